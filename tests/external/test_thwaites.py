"""Boundary layers against published solutions; the figures are from memory unless derived here.

F. M. White, Viscous Fluid Flow; H. Schlichting, Boundary-Layer Theory; L. Howarth, Proc. R. Soc.
Lond. A 164 (1938) 547-579; G. B. Schubauer and H. K. Skramstad, NACA Report 909 (1948).
"""

import numpy as np
import pytest

import offbody as ob
from offbody.layers import ATTACHED, LAMINAR, TURBULENT, friction, march


def lanes(*arrays):
    return [np.asarray(array, float)[None] for array in arrays]


def plate(viscosity, stations):
    return march(*lanes(stations, np.ones_like(stations), np.zeros_like(stations)), viscosity)


def test_a_laminar_layer_leaves_a_circle_at_103_degrees_of_its_potential_flow():
    angle = np.linspace(0, np.pi, 200)
    layers = march(*lanes(angle, 2 * np.sin(angle), 2 * np.cos(angle)), 1e-5)
    assert layers.state[0] == LAMINAR
    # White: 103.1 by Thwaites; a tenth for its last digit.
    np.testing.assert_allclose(np.degrees(layers.separation), 103.1, rtol=0, atol=0.1)
    # 104.5 by exact series: Thwaites' method is known to be good to a few percent.
    np.testing.assert_allclose(np.degrees(layers.separation), 104.5, rtol=0.02)


def test_the_march_on_the_solved_circle_finds_the_same_place():
    # Above the drag crisis the march alone speaks, and laminar separation turns it turbulent.
    found = ob.separation(ob.solve(ob.circle(0.3)), 25.0, reynolds=1e6)
    front = 0.15 * np.array([-np.cos(np.radians(25)), -np.sin(np.radians(25))])
    turned = np.degrees(np.arccos(found.transition[0] @ front / 0.15**2))
    np.testing.assert_allclose(turned, 103.1, rtol=0, atol=0.1)


def test_a_linearly_retarded_layer_leaves_at_howarths_place():
    x = np.linspace(0, 0.2, 41)
    layers = march(*lanes(x, 1 - x, -np.ones_like(x)), 1e-6)
    # White: 0.123 by Thwaites, 0.120 exact. Half a last digit; 3 percent for the method.
    np.testing.assert_allclose(layers.separation, 0.123, rtol=0, atol=5e-4)
    np.testing.assert_allclose(layers.separation, 0.120, rtol=0.03)


def test_a_laminar_layer_on_a_plate_is_blasiuss():
    layers = plate(1e-5, np.linspace(0, 1, 51))
    assert layers.state[0] == ATTACHED
    # Blasius: 0.664, Thwaites' constant: sqrt(0.45) = 0.671. One percent lies between them.
    np.testing.assert_allclose(layers.momentum[0, -1], np.sqrt(0.45e-5), rtol=1e-9)
    np.testing.assert_allclose(layers.momentum[0, -1], 0.664 * np.sqrt(1e-5), rtol=0.011)
    # Blasius: 1.721; Thwaites' shape factor is a fit.
    np.testing.assert_allclose(layers.displacement[0, -1], 1.721 * np.sqrt(1e-5), rtol=0.02)


def test_a_layer_at_a_stagnation_point_is_hiemenzs():
    k, viscosity, diameter = 4.0, 1e-5, 1.0  # speed 2 sin(2 s / d): 4 / d at the front
    found = ob.separation(ob.solve(ob.circle(diameter)), reynolds=diameter / viscosity)
    thickness = found.displacement_thickness(0, 0.5)
    # Hiemenz: 0.648 sqrt(viscosity / k); Thwaites' method is good to a few percent there.
    np.testing.assert_allclose(thickness, 0.648 * np.sqrt(viscosity / k), rtol=0.03)


def test_a_layer_on_a_plate_turns_turbulent_where_michel_has_it():
    length = 1e7
    layers = plate(1 / length, np.append(0, np.geomspace(1e-3, 1, 200)))
    # Schubauer and Skramstad: 2.8 million in a stream of little turbulence. The criterion crosses
    # the layer at so flat an angle that a percent of its constant is a quarter of the length.
    assert 1.4e6 < layers.transition[0] * length < 5.6e6, layers.transition * length


def test_a_turbulent_layer_on_a_plate_has_the_friction_of_karman_and_schoenherr():
    x, length = np.append(0, np.geomspace(1e-4, 1, 400)), 1e7
    layers = plate(1 / length, x)
    assert layers.state[0] == ATTACHED
    rows = x > 0.5  # half the plate behind transition, near 0.17
    number = layers.momentum[0, rows] * length
    shape = layers.displacement[0, rows] / layers.momentum[0, rows]
    logarithm = np.log10(number)
    # 1 / c = 17.08 log^2 + 25.11 log + 6.012 of R_theta: Ludwieg and Tillmann's law is 5 percent
    # below it by R_theta = 10^4, the end of the range that it was made for.
    expected = 1 / (17.08 * logarithm**2 + 25.11 * logarithm + 6.012)
    np.testing.assert_allclose(friction(number, shape), expected, rtol=0.06)
    # Such plates have shape factors of 1.3 to 1.4 (Schlichting).
    np.testing.assert_allclose(shape, 1.35, rtol=0.03)


def test_a_layer_on_a_plate_has_the_drag_of_prandtl_and_schlichting():
    length = 1e7
    layers = plate(1 / length, np.append(0, np.geomspace(1e-4, 1, 400)))
    # 0.455 log10(R)^-2.58 less A / R, A = 3300 and 8700 for transition at one and three million:
    # about 5000 at 1.7. The momentum thickness is half the drag; 4 percent for the friction law.
    drag = 0.455 / np.log10(length) ** 2.58 - 5000 / length
    np.testing.assert_allclose(2 * layers.momentum[0, -1], drag, rtol=0.04)


@pytest.mark.parametrize("reynolds", [1e6, 1e7])
def test_a_turbulent_layer_leaves_a_circle_far_behind_its_widest_points(reynolds):
    angle = np.linspace(0, np.pi, 200)
    layers = march(*lanes(angle, 2 * np.sin(angle), 2 * np.cos(angle)), 2 / reynolds, closing=0.0)
    assert layers.state[0] == TURBULENT
    # Measured 110 to 140 degrees beyond the drag crisis (Achenbach, J. Fluid Mech. 34 (1968)); the
    # pressure of potential flow, without the wake's, is the mildest there is: no earlier than that.
    assert 110 < np.degrees(layers.separation[0]) < 150, np.degrees(layers.separation)

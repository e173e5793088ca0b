"""Masts of IEC 61400-12-1, mounting of instruments (its figures from memory).

The standard's centreline figures, for a lattice mast as a law and for a tubular mast as two
distances, beside those of potential flow with the wake's displacement.
"""

import numpy as np
import pytest
from scipy.optimize import brentq

import offbody as ob

FACE = 1.0
THRUST_COEFFICIENT = 0.5
# Distances (diameters) for 99 and 99.5 percent of the undisturbed speed, by drag coefficient: from
# (a / r)^2 + Cd b / (4 pi r), the far field of a body and its wake's source.
FAR_FIELD = {0.0: (5.0, 7.07), 0.3: (6.3, 10.0), 1.2: (11.7, 21.4)}
STANDARD = (6.1, 8.2)


def lattice_mast():
    """Three tubular legs, a face width apart, one corner upstream of direction 0."""
    corners = FACE / np.sqrt(3) * np.exp(1j * np.radians([180, -60, 60]))
    legs = [ob.circle(0.1 * FACE, (corner.real, corner.imag)) for corner in corners]
    wake = ob.Wake(THRUST_COEFFICIENT / 3, reference=FACE)
    return ob.solve(legs, wakes=[wake] * 3)


def flux_round(model, radius, count=2048):
    """Outward flux through a circle round the origin, by the trapezoidal rule."""
    angle = 2 * np.pi * np.arange(count) / count
    outward = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    return 2 * np.pi * radius * np.mean(np.sum(model.velocity(radius * outward) * outward, axis=-1))


def test_the_legs_together_displace_the_stream_by_half_the_thrust():
    # C_T L / 2; the trapezoidal rule is exact to rounding round a circle clear of the mast.
    np.testing.assert_allclose(flux_round(lattice_mast(), 3 * FACE),
                               THRUST_COEFFICIENT * FACE / 2, rtol=1e-6)


def test_a_lattice_mast_slows_the_stream_ahead_as_the_standard_says():
    distance = np.linspace(2, 6, 41) * FACE
    points = np.stack([-distance, np.zeros_like(distance)], axis=-1)
    ratio = np.linalg.norm(lattice_mast().velocity(points), axis=-1)
    c = THRUST_COEFFICIENT
    standard = 1 - (0.062 * c**2 + 0.076 * c) * (FACE / distance - 0.082)
    # 0.3 percentage points: the law is an empirical one that reaches 1 at a finite distance.
    np.testing.assert_allclose(ratio, standard, rtol=0, atol=0.003)


def distances_ahead(drag_coefficient):
    """Diameters upstream of a tube at which 99 and 99.5 percent of the speed are reached."""
    model = ob.solve([ob.circle(1.0)], wakes=[ob.Wake(drag_coefficient)])

    def speed(diameters):
        return np.linalg.norm(model.velocity(np.array([-diameters, 0.0])))

    return tuple(brentq(lambda x, ratio=ratio: speed(x) - ratio, 2, 100) for ratio in (0.99, 0.995))


@pytest.mark.parametrize("drag_coefficient", FAR_FIELD)
def test_a_tubular_masts_distances_stand_beside_the_standards(drag_coefficient):
    ours = distances_ahead(drag_coefficient)
    print(f"Cd {drag_coefficient}: 99 percent at {ours[0]:.2f} diameters, 99.5 at {ours[1]:.2f};"
          f" IEC 61400-12-1 (from memory): {STANDARD[0]} and {STANDARD[1]}")
    # With its image in the tube, the source in the lee acts from 0.9 diameters behind the axis, not
    # from the axis: the distances are shorter than those of the far field, by no more than that.
    # 0.05 is half a unit of the last digit of the far field's figures.
    shorter = np.subtract(FAR_FIELD[drag_coefficient], ours)
    np.testing.assert_array_less(-0.05, shorter)
    np.testing.assert_array_less(shorter, 0.9 + 0.05)

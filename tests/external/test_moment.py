"""Moments of the pressure about a point, against Lamb's ellipse and the laws of statics."""

import numpy as np
import pytest

import exact
import offbody as ob

INCIDENCES = np.array([0.0, 10.0, 25.0, 45.0, 90.0, 130.0])


@pytest.mark.parametrize("circulation", [0.0, 1.3])
@pytest.mark.parametrize("length, thickness", [(2.0, 1.0), (2.0, 0.2), (1.0, 3.0)])
def test_an_ellipse_is_turned_broadside_by_lambs_moment(length, thickness, circulation):
    model = ob.solve(ob.ellipse(length, thickness), panels=40, circulation=circulation)
    # Lamb, Hydrodynamics: pi rho (a^2 - b^2) U^2 sin cos of the incidence, with or without
    # circulation, about the centre; per half rho U^2 it is twice that.
    semi = (length**2 - thickness**2) / 4
    expected = -np.pi * semi * np.sin(2 * np.radians(INCIDENCES))
    # The wall speed is good to 1e-9, its square times the length to a few of it.
    np.testing.assert_allclose(model.moment(direction=INCIDENCES)[:, 0], expected,
                               rtol=0, atol=1e-8)


def test_a_moment_about_another_point_differs_by_the_forces_arm():
    body = ob.four_digit("2412").moved(3.0, -1.0)
    model, place = ob.solve(body), np.array([0.7, 2.0])
    for direction in (-3.0, 5.0):
        force = model.force(direction)[0]
        here, there = model.moment(direction=direction), model.moment(place, direction)
        arm = place[0] * force[1] - place[1] * force[0]
        np.testing.assert_allclose(here - there, [arm], rtol=0, atol=1e-12)


def test_a_karman_trefftz_sections_moment_is_that_of_its_exact_pressure():
    section, direction = exact.KarmanTrefftz(bending=0.04), 6.0
    model = ob.solve(ob.curve(exact.as_function(section), sharp=0.0))
    # Blasius: minus the real part of the integral of z W^2 dz, here round a circle outside,
    # by the trapezoidal rule, exact to rounding.
    turn = np.exp(2j * np.pi * np.arange(512) / 512)
    z = 0.5 + 1.5 * turn
    w = section.velocity(z, direction)
    expected = -np.mean((z - 0.25) * w**2 * 2j * np.pi * 1.5 * turn).real
    # The panels' wall speed, 1e-8 but next to the edge.
    np.testing.assert_allclose(model.moment((0.25, 0.0), direction), [expected],
                               rtol=0, atol=1e-7)


def test_the_moments_of_bodies_in_an_open_stream_balance_but_for_the_stream_itself():
    bodies = [ob.ellipse(2.0, 1.0, turned=20.0), ob.circle(0.8, centre=(1.5, 0.9))]
    moved = [body.moved(5.0, -2.0) for body in bodies]
    one, other = ob.solve(bodies, panels=30), ob.solve(moved, panels=30)
    # Together they bear no force (d'Alembert): the moment on all is the same about any point.
    np.testing.assert_allclose(one.moment(direction=30.0).sum(),
                               other.moment(direction=30.0).sum(), rtol=0, atol=1e-9)


def test_the_moment_behind_a_wake_counts_its_base_pressure():
    tube = ob.solve(ob.circle(1.0, centre=(0.0, 2.0)), wakes=ob.Wake(1.2, separation=80.0))
    # Straight behind: the drag alone, per unit dynamic pressure 1.2, at an arm of 2; the base
    # pressure jumps between nodes, to about a node's share of the wall.
    np.testing.assert_allclose(tube.moment(), [-2.0 * 1.2], rtol=0.03)
    np.testing.assert_allclose(tube.moment((0.0, 2.0)), [0.0], atol=1e-9)
    assert np.isnan(ob.solve(ob.circle(1.0), wakes=ob.Wake(1.2)).moment()).all()


def test_the_moment_round_an_edge_with_a_prescribed_circulation_is_none():
    model = ob.solve(ob.four_digit("0012"), circulation=0.0)
    with pytest.warns(ob.AccuracyWarning, match="the moment on body 0 is NaN"):
        assert np.isnan(model.moment(direction=5.0)).all()


@pytest.mark.parametrize("about", [(0.0,), (0.0, 1.0, 2.0), (0.0, float("nan")), "here"])
def test_a_moment_about_no_point_is_refused(about):
    with pytest.raises(ob.InputError, match="about"):
        ob.solve(ob.circle(1.0)).moment(about)

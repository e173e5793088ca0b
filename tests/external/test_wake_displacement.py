"""A wake pushes the outer flow aside as a source of strength Cd b / 2 does.

Batchelor, An Introduction to Fluid Dynamics, on the far field of a body with drag; Parkinson and
Jandali, J. Fluid Mech. 40 (1970) 577-594, on wake sources.
"""

import numpy as np
import pytest

import exact
import offbody as ob

DIAMETER = 0.6


def unit(direction):
    return np.array([np.cos(np.radians(direction)), np.sin(np.radians(direction))])


def flux_round(model, radius, direction, count=2048):
    """Outward flux through a circle round the origin, by the trapezoidal rule."""
    angle = 2 * np.pi * np.arange(count) / count
    outward = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    velocity = model.velocity(radius * outward, direction)
    return 2 * np.pi * radius * np.mean(np.sum(velocity * outward, axis=-1))


@pytest.mark.parametrize("direction", [0.0, 37.0, 180.0, 300.0])
@pytest.mark.parametrize("drag_coefficient", [0.3, 1.2])
def test_a_wake_slows_the_stream_far_ahead_as_its_source_does(drag_coefficient, direction):
    tube = [ob.circle(DIAMETER)]
    distance = 200 * DIAMETER
    ahead = -distance * unit(direction)
    with_wake = ob.solve(tube, wakes=[ob.Wake(drag_coefficient)]).velocity(ahead, direction)
    without = ob.solve(tube).velocity(ahead, direction)
    slowed = -(with_wake - without) @ unit(direction)
    # Cd b / (4 pi R); one percent: with its image in the tube, the source in the lee acts from 0.9
    # diameters behind the axis, 0.45 percent of the distance.
    np.testing.assert_allclose(slowed, drag_coefficient * DIAMETER / (4 * np.pi * distance),
                               rtol=0.01)


def blown_tube(drag_coefficient, direction):
    """The exact field of the normal speed prescribed: cos^6 of the angle over the lee half."""
    flux = drag_coefficient * DIAMETER / 2

    def normal_speed(angle):
        lee = np.maximum(np.cos(angle - np.radians(direction)), 0.0)
        return flux * lee**6 / (0.3125 * np.pi * DIAMETER / 2)  # 5/16: the mean of cos^6

    return exact.BlownCircle(normal_speed, DIAMETER / 2, terms=2048)


@pytest.mark.parametrize("direction", [0.0, 37.0, 180.0, 300.0])
def test_the_flow_leaves_the_wall_of_a_tube_as_prescribed(direction):
    model = ob.solve([ob.circle(DIAMETER)], wakes=[ob.Wake(1.2)])
    blown = blown_tube(1.2, direction)
    # Points between the nodes as well as the nodes themselves.
    angle = np.append(np.linspace(0, 2 * np.pi, 721), np.arctan2(*model.walls[0].T[::-1]))
    outward = np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    just_off = (DIAMETER / 2 + 1e-9) * outward
    found = np.sum(model.velocity(just_off, direction) * outward, axis=-1)
    # 1e-6 as promised, of the undisturbed speed.
    np.testing.assert_allclose(found, blown.normal_velocity(angle), rtol=0, atol=1e-6)
    np.testing.assert_allclose(model.wall_normal_speed(0, direction),
                               blown.normal_velocity(angle[721:]), rtol=0, atol=1e-6)


@pytest.mark.parametrize("direction", [0.0, 37.0, 180.0, 300.0])
def test_a_wake_adds_the_exact_field_of_its_normal_speed(direction):
    tube = [ob.circle(DIAMETER)]
    blown = blown_tube(1.2, direction)
    distances = DIAMETER * np.logspace(-6, 2, 9)
    points = exact.Circle(DIAMETER / 2).offset_points(np.arange(90) / 90, distances[:, None])
    pairs = exact.as_pairs(points)
    added = (ob.solve(tube, wakes=[ob.Wake(1.2)]).velocity(pairs, direction)
             - ob.solve(tube).velocity(pairs, direction))
    # 1e-6, as for the normal speed that causes it.
    np.testing.assert_allclose(added, exact.as_velocity(blown.velocity(points)), rtol=0, atol=1e-6)


@pytest.mark.parametrize("direction", [0.0, 37.0, 90.0])
def test_the_flux_round_all_bodies_is_the_sum_of_the_sources(direction):
    bodies = [ob.circle(DIAMETER, (-1, 0)), ob.circle(0.5 * DIAMETER, (1, 0.2)),
              ob.ellipse(0.8, 0.2, (0, 1.5), turned=20.0)]
    wakes = [ob.Wake(1.2), ob.Wake(0.5, reference=2.0), None]
    model = ob.solve(bodies, wakes=wakes)
    sources = (1.2 * DIAMETER + 0.5 * 2.0) / 2
    # The trapezoidal rule is exact to rounding round a circle clear of the bodies; what is left is
    # the flux's error on the walls.
    np.testing.assert_allclose(flux_round(model, 5.0, direction), sources, rtol=1e-6)

"""Two close circles, and one close to the ground, against images of doublets (Milne-Thomson)."""

import numpy as np
import pytest

import exact
import offbody as ob

NODES_A_BODY = 300
ORDER = 16
GAP = 0.25
BOUND = 1e-6  # promised everywhere, the gap included, of the undisturbed speed
SIDES = np.linspace(0, 1, 360, endpoint=False)
DISTANCES = np.array([1e-6, 1e-3, 0.02, 0.1, 0.5, 2.0, 20.0])


def circles_of(pair):
    return [ob.circle(2 * circle.radius, (circle.centre.real, circle.centre.imag))
            for circle in pair.bodies]


def solved(bodies, **surroundings):
    model = ob.solve(bodies, panels=NODES_A_BODY // ORDER, order=ORDER, **surroundings)
    most = NODES_A_BODY * len(bodies)
    assert model.node_count <= most, f"{model.node_count} nodes, {most} allowed"
    return model


def points_outside(pair):
    """Points at all distances from either wall, and a line through the gap from wall to wall."""
    rings = [body.offset_points(SIDES, DISTANCES[:, None]).ravel() for body in pair.bodies]
    between = pair.centres[1] - pair.centres[0]
    along = between / abs(between)
    gap = abs(between) - sum(pair.radii)
    line = pair.centres[0] + along * (pair.radii[0] + gap * np.linspace(1e-6, 1 - 1e-6, 101))
    points = np.concatenate([*rings, line])
    outside = [abs(points - body.centre) > body.radius for body in pair.bodies]
    return points[np.all(outside, axis=0)]


def assert_exact(model, pair, points, direction, bodies):
    np.testing.assert_allclose(model.velocity(exact.as_pairs(points), direction),
                               exact.as_velocity(pair.velocity(points, direction)),
                               rtol=0, atol=BOUND)
    for body in bodies:
        surface = model.surface(body, direction)
        on_wall = pair.velocity(exact.as_complex(surface.points), direction)
        expected = exact.along_wall(surface.points, exact.as_velocity(on_wall))
        np.testing.assert_allclose(surface.speed, expected, rtol=0, atol=BOUND)


@pytest.mark.parametrize("direction", [0.0, 30.0, 90.0])
@pytest.mark.parametrize("second_radius", [1.0, 0.5])
def test_two_circles_a_quarter_of_a_radius_apart_are_exact(second_radius, direction):
    pair = exact.TwoCircles.with_gap(1.0, second_radius, GAP * second_radius)
    model = solved(circles_of(pair))
    assert_exact(model, pair, points_outside(pair), direction, (0, 1))
    np.testing.assert_allclose(model.circulation(direction), 0, atol=BOUND)


@pytest.mark.parametrize("direction", [0.0, 180.0])
def test_a_circle_a_quarter_of_a_radius_above_ground_is_exact(direction):
    pair = exact.TwoCircles.above_ground(1.0, GAP)
    model = solved(circles_of(pair)[:1], surroundings=ob.Ground())
    points = points_outside(pair)
    assert_exact(model, pair, points[points.imag >= 0], direction, (0,))
    ground = np.stack([np.linspace(-5, 5, 101), np.zeros(101)], axis=-1)
    # Mirrored in the kernel: no flow through the ground but for rounding.
    np.testing.assert_allclose(model.velocity(ground, direction)[:, 1], 0, atol=1e-13)

"""Ellipses in a stream against the exact solution by the Joukowski map (Lamb)."""

import numpy as np
import pytest

import exact
import offbody as ob

SIDES = np.linspace(0, 1, 301, endpoint=False)
DISTANCES = np.array([1e-6, 1e-4, 1e-2, 0.1, 1.0, 10.0])
# (length, thickness, order, nodes, bound): the bounds are the promised ones, of the undisturbed
# speed, for the promised number of nodes.
CASES = [(2.0, 0.2, 8, 600, 1e-4), (2.0, 1.0, 16, 450, 1e-9)]


def solved(length, thickness, order, nodes):
    model = ob.solve([ob.ellipse(length, thickness)], panels=nodes // order, order=order)
    assert model.node_count <= nodes, f"{model.node_count} nodes, {nodes} allowed"
    return exact.Ellipse(length, thickness), model


@pytest.mark.parametrize("direction", [0.0, 25.0, 90.0])
@pytest.mark.parametrize("length, thickness, order, nodes, bound", CASES)
def test_surface_and_field_meet_the_exact_solution(
        length, thickness, order, nodes, bound, direction):
    solution, model = solved(length, thickness, order, nodes)
    surface = model.surface(0, direction)
    on_wall = exact.as_velocity(solution.velocity(exact.as_complex(surface.points), direction))
    np.testing.assert_allclose(surface.speed, exact.along_wall(surface.points, on_wall),
                               rtol=0, atol=bound)
    points = solution.offset_points(SIDES, DISTANCES[:, None])
    np.testing.assert_allclose(model.velocity(exact.as_pairs(points), direction),
                               exact.as_velocity(solution.velocity(points, direction)),
                               rtol=0, atol=bound)


@pytest.mark.parametrize("length, thickness, order, nodes, bound", CASES)
def test_the_greatest_speed_along_the_stream_is_lambs(length, thickness, order, nodes, bound):
    _, model = solved(length, thickness, order, nodes)
    sides = np.array([[0, thickness / 2], [0, -thickness / 2]])
    speed = np.hypot(*model.velocity(sides).T)
    # Lamb, Hydrodynamics: 1 + thickness / length.
    np.testing.assert_allclose(speed, 1 + thickness / length, rtol=0, atol=bound)


@pytest.mark.parametrize("direction", [0.0, 25.0, 90.0])
def test_the_velocity_gradient_meets_the_exact_solution(direction):
    solution, model = solved(2.0, 1.0, 16, 450)
    points = solution.offset_points(SIDES, np.array([0.01, 0.1, 1.0, 10.0])[:, None])
    slope = solution.gradient(points, direction)  # d(u - i v)/dz
    expected = np.stack([np.stack([slope.real, -slope.imag], -1),
                         np.stack([-slope.imag, -slope.real], -1)], -2)
    # The velocity is good to 1e-9; over the least distance, 0.01, its gradient to 1e-7.
    np.testing.assert_allclose(model.velocity_gradient(exact.as_pairs(points), direction),
                               expected, rtol=0, atol=1e-7)

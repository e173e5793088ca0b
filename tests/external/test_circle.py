"""Circle in a stream against its exact solution (Milne-Thomson; Lamb).

W = 1 - a^2 / z^2, surface speed 2 sin(angle), pressure coefficient 1 - 4 sin^2(angle).
"""

import numpy as np
import pytest

import exact
import offbody as ob

RADIUS = 1.0
SIDES = np.linspace(0, 1, 397, endpoint=False)
DISTANCES = np.logspace(-6, 3, 28) * RADIUS


def worst_off_body(model, solution, distances, direction):
    points = solution.offset_points(SIDES, np.asarray(distances)[:, None])
    found = model.velocity(exact.as_pairs(points), direction)
    expected = exact.as_velocity(solution.velocity(points, direction))
    return np.hypot(*np.moveaxis(found - expected, -1, 0)).max(axis=-1)


def test_constant_strength_panels_are_of_first_order_off_the_body():
    solution = exact.Circle(RADIUS)
    errors = np.array([
        worst_off_body(ob.solve([ob.circle(2 * RADIUS)], panels=panels, order=1),
                       solution, [0.05 * RADIUS], 0.0)[0]
        for panels in (100, 200, 400, 800)
    ])
    # About 6e-3 is the textbook panel's error at 200; twice that would be a worse panel.
    np.testing.assert_array_less(errors[1], 1.2e-2)
    # First order halves with each doubling; 20 percent for how near to it 200 panels come.
    np.testing.assert_allclose(errors[1:-1] / errors[2:], 2.0, rtol=0.2)


@pytest.mark.parametrize("direction", [0.0, 33.0, -90.0])
@pytest.mark.parametrize("order, bound", [(8, 1e-7), (16, 1e-10)])
def test_twenty_panels_of_high_order_meet_the_exact_solution_near_and_far(order, bound, direction):
    # Bounds: what is promised for 20 panels of this order, of the undisturbed speed.
    solution = exact.Circle(RADIUS)
    model = ob.solve([ob.circle(2 * RADIUS)], panels=20, order=order)
    surface = model.surface(0, direction)
    angle = np.arctan2(surface.points[:, 1], surface.points[:, 0]) - np.radians(direction)
    np.testing.assert_allclose(surface.speed, -2 * np.sin(angle), rtol=0, atol=bound)
    errors = worst_off_body(model, solution, DISTANCES, direction)
    np.testing.assert_allclose(errors, 0, atol=bound)


def test_the_pressure_is_undisturbed_thirty_degrees_from_either_stagnation_point():
    model = ob.solve([ob.circle(2 * RADIUS)], panels=20, order=16)
    angle = np.radians([30, 150, 210, 330])
    points = RADIUS * np.stack([np.cos(angle), np.sin(angle)], axis=-1)
    # The speed is good to 1e-10, its square, times two, to a few of it.
    np.testing.assert_allclose(model.pressure_coefficient(points), 0, atol=1e-9)


@pytest.mark.parametrize("direction", [0.0, 90.0, 200.0])
def test_a_circulation_gives_the_kutta_joukowski_force_to_the_right_of_the_stream(direction):
    circulation = 1.7
    solution = exact.Circle(RADIUS, 0.0, circulation)
    model = ob.solve([ob.circle(2 * RADIUS)], panels=20, order=16, circulation=[circulation])
    # Per unit dynamic pressure: 2 G, a quarter turn clockwise from the stream.
    right = np.radians(direction - 90)
    np.testing.assert_allclose(model.force(direction)[0],
                               2 * circulation * np.array([np.cos(right), np.sin(right)]),
                               atol=1e-9)
    np.testing.assert_allclose(worst_off_body(model, solution, DISTANCES, direction), 0, atol=1e-10)

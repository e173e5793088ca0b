"""The last digits: the promised errors on exact flows, on the wall and at every distance off it.

Errors are of the undisturbed speed. The exact solutions are those of ``exact``: Lamb's and
Milne-Thomson's.
"""

from functools import cache

import numpy as np
import pytest

import exact
import offbody as ob

SIDES = np.linspace(0, 1, 199, endpoint=False)
DISTANCES = np.logspace(-12, 3, 31)   # diameters, or lengths
CIRCLE, STOUT = exact.Circle(1.0), exact.Ellipse(2.0, 1.0)
THIN, THINNEST = exact.Ellipse(2.0, 0.2), exact.Ellipse(2.0, 0.02)
SECTIONS = (exact.KarmanTrefftz(), exact.KarmanTrefftz(bending=0.04))


@cache
def solved(solution, most_nodes):
    if isinstance(solution, exact.Circle):
        body = ob.circle(2.0)
    elif isinstance(solution, exact.Ellipse):
        body = ob.ellipse(solution.length, solution.thickness)
    else:
        body = ob.curve(exact.as_function(solution), sharp=0.0)
    model = ob.solve(body, panels=most_nodes // 16)
    assert model.node_count <= most_nodes, f"{model.node_count} nodes, {most_nodes} allowed"
    return model


def wall_error(model, solution, direction, body=0):
    """Error of the surface speed at the nodes, and the nodes."""
    surface = model.surface(body, direction)
    z = exact.as_complex(surface.points)
    on_wall = exact.as_velocity(solution.velocity(z, direction))
    return np.abs(surface.speed - exact.along_wall(surface.points, on_wall)), z


def field_error(model, solution, points, direction):
    found = model.velocity(exact.as_pairs(points), direction)
    wrong = found - exact.as_velocity(solution.velocity(points, direction))
    return np.hypot(*np.moveaxis(wrong, -1, 0))


@pytest.mark.parametrize("direction", [0.0, 25.0, 90.0])
@pytest.mark.parametrize("solution, nodes, promise", [
    (CIRCLE, 450, 1e-12), (STOUT, 450, 1e-11), (THIN, 700, 1e-8), (THINNEST, 2000, 1e-7)])
def test_a_smooth_body_is_exact_on_the_wall_and_at_every_distance(
        solution, nodes, promise, direction):
    model = solved(solution, nodes)
    error, _ = wall_error(model, solution, direction)
    np.testing.assert_array_less(error, promise)
    points = solution.offset_points(SIDES, 2 * DISTANCES[:, None])
    np.testing.assert_array_less(
        field_error(model, solution, points, direction).max(axis=1), promise)


@pytest.mark.parametrize("direction", [25.0, 90.0])
@pytest.mark.parametrize("solution, nodes, promise", [
    (THIN, 700, 1e-8), (THINNEST, 2000, 1e-7)])
def test_a_thin_ellipse_is_exact_a_millionth_off_its_tips(solution, nodes, promise, direction):
    near = solution.offset_points(np.linspace(-1e-3, 1e-3, 81), 1e-6)
    points = np.concatenate([near, -near])
    np.testing.assert_array_less(
        field_error(solved(solution, nodes), solution, points, direction), promise)


@pytest.mark.parametrize("section", SECTIONS)
def test_a_karman_trefftz_section_is_exact_up_to_its_edge(section):
    model, direction = solved(section, 1200), 10.0
    np.testing.assert_allclose(model.circulation(direction), section.circulation(direction),
                               rtol=0, atol=1e-9)
    sides = np.concatenate([np.linspace(0.001, 0.999, 400), np.logspace(-9, -3, 40),
                            1 - np.logspace(-9, -3, 40)])
    behind = section.edge + 0.002 * np.exp(1j * np.radians(np.linspace(-80, 80, 41)))
    points = np.concatenate([section.offset_points(sides, 0.002), behind])
    np.testing.assert_array_less(field_error(model, section, points, direction), 1e-8)
    error, z = wall_error(model, section, direction)
    away = np.abs(z - section.edge) > 1e-7
    assert np.sum(~away) > 20, "the panels do not reach the last ten-millionth of the chord"
    np.testing.assert_array_less(error[away], 1e-6)


@pytest.mark.parametrize("gap, nodes, promise, direction", [
    (0.05, 700, 1e-10, 0.0), (0.05, 700, 1e-10, 30.0), (0.05, 700, 1e-10, 90.0),
    (1e-3, 700, 1e-7, 30.0), (1e-3, 700, 1e-7, 90.0), (1e-6, 700, 1e-4, 30.0)])
def test_two_unequal_circles_are_exact_in_their_gap(gap, nodes, promise, direction):
    pair = exact.TwoCircles.with_gap(1.0, 0.5, gap)
    circles = [ob.circle(2 * one.radius, (one.centre.real, one.centre.imag))
               for one in pair.bodies]
    model = ob.solve(circles, panels=nodes // 2 // 16)
    assert model.node_count <= nodes, f"{model.node_count} nodes, {nodes} allowed"
    across = gap * (np.linspace(1e-6, 1 - 1e-6, 41) - 0.5)
    points = np.concatenate([across, 1j * np.sqrt(gap) * np.linspace(-3, 3, 41)])
    # Of the peak speed where the gap is a millionth: 1,600 times the undisturbed one across it.
    scale = 1.0 if gap > 1e-6 else abs(pair.velocity(0j, 90.0))
    np.testing.assert_array_less(field_error(model, pair, points, direction), promise * scale)
    for body in (0, 1):
        error, _ = wall_error(model, pair, direction, body)
        np.testing.assert_array_less(error, promise * scale)


def circle_errors(order, panels):
    model = ob.solve(ob.circle(2.0), panels=panels, order=order)
    points = CIRCLE.offset_points(SIDES, 2 * DISTANCES[:, None])
    return np.append(field_error(model, CIRCLE, points, 25.0).max(axis=1),
                     wall_error(model, CIRCLE, 25.0)[0].max())


@pytest.mark.parametrize("order", [8, 10, 12, 14, 16])
def test_high_orders_reach_rounding_on_a_circle(order):
    np.testing.assert_array_less(circle_errors(order, 800 // order), 1e-12)


@pytest.mark.parametrize("order", [2, 3, 4, 6])
def test_low_orders_converge_at_their_order_with_nothing_else_in_the_way(order):
    coarse, fine = circle_errors(order, 100), circle_errors(order, 200)
    seen = coarse > 1e-12   # farther off there is but rounding
    # Each doubling divides the error by 2^order at least; a fifth for how near 100 panels come.
    # No error falls below the rounding of sums over 1,200 nodes.
    bound = np.maximum(1.2 * 2.0**-order * coarse[seen], 5e-13)
    np.testing.assert_array_less(fine[seen], bound)

"""The estimated error against the true one on every exact case, on the wall and in bands off it.

For each body and band the greatest estimated error lies within a factor of ten of the greatest true
one, once both are held above rounding: 1e-12 of the greatest surface speed, and 1e-11 of it where
there is a sharp edge, as the flow there carries the rounding of the edge's coordinates. The
solutions are Lamb's and Milne-Thomson's, of ``exact``. Orders 2 and 3 are not promised.
"""

import os
import subprocess
import sys

import numpy as np
import pytest

import exact
import offbody as ob

BANDS = [(1e-12, 1e-9), (1e-9, 1e-6), (1e-6, 1e-3), (1e-3, 1e-2), (1e-2, 0.1), (0.1, 1.0),
         (1.0, 10.0), (10.0, 100.0)]   # distances off the wall, of the bodies' size
SIDES = np.linspace(0, 1, 331, endpoint=False) + 0.001
ORDERS = (1, 4, 8, 12, 16)
SHARES = (0.6, 1.0, 1.5)   # of the panels that are laid by default
FACTOR, FLOOR, EDGE_FLOOR = 10.0, 1e-12, 1e-11
NEAR_EDGE = 1e-5           # of the chord


def greatest_errors(model, solution, direction, body, wall, admitted=None, edge=None):
    """Pairs of the greatest true and estimated error, on one wall and in each band off it."""
    surface = model.surface(body, direction)
    z = exact.as_complex(surface.points)
    speed = exact.along_wall(surface.points, exact.as_velocity(solution.velocity(z, direction)))
    away = np.abs(z - (1e9 if edge is None else edge)) > NEAR_EDGE
    pairs = [(np.abs(surface.speed - speed)[away].max(), surface.numerical_error[away].max())]
    size = np.ptp(np.concatenate(model.walls), axis=0).sum() / 2
    for band in BANDS:
        distances = size * np.array([band[0], np.sqrt(band[0] * band[1])])
        points = wall.offset_points(SIDES[SIDES < 0.999], distances[:, None]).ravel()
        points = points if admitted is None else points[admitted(points)]
        if len(points):
            wrong = model.velocity(exact.as_pairs(points), direction) - exact.as_velocity(
                solution.velocity(points, direction))
            wrong = np.hypot(*wrong.T)
            seen = np.isfinite(wrong)   # beyond a duct's walls there is nothing
            estimated = model.numerical_error(exact.as_pairs(points), direction)
            pairs.append((wrong[seen].max(), estimated[seen].max()))
    return np.array(pairs), np.abs(surface.speed).max()


def assert_estimated(outlines, solution, walls, order, direction, floor=FLOOR, surroundings=None,
                     admitted=None, edge=None, **options):
    by_default = ob.solve(outlines, surroundings, order=order, **options).panel_counts
    for share in SHARES:
        panels = [max(2, int(share * count)) for count in by_default]
        model = ob.solve(outlines, surroundings, panels=panels, order=order, **options)
        for body, wall in enumerate(walls):
            errors, peak = greatest_errors(
                model, solution, direction, body, wall, admitted, edge)
            true, estimated = np.maximum(errors, floor * max(1.0, peak)).T
            # Off a factor of ten by the logarithm, band by band, the wall first.
            np.testing.assert_array_less(
                np.abs(np.log10(estimated / true)), np.log10(FACTOR),
                err_msg=f"{panels} panels, body {body}: true {true}, estimated {estimated}")


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("solution, outline", [
    (exact.Circle(1.0), ob.circle(2.0)),
    (exact.Ellipse(2.0, 1.0), ob.ellipse(2.0, 1.0)),
    (exact.Ellipse(2.0, 0.2), ob.ellipse(2.0, 0.2)),
    (exact.Ellipse(2.0, 0.02), ob.ellipse(2.0, 0.02))])
def test_the_error_of_a_smooth_body_is_estimated_within_ten_times(solution, outline, order):
    assert_estimated(outline, solution, [solution], order, 25.0)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("section", [
    exact.KarmanTrefftz(), exact.KarmanTrefftz(bending=0.04)])
def test_the_error_of_a_section_with_an_edge_is_estimated_within_ten_times(section, order):
    outline = ob.curve(exact.as_function(section), sharp=0.0)
    assert_estimated(outline, section, [section], order, 8.0, EDGE_FLOOR, edge=section.edge)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("gap", [0.25, 0.05, 1e-3])
def test_the_error_of_two_circles_is_estimated_within_ten_times(gap, order):
    pair = exact.TwoCircles.with_gap(1.0, 0.5, gap)
    circles = [ob.circle(2 * one.radius, (one.centre.real, one.centre.imag))
               for one in pair.bodies]

    def outside(z):
        return np.all([np.abs(z - one.centre) > one.radius for one in pair.bodies], axis=0)

    assert_estimated(circles, pair, pair.bodies, order, 30.0, admitted=outside)


DUCTED = exact.CircleInDuct(1.0, -2.0, 2.0)
ROWED = exact.CircleRow(1.0, 4.0, 0.2 + 0.1j, 2.0)
GROUNDED = exact.TwoCircles.above_ground(1.0, 0.25)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("solution, wall, outline, surroundings, direction, admitted, options", [
    (DUCTED, DUCTED, ob.circle(2.0), ob.Duct(-2.0, 2.0), 0.0, lambda z: np.abs(z.imag) < 2, {}),
    (ROWED, ROWED, ob.circle(2.0, (0.2, 0.1)), ob.Row(4.0), 30.0,
     lambda z: np.abs(z - ROWED.centre) < 2.9, {"circulation": 2.0}),
    (GROUNDED, GROUNDED.bodies[0], ob.circle(2.0, (0.0, 1.25)), ob.Ground(), 0.0,
     lambda z: z.imag > 0, {})], ids=["duct", "row", "ground"])
def test_the_error_between_walls_and_in_rows_is_estimated_within_ten_times(
        solution, wall, outline, surroundings, direction, admitted, options, order):
    assert_estimated(outline, solution, [wall], order, direction, surroundings=surroundings,
                     admitted=admitted, **options)


def test_the_estimate_covers_the_greatest_error_of_each_body_and_any_direction():
    solution = exact.Ellipse(2.0, 0.5)
    model = ob.solve(ob.ellipse(2.0, 0.5), panels=12)
    wrong = [np.abs(greatest_errors(model, solution, direction, 0, solution)[0][0, 0])
             for direction in np.arange(0.0, 180.0, 15.0)]
    # Three directions stand for all: at most 30 degrees off, 13 percent less than the greatest.
    np.testing.assert_array_less(wrong, 2.0 * model.estimated_error)
    np.testing.assert_array_less(0.1 * model.estimated_error, max(wrong))


COST = """
import time
import offbody as ob
ob.threads(1)
for outline in (ob.ellipse(2.0, 0.2), ob.four_digit("4412"),
                ob.polygon([(0, 0), (1, 0), (1, 1), (0, 1)], 0.1)):
    solving, estimating = [], []
    for _ in range(7):
        start = time.process_time()
        model = ob.solve(outline)
        middle = time.process_time()
        model.estimated_error
        estimating.append(time.process_time() - middle)
        solving.append(middle - start)
    print(min(solving), min(estimating))
"""


def test_an_estimate_costs_less_than_the_solution():
    # Processor's time of one thread, LAPACK's among them, which would wait in a busy loop: best of
    # seven, as others may be at work. Less than doubling it.
    run = subprocess.run([sys.executable, "-c", COST], capture_output=True, text=True, check=True,
                         env=os.environ | {"OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"})
    solving, estimating = np.array([line.split() for line in run.stdout.splitlines()], float).T
    np.testing.assert_array_less(estimating, solving)

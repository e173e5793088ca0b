"""Streamlines: along them the stream function stays what it was, and they stop where they must."""

from functools import cache

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal, assert_array_less

import offbody as ob

SQUARE = ob.polygon([(-0.5, -0.5), (0.5, -0.5), (0.5, 0.5), (-0.5, 0.5)], corner_radius=0.05)
FLOWS = {
    "circle": dict(outlines=ob.circle(2.0)),
    "circle with circulation": dict(outlines=ob.circle(1.0), circulation=5.0),
    "square and tube": dict(outlines=[SQUARE, ob.circle(0.3, (1.2, 0.4))]),
    "section and flap": dict(outlines=[
        ob.four_digit("4412"), ob.four_digit("0012", 0.3).turned(-20.0).moved(1.02, -0.03)]),
    "circle over the ground": dict(outlines=ob.circle(1.0, (0.0, 0.8)), surroundings=ob.Ground()),
}
EACH = pytest.mark.parametrize("name", FLOWS)
PER_LENGTH = 400  # the points that are kept along a line


@cache
def solved(name):
    return ob.solve(**FLOWS[name])


def length_of(line):
    return np.hypot(*np.diff(line, axis=0).T).sum()


def rake(model, count=25):
    """Starts upstream of the bodies, above the ground if there is one."""
    x0, x1, y0, y1 = model.extent
    size = max(x1 - x0, y1 - y0)
    low = y0 - 0.3 * size if not model.surroundings.walls else 1e-3
    return np.stack([np.full(count, x0 - size), np.linspace(low, y1 + 0.3 * size, count)], axis=-1)


@EACH
def test_the_stream_function_is_constant_along_streamlines(name):
    model = solved(name)
    starts = rake(model)
    lines = model.streamlines(starts)
    psi = [model.stream_function(line) for line in lines]
    # Promised: 1e-6; the steps are good to 1e-9 of the length each, the wall of the square to 1e-8.
    for start, line, values in zip(starts, lines, psi, strict=True):
        assert len(line) > 1, f"the line from {start} is only {line}"
        assert_allclose(values, values[0], rtol=0, atol=1e-6)


@pytest.mark.parametrize("direction", [40.0, 180.0])
def test_the_stream_function_is_constant_for_other_directions(direction):
    model = solved("square and tube")
    starts = np.random.default_rng(5).uniform(-1.5, 1.5, (20, 2))
    starts = starts[~ob.inside(model, starts)]
    for line in model.streamlines(starts, direction, length=3.0):
        values = model.stream_function(line, direction)
        assert_allclose(values, values[0], rtol=0, atol=1e-6)


def test_with_a_wake_the_stream_function_is_constant_on_either_side_of_its_cut():
    model = ob.solve(ob.circle(1.0), wakes=ob.Wake(1.2))
    starts = np.array([(-2.0, 0.3), (-2.0, -0.8), (0.0, 1.0)])
    for line in model.streamlines(starts, length=4.0):
        values = model.stream_function(line)
        assert_allclose(values, values[0], rtol=0, atol=1e-6)


@EACH
def test_no_point_of_a_streamline_lies_inside_a_body_or_below_the_ground(name):
    model = solved(name)
    lines = np.concatenate(model.streamlines(rake(model, 60), both_ways=True))
    assert len(lines) > 10_000
    assert not ob.inside(model, lines).any(), f"{lines[ob.inside(model, lines)][:3]} lie inside"
    assert not np.isnan(lines).any()
    if model.surroundings.walls:
        assert_array_less(0.0, lines[:, 1])


def test_lines_run_downstream_in_order_from_their_starts():
    starts = np.array([(-3.0, 1.5), (-3.0, -2.0), (-2.0, 3.0)])
    lines = solved("circle").streamlines(starts, length=4.0)
    for start, line in zip(starts, lines, strict=True):
        assert_array_equal(line[0], start)
        assert_array_less(0.0, np.diff(line[:, 0]))
        steps = np.hypot(*np.diff(line, axis=0).T)
        # Points are a length / 400 apart, or less at the end of a step.
        assert_array_less(steps, 4.0 / PER_LENGTH * (1 + 1e-6))


def test_lines_are_as_long_as_asked_for():
    lines = solved("circle").streamlines([(-3.0, 1.5), (-3.0, 4.0), (3.0, 0.5)], length=7.0)
    # Slowed by 1e-4 where the speed is 1, a little more where less.
    assert_allclose([length_of(line) for line in lines], 7.0, rtol=1e-3)


def test_without_a_length_they_run_three_times_the_bodies_extent():
    model = solved("circle")
    x0, x1, y0, y1 = model.extent
    line, = model.streamlines((-3.0, 2.0))
    assert_allclose(length_of(line), 3.0 * max(x1 - x0, y1 - y0), rtol=1e-3)


def test_a_negative_length_runs_upstream():
    line, = solved("circle").streamlines((3.0, 1.5), length=-4.0)
    assert_array_equal(line[0], (3.0, 1.5))
    assert_array_less(np.diff(line[:, 0]), 0.0)
    assert_allclose(length_of(line), 4.0, rtol=1e-3)


def test_both_ways_the_line_is_the_one_upstream_reversed_and_the_one_downstream():
    model, start = solved("square and tube"), (-1.0, 0.9)
    line, = model.streamlines(start, length=2.0, both_ways=True)
    upstream, = model.streamlines(start, length=-2.0)
    downstream, = model.streamlines(start, length=2.0)
    assert_array_equal(line, np.concatenate([upstream[::-1], downstream[1:]]))
    assert np.sum((line == start).all(axis=1)) == 1, "its start is not once within it"
    assert_array_less(0.0, np.diff(line[:, 0]))


def test_a_streamline_traced_back_from_its_end_returns_to_its_start():
    model = solved("circle")
    there, = model.streamlines((-3.0, 0.05), length=6.0)
    back, = model.streamlines(there[-1], length=-length_of(there))
    # Over 6 long, past the stagnation point and back; the length itself is of a polygon.
    nearest = np.hypot(*(back - there[0]).T).min()
    assert_array_less(nearest, 6.0 / PER_LENGTH)
    values = model.stream_function(back)
    assert_allclose(values, values[0], rtol=0, atol=1e-6)


def test_lines_end_at_the_domains_edge():
    domain = (-2.5, 2.0, -1.2, 1.2)
    starts = np.array([(-2.0, 0.5), (-2.0, 1.1), (-2.0, -0.3), (1.5, 0.9)])
    for line in solved("circle").streamlines(starts, length=10.0, domain=domain, both_ways=True):
        assert_array_less(domain[0] - 1e-12, line[:, 0])
        assert_array_less(line[:, 0], domain[1] + 1e-12)
        assert_array_less(domain[2] - 1e-12, line[:, 1])
        assert_array_less(line[:, 1], domain[3] + 1e-12)
        for end in (line[0], line[-1]):
            room = min(end[0] - domain[0], domain[1] - end[0], end[1] - domain[2],
                       domain[3] - end[1])
            # Less than one more point away.
            assert room < 10.0 / PER_LENGTH, f"ends {room} before the edge, at {end}"


def test_a_line_that_would_come_back_into_the_domain_ends_where_it_left():
    model, start = solved("circle"), (-3.0, 0.5)
    free, = model.streamlines(start, length=6.0)
    crest = free[:, 1].max()
    # Over the edge for a few points only, fewer than a step of the solver has.
    line, = model.streamlines(start, length=6.0, domain=(-5.0, 5.0, -5.0, crest - 5e-4))
    assert line[-1, 0] < 0.0, f"it goes on to {line[-1]}"


def test_a_start_outside_the_domain_gives_an_empty_line():
    inner, outer = solved("circle").streamlines([(-2.0, 0.5), (-2.0, 5.0)], length=1.0,
                                                domain=(-3.0, 3.0, -2.0, 2.0))
    assert len(inner) > 1 and outer.shape == (0, 2)


@pytest.mark.parametrize("both_ways", [False, True])
def test_a_start_inside_a_body_gives_an_empty_line_and_leaves_the_others_as_they_are(both_ways):
    model = solved("square and tube")
    within = [(0.0, 0.0), (1.2, 0.4)]
    lines = model.streamlines([within[0], (-2.0, 0.6), within[1]], length=2.0, both_ways=both_ways)
    alone, = model.streamlines((-2.0, 0.6), length=2.0, both_ways=both_ways)
    assert [line.shape for line in lines[::2]] == [(0, 2), (0, 2)]
    # Steps are as long as the most demanding line of a call asks for.
    assert_allclose(lines[1], alone, atol=1e-6)


@pytest.mark.parametrize("direction", [0.0, 90.0])
def test_a_start_on_the_stagnation_line_ends_at_the_wall(direction):
    model = solved("circle")
    upstream = -np.array([np.cos(np.radians(direction)), np.sin(np.radians(direction))])
    line, = model.streamlines(3.0 * upstream, direction, length=10.0)
    # At rest, slower than 1e-5 of the stream: that is 5e-6 radii before the wall; what steps of a
    # slowing line leave is a few of that.
    assert_array_less(np.hypot(*(line[-1] - upstream)), 1e-4)
    assert not ob.inside(model, line).any()
    assert_array_less(length_of(line), 2.0 + 1e-9)
    # Along the axis: rounding, which the stagnation point spreads.
    assert_allclose(line @ [upstream[1], -upstream[0]], 0, atol=1e-9)


def test_a_line_just_beside_the_stagnation_line_goes_round_the_body():
    line, = solved("circle").streamlines((-3.0, 1e-6), length=8.0)
    assert line[-1, 0] > 2.0, f"it ends at {line[-1]}"
    assert_array_less(0.0, line[:, 1])
    assert line[:, 1].max() > 0.999
    assert not ob.inside(solved("circle"), line).any()


def test_a_start_on_a_wall_runs_along_it():
    line, = solved("circle").streamlines((0.0, 1.0), length=1.0)
    radius = np.hypot(*line.T)
    # On the wall, but never in it: the streamline's own accuracy.
    assert_array_less(radius, 1.0 + 1e-5)
    assert_array_less(1.0 - 1e-12, radius)
    assert_array_equal(line[0], (0.0, 1.0))
    assert len(line) > 100


def test_a_start_behind_the_sharp_edge_leaves_it_along_its_bisector():
    model = ob.solve(ob.four_digit("0012"))
    line, = model.streamlines(model.edge_point(0), length=1.0)
    # By symmetry; the edge's own rounding.
    assert_allclose(line[:, 1], 0, atol=1e-6)
    assert_allclose(line[-1, 0], 2.0, atol=1e-3)


def test_closed_streamlines_under_a_strong_circulation_stay_near_the_body():
    model = ob.solve(ob.circle(1.0), circulation=-50.0)
    line, = model.streamlines((0.0, 0.8), length=20.0)
    radius = np.hypot(*line.T)
    assert 0.5 < radius.min() and radius.max() < 2.0
    turns = np.unwrap(np.arctan2(line[:, 1], line[:, 0]))
    assert turns[-1] - turns[0] < -6 * np.pi, f"{(turns[-1] - turns[0]) / 2 / np.pi} turns"


@pytest.mark.parametrize("shape", [(2,), (3, 2), (2, 3, 2), (0, 2)])
def test_starts_may_have_any_shape_and_lines_come_as_a_flat_list(shape):
    starts = np.full(shape, -3.0)
    lines = solved("circle").streamlines(starts, length=1.0)
    assert isinstance(lines, list) and len(lines) == np.prod(shape[:-1], dtype=int)
    for line in lines:
        assert line.ndim == 2 and line.shape[1] == 2


@pytest.mark.parametrize("arguments, message", [
    (dict(direction=[0.0, 1.0]), r"direction must be one number for streamlines; call once"),
    (dict(direction=np.nan), r"direction must be finite"),
    (dict(length=np.inf), r"length must be finite, got inf"),
    (dict(length="long"), r"length must be a number, got 'long'"),
    (dict(starts=(1.0, 2.0, 3.0)), r"starts must have shape \(\.\.\., 2\)"),
    (dict(starts=(1.0, np.nan)), r"starts must be finite"),
    (dict(domain=(1.0, 0.0, 0.0, 1.0)), r"domain must be \(xmin, xmax, ymin, ymax\), got \[1"),
    (dict(domain=(0.0, 1.0, 2.0, 2.0)), r"domain must be \(xmin, xmax, ymin, ymax\), got \[0"),
    (dict(domain=(0.0, 1.0, 2.0)), r"domain must be \(xmin, xmax, ymin, ymax\), got \[0"),
    (dict(domain="all"), r"domain must hold real numbers"),
])
def test_what_cannot_be_traced_is_refused_with_name_and_value(arguments, message):
    with pytest.raises(ob.InputError, match=message):
        solved("circle").streamlines(**{"starts": (-3.0, 1.0), **arguments})

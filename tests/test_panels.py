"""How panels are laid: nodes by arc length, lengths by what the wall asks for, refusals."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_less
from scipy.special import ellipe, ellipeinc

import exact
import offbody as ob

SQUARE = ob.polygon([(-0.5, -0.5), (0.5, -0.5), (0.5, 0.5), (-0.5, 0.5)], corner_radius=0.05)
CAMBERED = ob.four_digit("4412")
OUTLINES = {
    "circle": ob.circle(0.3, (2.0, 1.0)),
    "ellipse 2:1": ob.ellipse(2.0, 1.0, turned=20.0),
    "ellipse 100:1": ob.ellipse(2.0, 0.02),
    "square": SQUARE,
    "square, small radius": ob.polygon([(0, 0), (1, 0), (1, 1), (0, 1)], corner_radius=0.001),
    "angle": ob.polygon([(0, 0), (1, 0), (1, 0.3), (0.3, 0.3), (0.3, 1), (0, 1)], 0.02),
    "section": ob.four_digit("0012"),
    "cambered section": CAMBERED,
    "points": ob.outline([(0, 0), (3, 0), (4, 2), (2, 3), (-1, 1.5)]),
}
EACH = pytest.mark.parametrize("outline", OUTLINES.values(), ids=OUTLINES.keys())


def laid(*outlines, order=2, **options):
    """The panels of a model; where they end does not depend on their order."""
    return ob.solve(outlines, order=order, **options)._panels


def lengths(panels, body=0):
    """Arc lengths of a body's panels, in order round the wall."""
    return np.diff(panels.end_arcs[panels.panel_slice(body)], axis=1)[:, 0]


def spans(panels, body=0):
    """Chord and middle of each panel of a body."""
    ends = panels.ends[panels.panel_slice(body)]
    return abs(ends[:, 1] - ends[:, 0]), ends.mean(axis=1)


# --- nodes by arc length --------------------------------------------------------------------------


def test_nodes_stand_at_gauss_points_of_the_arc_length_of_an_ellipse():
    panels = laid(ob.ellipse(2.0, 1.0), order=16)
    angle = np.arctan2(2 * panels.nodes.imag, panels.nodes.real) % (2 * np.pi)
    # The arc of an ellipse from the end of its length is that from the end of its thickness to
    # angle + 90 degrees, less a quarter: Legendre's integral of the second kind, modulus^2 = 3/4.
    arc = ellipeinc(angle + np.pi / 2, 0.75) - ellipe(0.75)
    # Rounding of positions, nodes and integrals alike.
    assert_allclose(panels.arcs, arc, rtol=0, atol=1e-13)
    gauss = np.polynomial.legendre.leggauss(16)[0]
    ends = panels.end_arcs
    middle, half = ends.mean(axis=1), np.diff(ends, axis=1)[:, 0] / 2
    assert_allclose(panels.arcs, (middle[:, None] + half[:, None] * gauss).ravel(), atol=1e-13)
    assert_allclose(panels.weights.sum(), 4 * ellipe(0.75), rtol=1e-14)


@EACH
def test_weights_sum_to_the_length_of_a_fine_polygon(outline):
    fine = outline.points(200_000)
    perimeter = np.hypot(*(np.roll(fine, -1, axis=0) - fine).T).sum()
    # The polygon falls short in second order; worst where the parameter is widest, at the corners
    # of a thousandth of the side.
    assert_allclose(lengths(laid(outline)).sum(), perimeter, rtol=1e-7)


def crowded(function, strength):
    """The same curve with a parameter that crowds near s = 0 and is sparse half round."""
    def run(s):
        return function(s - strength * np.sin(2 * np.pi * s) / (2 * np.pi))
    return run


@pytest.mark.parametrize("strength", [0.5, 0.95])
def test_a_crowded_parameter_gives_the_panels_and_the_flow_of_an_even_one(strength):
    solution = exact.Ellipse(2.0, 1.0, turned=20.0)
    even = ob.solve(ob.ellipse(2.0, 1.0, turned=20.0), panels=16)
    odd = ob.solve(ob.curve(crowded(exact.as_function(solution), strength)), panels=16)
    # Measured 2 percent: the lengths wanted are looked up at samples, which the parameter places.
    assert_allclose(lengths(odd._panels), lengths(even._panels), rtol=0.03)
    points = exact.as_pairs(solution.offset_points(np.arange(60) / 60, np.c_[[1e-6, 0.1, 3.0]]))
    # Both are exact to 1e-10 with 16 panels; a parameter that mattered would cost many digits.
    assert_allclose(odd.velocity(points, 33.0), even.velocity(points, 33.0), rtol=0, atol=1e-9)


def test_a_parameter_that_crowds_at_a_sharp_edge_keeps_the_exact_circulation():
    section = exact.KarmanTrefftz(bending=0.04)

    def run(s):  # s^2 from either side: points crowd at the edge more than its angle asks for
        return exact.as_pairs(section.wall(np.where(s < 0.5, 2 * s * s, 1 - 2 * (1 - s) ** 2)))

    model = ob.solve(ob.curve(run, sharp=0.0))
    # As promised for the even parameter; measured 5e-8.
    assert_allclose(model.circulation(5.0), [section.circulation(5.0)], rtol=0, atol=1e-6)


# --- lengths --------------------------------------------------------------------------------------


@EACH
def test_neighbouring_panels_differ_by_less_than_a_factor_of_e(outline):
    size = lengths(laid(outline))
    ratio = size / np.roll(size, 1)
    if outline.edge is not None:
        ratio = ratio[1:]  # the first and the last panel meet at the edge and see nothing of it
    # The field of lengths rises by no more than the way along the wall; 20 percent for whole
    # numbers of panels between joins.
    assert_array_less(np.maximum(ratio, 1 / ratio), 1.2 * np.e)


@EACH
def test_panels_end_at_every_join_and_edge(outline):
    panels = laid(outline)
    places = outline.position(np.array([*outline.joins, *([outline.edge] * (outline.edge is not
                                                                            None))]))
    nearest = abs(places[:, None] - panels.ends[:, 0]).min(axis=1, initial=np.inf)
    # The end is the join itself: rounding of its arc position.
    assert_allclose(nearest, 0, atol=1e-14 * lengths(panels).sum())


def test_the_place_of_greatest_camber_is_a_join_on_both_sides():
    ends = laid(CAMBERED).ends[:, 0]
    camber = 0.04 + 0.4j   # 4 percent, at 40 percent of the chord, where the camber line is level
    upper, lower = (ends[np.argmin(abs(ends - place))] for place in (0.4 + 0.098j, 0.4 - 0.018j))
    assert_allclose([upper.real, lower.real], camber.imag, rtol=0, atol=1e-12)


def test_panels_shrink_toward_joins_by_a_factor_of_eight():
    # Of what the curvature asks for beside the join, the arc's half a radius: a sixteenth of it.
    size, middle = spans(laid(SQUARE))
    join = 0.45 + 0.5j
    beside = size[np.argsort(abs(middle - join))[:2]]
    assert_array_less(beside, 2 * 0.5 * 0.05 / 8)
    assert size.max() > 20 * beside.min(), "panels are small everywhere"


@pytest.mark.parametrize("outline", [OUTLINES["section"], CAMBERED], ids=lambda o: o.kind)
def test_panels_shrink_toward_a_sharp_edge_to_a_hundred_millionth(outline):
    size = lengths(laid(outline))
    # 1e-8 of the perimeter, within the factor of e of one panel.
    assert_array_less(size[[0, -1]], np.e * 1e-8 * size.sum())
    assert_array_less(1e-8 / np.e * size.sum(), size[[0, -1]])


@pytest.mark.parametrize("gap", [0.1, 1e-3, 1e-5])
def test_panels_in_a_gap_are_no_longer_than_the_gap_stays_narrow(gap):
    panels = laid(ob.circle(2.0), ob.circle(2.0, (2.0 + gap, 0.0)))
    for body, place in ((0, 1.0), (1, 1.0 + gap)):
        size, middle = spans(panels, body)
        # The gap widens as gap + x^2: twice as wide at x = sqrt(gap). Twice it, for a panel that
        # lies beside the narrowest place rather than at it.
        assert_array_less(size[np.argmin(abs(middle - place))], 2 * np.sqrt(gap))
        assert size.max() > 0.4, "panels far from the gap are as long as on a lone circle"


@pytest.mark.parametrize("turned", [0.0, 37.0])
@pytest.mark.parametrize("gap", [1e-2, 1e-3, 1e-4])
def test_the_flow_through_a_narrow_gap_over_the_ground_is_exact(gap, turned):
    pair = exact.TwoCircles.above_ground(1.0, gap)
    place = (0.0, 1.0 + gap)
    model = ob.solve(ob.circle(2.0, place).turned(turned, about=place), surroundings=ob.Ground())
    surface = model.surface(0)
    on_wall = pair.velocity(exact.as_complex(surface.points))
    expected = exact.along_wall(surface.points, exact.as_velocity(on_wall))
    # Ten times what the same gaps give between two circles.
    assert_allclose(surface.speed, expected, rtol=0, atol=1e-8 * abs(expected).max())


@pytest.mark.parametrize("gap", [1e-1, 1e-3, 1e-5])
def test_the_flow_through_a_narrow_gap_between_circles_is_exact(gap):
    pair = exact.TwoCircles.with_gap(1.0, 0.5, gap)
    model = ob.solve([ob.circle(2 * c.radius, (c.centre.real, c.centre.imag))
                      for c in pair.bodies])
    for body in (0, 1):
        surface = model.surface(body, 90.0)
        on_wall = pair.velocity(exact.as_complex(surface.points), 90.0)
        expected = exact.along_wall(surface.points, exact.as_velocity(on_wall))
        # Measured 5e-11 of the greatest speed; the narrowest gap's share is the rounding of places
        # over it, 1e-16 of 1e-5.
        assert_allclose(surface.speed, expected, rtol=0, atol=1e-9 * abs(expected).max())


@EACH
@pytest.mark.parametrize("factor", [1e-6, 1e6])
def test_panels_do_not_depend_on_the_unit_of_length(outline, factor):
    size, scaled = lengths(laid(outline)), lengths(laid(outline.scaled(factor)))
    # Rounding, which the spline of a body's arc multiplies.
    assert_allclose(scaled, factor * size, rtol=1e-7)


# --- counts ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("panels, expected", [
    (20, (20, 20)), (np.int64(20), (20, 20)), ([20, 30], (20, 30)), ((12, 11), (12, 11)),
    (np.array([20, 30]), (20, 30)), ([None, 30], (13, 30)),
])
def test_panels_are_counted_for_all_bodies_or_for_each(panels, expected):
    model = ob.solve([ob.circle(1.0), ob.circle(0.5, (3.0, 0.0))], panels=panels, order=8)
    assert model.panel_counts == expected
    assert model.node_count == 8 * sum(expected)


def test_a_count_is_shared_among_the_smooth_pieces_as_they_need_panels():
    panels = laid(SQUARE, panels=40)
    assert len(panels.ends) == 40
    size, middle = spans(panels)
    at_corner = np.maximum(abs(middle.real), abs(middle.imag)) > 0.45
    corners = at_corner & (np.minimum(abs(middle.real), abs(middle.imag)) > 0.45)
    # By symmetry each corner gets as many as the others, but for what does not divide by four.
    quadrant = np.angle(middle[corners]) // (np.pi / 2)
    assert np.ptp(np.unique(quadrant, return_counts=True)[1]) <= 1


@pytest.mark.parametrize("panels, message", [
    (1, r"panels must be at least 2, got 1"),
    (0, r"panels must be at least 2, got 0"),
    (-3, r"panels must be at least 2, got -3"),
    (2.0, r"panels must be a whole number, got 2\.0"),
    (True, r"panels must be a whole number, got True"),
    ("20", r"panels must be a whole number, got '20'"),
    ([20], r"panels has 1 entries for 2 bodies; give one for each"),
    ([20, 20, 20], r"panels has 3 entries for 2 bodies; give one for each"),
    (5, r"panels = 5: polygon .* has 8 smooth pieces and needs at least 8 panels"),
])
def test_counts_that_cannot_be_are_refused_with_name_value_and_mend(panels, message):
    with pytest.raises(ob.InputError, match=message):
        ob.solve([SQUARE, ob.circle(0.5, (3.0, 0.0))], panels=panels)


# --- refusals -------------------------------------------------------------------------------------

BAR = ob.ellipse(4.0, 0.1)
MEETING = {
    "bars that cross, no end of one within the other": (BAR, BAR.turned(90.0)),
    "the same twice": (BAR, BAR),
    "one within the other": (ob.circle(2.0), ob.circle(0.5, (0.1, 0.1))),
    "the other within the one": (ob.circle(0.5, (0.1, 0.1)), ob.circle(2.0)),
    "a tiny one within a great one": (ob.circle(100.0), ob.circle(1e-3, (20.0, 10.0))),
    "circles that overlap by a millionth": (ob.circle(2.0), ob.circle(2.0, (2.0 - 1e-6, 0.0))),
    "circles that touch": (ob.circle(2.0), ob.circle(2.0, (2.0, 0.0))),
    "circles that touch between samples": (
        ob.circle(2.0).turned(33.0), ob.circle(2.0, (2.0, 0.0)).turned(50.0, (2.0, 0.0))),
    "circles nearer than a billionth": (ob.circle(2.0), ob.circle(2.0, (2.0 + 1e-10, 0.0))),
    "squares side by side": (SQUARE, SQUARE.moved(1.0, 0.3)),
    "a flap that meets its section": (
        ob.four_digit("0012"), ob.four_digit("0012", 0.3).moved(0.999, 0.0)),
}


@pytest.mark.parametrize("bodies", MEETING.values(), ids=MEETING.keys())
def test_bodies_that_meet_are_refused_with_their_names_a_place_and_a_mend(bodies):
    clear = ob.circle(0.1, (500.0, 0.0))
    message = r"bodies 0 \(.+\) and 2 \(.+\) overlap or touch near \(.+, .+\); move them apart"
    with pytest.raises(ob.InputError, match=message):
        ob.solve([bodies[0], clear, bodies[1]])


def test_the_place_named_is_where_bodies_touch():
    with pytest.raises(ob.InputError, match=r"near \(1, [-+.\de]+\)"):
        ob.solve([ob.circle(2.0), ob.circle(1.0, (1.5, 0.0))])


def test_a_body_in_the_bay_of_another_is_not_refused():
    channel = ob.polygon([(0, 0), (3, 0), (3, 3), (2.8, 3), (2.8, 0.2), (0.2, 0.2), (0.2, 3),
                          (0, 3)], corner_radius=0.05)
    model = ob.solve([channel, ob.circle(1.0, (1.5, 1.5))], order=8)
    # Zero net circulation: rounding.
    assert_allclose(model.circulation(30.0), 0, atol=1e-12)


@pytest.mark.parametrize("turned", [0.0, 37.0])
@pytest.mark.parametrize("height", [-3.0, 0.5, 0.999, 1 - 1e-4, 1 - 1e-6, 1 - 1e-8, 1.0, 1 + 1e-10])
def test_a_body_across_or_on_the_ground_is_refused(height, turned):
    place = (0.0, height)
    circle = ob.circle(2.0, place).turned(turned, about=place)
    with pytest.raises(ob.InputError, match=r"body 0 \(circle .*wall y = 0 .*; move it up"):
        ob.solve(circle, surroundings=ob.Ground())


def test_a_flat_side_on_the_ground_is_refused():
    with pytest.raises(ob.InputError, match=r"body 1 \(polygon .*wall y = -0\.5 .*; move it up"):
        ob.solve([ob.circle(1.0, (3.0, 3.0)), SQUARE], surroundings=ob.Ground(-0.5))

"""Outlines lie where they should, know their edges and joins, and refuse what is no body."""

import pickle
import time

import numpy as np
import pytest

import offbody as ob

SQUARE = [(0.0, 0.0), (1.0, 0.0), (1.0, 1.0), (0.0, 1.0)]
L_SHAPE = [(0, 0), (2, 0), (2, 0.6), (0.6, 0.6), (0.6, 2), (0, 2)]


def assert_near(actual, expected, atol=0.0, rtol=0.0):
    """Like NumPy's, with no tolerance that is not asked for."""
    np.testing.assert_allclose(actual, expected, rtol=rtol, atol=atol)


def pairs(z):
    return np.stack([np.real(z), np.imag(z)], axis=-1)


def round_points(count, length=2.0, thickness=2.0, shift=0.0):
    angle = 2 * np.pi * (np.arange(count) + shift) / count
    return np.stack([length / 2 * np.cos(angle), thickness / 2 * np.sin(angle)], axis=-1)


def area(outline, count=100_000):
    z = outline.position((np.arange(count) + 0.5) / count)
    return 0.5 * np.sum((np.conj(z) * np.roll(z, -1)).imag)


# Functions for ob.curve, at module level so that they can be pickled.


def ellipse_function(s):
    return pairs(np.cos(2 * np.pi * s) + 0.1j * np.sin(2 * np.pi * s))


def ellipse_derivative(s):
    return 2 * np.pi * (-np.sin(2 * np.pi * s) + 0.1j * np.cos(2 * np.pi * s))


def wavy_function(s):
    return pairs((1 + 0.1 * np.cos(40 * np.pi * s)) * np.exp(2j * np.pi * s))


def wavy_derivative(s):
    radius, change = 1 + 0.1 * np.cos(40 * np.pi * s), -4 * np.pi * np.sin(40 * np.pi * s)
    return (change + 2j * np.pi * radius) * np.exp(2j * np.pi * s)


STADIUM_LENGTH = 4 + 2 * np.pi


def stadium(s):
    """Sides of length 2 and half circles of radius 1, by arc length: positions and derivatives."""
    along = (s % 1.0) * STADIUM_LENGTH
    right, left = along - 2 - np.pi / 2, along - 4 - 1.5 * np.pi
    top = along - 2 - np.pi
    cases = [along < 2, along < 2 + np.pi, along < 4 + np.pi]
    z = np.select(cases, [along - 1 - 1j, 1 + np.exp(1j * right), 1 - top + 1j],
                  -1 - np.exp(1j * left))
    slope = np.select(cases, [1, 1j * np.exp(1j * right), -1], -1j * np.exp(1j * left))
    return z, slope * STADIUM_LENGTH


def stadium_function(s):
    return pairs(stadium(s + 0.1234567)[0])


STADIUM_JOINS = np.sort((np.array([0, 2, 2 + np.pi, 4 + np.pi]) / STADIUM_LENGTH - 0.1234567) % 1)

POWER = 2 - 12 / 180


def karman_trefftz(s, shift):
    """A section with an edge of 12 degrees at s = 0; the edge is at the origin if shift is 0."""
    centre = -0.08 + 0.02j
    spoke = 1 - centre
    off_edge = spoke * 2j * np.sin(np.pi * s) * np.exp(1j * np.pi * s)
    ratio = off_edge / (off_edge + 2)
    z = 2 * POWER * ratio**POWER / (1 - ratio**POWER) + shift
    slope = 2 * np.pi * 1j * spoke * np.exp(2j * np.pi * s) * 2 / (off_edge + 2) ** 2
    return z, 2 * POWER**2 * ratio ** (POWER - 1) / (1 - ratio**POWER) ** 2 * slope


def karman_trefftz_function(s):
    return pairs(karman_trefftz(s, POWER)[0])


def karman_trefftz_from_edge(s):
    return pairs(karman_trefftz(s, 0.0)[0])


def square_function(s, shift=0.0377):
    side, along = np.divmod(4 * (s + shift) % 4, 1)
    corner = np.array([0, 1, 1 + 1j, 1j, 0])
    k = side.astype(int)
    return pairs(corner[k] + along * (corner[k + 1] - corner[k]))


def eased_square_function(s):
    """The square, its speed nought at every corner, so that the function is smooth there."""
    quarters = 4 * (s + 0.0377)
    k = np.floor(quarters)
    along = quarters - k
    return square_function((k + along**2 * (3 - 2 * along)) / 4, shift=0.0)


def some_outlines():
    """One outline of each kind, with what it is in words."""
    return {
        "circle": ob.circle(0.3, centre=(1, 2)),
        "ellipse": ob.ellipse(2.0, 0.3, centre=(0, 1), turned=25.0),
        "polygon": ob.polygon(L_SHAPE, 0.1),
        "smooth": ob.outline(round_points(24, 3.0, 1.0)),
        "sharp": ob.outline(ob.four_digit("4415").points(60), sharp=0),
        "few": ob.outline([(1, 0), (0.3, 0.2), (0, 0), (0.3, -0.1)], sharp=0),
        "symmetric": ob.four_digit("0012"),
        "cambered": ob.four_digit("2412", chord=3.0),
        "curve": ob.curve(ellipse_function),
        "stadium": ob.curve(stadium_function),
        "turned round": ob.curve(karman_trefftz_function, sharp=0.0),
    }


OUTLINES = some_outlines()
EACH = pytest.mark.parametrize("name", OUTLINES)

# --- what every outline promises ------------------------------------------------------------------


@EACH
def test_position_and_derivative_have_the_shape_of_the_parameter(name):
    outline = OUTLINES[name]
    for shape in ((), (0,), (3,), (2, 3), (2, 0, 3)):
        s = np.full(shape, 0.3)
        for values in (outline.position(s), outline.derivative(s)):
            assert np.shape(values) == shape
            assert np.asarray(values).dtype == complex


@EACH
def test_parameter_is_periodic_and_tiny_negative_parameters_are_just_before_its_origin(name):
    outline = OUTLINES[name]
    s = np.random.default_rng(1).random(100)
    # Adding 3 rounds s to 4e-16, and speeds are below 100.
    assert_near(outline.position(s + 3), outline.position(s), atol=1e-13)
    ends = outline.position(np.array([0.0, 1.0, -1e-300, -1e-17]))
    assert_near(ends, ends[0], atol=1e-14)  # rounding of coordinates below 4


@EACH
def test_derivative_is_the_limit_of_differences(name):
    outline = OUTLINES[name]
    breaks = np.array([0.0, *outline.joins, *outline.knots, 1.0])
    s = np.random.default_rng(2).random(500)
    s = s[np.abs(s[:, None] - breaks).min(axis=1) > 3e-4]
    step = 1e-4
    slope = np.array([1, -8, 8, -1]) / (12 * step)
    differences = sum(
        w * outline.position(s + k * step) for w, k in zip(slope, (-2, -1, 1, 2), strict=True)
    )
    derivative = outline.derivative(s)
    # Fourth-order differences: step^4 times the fifth derivative, and rounding over the step.
    assert_near(differences, derivative, atol=2e-8 * np.abs(derivative).max())


@EACH
def test_outlines_run_counter_clockwise_and_close(name):
    outline = OUTLINES[name]
    assert area(outline) > 0
    # Spectral or better; joins cost the trapezium rule some digits.
    total = np.mean(outline.derivative((np.arange(20_000) + 0.5) / 20_000))
    assert abs(total) < 1e-4 * np.abs(outline.derivative(0.37))


@EACH
def test_outlines_survive_pickling(name):
    outline = OUTLINES[name].moved(1.0, -2.0).turned(33.0)
    copy = pickle.loads(pickle.dumps(outline))
    s = np.linspace(0, 1, 50)
    np.testing.assert_array_equal(copy.position(s), outline.position(s))
    np.testing.assert_array_equal(copy.derivative(s), outline.derivative(s))
    for mark in ("edge", "joins", "knots", "start", "name"):
        assert getattr(copy, mark) == getattr(outline, mark)


@EACH
def test_outlines_cannot_be_changed(name):
    with pytest.raises(AttributeError):
        OUTLINES[name].edge = 0.5


@EACH
def test_breaks_are_plain_increasing_numbers_in_the_unit_interval(name):
    outline = OUTLINES[name]
    for breaks in (outline.joins, outline.knots):
        assert type(breaks) is tuple
        assert all(type(s) is float and 0 <= s < 1 for s in breaks)
        assert list(breaks) == sorted(set(breaks))
    assert type(outline.start) is float and 0 <= outline.start < 1
    assert outline.edge is None or (type(outline.edge) is float and 0 <= outline.edge < 1)


@EACH
def test_points_lie_on_the_outline(name):
    outline = OUTLINES[name]
    np.testing.assert_array_equal(
        outline.points(7), pairs(outline.position(np.arange(7) / 7))
    )
    assert outline.points().shape == (200, 2)


@pytest.mark.parametrize("count", [0, -1, 2.5, True, "many"])
def test_points_refuses_what_is_no_count(count):
    with pytest.raises(ob.InputError, match="count"):
        ob.circle(1.0).points(count)


@pytest.mark.parametrize("s", [np.nan, [0.1, np.inf], "a"])
def test_position_and_derivative_refuse_what_is_no_finite_parameter(s):
    for method in (ob.circle(1.0).position, ob.circle(1.0).derivative):
        with pytest.raises(ob.InputError, match="s must"):
            method(s)


# --- moving, turning, scaling ---------------------------------------------------------------------


def test_moves_turns_and_scalings_compose_as_complex_arithmetic_says():
    base = ob.four_digit("2412")
    s = np.linspace(0, 1, 101)
    z = base.position(s)
    moved = base.moved(2.0, -1.0).turned(30.0, about=(1.0, 1.0)).scaled(2.5, about=(0.0, 3.0))
    turn = np.exp(1j * np.pi / 6)
    expected = ((z + 2 - 1j - (1 + 1j)) * turn + (1 + 1j) - 3j) * 2.5 + 3j
    assert_near(moved.position(s), expected, atol=1e-14)  # rounding near 10
    assert_near(
        moved.derivative(s), base.derivative(s) * turn * 2.5, atol=1e-13
    )
    assert (moved.edge, moved.joins, moved.knots, moved.start) == (
        base.edge, base.joins, base.knots, base.start
    )


def test_quarter_turns_are_exact():
    section = ob.four_digit("2412")
    s = np.linspace(0, 1, 64)
    for quarters, factor in ((1, 1j), (2, -1), (3, -1j), (-1, -1j), (4, 1)):
        turned = section.turned(90.0 * quarters)
        np.testing.assert_array_equal(turned.position(s), factor * section.position(s))


def test_a_thousand_small_turns_lose_nothing_but_rounding():
    section = ob.four_digit("2412")
    turned = section
    for _ in range(1000):
        turned = turned.turned(0.36, about=(0.25, 0.0))
    s = np.linspace(0, 1, 64)
    # A thousand roundings of a number near 1.
    assert_near(turned.position(s), section.position(s), atol=1e-13)
    assert len(turned.name) < 120, turned.name


def test_names_say_what_the_outline_is_and_where_it_has_been_set():
    assert ob.circle(0.3).name == "circle of diameter 0.3 at (0, 0)"
    assert ob.circle(0.3).moved(1, 2).name == "circle of diameter 0.3 at (0, 0), moved by (1, 2)"
    name = ob.four_digit(12).scaled(2.0).turned(-10.0).name
    assert name == "NACA 0012 section of chord 1, scaled by 2, turned by -10 degrees"
    assert ob.curve(stadium_function).name == "curve stadium_function"


@pytest.mark.parametrize(
    ("call", "argument"),
    [
        (lambda o: o.moved(np.nan, 0), "dx"),
        (lambda o: o.moved(0, "up"), "dy"),
        (lambda o: o.turned(np.inf), "degrees"),
        (lambda o: o.turned(10.0, about=(1, 2, 3)), "about"),
        (lambda o: o.scaled(0.0), "factor"),
        (lambda o: o.scaled(-1.0), "factor"),
        (lambda o: o.scaled(2.0, about=np.nan), "about"),
    ],
)
def test_moves_name_the_argument_that_they_refuse(call, argument):
    with pytest.raises(ob.InputError, match=argument):
        call(ob.circle(1.0))


# --- circle and ellipse ---------------------------------------------------------------------------


def test_circle_is_centre_plus_radius_times_unit_circle():
    s = np.random.default_rng(3).random(1000)
    circle = ob.circle(3.0, centre=(1.0, -2.0))
    unit = np.exp(2j * np.pi * s)
    assert_near(circle.position(s), 1 - 2j + 1.5 * unit, atol=2e-15)
    assert_near(circle.derivative(s), 3j * np.pi * unit, atol=2e-14)
    assert (circle.edge, circle.joins, circle.knots, circle.start) == (None, (), (), 0.0)


def test_ellipse_has_its_length_along_the_turned_axis():
    s = np.random.default_rng(4).random(1000)
    ellipse = ob.ellipse(4.0, 1.0, centre=(1.0, 2.0), turned=40.0)
    own = (ellipse.position(s) - (1 + 2j)) * np.exp(-1j * np.radians(40.0))
    assert_near((own.real / 2) ** 2 + (own.imag / 0.5) ** 2, 1, atol=1e-14)
    tip = 1 + 2j + 2 * np.exp(1j * np.radians(40.0))
    assert_near(ellipse.position(0.0), tip, atol=1e-15)
    assert "turned by 40 degrees" in ellipse.name


@pytest.mark.parametrize(
    ("make", "argument"),
    [
        (lambda: ob.circle(0.0), "diameter"),
        (lambda: ob.circle(-1.0), "diameter"),
        (lambda: ob.circle("wide"), "diameter"),
        (lambda: ob.circle(1.0, centre=(0, np.nan)), "centre"),
        (lambda: ob.ellipse(0.0, 1.0), "length"),
        (lambda: ob.ellipse(1.0, np.inf), "thickness"),
        (lambda: ob.ellipse(1.0, 1.0, centre=1.0), "centre"),
        (lambda: ob.ellipse(1.0, 1.0, turned=None), "turned"),
    ],
)
def test_circle_and_ellipse_name_the_argument_that_they_refuse(make, argument):
    with pytest.raises(ob.InputError, match=argument):
        make()


# --- polygon --------------------------------------------------------------------------------------


def curvature(outline, s, step=1e-7):
    turn = np.angle(outline.derivative(s + step) / outline.derivative(s - step))
    return turn / (2 * step * np.abs(outline.derivative(s)))


@pytest.mark.parametrize("corners", [SQUARE, L_SHAPE, SQUARE[::-1], L_SHAPE[::-1]])
def test_rounded_polygon_has_sides_and_arcs_of_the_radius_and_nothing_else(corners):
    outline = ob.polygon(corners, 0.07)
    assert len(outline.joins) == 2 * len(corners)
    ends = np.append(outline.joins, 1 + outline.joins[0])
    bends = curvature(outline, 0.5 * (ends[1:] + ends[:-1]))
    # Differences over 2e-7 of the perimeter leave 1e-9 over 1e-6.
    expected = np.select([bends > 1, bends < -1], [1 / 0.07, -1 / 0.07], 0.0)
    assert_near(bends, expected, atol=1e-5)
    arcs = np.count_nonzero(expected)
    assert arcs == len(corners)
    re_entrant = 0 if len(corners) == 4 else 1
    assert np.count_nonzero(expected < 0) == re_entrant


def test_rounded_square_has_the_area_and_perimeter_of_elementary_geometry():
    outline = ob.polygon(SQUARE, 0.1)
    speed = np.abs(outline.derivative(np.random.default_rng(5).random(1000)))
    # The parameter goes with arc length: the speed is the perimeter, everywhere.
    assert_near(speed, 4 - 0.8 + 0.2 * np.pi, rtol=1e-14)
    # Chords of 1e5 pieces cut off less than 1e-9.
    assert_near(area(outline), 1 - 0.01 * (4 - np.pi), atol=1e-8)


def test_tangents_are_continuous_at_the_joins_of_a_rounded_polygon():
    outline = ob.polygon(L_SHAPE, 0.13)
    joins = np.array(outline.joins)
    after, before = outline.derivative(joins + 1e-13), outline.derivative(joins - 1e-13)
    # An arc turns by 1e-13 perimeters over its radius in between.
    assert_near(after, before, atol=1e-10)
    assert_near(
        outline.position(joins + 1e-15), outline.position(joins - 1e-15), atol=5e-14
    )


def test_polygon_starts_in_the_middle_of_the_first_corner_whatever_its_sense():
    middle = 0.1 * (1 - np.sqrt(0.5)) * (1 + 1j)
    for corners in (SQUARE, SQUARE[:1] + SQUARE[:0:-1]):
        outline = ob.polygon(corners, 0.1)
        assert_near(outline.position(outline.start), middle, atol=1e-15)


def test_polygon_whose_first_point_lies_on_a_side_starts_there():
    corners = [(0.3, 0.0), *SQUARE[1:], SQUARE[0]]
    for points in (corners, corners[:1] + corners[:0:-1]):
        outline = ob.polygon(points, 0.1)
        assert outline.name == "polygon of 4 corners with corner radius 0.1"
        assert_near(outline.position(outline.start), 0.3, atol=1e-15)


def test_points_on_a_side_do_not_limit_the_radius():
    with_points = [(0, 0), (0.05, 0), (0.1, 0), (1, 0), (1, 0.9), (1, 1), (0, 1)]
    plain, crowded = ob.polygon(SQUARE, 0.4), ob.polygon(with_points, 0.4)
    s = np.linspace(0, 1, 100)
    assert_near(crowded.position(s), plain.position(s), atol=1e-15)


def test_square_with_the_largest_radius_is_a_circle():
    outline = ob.polygon(SQUARE, 0.5)
    z = outline.position(np.linspace(0, 1, 1000))
    assert_near(np.abs(z - 0.5 - 0.5j), 0.5, atol=1e-15)
    assert outline.joins == ()
    on_side = ob.polygon([(0.5, 0.0), *SQUARE[1:], SQUARE[0]], 0.5)
    assert_near(on_side.position(on_side.start), 0.5, atol=1e-15)


def test_radius_that_does_not_fit_is_refused_with_the_side_and_the_largest_that_fits():
    points = [(0, 0), (3, 0), (3, 1), (1.2, 1), (1.2, 2), (0, 2)]
    message = r"0\.7 does not fit on the side from point 1, \(3, 0\), to point 2, \(3, 1\)"
    with pytest.raises(ob.InputError, match=message + ".* is 0.5$"):
        ob.polygon(points, 0.7)
    ob.polygon(points, 0.5)
    with pytest.raises(ob.InputError, match=r"from point 5, \(3, 0\), to point 4, \(3, 1\)"):
        ob.polygon(points[:1] + points[:0:-1], 0.7)
    triangle = [(0, 0), (1, 0), (0.3, 0.7)]
    with pytest.raises(ob.InputError, match="the largest that fits every side is") as caught:
        ob.polygon(triangle, 5.0)
    ob.polygon(triangle, float(str(caught.value).split()[-1]))


@pytest.mark.parametrize("radius", [0.0, -0.1])
def test_no_corner_radius_is_refused_with_one_that_would_do(radius):
    with pytest.raises(ob.InputError, match="greater than zero.*; 0.02 would do here"):
        ob.polygon(SQUARE, radius)
    ob.polygon(SQUARE, 0.02)


def test_polygon_that_turns_straight_back_is_refused():
    spike = [(0, 0), (1, 0), (3, 0), (1, 0.0), (1, 1), (0, 1)]
    with pytest.raises(ob.InputError, match=r"straight back at point 2, \(3, 0\)"):
        ob.polygon(spike, 0.01)


# --- points, for polygon and outline --------------------------------------------------------------

WITH_POINTS = pytest.mark.parametrize(
    "make", [ob.outline, lambda points: ob.polygon(points, 1e-3)], ids=["outline", "polygon"]
)


@WITH_POINTS
@pytest.mark.parametrize(
    ("points", "message"),
    [
        ([(0, 0), (1, 0), (1, np.nan)], "points must be finite"),
        ([(0, 0), (1, 0), (1, np.inf)], "points must be finite"),
        ([(0, 0, 0), (1, 0, 0), (1, 1, 0)], "points must have shape"),
        ([0.0, 1.0], "points must have shape"),
        ([], "points must"),
        ("square", "points must"),
        ([(0, 0), (1, 0)], "three distinct points, got 2"),
        ([(0, 0), (1, 0), (0, 0), (1, 0)], "three distinct points, got 2"),
        ([(0, 0), (1, 1), (3, 3), (2, 2)], "on one line"),
        ([(1e6, 1e6), (1e6 + 1, 1e6), (1e6 + 2, 1e6)], "on one line"),
        ([(0, 0), (1, 1), (1, 0), (0, 1)], r"crosses .* near \(0.5, 0.5\)"),
    ],
)
def test_points_that_make_no_outline_are_refused(make, points, message):
    with pytest.raises(ob.InputError, match=message):
        make(points)


@WITH_POINTS
def test_repeated_points_and_the_sense_of_rotation_change_nothing(make):
    plain = make(L_SHAPE)
    repeated = make([L_SHAPE[0], *L_SHAPE, L_SHAPE[-1], L_SHAPE[0]])
    backward = make(L_SHAPE[:1] + L_SHAPE[:0:-1])
    s = np.linspace(0, 1, 200)
    for other in (repeated, backward):
        assert_near(other.position(s), plain.position(s), atol=1e-14)
        assert other.start == pytest.approx(plain.start, abs=1e-15)


def test_wall_that_touches_itself_is_refused():
    slit = [(0, 0), (2, 0), (2, 1), (1, 1), (1, 0.2), (1, 0.2 - 1e-12), (1, 1 + 1e-12), (0, 1)]
    with pytest.raises(ob.InputError, match="touches itself|straight back"):
        ob.polygon(slit, 1e-14)
    pinched = [(0, 0), (2, 0), (2, 2), (1, 1e-11), (0, 2)]
    with pytest.raises(ob.InputError, match=r"touches itself near \(1, "):
        ob.polygon(pinched, 1e-13)


def test_narrow_slot_is_no_crossing():
    slot = [(0, 0), (2, 0), (2, 1), (1 + 1e-6, 1), (1 + 1e-6, 0.2), (1, 0.2), (1, 1), (0, 1)]
    assert len(ob.polygon(slot, 1e-7).joins) == 16


def test_crossings_of_random_polygons_are_those_that_shapely_finds():
    shapely = pytest.importorskip("shapely")
    random = np.random.default_rng(6)
    found = []
    for _ in range(150):
        points = random.random((random.integers(3, 9), 2))
        valid = shapely.Polygon(points).is_valid
        try:
            outline = ob.polygon(points, 1e-6)
        except ob.InputError as error:
            assert not valid, f"{error}: {points.tolist()}"
            assert "crosses" in str(error)
        else:
            assert valid, f"crosses: {points.tolist()}"
            # Five thousand chords cut off corners of at most a perimeter's five-thousandth.
            assert_near(area(outline, 5000), shapely.Polygon(points).area, atol=1e-3)
        found.append(valid)
    assert 30 < sum(found) < 120, f"{sum(found)} of 150 are valid: the test says little"


def test_crossings_of_random_splines_are_those_that_shapely_finds():
    shapely = pytest.importorskip("shapely")
    random = np.random.default_rng(7)
    found = []
    for _ in range(60):
        count = random.integers(5, 20)
        radius = random.uniform(0.25, 1, count)
        points = pairs(radius * np.exp(2j * np.pi * np.arange(count) / count))
        points += random.normal(0, 0.15, points.shape)
        try:
            outline = ob.outline(points)
        except ob.InputError as error:
            assert "crosses" in str(error)
            found.append(False)
        else:
            ring = outline.points(4000)
            assert shapely.LinearRing(ring).is_simple, f"crosses: {points.tolist()}"
            found.append(True)
    assert 10 < sum(found) < 50, f"{sum(found)} of 60 do not cross: the test says little"


def test_crossing_is_found_where_a_short_chord_meets_a_long_bent_one():
    points = [(0.524, 0.03), (0.615, 0.204), (0.299, 0.461), (0.088, 0.968), (-0.095, 0.762),
              (-0.657, 0.334), (-0.857, 0.024), (-0.495, -0.192), (-0.71, -0.492),
              (-0.022, -0.678), (-0.139, -0.656), (0.593, -0.667), (0.286, 0.028)]
    with pytest.raises(ob.InputError, match=r"near \(0.0092\d*, -0.692"):
        ob.outline(points, sharp=0)


def test_small_loop_at_a_bend_is_found():
    points = [(0.831, 0.06), (0.424, 0.563), (0.271, 0.094), (-1.038, 0.416), (-0.647, -0.182),
              (-0.156, -0.535), (-0.016, -0.171)]
    with pytest.raises(ob.InputError, match=r"near \(0.213\d*, 0.0368"):
        ob.outline(points, sharp=0)


# --- a curve through points -----------------------------------------------------------------------


@pytest.mark.parametrize("count", [3, 4, 5, 6, 7, 12, 200])
def test_smooth_outline_passes_through_its_points_in_order(count):
    points = round_points(count, 2.0, 1.0, shift=0.3)
    outline = ob.outline(points)
    at_knots = pairs(outline.position(np.array(outline.knots)))
    assert_near(at_knots, points, atol=1e-14)
    assert (outline.start, outline.edge, outline.joins) == (0.0, None, ())


@pytest.mark.parametrize("shift", [0, 1, -1, 20])
@pytest.mark.parametrize("backward", [False, True])
@pytest.mark.parametrize("count", [9, 60])
def test_sharp_outline_has_its_edge_at_the_point_and_starts_at_the_first(count, backward, shift):
    points = ob.four_digit("2412").points(count)
    edge = shift % count
    points = np.roll(points, edge, axis=0)
    if backward:
        points, edge = points[::-1], count - 1 - edge
    outline = ob.outline(points, sharp=int(edge))
    assert_near(outline.position(outline.edge), 1.0, atol=1e-15)
    assert_near(
        outline.position(outline.start), complex(*points[0]), atol=1e-14
    )
    assert area(outline) > 0
    for s in (1e-6, -1e-6):
        assert abs(outline.derivative(s).real) > 0.1  # both sides leave the edge
    assert outline.derivative(1e-6).real < 0 < outline.derivative(-1e-6).real


def test_sharp_counts_repeated_points_as_the_caller_does():
    points = ob.four_digit("2412").points(60)
    closed = np.concatenate([points[10:], points[:11]])
    outline = ob.outline(closed, sharp=50)
    assert_near(outline.position(outline.edge), 1.0, atol=1e-15)
    closed = np.concatenate([points[:30], points[29:], points[:1]])
    for sharp in (0, -1, 61):
        outline = ob.outline(closed, sharp=sharp)
        assert_near(outline.position(outline.edge), 1.0, atol=1e-15)


def test_uneven_points_on_a_circle_are_followed_with_the_sixth_order():
    random = np.random.default_rng(1)
    errors = []
    for count in (40, 80):
        angle = 2 * np.pi * (np.arange(count) + 0.3 * random.uniform(-1, 1, count)) / count
        outline = ob.outline(np.stack([np.cos(angle), np.sin(angle)], axis=-1))
        errors.append(np.abs(np.abs(outline.position(np.linspace(0, 1, 5000))) - 1).max())
    # Measured 3e-8 and 5e-10; chord lengths alone give 2e-5 and 2e-6.
    assert errors[0] < 1e-7 and errors[1] < 2e-9, errors


def test_spline_through_a_section_follows_it():
    section = ob.four_digit("0012")
    outline = ob.outline(section.points(160), sharp=0)
    x, y = outline.points(2000).T
    upper = y[1:1000]
    x = x[1:1000]
    thickness = 0.6 * (0.2969 * np.sqrt(x) - 0.126 * x - 0.3516 * x**2 + 0.2843 * x**3
                       - 0.1036 * x**4)
    # Measured 3e-6, next to the nose, where the section's own third derivative jumps.
    assert_near(upper[x > 1e-3], thickness[x > 1e-3], atol=1e-5)


def test_parameter_of_a_spline_is_nearly_its_arc_length():
    outline = ob.outline(round_points(40, 2.0, 0.5))
    speed = np.abs(outline.derivative(np.linspace(0, 1, 1000)))
    assert np.ptp(speed) / speed.mean() < 0.05, np.ptp(speed) / speed.mean()


@pytest.mark.parametrize(
    ("sharp", "message"),
    [(60, "points 0 to 59"), (-61, "points 0 to 59"), (0.5, "index"), (True, "index")],
)
def test_sharp_that_is_no_index_is_refused(sharp, message):
    with pytest.raises(ob.InputError, match=f"sharp.*{message}"):
        ob.outline(round_points(60), sharp=sharp)


def test_sharp_where_points_make_no_edge_is_refused():
    with pytest.raises(ob.InputError, match="sharp = 3: .* is smooth there"):
        ob.outline(round_points(200), sharp=3)
    turn = np.linspace(0, 2 * np.pi, 60, endpoint=False)
    heart = pairs((0.5 + np.sin(turn / 2)) * np.exp(1j * turn))
    with pytest.raises(ob.InputError, match="sharp = 0: .* is re-entrant there"):
        ob.outline(heart, sharp=0)


# --- a curve given as a function ------------------------------------------------------------------

EVERYWHERE = np.sort(
    np.concatenate([np.random.default_rng(8).random(20_000), np.geomspace(1e-14, 0.1, 500)])
)


def test_positions_of_a_curve_are_those_of_the_function():
    for function in (ellipse_function, wavy_function, stadium_function):
        outline = ob.curve(function)
        np.testing.assert_array_equal(pairs(outline.position(EVERYWHERE)), function(EVERYWHERE))
        assert outline.start == 0.0


@pytest.mark.parametrize(
    ("function", "derivative"),
    [(ellipse_function, ellipse_derivative), (wavy_function, wavy_derivative)],
)
def test_derivative_of_an_analytic_curve_is_good_to_rounding(function, derivative):
    outline = ob.curve(function)
    exact = derivative(EVERYWHERE)
    error = np.abs(outline.derivative(EVERYWHERE) - exact) / np.abs(exact)
    assert error.max() < 2e-11, error.max()  # rounding times degree squared times pieces
    assert outline.joins == ()


def test_jumps_of_curvature_are_found_to_rounding():
    outline = ob.curve(stadium_function)
    assert_near(outline.joins, STADIUM_JOINS, atol=1e-12)
    exact = stadium(EVERYWHERE + 0.1234567)[1]
    away = np.abs(EVERYWHERE[:, None] - STADIUM_JOINS).min(axis=1) > 1e-12
    error = np.abs(outline.derivative(EVERYWHERE) - exact)[away]
    assert error.max() < 1e-9, error.max()  # of 10.3; rounding times degree squared times pieces


@pytest.mark.parametrize("shift", [0.0, 0.25 - 2 / STADIUM_LENGTH, 0.5 - 1e-4])
def test_jumps_of_curvature_are_found_at_round_parameters_too(shift):
    outline = ob.curve(lambda s: pairs(stadium(s - shift)[0]))
    joins = (np.array([0, 2, 2 + np.pi, 4 + np.pi]) / STADIUM_LENGTH + shift) % 1
    away = (np.array(outline.joins)[:, None] - joins + 0.5) % 1 - 0.5
    assert len(outline.joins) == 4
    # One of them may lie 1e-4 from s = 0: pieces so short are compared to fewer digits.
    assert_near(np.abs(away).min(axis=0), 0, atol=1e-9)


def test_a_jump_of_the_third_derivative_is_a_join():
    def bent(s):
        radius = 1 + 0.1 * np.abs(np.sin(np.pi * (s - 0.3))) ** 3
        return pairs(radius * np.exp(2j * np.pi * s))

    # A jump that shows in the third derivative only: the cube root of rounding, and better.
    assert_near(ob.curve(bent).joins, [0.3], atol=1e-5)


def test_derivative_toward_a_sharp_edge_is_as_good_as_the_points():
    outline = ob.curve(karman_trefftz_function, sharp=0.0)
    assert (outline.edge, outline.joins) == (0.0, ())
    for least, tolerance in ((1e-2, 1e-10), (1e-3, 2e-9), (1e-4, 1e-7), (1e-5, 5e-6)):
        s = np.geomspace(least, 0.3, 2000)
        s = np.concatenate([s, 1 - s])
        z, exact = karman_trefftz(s, POWER)
        error = np.abs(outline.derivative(s) / exact - 1).max()
        # Distances from the edge go as s^1.93: 1e-4 is 4e-8 of the chord, known to 5e-9.
        assert error < tolerance, (least, error)


def test_derivative_is_good_to_rounding_beside_an_edge_at_the_origin():
    outline = ob.curve(karman_trefftz_from_edge, sharp=0.0)
    s = np.geomspace(1e-11, 0.5, 3000)
    error = np.abs(outline.derivative(s) / karman_trefftz(s, 0.0)[1] - 1)
    assert error.max() < 1e-10, error.max()


@pytest.mark.parametrize("sense", [1, -1])
def test_functions_are_never_asked_outside_their_interval(sense):
    def strict(s):
        assert s.dtype == float and s.ndim == 1 and (s >= 0).all() and (s < 1).all(), s
        return ellipse_function(sense * s)

    outline = ob.curve(strict)
    s = np.array([[0.0, 1.0, -1e-300], [1 - 2.0**-53, -3.5, 1e9]])
    assert outline.position(s).shape == outline.derivative(s).shape == (2, 3)


def test_clockwise_functions_are_turned_round():
    outline = ob.curve(lambda s: karman_trefftz_function(-(s - 0.3) % 1), sharp=0.3)
    plain = ob.curve(karman_trefftz_function, sharp=0.0)
    assert area(outline) > 0
    assert_near(outline.position(outline.edge), POWER, atol=1e-12)
    assert_near(
        outline.position(outline.start), complex(*karman_trefftz_function(0.3)), atol=1e-15
    )
    s = np.linspace(0.01, 0.99, 99)
    assert_near(
        outline.derivative(outline.edge + s), plain.derivative(s), rtol=1e-8
    )


def test_a_four_digit_section_as_a_function_has_its_joins_found():
    section = ob.four_digit("2412")
    outline = ob.curve(lambda s: pairs(section.position(s)), sharp=0.0)
    assert_near(outline.joins, section.joins, atol=1e-11)
    s = np.random.default_rng(9).random(10_000)
    error = np.abs(outline.derivative(s) - section.derivative(s))
    assert error.max() < 1e-9, error.max()  # of 4


@pytest.mark.parametrize(
    ("function", "corner"),
    [
        (square_function, 0.25 - 0.0377),
        (lambda s: square_function(s, shift=0.0), 0.25),
        (lambda s: square_function(-s % 1), 0.0377),
        (eased_square_function, 0.25 - 0.0377),
        (lambda s: karman_trefftz_function((s + 0.3) % 1), 0.7),
        (lambda s: karman_trefftz_function(-(s + 0.3) % 1), 0.7),
        (lambda s: pairs(np.cos(2 * np.pi * s) ** 3 + 1j * np.sin(2 * np.pi * s) ** 3), 0.0),
    ],
)
def test_a_corner_that_sharp_does_not_name_is_refused_with_its_place(function, corner):
    with pytest.raises(ob.InputError, match="has a sharp corner near s = ") as caught:
        ob.curve(function)
    found = float(str(caught.value).split("s = ")[1].split(",")[0])
    # Within a thousandth; some of these have several corners a quarter apart.
    assert abs((found - corner + 0.125) % 0.25 - 0.125) < 1e-3, caught.value


def test_corners_of_half_a_degree_are_joins_and_of_two_degrees_are_refused():
    def kinked(degrees):
        size = np.radians(degrees) / 2
        return lambda s: pairs(
            (1 - size * np.abs(np.sin(2 * np.pi * (s - 0.2)) / 2)) * np.exp(2j * np.pi * s)
        )

    assert_near(ob.curve(kinked(0.5)).joins, [0.2, 0.7], atol=1e-12)
    with pytest.raises(ob.InputError, match="near s = 0.2,|near s = 0.7,"):
        ob.curve(kinked(2.5))


@pytest.mark.parametrize("sharp", [0.3, 0.999])
def test_sharp_beside_the_edge_is_refused(sharp):
    with pytest.raises(ob.InputError, match="corner|smooth"):
        ob.curve(karman_trefftz_function, sharp=sharp)


@pytest.mark.parametrize("sharp", [0.0, 0.3, 0.5])
def test_sharp_on_a_smooth_wall_is_refused_even_at_its_sharpest_bend(sharp):
    with pytest.raises(ob.InputError, match=f"sharp = {sharp}: .* smooth"):
        ob.curve(ellipse_function, sharp=sharp)


@pytest.mark.parametrize("sharp", [-0.1, 1.0, np.nan, "0"])
def test_sharp_outside_the_unit_interval_is_refused(sharp):
    with pytest.raises(ob.InputError, match="sharp"):
        ob.curve(karman_trefftz_function, sharp=sharp)


@pytest.mark.parametrize(
    ("function", "message"),
    [
        (lambda s: pairs(np.exp(5j * s)), "is open: it starts at .* and ends at"),
        (lambda s: pairs(np.exp(2j * np.pi * s) + ((s > 0.37) & (s < 0.8))),
         "is open: at s = 0.37 it leaps"),
        (lambda s: pairs(np.exp(2j * np.pi * s) + ((s >= 0.5) & (s < 0.75))),
         "is open: at s = 0.[57]5? it leaps"),
        (lambda s: pairs(np.sin(2 * np.pi * s) + 1j * np.sin(4 * np.pi * s)), "crosses"),
        (lambda s: pairs(np.exp(4j * np.pi * s)), "crosses or touches"),
        (lambda s: pairs((0.5 + np.cos(2 * np.pi * s)) * np.exp(2j * np.pi * s)), "crosses"),
        (lambda s: pairs(np.cos(2 * np.pi * s) + 0j), "corner|crosses"),
        (lambda s: pairs(0 * s), "no length"),
        (lambda s: pairs(np.log(s + 0j) + np.exp(2j * np.pi * s)), "not finite at s = 0;"),
        (lambda s: np.round(ellipse_function(s), 4), "not smooth anywhere"),
        (lambda s: ellipse_function(s).T, r"gave shape \(2, 3\)"),
        (lambda s: ellipse_function(s) + 0j, "complex"),
        (lambda s: (float(s), 0.0), "failed on an array"),
        (lambda s: None, "function gave"),
        (3.0, "callable"),
    ],
)
@pytest.mark.filterwarnings("ignore:divide by zero", "ignore:invalid value")
def test_functions_that_are_no_outline_are_refused(function, message):
    with pytest.raises(ob.InputError, match=message):
        ob.curve(function)


def test_rounded_functions_are_taken_with_a_warning():
    with pytest.warns(ob.AccuracyWarning, match="rounded to"):
        outline = ob.curve(lambda s: ellipse_function(s).astype(np.float32))
    s = np.linspace(0, 1, 500)
    error = np.abs(outline.derivative(s) - ellipse_derivative(s))
    assert error.max() < 1e-3, error.max()  # float32: 6e-8 times a thousand and more


def test_a_parameter_with_unbounded_speed_is_followed_all_the_same():
    def by_height(s):
        x = 2 * np.abs(2 * ((s + 0.07) % 1) - 1) - 1
        y = np.where((s + 0.07) % 1 < 0.5, 1, -1) * np.sqrt(np.maximum(0, 1 - x * x))
        return pairs(x + 1j * y)

    outline = ob.curve(by_height)
    assert_near(np.sort(outline.joins), [0.43, 0.93], atol=1e-9)


# --- NACA four-digit sections ---------------------------------------------------------------------


def test_half_thickness_of_the_0012_is_that_of_naca_report_460():
    """NACA Report 460, ordinates of the 0012; those away from 30 percent are from memory."""
    section = ob.four_digit("0012")
    for x, ordinate in {0.3: 0.06002, 0.1: 0.04683, 0.5: 0.05294, 0.7: 0.03664}.items():
        z = section.position(0.5 * (1 - np.sqrt(x)))
        assert_near(z.real, x, atol=1e-15)
        # Closing the edge takes 0.6 * 0.0021 x^4 from the ordinate: 1e-5 at 30 percent. The rest
        # is half a unit of the last printed digit, with room for a slip of memory.
        assert_near(z.imag + 0.6 * 0.0021 * x**4, ordinate, atol=1.1e-5)


def test_nose_radius_is_that_of_naca_report_460():
    """NACA Report 460: leading-edge radius 1.1019 thickness^2, 1.58 percent for the 0012."""
    section = ob.four_digit("0012")
    assert_near(1 / curvature(section, 0.5 - 1e-5), 0.0158, atol=2e-4)


def test_sections_close_at_an_edge_at_the_end_of_the_chord_with_the_nose_at_the_origin():
    for code in ("0012", "2412", "6409", "9740"):
        section = ob.four_digit(code, chord=2.5)
        assert complex(section.position(0.0)) == 2.5
        assert complex(section.position(0.5)) == 0.0
        assert complex(section.position(np.nextafter(1, 0))) == pytest.approx(2.5, abs=1e-14)
        assert (section.edge, section.start) == (0.0, 0.0)
        assert section.position(0.1).imag > section.position(0.9).imag  # the upper side first


def test_thickness_near_the_edge_keeps_all_its_digits():
    section = ob.four_digit("0012")
    s = np.array([1e-12, 1e-9, 1e-6])
    mpmath = pytest.importorskip("mpmath")
    with mpmath.workdps(50):
        for value, z in zip(s, section.position(s), strict=True):
            root = 1 - 2 * mpmath.mpf(float(value))
            exact = mpmath.mpf("0.6") * sum(
                mpmath.mpf(a) * root**k
                for a, k in (("0.2969", 1), ("-0.1260", 2), ("-0.3516", 4), ("0.2843", 6),
                             ("-0.1036", 8))
            )
            # The coefficients themselves are rounded to 1e-16 of 0.3, their sum here is 0.07.
            assert abs(z.imag / float(exact) - 1) < 1e-14


def test_symmetric_sections_are_exact_mirror_images_of_themselves():
    section = ob.four_digit("0018", chord=1.3)
    s = np.random.default_rng(10).integers(1, 2**40, 5000) / 2**40  # 1 - s is exact
    np.testing.assert_array_equal(section.position(1 - s), np.conj(section.position(s)))
    mirrored = -np.conj(section.derivative(s))
    np.testing.assert_array_equal(section.derivative(1 - s)[s != 0.5], mirrored[s != 0.5])


def test_the_camber_line_has_its_greatest_height_where_the_code_says():
    section = ob.four_digit("4415")
    upper, lower = section.position(np.array(section.joins)[[0, 2]])
    # The camber line is level there, so that the two points are right above each other.
    assert_near(0.5 * (upper + lower), 0.4 + 0.04j, atol=1e-15)
    for x, height in ((0.2, 0.04 * 0.2 * 0.6 / 0.16), (0.7, 0.04 * 0.27 / 0.36)):
        s = 0.5 * (1 - np.sqrt(x))
        middle = 0.5 * (section.position(s) + section.position(1 - s))
        assert_near(middle, x + 1j * height, atol=1e-15)


def test_thickness_is_laid_off_perpendicular_to_the_camber_line():
    section = ob.four_digit("6409")
    s = np.linspace(0.02, 0.48, 47)
    across = section.position(s) - section.position(1 - s)
    x = (1 - 2 * s) ** 2
    slope = np.where(x < 0.4, 0.12 / 0.16 * (0.4 - x), 0.12 / 0.36 * (0.4 - x))
    assert_near((across * (1 - 1j * slope)).real, 0, atol=1e-15)


def test_joins_are_the_nose_and_the_places_of_greatest_camber():
    assert ob.four_digit("0012").joins == (0.5,)
    joins = ob.four_digit("2412").joins
    assert_near(joins, [0.5 - np.sqrt(0.1), 0.5, 0.5 + np.sqrt(0.1)], rtol=1e-15)


def test_corners_at_the_greatest_camber_are_as_small_as_the_docstring_says():
    for code, degrees in (("2412", 0.018), ("6221", 2.35)):
        section = ob.four_digit(code)
        joins = np.array(section.joins)[[0, 2]]
        turn = np.angle(section.derivative(joins + 1e-9) / section.derivative(joins - 1e-9))
        assert_near(np.degrees(np.abs(turn).max()), degrees, rtol=0.02)


@pytest.mark.parametrize(
    ("code", "name"), [("0012", "NACA 0012"), (12, "NACA 0012"), (2412, "NACA 2412"),
                       (np.int64(9), "NACA 0009")],
)
def test_codes_are_words_or_numbers(code, name):
    assert ob.four_digit(code).name == f"{name} section of chord 1"


@pytest.mark.parametrize(
    ("code", "message"),
    [
        ("0000", "no thickness"), ("2400", "no thickness"), (0, "no thickness"),
        ("012", "four digits"), ("23012", "four digits"), (23012, "four digits"),
        (-12, "four digits"), ("NACA", "four digits"), (12.0, "four digits"),
        (True, "four digits"), ("\u0660\u0660\u0661\u0662", "four digits"), (None, "four digits"),
        ("2012", "'0012'"), ("0412", "'0012'"), ("9121", "fold"),
    ],
)
def test_codes_of_no_section_are_refused(code, message):
    with pytest.raises(ob.InputError, match=f"code.*{message}"):
        ob.four_digit(code)


@pytest.mark.parametrize("chord", [0.0, -1.0, np.nan])
def test_four_digit_refuses_a_chord_that_is_not_greater_than_zero(chord):
    with pytest.raises(ob.InputError, match="chord"):
        ob.four_digit("0012", chord=chord)


# --- reading from a file --------------------------------------------------------------------------


@pytest.fixture
def write(tmp_path):
    def write(content, name="tower.csv"):
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return path

    return write


@pytest.mark.parametrize(
    "text",
    [
        "0,0\n1,0\n1,1\n0,1\n",
        "0 0\n1 0\n1 1\n0 1\n0 0",
        "\ufeffx,y\r\n0,0\r\n1,0\r\n1,1\r\n0,1\r\n",
        "# tower at Hallin Sound\n\nx (m)\ty (m)\n0\t0\n  1 ,\t0\n# half\n1e0, 1.0\n0 1\n",
        "Hallin tower 12\n0 0\n1 0\n1 1\n0 1",
        "POLYGON ((0 0, 1 0, 1 1, 0 1, 0 0))",
        "polygon((0 0,1 0,1 1,0 1))\n",
        "# a tower\nPolygon\n  ((0 0,\n    1 0, 1 1,\n    0 1,\n    0 0));\n",
        "\ufeffPOLYGON ((0 0, 0 1, 1 1, 1 0, 0 0))",
    ],
)
def test_every_way_of_writing_a_square_gives_the_same_polygon(write, text):
    expected = ob.polygon(SQUARE, 0.1)
    outline = ob.read_outline(write(text), corner_radius=0.1)
    s = np.linspace(0, 1, 100)
    assert_near(outline.position(s), expected.position(s), atol=1e-15)
    assert outline.name == f"{expected.name}, read from tower.csv"


def test_without_corner_radius_the_points_lie_on_a_curve(write):
    points = ob.four_digit("2412").points(60)
    text = "\n".join(f"{x!r} {y!r}" for x, y in points.tolist())
    outline = ob.read_outline(str(write(text)), sharp=0)
    expected = ob.outline(points, sharp=0)
    s = np.linspace(0, 1, 100)
    np.testing.assert_array_equal(outline.position(s), expected.position(s))
    assert outline.edge == 0.0


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("0 0\n1 0\n1 x\n0 1", "line 3: found '1 x', expected two finite numbers"),
        ("0 0\n1 0\n\n# c\n1\n0 1", "line 5: found '1', .*comma or blanks"),
        ("0 0 0\n1 0 0", "line 1: found '0 0 0', .*leave out the third"),
        ("0,5 0,0\n1,5 0,0", "line 1: found '0,5 0,0', .*decimals with a point"),
        ("0 0\n1 nan\n1 1", "line 2: found '1 nan'"),
        ("0 0\n1 1_0\n1 1", "line 2: found '1 1_0'"),
        ("x y\nlength width\n0 0\n1 0", "line 2: found 'length width'"),
        ("1.O 0 0\n0 0\n1 0\n1 1", "line 1: found '1.O 0 0'"),
        ("O.5 0.0\n1 0\n1 1", "line 1: found 'O.5 0.0'"),
        ("", "holds no points"),
        ("# nothing\n", "holds no points"),
        ("x y\n", "holds no points"),
        ("0 0\n1 0\n", "tower.csv: points must hold at least three distinct"),
        ("0 0\n1 1\n1 0\n0 1\n", "tower.csv: .* crosses"),
        ("POLYGON Z ((0 0 0, 1 0 0, 1 1 0))", "line 1: .*leave out Z and M"),
        ("POLYGON ((0 0 1, 1 0 1, 1 1 1))", "line 1: found '0 0 1', .*leave out the third"),
        ("\nPOLYGON ((0 0, 9 0, 9 9), (1 1, 2 1, 2 2))", "line 2: .*leave out the holes"),
        ("MULTIPOLYGON (((0 0, 1 0, 1 1)))", "a file of its own"),
        ("SRID=4326;POLYGON ((0 0, 1 0, 1 1))", "leave out SRID"),
        ("LINESTRING (0 0, 1 0, 1 1)", r"expected POLYGON \(\(x y"),
        ("POLYGON EMPTY", r"expected POLYGON \(\(x y"),
        ("POLYGON ((0 0, 1 0, 1 1)", "check the brackets"),
        ("POLYGON ((0 0, 1 0, 1 1))\n3 4", "nothing else"),
        ("# c\nPOLYGON ((0 0,\n1 0,\none 1))", "line 4: found 'one 1'"),
        ("POLYGON (( ))", "line 1: found ''"),
        (b"0 0\n1 0\n\xff\xfe 1", "not UTF-8 text"),
        ("0 0\n1 0".encode("utf-16"), "not UTF-8 text"),
        (b"0 0\n\x00\x01", "binary"),
    ],
)
def test_files_that_hold_no_outline_are_refused_with_line_and_mend(write, text, message):
    with pytest.raises(ob.InputError, match="(?s)tower.csv.*" + message.replace("tower.csv", "")):
        ob.read_outline(write(text))


def test_files_that_cannot_be_read_are_refused(tmp_path):
    with pytest.raises(ob.InputError, match="nowhere.csv cannot be read: No such file"):
        ob.read_outline(tmp_path / "nowhere.csv")
    with pytest.raises(ob.InputError, match="cannot be read"):
        ob.read_outline(tmp_path)
    with pytest.raises(ob.InputError, match="path must name a file"):
        ob.read_outline(3)
    with pytest.raises(ob.InputError, match="cannot be read"):
        ob.read_outline("null\0byte")


def test_corner_radius_and_sharp_exclude_each_other(write):
    with pytest.raises(ob.InputError, match="one of the two"):
        ob.read_outline(write("0 0\n1 0\n1 1"), corner_radius=0.1, sharp=0)


def test_what_is_wrong_with_the_corner_radius_names_the_file(write):
    with pytest.raises(ob.InputError, match="tower.csv: corner_radius = 3"):
        ob.read_outline(write("0 0\n1 0\n1 1"), corner_radius=3)


# --- speed ----------------------------------------------------------------------------------------


def seconds(call, repeats=5):
    def once():
        start = time.perf_counter()
        call()
        return time.perf_counter() - start

    return min(once() for _ in range(repeats))


def test_outlines_are_made_fast_enough_to_sit_in_a_loop():
    # Measured on two cores: 7 microseconds, 5 and 70 milliseconds; the limits leave room for
    # a busy machine.
    assert seconds(lambda: ob.circle(1.0), 50) < 1e-4
    assert seconds(lambda: ob.outline(round_points(200))) < 0.05
    count = 20_000
    radius = 1 + 0.3 * np.cos(2 * np.pi * 200 * np.arange(count) / count)
    points = radius[:, None] * round_points(count)
    assert seconds(lambda: ob.polygon(points, 1e-5), 2) < 1.0


@EACH
def test_a_hundred_thousand_points_take_a_fraction_of_a_second(name):
    outline = OUTLINES[name]
    s = np.random.default_rng(11).random(100_000)
    # Measured 5 to 30 milliseconds.
    assert seconds(lambda: outline.position(s), 2) < 0.3
    assert seconds(lambda: outline.derivative(s), 2) < 0.3

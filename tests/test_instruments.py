"""Instruments beside points, paths and discs, the boom below them, and how exact their tables are.

Pitot-static tubes, multi-hole probes, and a cup with a vane; against the exact flow past a circle.
"""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal, assert_array_less

import offbody as ob
from exact import Circle
from offbody.cases import read_case

CIRCLE = Circle(radius=1.0)
EXACT = 1e-9  # the default panels on a circle are good to 1e-10 of the undisturbed speed
COMPASS = np.arange(0.0, 360.0, 15.0)


@pytest.fixture(scope="module")
def tube():
    return ob.solve(ob.circle(2.0))


def exact(z, directions):
    """The exact u + i v at one place, (n,)."""
    return np.conj(CIRCLE.velocity(np.array([z]), np.asarray(directions)[:, None]))[:, 0]


def degrees(vectors, axis):
    return np.angle(vectors * np.exp(-1j * np.radians(axis)), deg=True)


# --- tubes and probes -----------------------------------------------------------------------------


def test_a_pitot_tube_reads_the_speed_at_its_static_holes_and_the_yaw_at_its_nose(tube):
    sensor = ob.PitotTube(-2.0, 1.0, axis=10.0, static_behind=0.5)
    static = complex(-2.0, 1.0) + 0.5 * np.exp(1j * np.radians(10.0))
    table = ob.survey(tube, sensor, COMPASS)
    assert_allclose(table.speed_ratio[:, 0], np.abs(exact(static, COMPASS)), atol=EXACT)
    assert_allclose(table.static_error[:, 0], 1 - np.abs(exact(static, COMPASS)) ** 2, atol=EXACT)
    # EXACT of the speed is 6e-8 degrees.
    assert_allclose(table.yaw[:, 0], degrees(exact(-2 + 1j, COMPASS), 10.0), atol=1e-7)
    assert np.isnan(table.direction_error).all()  # it reads a speed


def test_far_from_all_bodies_a_tube_is_trusted_up_to_its_greatest_yaw_and_no_further(tube):
    sensor = ob.PitotTube(-1e6, 0.0, axis=30.0, greatest_yaw=10.0)
    table = ob.survey(tube, sensor, [19.9, 20.1, 30.0, 39.9, 40.1])
    assert_array_equal(table.saturated[:, 0], [True, False, False, False, True])
    assert_array_equal(table.trust, ~table.saturated)
    assert table.reason[0, 0] == "yaw beyond -10 to 10 degrees"


def test_a_probe_saturates_beyond_its_outermost_hole_on_either_side(tube):
    probe = ob.MultiHoleProbe(-1e6, 0.0, axis=0.0, hole_angles=(-30.0, 0.0, 50.0))
    table = ob.survey(tube, probe, [-31.0, -29.0, 0.0, 49.0, 51.0])
    assert_array_equal(table.saturated[:, 0], [True, False, False, False, True])
    assert_array_equal(table.trust, ~table.saturated)


def test_yaw_is_clockwise_positive_in_a_table_made_for_bearings(tube):
    probe = ob.MultiHoleProbe(-2.0, 1.0, axis=0.0, hole_angles=(-30.0, 50.0))
    by_direction = ob.survey(tube, probe, directions=[40.0, -40.0])
    by_bearing = ob.survey(tube, probe, bearings=ob.to_bearing(np.array([40.0, -40.0])))
    # Rounding of angles of at most a turn.
    assert_allclose(by_bearing.yaw, -by_direction.yaw, atol=1e-12)
    assert_array_equal(by_bearing.saturated, by_direction.saturated)


def test_a_probe_reads_speed_and_direction_as_a_point_does(tube):
    probe = ob.MultiHoleProbe(-2.0, 1.0, axis=0.0, hole_angles=(-45.0, 45.0))
    table = ob.survey(tube, [probe, ob.PointSensor(-2.0, 1.0)], COMPASS)
    for column in ("speed_ratio", "direction_error", "static_error", "speed_ratio_gradient"):
        values = getattr(table, column)
        assert_array_equal(values[:, 0], values[:, 1], err_msg=column)


# --- a cup with a vane ----------------------------------------------------------------------------


def test_a_pair_takes_the_speed_from_the_cup_and_the_direction_from_the_vane(tube):
    cup, vane = ob.DiscSensor((0.0, 3.0), 0.3), ob.PointSensor(2.0, 1.0)
    table = ob.survey(tube, [ob.CupAndVane(cup, vane), cup, vane], COMPASS)
    for column, source in (("speed_ratio", 1), ("speed_ratio_gradient", 1), ("static_error", 1),
                           ("direction_error", 2), ("direction_error_gradient", 2)):
        values = getattr(table, column)
        # Rounding: zeros are added to the sums.
        assert_allclose(values[:, 0], values[:, source], atol=1e-12, err_msg=column)


def test_a_pair_is_trusted_where_both_of_it_are(tube):
    cup, vane = ob.PointSensor(0.0, 3.0), ob.PointSensor(3.0, 0.0)
    table = ob.survey(tube, [ob.CupAndVane(cup, vane), cup, vane], COMPASS)
    assert_array_equal(table.trust[:, 0], table.trust[:, 1] & table.trust[:, 2])
    assert not table.trust[:, 1].all() and not table.trust[:, 2].all()


EVERY = {
    "point": ob.PointSensor(-2.0, 1.0),
    "path": ob.PathSensor((-2.0, 1.0), (-1.5, 1.5)),
    "crossed": ob.CrossedPaths([((-2.0, 1.0), (-1.5, 1.5)), ((-2.0, 1.5), (-1.5, 1.0))]),
    "disc": ob.DiscSensor((-2.0, 1.0), 0.3),
    "tube": ob.PitotTube(-2.0, 1.0, axis=10.0, static_behind=0.5),
    "probe": ob.MultiHoleProbe(-2.0, 1.0, 0.0, (-45.0, 45.0)),
    "pair": ob.CupAndVane(ob.DiscSensor((0.0, 3.0), 0.3), ob.PointSensor(2.0, 1.0)),
}


@pytest.mark.parametrize("kind", EVERY)
def test_gradients_are_what_moving_the_whole_sensor_does(tube, kind):
    sensor, step = EVERY[kind], 1e-5
    table = ob.survey(tube, sensor, [20.0, 75.0])
    for axis, shift in enumerate(((step, 0.0), (0.0, step))):
        ahead = ob.survey(tube, sensor.moved(*shift), [20.0, 75.0])
        behind = ob.survey(tube, sensor.moved(*np.negative(shift)), [20.0, 75.0])
        for column in ("speed_ratio", "direction_error"):
            slope = (getattr(ahead, column) - getattr(behind, column)) / (2 * step)
            # Central differences of a smooth field: step^2, and rounding of 1e-13 degrees / step.
            assert_allclose(getattr(table, f"{column}_gradient")[..., axis], slope, atol=1e-7)


@pytest.mark.parametrize("kind", EVERY)
def test_a_moved_sensor_samples_where_it_was_moved_to(kind):
    sensor = EVERY[kind]
    assert_allclose(sensor.moved(0.3, -0.2).points, sensor.points + [0.3, -0.2], rtol=1e-15)
    assert_allclose(sensor.moved(0.3, -0.2).centre, np.add(sensor.centre, [0.3, -0.2]),
                    rtol=1e-15)


# --- the boom below an instrument -----------------------------------------------------------------


def test_fifteen_diameters_above_a_tubular_boom_keep_it_below_half_a_percent():
    # IEC 61400-12-1, mounting of instruments: distortion by the boom below 0.5 percent, cups about
    # 15 boom diameters above a tubular boom. Exact: (a/r)^2 = 0.11 percent there; the boom's wake
    # (Cd = 1.2) takes off less than that.
    assert_allclose(ob.Boom(0.0, 15.0, 1.0).factors, 1 + 1 / 30**2, rtol=0, atol=EXACT)
    assert_array_less(np.abs(np.subtract(ob.Boom(0.0, 15.0, 1.0, ob.Wake(1.2)).factors, 1)), 0.005)


def test_half_a_percent_is_reached_seven_diameters_above_a_tubular_boom():
    # (a/r)^2 = 0.005 (Milne-Thomson, circle in a stream).
    assert_allclose(ob.Boom(0.0, np.sqrt(50), 1.0).factors, 1.005, rtol=0, atol=EXACT)


def test_a_boom_changes_the_flow_across_it_and_none_along_it(tube):
    sensor, boom = ob.PointSensor(0.0, 4.0), ob.Boom(90.0, 0.6, 0.2)
    factor = 1 + (0.1 / 0.6) ** 2
    table = ob.survey(tube, sensor, COMPASS, booms=boom)
    bare = exact(4j, COMPASS)
    sensed = bare.real * factor + 1j * bare.imag  # the boom lies along y
    undisturbed = np.exp(1j * np.radians(COMPASS))
    assert_allclose(table.speed_ratio[:, 0], np.abs(sensed), atol=EXACT)
    assert_allclose(table.body_speed_ratio[:, 0], np.abs(bare), atol=EXACT)
    # Of angles in degrees.
    error = np.angle(sensed / undisturbed, deg=True)
    assert_allclose(table.direction_error[:, 0], error, atol=1e-7)
    assert_allclose(table.boom_speed_ratio[COMPASS == 90.0, 0], 1.0, atol=EXACT)
    assert_allclose(table.boom_speed_ratio[COMPASS == 0.0, 0], factor, atol=EXACT)


@pytest.mark.parametrize("kind", ["point", "disc", "crossed", "pair"])
def test_both_parts_multiply_and_the_gradient_is_that_of_the_whole(tube, kind):
    boom, step = ob.Boom(60.0, 0.6, 0.2, ob.Wake(1.2)), 1e-5
    table = ob.survey(tube, EVERY[kind], [20.0], booms=[boom])
    bare = ob.survey(tube, EVERY[kind], [20.0])
    assert_array_equal(table.body_speed_ratio, bare.speed_ratio)
    product = table.body_speed_ratio * table.boom_speed_ratio
    assert_allclose(table.speed_ratio, product, rtol=1e-15)
    ahead, behind = (
        ob.survey(tube, EVERY[kind].moved(move, 0.0), [20.0], booms=[boom])
        for move in (step, -step)
    )
    slope = (ahead.speed_ratio - behind.speed_ratio) / (2 * step)
    # Central differences, as above.
    assert_allclose(table.speed_ratio_gradient[..., 0], slope, atol=1e-7)


def test_a_mirrored_boom_does_to_a_stream_what_the_boom_does_to_the_reverse():
    corners = np.array([(-0.1, -0.1), (0.2, -0.1), (-0.1, 0.15)])
    section = ob.polygon(corners, 0.02)
    mirrored = ob.polygon(corners[::-1] * [-1, 1], 0.02)
    wake = ob.Wake(2.0)
    to_left, to_right = ob.Boom(0.0, 0.5, section, wake).factors
    # The accuracy of the default panels on a triangle with rounded corners.
    assert_allclose(ob.Boom(0.0, 0.5, mirrored, wake).factors, [to_right, to_left], rtol=1e-7)
    assert abs(to_left - to_right) > 1e-3, (to_left, to_right)
    # Without a wake the flow is reversible.
    assert_allclose(*ob.Boom(0.0, 0.5, section).factors, rtol=1e-12)


# --- the numerical error --------------------------------------------------------------------------


@pytest.mark.parametrize("kind", EVERY)
def test_the_numerical_error_is_about_that_of_the_table(kind):
    coarse = ob.solve(ob.circle(2.0), panels=8, order=6)
    fine = ob.solve(ob.circle(2.0))
    table, right = (ob.survey(model, EVERY[kind], COMPASS) for model in (coarse, fine))
    error = table.numerical_error[:, 0]
    off = np.abs(table.speed_ratio - right.speed_ratio)[:, 0]
    turned = np.radians(np.abs(table.direction_error - right.direction_error)[:, 0])
    worst = max(np.nanmax(off), np.nanmax(np.nan_to_num(turned)))
    # An estimate, of the greatest part of the error: within a factor of three of the worst.
    assert worst / 3 < error.max() < 1e-2, (worst, error.max())
    known = np.isfinite(off)
    assert_array_less(off[known], 3 * error.max())


def test_the_numerical_error_stands_in_the_rows(tube):
    row = next(ob.survey(tube, ob.PointSensor(-2.0, 1.0), [0.0]).rows())
    assert 0 <= row["numerical_error"] < EXACT, row["numerical_error"]


# --- what is refused ------------------------------------------------------------------------------

POINT = ob.PointSensor(0.0, 3.0)


@pytest.mark.parametrize(
    ("make", "complaint"),
    [
        (lambda: ob.PitotTube(0, 0, axis=0, greatest_yaw=0), "greatest_yaw must be greater"),
        (lambda: ob.PitotTube(0, 0, axis=0, static_behind=-1), "static_behind must be at least 0"),
        (lambda: ob.PitotTube(0, 0, axis="north"), "axis must be a number"),
        (lambda: ob.MultiHoleProbe(0, 0, 0, (10, 45)), "at least one angle on either side"),
        (lambda: ob.MultiHoleProbe(0, 0, 0, (-95, 45)), "between -90 and 90"),
        (lambda: ob.MultiHoleProbe(0, 0, 0, 45), "hole_angles = 45"),
        (lambda: ob.CupAndVane(POINT, ob.PathSensor((0, 3), (0, 4))), "vane must be a PointSensor"),
        (lambda: ob.CupAndVane(POINT, POINT, name=" "), "name must be a text"),
        (lambda: ob.Boom(0.0, 0.05, 0.2), "height = 0.05 is inside the boom"),
        (lambda: ob.Boom(0.0, 0.5, "tube"), "section must be a number"),
    ],
)
def test_an_instrument_that_cannot_be_is_refused(make, complaint):
    with pytest.raises(ob.InputError, match=complaint):
        make()


@pytest.mark.parametrize(
    ("sensors", "booms", "complaint"),
    [
        ([POINT], [None, None], "booms has 2 entries for 1 sensors"),
        ([POINT], [3.0], r"booms\[0\] must be an ob.Boom"),
        ([ob.WallPort(0, 0.1)], ob.Boom(0.0, 0.5, 0.1), r"booms\[0\] is given for a port"),
        ([ob.PitotTube(-2, 0.3, axis=0, static_behind=4.0)], None, "lies inside or across body 0"),
        ([ob.MultiHoleProbe(0, 0, 0, (-9, 9))], None, "lies inside or across body 0"),
        ([ob.CupAndVane(POINT, ob.DiscSensor((0, 1.2), 0.5))], None, "inside or across body 0"),
    ],
)
def test_an_instrument_or_a_boom_that_does_not_fit_is_refused(tube, sensors, booms, complaint):
    with pytest.raises(ob.InputError, match=complaint):
        ob.survey(tube, sensors, booms=booms)


# --- case files -----------------------------------------------------------------------------------

CASE = """\
length_unit = "m"
stream = { bearings = 30 }
body = [{ shape = "circle", diameter = 0.4, name = "mast" }]

[[sensor]]
name = "pair"
kind = "cup_and_vane"
[sensor.cup]
radius = 0.1
boom = { bearing = 270, length = 2, from = "axis", diameter = 0.05, height = 0.75 }
[sensor.vane]
boom = { bearing = 0, length = 1, from = "face" }

[[sensor]]
name = "tube"
kind = "pitot_tube"
x = 1
y = -1
nose_bearing = 250
static_behind = 0.1
greatest_yaw = 15

[[sensor]]
name = "probe"
kind = "multi_hole_probe"
x = -1
y = -1
nose_bearing = 240
hole_angles = [-40, 0, 40]
"""


@pytest.fixture
def case(tmp_path):
    def read(text):
        path = tmp_path / "case.toml"
        path.write_text(text, encoding="utf-8")
        return read_case(path)

    return read


def test_a_case_file_places_every_instrument(case):
    read = case(CASE)
    pair, tube, probe = read.sensors
    # Rounding of a boom's heading.
    assert_allclose([pair.cup.centre, pair.vane.centre], [(-2, 0), (0, 1.2)], atol=1e-12)
    # A nose that points to 250 is met head on by the stream that goes to 20, counter-clockwise
    # from east.
    assert (tube.axis, tube.static_behind, tube.greatest_yaw) == (20.0, 0.1, 15.0)
    assert (probe.axis, probe.hole_angles) == (30.0, (-40.0, 0.0, 40.0))
    boom, *others = read.boom_sections
    assert (boom.direction, boom.height, boom.section) == (-180.0, 0.75, 0.05)
    assert others == [None, None]
    assert read.booms[1] is None
    table = read.survey(read.solve())
    assert_allclose(np.nanmax(table.boom_speed_ratio[:, 0]), 1 + (0.025 / 0.75) ** 2, atol=EXACT)


@pytest.mark.parametrize(
    ("old", "new", "complaint"),
    [
        ("nose_bearing = 250\n", "", "missing; expected an angle"),
        ("nose_bearing = 250", "nose_direction = 20", "say every angle of a case one way"),
        ("greatest_yaw = 15", "greatest_yaw = 95", "greatest_yaw must be at most 90"),
        ("[-40, 0, 40]", "[0, 40]", "at least one angle on either side"),
        ("diameter = 0.05, ", "", "boom.diameter: missing; expected a number, beside height"),
        (", height = 0.75", "", "boom.height: missing"),
        ("height = 0.75", "height = 0.01", "is inside the boom"),
        ('length = 1, from = "face"', 'length = 1, from = "face", diameter = 0.1, height = 1',
         "counts for the cup"),
    ],
)
def test_a_case_file_that_misplaces_one_says_which_key(case, old, new, complaint):
    assert CASE.count(old) == 1
    with pytest.raises(ob.InputError, match=complaint):
        case(CASE.replace(old, new))

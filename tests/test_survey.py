"""Surveys: every column against exact solutions, symmetries, and the rules of trust."""

import json
from types import SimpleNamespace

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal, assert_array_less

import offbody as ob
from exact import Circle, as_complex, as_pairs, as_velocity
from offbody import surveys

EXACT = 1e-9  # the default panels on a circle are good to 1e-10 of the undisturbed speed
COMPASS = np.arange(0.0, 360.0, 15.0)


class ExactCircle:
    """The exact flow past a circle in place of a solved model, as a second opinion."""

    def __init__(self, radius=1.0):
        self.circle = Circle(radius)
        self.surroundings = ob.OpenStream()
        self.wakes, self.bracings = (None,), ()
        self.outlines = (SimpleNamespace(edge=None, name="exact circle"),)
        self.walls = [as_pairs(self.circle.wall(np.arange(200) / 200))]

    def _columns(self, directions):
        return np.asarray(directions)[:, None]

    def velocity(self, points, directions):
        return as_velocity(self.circle.velocity(as_complex(points), self._columns(directions)))

    def velocity_gradient(self, points, directions):
        slope = self.circle.gradient(as_complex(points), self._columns(directions))
        rows = [[slope.real, -slope.imag], [-slope.imag, -slope.real]]
        return np.moveaxis(np.array(rows), (0, 1), (-2, -1))

    def undisturbed(self, points, directions):
        stream = np.exp(1j * np.radians(self._columns(directions)))
        return as_pairs(stream + 0 * as_complex(points))

    def widest(self, body, directions):
        left = 1j * self.circle.radius * np.exp(1j * np.radians(directions))
        return np.stack([as_pairs(left), as_pairs(-left)], axis=-2)

    def breadth(self, body, directions):
        return np.full(len(directions), 2 * self.circle.radius)


@pytest.fixture(scope="module")
def tube():
    return ob.solve(ob.circle(2.0))


@pytest.fixture(scope="module")
def mast():
    """A square mast beside a tube: nothing symmetric about it."""
    return ob.solve(
        [ob.polygon([(-1, -1), (1, -1), (1, 1), (-1, 1)], 0.1), ob.circle(0.6, centre=(2.1, 0.5))]
    )


@pytest.fixture(scope="module")
def section():
    return ob.solve(ob.four_digit("0012"))


def every_kind(x, y, size=0.2):
    """One sensor of each kind that stands in the flow, about one place."""
    x_path, y_path = ((x - size, y), (x + size, y)), ((x, y - size), (x, y + size))
    slanted = ((x - size, y - size), (x + size, y + size))
    return [
        ob.PointSensor(x, y),
        ob.PathSensor(*slanted),
        ob.CrossedPaths([x_path, y_path]),
        ob.CrossedPaths([x_path, y_path, slanted]),
        ob.DiscSensor((x, y), size),
    ]


# --- exact values -------------------------------------------------------------------------------


def test_five_diameters_upstream_of_a_tube_the_ratio_is_099(tube):
    # 1 - (a/r)^2 (Milne-Thomson, Theoretical Hydrodynamics, circle in a stream).
    table = ob.survey(tube, [ob.PointSensor(-10, 0), ob.PointSensor(-np.sqrt(200), 0)], [0.0])
    assert_allclose(table.speed_ratio, [[0.99, 0.995]], atol=EXACT)
    assert_allclose(table.direction_error, 0.0, atol=1e-7)


def test_at_45_degrees_to_the_stream_the_first_order_vanishes(tube):
    # sqrt(1 + (a/r)^4) (the same source).
    table = ob.survey(tube, ob.PointSensor(3.0, 0.0), [-135.0, 135.0])
    assert_allclose(table.speed_ratio, np.sqrt(1 + 3.0**-4), atol=EXACT)
    # There W = 1 -+ i (a/r)^2 in the frame of the stream; in degrees 60 times less exact.
    expected = np.degrees(np.arctan(1 / 9))
    assert_allclose(table.direction_error[:, 0], [expected, -expected], atol=60 * EXACT)


@pytest.mark.parametrize("column", ["speed_ratio", "direction_error", "component_error",
                                    "static_error", "speed_ratio_gradient", "trust", "reason"])
def test_a_table_of_the_solved_circle_is_that_of_the_exact_one(tube, column):
    sensors = every_kind(1.5, 1.5)
    ours = getattr(ob.survey(tube, sensors, COMPASS), column)
    exact = getattr(ob.survey(ExactCircle(), sensors, COMPASS), column)
    if column in ("trust", "reason"):
        assert_array_equal(ours, exact)
    else:
        # A hundredfold for degrees, the gradient and the component nearly square to a path.
        assert_allclose(ours, exact, atol=100 * EXACT)


def test_a_path_reads_the_difference_of_potential_over_its_length(tube):
    # The potential of z + 1/z (Milne-Thomson).
    start, end = np.array([1.2, 0.9]), np.array([0.2, 1.8])
    z, length = as_complex([start, end]), np.hypot(*(end - start))
    stream = np.exp(1j * np.radians(COMPASS))[:, None]
    component = np.diff((z / stream + stream / z).real, axis=1)[:, 0] / length
    undisturbed = np.diff((z / stream).real, axis=1)[:, 0] / length
    table = ob.survey(tube, ob.PathSensor(start, end), COMPASS)
    assert_allclose(table.component_error[:, 0], component - undisturbed, atol=EXACT)
    with np.errstate(divide="ignore"):
        expected = component / undisturbed
    far_from_square = np.abs(undisturbed) > 0.06
    # A ratio to a component of 0.06 is that much less exact.
    ratio = table.speed_ratio[far_from_square, 0]
    assert_allclose(ratio, expected[far_from_square], atol=EXACT / 0.06)


def test_a_path_has_no_ratio_square_to_the_stream_and_no_direction_ever(tube):
    table = ob.survey(tube, ob.PathSensor((3, -1), (3, 1)), [0.0, 2.8, 2.9, 90.0, 180.0])
    assert_array_equal(np.isnan(table.speed_ratio[:, 0]), [True, True, False, False, True])
    assert_array_equal(np.isnan(table.speed_ratio_gradient[:, 0, 0]),
                       [True, True, False, False, True])
    assert np.isnan(table.direction_error).all()
    assert np.isfinite(table.component_error).all()


def test_reversing_a_path_turns_its_component_and_keeps_its_ratio(tube):
    ends = ((1.2, 0.9), (0.2, 1.8))
    there = ob.survey(tube, ob.PathSensor(*ends), COMPASS)
    back = ob.survey(tube, ob.PathSensor(*ends[::-1]), COMPASS)
    # Rounding, of a ratio to 0.05 at least.
    assert_allclose(back.speed_ratio, there.speed_ratio, rtol=1e-12)
    assert_allclose(back.component_error, -there.component_error, atol=1e-14)


def test_a_wall_port_reads_the_pressure_of_the_exact_circle(tube):
    # 1 - 4 sin^2, zero 30 degrees from the front stagnation point (Milne-Thomson; Lamb).
    ports = [ob.WallPort(0, angle / 360) for angle in (180.0, 150.0, 210.0, 90.0)]
    table = ob.survey(tube, ports, [0.0])
    assert_allclose(table.static_error, [[1.0, 0.0, 0.0, -3.0]], atol=10 * EXACT)
    assert np.isnan(table.speed_ratio).all() and np.isnan(table.direction_error).all()


def test_gill_and_others_find_a_stack_within_10_percent_and_10_degrees_to_windward(tube):
    # Gill, Olsson, Sela and Suda, Bull. Amer. Meteor. Soc. 48 (1967) 665-674: three diameters out
    # from the face of a stack over an arc of about 180 degrees.
    windward = np.arange(-90.0, 91.0, 5.0)
    table = ob.survey(tube, ob.PointSensor(-7, 0), windward)
    assert table.trust.all(), table.reason
    assert_array_less(np.abs(table.speed_ratio - 1), 0.10)
    assert_array_less(np.abs(table.direction_error), 10.0)


# --- sensors against one another ----------------------------------------------------------------


@pytest.mark.parametrize("kind", [2, 3, 4])
def test_a_tiny_vector_sensor_reads_what_a_point_does(mast, kind):
    point, tiny = every_kind(1.3, 1.4, size=1e-5)[:: kind][:2]
    table = ob.survey(mast, [point, tiny], COMPASS)
    for column in ("speed_ratio", "direction_error", "static_error", "speed_ratio_gradient"):
        values = getattr(table, column)
        # The mean differs by the square of the size: 1e-10 times curvatures of the order of 100.
        assert_allclose(values[:, 1], values[:, 0], atol=1e-6, err_msg=column)


def test_a_tiny_path_reads_the_component_at_a_point(mast):
    x, y = 1.3, 1.4
    path = ob.PathSensor((x - 1e-5, y), (x + 1e-5, y))
    table = ob.survey(mast, path, COMPASS)
    stream = np.cos(np.radians(COMPASS))
    expected = mast.velocity((x, y), COMPASS)[:, 0] - stream
    assert_allclose(table.component_error[:, 0], expected, atol=1e-8)


def test_a_disc_points_along_the_velocity_at_its_centre_but_its_speed_is_greater(mast):
    # Mean value property of harmonic functions; the length of the vector is subharmonic.
    table = ob.survey(mast, [ob.DiscSensor((1.5, 1.9), 0.5), ob.PointSensor(1.5, 1.9)], COMPASS)
    # Quadrature of a disc half a radius clear of a sharply rounded corner.
    assert_allclose(table.direction_error[:, 0], table.direction_error[:, 1], atol=1e-4)
    assert_array_less(table.speed_ratio[:, 1], table.speed_ratio[:, 0])


@pytest.mark.parametrize("sensor", every_kind(1.3, 1.5))
def test_the_gradient_is_the_ratio_s_change_when_the_sensor_moves(mast, sensor):
    def ratio(dx, dy):
        moved = every_kind(1.3 + dx, 1.5 + dy)[every_kind(1.3, 1.5).index(sensor)]
        return ob.survey(mast, moved, COMPASS).speed_ratio[:, 0]

    step = 1e-4
    differences = [ratio(step, 0) - ratio(-step, 0), ratio(0, step) - ratio(0, -step)]
    gradient = ob.survey(mast, sensor, COMPASS).speed_ratio_gradient[:, 0]
    # Central differences: the square of the step times a third derivative of the order of 100.
    assert_allclose(gradient, np.transpose(differences) / (2 * step), atol=1e-5)


def test_a_table_of_many_sensors_is_the_tables_of_each_side_by_side(mast):
    sensors = [*every_kind(1.3, 1.5), ob.WallPort(0, 0.3), *every_kind(-2, 0.5)[::-1]]
    together = ob.survey(mast, sensors, COMPASS)
    for place, sensor in enumerate(sensors):
        alone = ob.survey(mast, sensor, COMPASS)
        for column in ("speed_ratio", "direction_error", "component_error", "static_error",
                       "speed_ratio_gradient"):
            # Sums in another order.
            assert_allclose(getattr(together, column)[:, place], getattr(alone, column)[:, 0],
                            atol=1e-12, err_msg=f"{column} of {sensor}")
        assert_array_equal(together.reason[:, place], alone.reason[:, 0])


# --- symmetries ---------------------------------------------------------------------------------


def columns_of(table):
    return (table.speed_ratio, table.direction_error, table.component_error, table.static_error)


def test_turning_body_and_sensors_turns_the_table(mast):
    turn = 37.0
    turned = ob.solve([outline.turned(turn, about=(0, 0)) for outline in mast.outlines])
    about = np.exp(1j * np.radians(turn))

    def carried(point):
        place = complex(*point) * about
        return place.real, place.imag

    place, start, end = (1.3, 1.5), (0.2, 1.6), (0.5, 1.9)
    before = [ob.PointSensor(*place), ob.PathSensor(start, end), ob.DiscSensor(place, 0.3)]
    after = [
        ob.PointSensor(*carried(place)),
        ob.PathSensor(carried(start), carried(end)),
        ob.DiscSensor(carried(place), 0.3),
    ]
    first, second = ob.survey(mast, before, COMPASS), ob.survey(turned, after, COMPASS + turn)
    for ours, theirs in zip(columns_of(first), columns_of(second), strict=True):
        # The disc's samples turn with it only in part: its quadrature beside a corner.
        assert_allclose(ours, theirs, atol=1e-5)
    assert_array_equal(first.reason, second.reason)
    vectors = [as_complex(table.speed_ratio_gradient) for table in (first, second)]
    assert_allclose(vectors[0] * about, vectors[1], atol=1e-4)


def test_the_mirror_image_has_the_mirrored_table(tube):
    upper = ob.survey(tube, every_kind(-1.2, 1.5), COMPASS)
    lower = ob.survey(tube, [
        ob.PointSensor(-1.2, -1.5),
        ob.PathSensor((-1.4, -1.3), (-1.0, -1.7)),
        ob.CrossedPaths([((-1.4, -1.5), (-1.0, -1.5)), ((-1.2, -1.7), (-1.2, -1.3))]),
        ob.CrossedPaths([((-1.4, -1.5), (-1.0, -1.5)), ((-1.2, -1.7), (-1.2, -1.3)),
                         ((-1.4, -1.3), (-1.0, -1.7))]),
        ob.DiscSensor((-1.2, -1.5), 0.2),
    ], -COMPASS)
    for name in ("speed_ratio", "component_error", "static_error"):
        assert_allclose(getattr(lower, name), getattr(upper, name), atol=100 * EXACT)
    assert_allclose(lower.direction_error, -upper.direction_error, atol=100 * EXACT)
    mirrored = upper.speed_ratio_gradient * [1, -1]
    assert_allclose(lower.speed_ratio_gradient, mirrored, atol=1e-6)
    assert_array_equal(lower.trust, upper.trust)


# --- directions and bearings --------------------------------------------------------------------


def test_a_table_for_bearings_counts_direction_errors_clockwise(tube):
    sensor, bearings = ob.PointSensor(-1.5, 1.5), [0.0, 250.0, 360.0]
    by_bearing = ob.survey(tube, sensor, bearings=bearings)
    by_direction = ob.survey(tube, sensor, ob.from_bearing(bearings))
    assert by_bearing.by_bearing and not by_direction.by_bearing
    assert_array_equal(by_bearing.direction_error, -by_direction.direction_error)
    assert_array_equal(by_bearing.speed_ratio, by_direction.speed_ratio)
    assert_array_equal(by_bearing.bearings, bearings)
    assert_array_equal(by_bearing.directions, [270.0, 20.0, 270.0])
    assert_array_equal(by_direction.bearings, [0.0, 250.0, 0.0])


def test_wind_from_the_west_backs_at_a_sensor_north_west_of_the_mast(tube):
    # It splits before the mast, and north of it swings to the left of its course: it then comes
    # from further south, a smaller bearing.
    table = ob.survey(tube, ob.PointSensor(-1.5, 1.5), bearings=[270.0])
    assert table.direction_error[0, 0] < -1.0, table.direction_error


def test_without_angles_every_degree_is_taken_or_the_two_along_the_ground(tube):
    sensor = ob.PointSensor(0, 3)
    assert_array_equal(ob.survey(tube, sensor).angles, np.arange(360.0))
    grounded = ob.solve(ob.circle(2.0, centre=(0, 2)), ob.Ground())
    assert_array_equal(ob.survey(grounded, ob.PointSensor(0, 5)).angles, [0.0, 180.0])


def test_one_number_makes_a_table_of_one_row(tube):
    assert ob.survey(tube, ob.PointSensor(3, 0), 30).speed_ratio.shape == (1, 1)


def test_a_reversed_stream_at_a_sensor_is_180_degrees_off_either_way():
    # Flow against the stream: between a circle and its own strong vortex sheet, by circulation.
    spun = ob.solve(ob.circle(2.0), circulation=20.0)
    sensor = ob.PointSensor(0, 1.5)
    # u = 1 + (1/1.5)^2 - 20 / (2 pi 1.5) < 0 on the y-axis, and v = 0.
    for table in (ob.survey(spun, sensor, [0.0]), ob.survey(spun, sensor, bearings=[270.0])):
        assert_allclose(np.abs(table.direction_error), 180.0, atol=1e-6)
        assert_array_less(-180.0, table.direction_error)


# --- trust --------------------------------------------------------------------------------------


def test_the_lee_is_the_strip_between_the_widest_points_and_ten_degrees_more(tube):
    slope = np.tan(np.radians(10.0))
    inside = [(0.1, 1.01), (3.0, 0.0), (5.0, 1 + 4.99 * slope), (5.0, -1 - 4.99 * slope)]
    outside = [(-0.1, 1.01), (-3.0, 0.0), (5.0, 1 + 5.01 * slope), (5.0, -1 - 5.01 * slope)]
    table = ob.survey(tube, [ob.PointSensor(x, y) for x, y in inside + outside], [0.0])
    assert_array_equal(table.reason[0, :4], "in the lee of body 0")
    assert_array_equal(table.reason[0, 4:], "")
    assert_array_equal(table.trust[0], [False] * 4 + [True] * 4)


def test_a_path_or_disc_that_reaches_into_the_lee_is_not_trusted(tube):
    reaching = [ob.PathSensor((2, 1.2), (2, 3)), ob.DiscSensor((2, 2), 0.8)]
    clear = [ob.PathSensor((2, 1.5), (2, 3)), ob.DiscSensor((2, 2), 0.5)]
    table = ob.survey(tube, reaching + clear, [0.0])
    assert_array_equal(table.trust, [[False, False, True, True]])


def test_the_lee_of_a_bar_aslant_starts_at_its_line_of_widest_points():
    bar = ob.solve(ob.ellipse(4.0, 0.2, turned=30.0))
    above, below = ob.PointSensor(0.0, 0.3), ob.PointSensor(0.0, -0.3)
    table = ob.survey(bar, [above, below], [0.0, 60.0, 120.0])
    # Towards 0 and 120 degrees the stream strikes its upper and lower face respectively.
    assert_array_equal(table.trust, [[True, False], [False, True], [False, True]])


def test_each_body_has_its_own_lee_and_the_first_is_named():
    pair = ob.solve([ob.circle(2.0), ob.circle(2.0, centre=(4, 0))])
    table = ob.survey(pair, [ob.PointSensor(2, 0), ob.PointSensor(6, 0)], [0.0, 180.0])
    assert table.reason.tolist() == [
        ["in the lee of body 0", "in the lee of body 0"],
        ["in the lee of body 1", ""],
    ]


@pytest.mark.parametrize("wake", [None, ob.Wake(1.2)])
def test_a_port_is_trusted_before_the_widest_points_only(wake):
    tube = ob.solve(ob.circle(2.0), wakes=[wake])
    ports = [ob.WallPort(0, angle / 360) for angle in (180.0, 95.0, 265.0, 85.0, 275.0, 0.0)]
    table = ob.survey(tube, ports, [0.0])
    assert_array_equal(table.trust, [[True, True, True, False, False, False]])
    assert_array_equal(np.isnan(table.static_error[0]), ~table.trust[0] & (wake is not None))


def test_a_sharp_edged_body_is_trusted_to_twelve_degrees_and_never_from_behind(section):
    directions = [0.0, 11.9, -11.9, 14.0, -14.0, 89.0, 91.0, 180.0]
    table = ob.survey(section, [ob.PointSensor(-0.5, 0), ob.PointSensor(9, 9)], directions)
    assert_array_equal(table.trust[:, 0], [True] * 3 + [False] * 5)
    assert_array_equal(table.trust[:, 1], table.trust[:, 0])
    assert table.reason[3:, 0].tolist() == [
        "body 0 (sharp edge) meets the stream at 14 degrees",
        "body 0 (sharp edge) meets the stream at 14 degrees",
        "body 0 (sharp edge) meets the stream at 89 degrees",
        "body 0 (sharp edge) meets the stream from behind",
        "body 0 (sharp edge) meets the stream from behind",
    ]


def test_incidence_is_measured_from_the_section_s_own_chord():
    turned = ob.solve(ob.four_digit("0012").turned(30.0, about=(0, 0)))
    table = ob.survey(turned, ob.PointSensor(-2, 0), [19.0, 41.0, 0.0, 383.0])
    assert_array_equal(table.trust[:, 0], [True, True, False, True])


def test_a_sharp_edge_comes_before_a_lee_as_the_reason():
    both = ob.solve([ob.circle(0.5, centre=(-2, 0)), ob.four_digit("0012")])
    table = ob.survey(both, ob.PointSensor(-1, 0), [0.0, 20.0])
    assert table.reason[0, 0] == "in the lee of body 0"
    assert table.reason[1, 0] == "body 1 (sharp edge) meets the stream at 20 degrees"


# --- what the reader is told --------------------------------------------------------------------


def test_a_body_without_drag_coefficient_is_noted_with_the_size_of_what_is_left_out(tube):
    # Cd b / (4 pi R) (Batchelor, An Introduction to Fluid Dynamics, far field of a body with
    # drag): two units broad, ten units away.
    table = ob.survey(tube, [ob.PointSensor(-20, 0), ob.PointSensor(0, 10, name="north")])
    (note,) = table.notes
    percent = 100 * 2 / (4 * np.pi * 10)
    assert "body 0 (circle of diameter 2" in note, note
    assert f"at north by up to {percent:.2g} percent" in note, note
    for word in ("common practice", "1.2", "0.3 to 0.7", "about 2 for a square"):
        assert word in note


def test_the_note_s_figure_is_what_the_wake_then_does():
    distance = 200.0
    free, wake = (ob.solve(ob.circle(1.0), wakes=[wake]) for wake in (None, ob.Wake(1.0)))
    sensor = ob.PointSensor(-distance, 0)
    slowed = ob.survey(free, sensor, 0).speed_ratio - ob.survey(wake, sensor, 0).speed_ratio
    # Within 1 percent of itself two hundred diameters upstream.
    assert_allclose(slowed, 1 / (4 * np.pi * distance), rtol=0.02)


def test_bodies_with_a_wake_or_a_sharp_edge_need_no_note(section):
    sensor = ob.PointSensor(-3, 3)
    assert ob.survey(section, sensor, 0).notes == ()
    assert ob.survey(ob.solve(ob.circle(1.0), wakes=[ob.Wake(1.2)]), sensor, 0).notes == ()


def test_each_bluff_body_has_its_own_note_and_ports_alone_need_no_figure(mast):
    assert len(ob.survey(mast, ob.PointSensor(-3, 3), 0).notes) == 2
    notes = ob.survey(mast, ob.WallPort(1, 0.5), 0).notes
    assert len(notes) == 2 and "common practice" in notes[0] and "up to" not in notes[0]


def test_an_instrument_s_columns_are_nan_where_it_does_not_read(tube):
    table = ob.survey(tube, [
        ob.PointSensor(0, 3, reads="speed"),
        ob.PointSensor(0, 3, reads="direction", name="vane"),
        ob.DiscSensor((0, 3), 0.1, reads="direction"),
    ], [0.0, 90.0])
    assert_array_equal(np.isnan(table.speed_ratio[0]), [False, True, True])
    assert_array_equal(np.isnan(table.speed_ratio_gradient[0, :, 0]), [False, True, True])
    assert_array_equal(np.isnan(table.direction_error[0]), [True, False, False])
    assert np.isnan(table.component_error).all() and np.isfinite(table.static_error).all()
    assert table.sectors()[1] == [] and np.isnan(table.worst()[1]).all()


def test_names_are_kind_and_place_unless_given(tube):
    sensors = [ob.PointSensor(0, 3), ob.DiscSensor((0, 3), 0.1, name="cup"),
               ob.PathSensor((0, 3), (1, 3)), ob.WallPort(0, 0.5)]
    table = ob.survey(tube, sensors, [0.0])
    assert table.names == ("point 1", "cup", "path 3", "port 4")
    assert repr(table) == "Survey(directions: 1, sensors: point 1, cup, path 3, port 4)"


def test_rows_hold_the_documented_columns_as_plain_values(tube):
    table = ob.survey(tube, every_kind(1.5, 2.5), bearings=[0.0, 90.0])
    rows = list(table.rows())
    names = [name for name, _, _ in ob.Survey.columns]
    assert len(rows) == 10 and all(list(row) == names for row in rows)
    assert all(sentence.endswith(".") for _, _, sentence in ob.Survey.columns)
    json.dumps(rows)  # refuses anything that is not plain
    last = rows[-1]
    assert (last["sensor"], last["bearing"], last["direction"]) == ("disc 5", 90.0, 180.0)
    assert last["speed_ratio"] == table.speed_ratio[-1, -1]
    assert last["speed_ratio_gradient_y"] == table.speed_ratio_gradient[-1, -1, 1]
    assert last["trust"] is bool(table.trust[-1, -1])


def test_a_table_cannot_be_written_over(tube):
    table = ob.survey(tube, ob.PointSensor(0, 3), [0.0, 90.0])
    for name in ("angles", "directions", "bearings", "speed_ratio", "direction_error",
                 "component_error", "static_error", "speed_ratio_gradient", "trust", "reason"):
        with pytest.raises(ValueError, match="read-only"):
            getattr(table, name)[0] = 0


def test_the_caller_s_angles_are_copied(tube):
    angles = np.array([0.0, 90.0])
    table = ob.survey(tube, ob.PointSensor(0, 3), angles)
    angles[:] = 7.0
    assert_array_equal(table.directions, [0.0, 90.0])


# --- sectors and the worst direction ------------------------------------------------------------


def test_sectors_are_where_the_exact_circle_is_within_the_limit(tube):
    # |1 - (a/r)^2 exp(2 i angle)| within 2 percent of 1, r = 6 a: 22 to 67 degrees on each side of
    # the stream, at whole degrees.
    table = ob.survey(tube, ob.PointSensor(-6, 0))
    angles = np.arange(360)
    ratio = np.abs(1 - np.exp(2j * np.radians(angles)) / 36)
    ahead = (np.abs(ratio - 1) <= 0.02) & table.trust[:, 0]
    ((first, last), *_) = table.sectors(0.02)[0]
    run = angles[ahead & (angles < 90)]
    assert (first, last) == (run.min(), run.max())


def test_a_sector_runs_across_zero(tube):
    # Within 3 percent the whole of the windward side of r = 6 a is good; the lee is cut out.
    ((start, stop),) = ob.survey(tube, ob.PointSensor(-6, 0)).sectors(0.03)[0]
    assert start > 180 > stop, (start, stop)
    assert_allclose(start + stop, 360.0)
    (sector,) = ob.survey(tube, ob.PointSensor(0, -6), bearings=np.arange(360.0)).sectors(0.03)[0]
    # The same sensor to the south: good for winds from the south, 90 degrees on as a direction.
    assert_allclose(np.mean(sector), 180.0)
    assert sector[1] - sector[0] == stop + 360 - start


def test_good_in_every_direction_is_the_whole_turn():
    angles, good = np.arange(5.0, 365.0, 10.0), np.ones(36, bool)
    assert surveys._runs(angles, good) == [(5.0, 365.0)]
    good[7] = False
    assert surveys._runs(angles, good) == [(85.0, 65.0)]


def test_angles_far_apart_are_not_joined_and_order_does_not_matter(tube):
    sensor = ob.PointSensor(-6, 0)
    assert ob.survey(tube, sensor, [0.0, 45.0]).sectors(0.03) == [[(0.0, 0.0), (45.0, 45.0)]]
    assert ob.survey(tube, sensor, [20.0, -5.0, 0.0, 370.0]).sectors(0.03) == [[(355.0, 20.0)]]
    assert ob.survey(tube, sensor, [180.0]).sectors(0.03) == [[]]


def test_the_worst_direction_is_the_exact_one(tube):
    # Among the trusted the ratio is lowest ahead, 1 - (a/r)^2, and highest beside, 1 + (a/r)^2.
    table = ob.survey(tube, [ob.PointSensor(-3, 0), ob.PointSensor(0, 3)], [0.0, 30.0, 180.0])
    (first, low), (second, high) = table.worst()
    assert (first, second) == (0.0, 0.0)
    assert_allclose((low, high), (1 - 1 / 9, 1 + 1 / 9), atol=EXACT)
    assert np.isnan(ob.survey(tube, ob.PointSensor(3, 0), [0.0]).worst()).all()


@pytest.mark.parametrize("limit", [0, -0.1, np.nan, "1%"])
def test_a_limit_that_is_no_positive_number_is_refused(tube, limit):
    with pytest.raises(ob.InputError, match="limit must be"):
        ob.survey(tube, ob.PointSensor(0, 3), [0.0]).sectors(limit)


# --- what is refused ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    "sensor",
    [
        ob.PointSensor(2.1, 0.5),
        ob.PathSensor((2.1, 2), (2.1, -2)),
        ob.PathSensor((2.0, 0.5), (2.2, 0.5)),
        ob.PathSensor((2.0, 0.5), (4.0, 0.5)),
        ob.CrossedPaths([((2.1, 2), (2.1, -2)), ((3, 0), (4, 0))]),
        ob.DiscSensor((2.9, 0.5), 0.6),
        ob.DiscSensor((2.1, 0.5), 0.1),
        ob.DiscSensor((2.1, 0.5), 0.9),
    ],
)
def test_a_sensor_that_could_never_read_is_refused_with_its_body(mast, sensor):
    with pytest.raises(ob.InputError, match=r"sensors\[1\] \(.* 2, .*body 1 \(circle of .*move"):
        ob.survey(mast, [ob.PointSensor(-3, 0), sensor], COMPASS)


def test_a_path_across_a_thin_body_is_refused_though_no_sample_lies_in_it():
    wire = ob.solve(ob.circle(1e-4))
    with pytest.raises(ob.InputError, match="inside or across body 0"):
        ob.survey(wire, ob.PathSensor((-1.01, 0), (1, 0)), [0.0])


def test_a_sensor_below_the_ground_is_refused():
    grounded = ob.solve(ob.circle(2.0, centre=(0, 2)), ob.Ground())
    with pytest.raises(ob.InputError, match=r"sensors\[0\].*beyond the wall of Ground\(y=0.0\)"):
        ob.survey(grounded, ob.PathSensor((3, 1), (3, -0.1)))


@pytest.mark.parametrize(
    ("arguments", "options", "message"),
    [
        (([],), {}, "sensors is empty"),
        (((3, 0),), {}, r"sensors\[0\] must be one of PointSensor.*got 3"),
        ((np.zeros(2),), {}, "sensors must be a list of sensors"),
        ((ob.PointSensor(3, 0), [0.0]), {"bearings": [0.0]}, "both given"),
        ((ob.PointSensor(3, 0), []), {}, "directions is empty"),
        ((ob.PointSensor(3, 0),), {"bearings": []}, "bearings is empty"),
        ((ob.PointSensor(3, 0), [np.nan]), {}, "directions must be finite"),
        ((ob.PointSensor(3, 0),), {"bearings": [[0.0]]}, "bearings must be one number or a vector"),
        (([ob.PointSensor(3, 0, "a"), ob.PointSensor(4, 0, "a")],), {},
         r"sensors\[0\] and sensors\[1\] are both named 'a'"),
        (([ob.PointSensor(3, 0, "point 2"), ob.PointSensor(4, 0)],), {}, "both named 'point 2'"),
        ((ob.WallPort(1, 0.5),), {}, "WallPort body = 1: the model has only body 0"),
    ],
)
def test_what_cannot_be_surveyed_is_refused_by_name(tube, arguments, options, message):
    with pytest.raises(ob.InputError, match=message):
        ob.survey(tube, *arguments, **options)


def test_a_direction_across_the_ground_is_refused():
    grounded = ob.solve(ob.circle(2.0, centre=(0, 2)), ob.Ground())
    with pytest.raises(ob.InputError, match="the stream runs along x"):
        ob.survey(grounded, ob.PointSensor(0, 5), [90.0])


def test_what_is_no_model_is_refused():
    with pytest.raises(ob.InputError, match="model must be what ob.solve returned"):
        ob.survey(ob.circle(1.0), ob.PointSensor(3, 0))

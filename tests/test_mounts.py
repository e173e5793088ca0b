"""The search for mounts: what it finds, that it keeps its limits, and that it can be believed."""

import csv
import json
import time

import numpy as np
import pytest

import offbody as ob
from offbody import charts
from offbody.cases import read_case
from offbody.command import main

DIAMETER = 0.3


@pytest.fixture(scope="module")
def mast():
    return ob.solve(ob.circle(DIAMETER))


def least_error(table):
    """In each wind, the least error of a trusted sensor."""
    errors = np.where(table.trust, np.abs(table.speed_ratio - 1), np.inf)
    return errors.min(axis=1)


def test_the_choices_errors_are_those_of_a_survey(mast):
    found = ob.best_mounts(mast, ob.Reach(2.0), count=2, bearings=range(0, 360, 5))
    for number, choice in enumerate(found.choices):
        table = found.survey(number)
        np.testing.assert_array_equal(table.bearings, np.arange(0, 360, 5))
        # The same reading twice, to rounding.
        np.testing.assert_allclose(choice.error, least_error(table), rtol=0, atol=1e-12)
        np.testing.assert_allclose(choice.worst_error, choice.error.max(), rtol=0, atol=0)


def test_the_shortest_boom_rests_on_its_limit_and_none_a_thousandth_shorter_does(mast):
    winds = np.arange(-20.0, 21.0)
    found = ob.best_mounts(mast, ob.Reach(3.0), directions=winds)
    # A millionth of the limit is the slack that the search allows itself.
    np.testing.assert_allclose(found.best.worst_error, 0.01, rtol=2e-6)
    headings = np.radians(np.arange(0.0, 360.0, 0.5))
    places = 0.999 * found.best.length * np.stack([np.cos(headings), np.sin(headings)], axis=-1)
    table = ob.survey(mast, [ob.PointSensor(*place) for place in places], winds)
    errors = np.where(table.trust, np.abs(table.speed_ratio - 1), np.inf).max(axis=0)
    assert errors.min() > 0.01, f"{errors.min():.6f} at 0.999 of the length found"


def test_the_bound_lies_beyond_what_a_search_ten_times_as_dense_finds(mast):
    wake = mast.with_wakes(ob.Wake(1.2))
    winds = np.arange(0.0, 91.0, 3.0)
    found = ob.best_mounts(wake, ob.Reach(4.0), directions=winds)
    assert found.search.quantity == "length"
    lengths = np.linspace(found.search.bound, found.best.length, 12)[:-1]
    headings = np.radians(np.arange(0.0, 360.0, 0.5))
    places = (lengths[:, None] * np.exp(1j * headings)).ravel()
    table = ob.survey(wake, [ob.PointSensor(z.real, z.imag) for z in places], winds)
    errors = np.where(table.trust, np.abs(table.speed_ratio - 1), np.inf).max(axis=0)
    # The limit itself is met at the length found: 1e-4 of it is the denser scan's own room.
    assert errors.min() > 0.01 * (1 - 1e-4), f"{errors.min():.6f} with a shorter boom"
    np.testing.assert_array_less(found.search.bound, found.best.length)
    # Cells are split until nothing better by a hundredth is left.
    np.testing.assert_array_less(found.search.gap, 0.0101)


def test_the_splitting_of_cells_finds_what_the_scan_stepped_over():
    centres = 0.35 * np.exp(1j * np.radians([90, 210, 330]))
    legs = [ob.circle(0.06, (z.real, z.imag)) for z in centres]
    tower = ob.solve(legs, wakes=ob.Wake(1.2))
    winds = np.arange(0.0, 91.0, 6.0)
    found = ob.best_mounts(tower, ob.Reach(5.0), directions=winds)
    np.testing.assert_array_less(found.search.gap, 0.0101)
    random = np.random.default_rng(7)
    z = found.search.bound * np.sqrt(random.random(4000)) * np.exp(2j * np.pi * random.random(4000))
    table = ob.survey(tower, [ob.PointSensor(p.real, p.imag) for p in z], winds)
    errors = np.where(table.trust, np.abs(table.speed_ratio - 1), np.inf).max(axis=0)
    assert errors.min() > 0.01, f"{errors.min():.6f} with a boom shorter than the bound"


def test_the_longer_the_boom_the_less_the_worst_error_of_a_trade_off(mast):
    curve = ob.best_mounts(mast, ob.Reach(3.0), directions=range(-45, 46)).curve
    assert np.all(np.diff(curve["length"]) > 0), curve["length"]
    clear = curve["length"] > DIAMETER
    np.testing.assert_array_less(np.diff(curve["worst_error"][clear]), 0.0)
    # Exact: (a / r)^2, whatever the bearing, over an arc of 90 degrees, but for the half of a
    # degree that the extreme lies off the nearest wind.
    exact = (DIAMETER / 2 / curve["length"][clear]) ** 2
    np.testing.assert_allclose(curve["worst_error"][clear], exact, rtol=1e-3)


def test_two_booms_share_the_winds_that_one_cannot_serve(mast):
    one = ob.best_mounts(mast, ob.Reach(3.0))
    two = ob.best_mounts(mast, ob.Reach(3.0), count=2)
    assert one.best.share < 1 and np.isinf(one.best.worst_error), one.best.row()
    assert "trusted" in one.notes[0], one.notes
    # The sum of 360 shares, to rounding.
    np.testing.assert_allclose(two.best.share, 1.0, atol=1e-12)
    # Two booms at 45 degrees read worst, both the same, at 22.5 between: (a/r)^2 cos 45 to first
    # order in (a/r)^2, whose square is a part of 3e-3 of it here; the winds stand a degree apart.
    exact = DIAMETER / 2 * np.sqrt(np.cos(np.pi / 4) / 0.01)
    np.testing.assert_allclose(two.best.length, exact, rtol=5e-3)
    apart = np.diff(two.best.angles)[0] % 90.0
    np.testing.assert_allclose(apart, 45.0, atol=2.0)  # as flat as the second order makes it
    assert set(two.best.serves) == {0, 1}


def test_a_third_boom_shortens_them_further(mast):
    winds = range(0, 360, 5)
    found = ob.best_mounts(mast, ob.Reach(3.0), count=3, directions=winds)
    # Three booms at 30 degrees: (a/r)^2 cos 60.
    exact = DIAMETER / 2 * np.sqrt(np.cos(np.pi / 3) / 0.01)
    np.testing.assert_allclose(found.best.length, exact, rtol=1e-2)


def test_limits_of_distance_spacing_and_keeping_out_are_kept(mast):
    area = ob.polygon([(-2, -2), (2, -2), (2, 2), (-2, 2)], 0.01)
    forbidden = ob.polygon([(-1.9, -2.1), (1.9, -2.1), (1.9, 2.1), (-1.9, 2.1)], 0.01)
    found = ob.best_mounts(
        mast, area, count=2, directions=range(0, 360, 10), keep_out=[forbidden], spacing=1.5,
        clearance=0.3,
    )
    for choice in found.choices:
        assert not ob.inside(forbidden, choice.places).any(), choice.places
        assert ob.inside(area, choice.places).all(), choice.places
        assert choice.spacing >= 1.5 - 1e-5, choice.spacing
        assert choice.wall_distance >= 0.3 - 1e-5, choice.wall_distance


def test_the_shortest_boom_stands_at_the_least_distance_where_the_error_lets_it(mast):
    found = ob.best_mounts(mast, ob.Reach(3.0), directions=[0.0], clearance=0.15)
    # The distance is measured to points of the wall a four-thousandth of it apart.
    np.testing.assert_allclose(found.best.wall_distance, 0.15, rtol=1e-4)
    np.testing.assert_allclose(found.best.length, 0.3, rtol=1e-4)


def test_an_area_yields_its_place_of_least_worst_error(mast):
    area = ob.polygon([(-2, -2), (-0.5, -2), (-0.5, 2), (-2, 2)], 0.01)
    found = ob.best_mounts(mast, area, directions=range(-45, 46, 3))
    # Exact for such an arc: (a / r)^2, least at a corner, whose rounding cuts off 0.004.
    exact = (DIAMETER / 2) ** 2 / 8.0
    np.testing.assert_allclose(found.best.worst_error, exact, rtol=1e-2)
    assert found.search.bound <= found.best.worst_error <= found.search.scan_best, found.search


def test_the_wind_climate_decides_where_the_one_boom_points(mast):
    rose = {angle: 0.0 for angle in range(0, 360, 30)} | {240: 3.0, 60: 1.0}
    found = ob.best_mounts(mast, ob.Reach(2.0), bearings=range(0, 360, 2), weights=rose)
    assert set(np.round(found.angles / 30) * 30 % 360) == {240.0, 60.0}
    np.testing.assert_allclose(found.weights.sum(), 1.0)
    # Winds from 240 must be read, and a boom to the side reads those from 60 as well.
    assert found.best.share == pytest.approx(1.0), found.best.row()
    only = ob.best_mounts(
        mast, ob.Reach(2.0, sector=(55, 65)), bearings=range(0, 360, 2), weights=rose
    )
    assert only.best.share < 0.5, only.best.row()


def test_directions_and_bearings_ask_the_same_question(mast):
    winds = np.arange(225.0, 316.0, 3.0)
    wake = mast.with_wakes(ob.Wake(0.5))
    sector = (150.0, 210.0)  # of bearings: where booms point
    by_bearing = ob.best_mounts(wake, ob.Reach(4.0, sector=sector), bearings=winds)
    turned = (90.0 - np.array(sector)[::-1]) % 360.0
    by_direction = ob.best_mounts(
        wake, ob.Reach(4.0, sector=turned), directions=ob.from_bearing(winds)
    )
    # The refinement's own room, of 1e-6 of the limit.
    np.testing.assert_allclose(by_bearing.best.length, by_direction.best.length, rtol=1e-5)
    x, y = by_bearing.best.places[0]
    np.testing.assert_allclose(by_bearing.best.angles[0], np.degrees(np.arctan2(x, y)) % 360)


def test_a_mount_may_carry_several_sensors_and_a_limit_of_direction(mast):
    carried = [
        ob.DiscSensor((0.0, 0.1), 0.09, name="cup", reads="speed"),
        ob.PointSensor(0.0, -0.1, name="vane", reads="direction"),
    ]
    found = ob.best_mounts(
        mast, ob.Reach(3.0), carried, directions=range(-45, 46, 5), direction_limit=0.3
    )
    table = found.survey()
    assert table.names == ("boom 1 cup", "boom 1 vane")
    assert table.trust.all()
    # The refinement's own room, of 1e-6 of the limit.
    assert np.abs(table.speed_ratio[:, 0] - 1).max() <= 0.01 * (1 + 2e-6)
    assert np.abs(table.direction_error[:, 1]).max() <= 0.3 * (1 + 2e-6)
    np.testing.assert_allclose(found.best.worst_error, 0.01, rtol=2e-6)


def test_the_error_changes_with_length_and_bearing_as_stated(mast):
    winds = range(-60, 1, 2)
    found = ob.best_mounts(mast, ob.Reach(3.0), directions=winds)
    length, angle = found.best.length, np.radians(found.best.angles[0])

    def error(length, angle):
        sensor = ob.PointSensor(length * np.cos(angle), length * np.sin(angle))
        return np.abs(ob.survey(mast, sensor, winds).speed_ratio[:, 0] - 1)

    step = 1e-5
    along = np.abs(error(length + step, angle) - error(length - step, angle)).max() / (2 * step)
    turn = np.abs(error(length, angle + step) - error(length, angle - step)).max() / (2 * step)
    # Central differences: their own error is of the square of the step.
    np.testing.assert_allclose(found.best.error_per_length, along, rtol=1e-5)
    np.testing.assert_allclose(found.best.error_per_degree, np.radians(turn), rtol=1e-5)


def test_no_boom_long_enough_is_said_and_the_least_error_is_kept(mast):
    found = ob.best_mounts(mast, ob.Reach(1.0), directions=range(-45, 46))
    assert found.search.quantity == "worst error"
    # (a / r)^2, but for the half of a degree that the extreme lies off the nearest wind.
    np.testing.assert_allclose(found.best.worst_error, 0.0225, rtol=1e-3)
    assert found.best.margin < 0 and "least worst error" in found.notes[0], found.notes


def test_a_pair_of_ports_on_a_circle_is_most_sensitive_at_45_degrees_and_saturates_there(mast):
    found = ob.best_mounts(mast, ob.Stretch(), count=2, directions=[0.0])
    # Exact: 4 sin(2 f) sin(2 d) for ports at f either side of the front, a turn d of the wind.
    np.testing.assert_allclose(np.sort(found.best.arc_fractions), [0.375, 0.625], atol=1e-4)
    np.testing.assert_allclose(found.best.slope, np.radians(8.0), rtol=1e-4)
    # The response is flat there, and the table's winds are a degree apart.
    np.testing.assert_allclose(found.best.saturates, (315.0, 45.0), atol=1.01)
    assert found.search.refined <= found.search.bound, found.search


def test_a_static_port_over_a_range_of_incidence_beats_its_neighbours():
    wing = ob.solve(ob.four_digit("0012"))
    winds = np.linspace(-2.0, 2.0, 9)
    found = ob.best_mounts(wing, ob.Stretch(0, 0.0, 0.5), directions=winds)
    assert found.search.bound <= found.best.worst_pressure <= found.search.scan_best
    for step in (-0.002, 0.002):
        beside = wing.port_pressure(0, found.best.arc_fractions[0] + step, winds)
        assert np.abs(beside).max() > found.best.worst_pressure
    # The aft place, where the speed hardly answers to incidence.
    assert found.best.places[0, 0] > 0.8 and abs(found.best.slope) < 0.02, found.best.row()


def test_one_boom_takes_less_than_a_second_and_a_pair_over_all_winds_less_than_five(mast):
    for count, winds, allowed in ((1, range(-45, 46), 1.0), (2, None, 5.0)):
        start = time.process_time()
        ob.best_mounts(mast, ob.Reach(3.0), count=count, directions=winds)
        taken = time.process_time() - start
        assert taken < allowed, f"{taken:.2f} s of processor time for {count}"


@pytest.mark.parametrize("arguments, word", [
    ({"where": (0, 0)}, "where"),
    ({"limit": "tower"}, "limit"),
    ({"limit": 0.0}, "limit"),
    ({"count": 4}, "count"),
    ({"sensors": ob.WallPort(0, 0.5)}, "sensors"),
    ({"sensors": []}, "sensors"),
    ({"weights": {0: -1.0}}, "weights"),
    ({"weights": {90: 0.0}}, "weights"),
    ({"directions": []}, "directions"),
    ({"directions": [0.0], "bearings": [0.0]}, "bearings"),
    ({"where": ob.Reach(0.1)}, "where"),
    ({"keep_out": [3]}, "keep_out"),
    ({"where": ob.Stretch(2)}, "body"),
    ({"where": ob.Stretch(0, 0.5, 0.501)}, "where"),
    ({"where": ob.Stretch(0), "count": 3}, "count"),
    ({"where": ob.Stretch(0), "sensors": ob.PointSensor(0, 0)}, "sensors"),
])
def test_what_cannot_be_used_is_refused_by_name(mast, arguments, word):
    arguments = {"where": ob.Reach(2.0)} | arguments
    with pytest.raises(ob.InputError, match=word):
        ob.best_mounts(mast, **arguments)


@pytest.mark.parametrize("arguments", [
    {"greatest": 0.0}, {"greatest": 1.0, "least": 2.0}, {"greatest": 1.0, "sector": (1, 2, 3)},
    {"greatest": 1.0, "foot": 3.0},
])
def test_a_reach_that_cannot_be_is_refused(arguments):
    with pytest.raises(ob.InputError):
        ob.Reach(**arguments)


CASE = """
title = "Quillane Ridge, mast 3"
length_unit = "m"
stream = { bearings = 5 }

[climate]
bearings = [0, 90, 180, 270]
frequencies = [1, 2, 3, 4]

[[body]]
name = "mast"
shape = "circle"
diameter = 0.3

[[sensor]]
name = "cup"
kind = "disc"
reads = "speed"
radius = 0.09
x = -1.0
y = 2.0

[mounts]
"""


@pytest.fixture
def case(tmp_path):
    def write(mounts):
        path = tmp_path / "case.toml"
        path.write_text(CASE + mounts, encoding="utf-8")
        return path

    return write


def test_the_command_writes_the_choices_the_trade_off_and_the_page(case, tmp_path, capsys):
    path = case('reach = { greatest = 3.0 }\ncarries = ["cup"]\ncount = 2\n')
    assert main(["mounts", str(path), "--out", str(tmp_path / "out")]) == 0
    pictures = set() if charts.missing_library() else {"trade-off.png"}
    assert {entry.name for entry in (tmp_path / "out").iterdir()} == pictures | {
        "mounts.csv", "mounts.json", "report.html", "summary.txt",
    }
    printed = capsys.readouterr()
    assert printed.err == "" and "booms of 1.2" in printed.out, printed
    with open(tmp_path / "out" / "mounts.csv", newline="", encoding="utf-8") as file:
        best, *_ = csv.DictReader(file)
    kept = json.loads((tmp_path / "out" / "mounts.json").read_text(encoding="utf-8"))
    length, bearing = float(best["length_m"]), np.radians(float(best["bearing_1_degrees"]))
    place = length * np.sin(bearing), length * np.cos(bearing)
    np.testing.assert_allclose([float(best["x_1_m"]), float(best["y_1_m"])], place, atol=1e-9)
    assert kept["choices"][0]["length"] == length
    assert kept["columns"].keys() == kept["choices"][0].keys()
    assert kept["search"]["bound"] <= length == kept["search"]["refined"]
    # A folder of its own making may be replaced.
    again = case("reach = { greatest = 3.0, bearings = [270, 270] }\nbearings = [270]\n")
    assert main(["mounts", str(again), "--out", str(tmp_path / "out"), "--overwrite"]) == 0


def test_a_case_asks_for_ports_and_areas_too(case, tmp_path):
    for number, (mounts, word) in enumerate((
        ("stretch = { }\nbearings = [270]\n", "arc fraction 0.5833"),
        ("stretch = { first = 0.25, last = 0.75 }\nbearings = [270]\ncount = 2\n", "saturates"),
        ("area = { points = [[-3, -1], [-1, -1], [-1, 1], [-3, 1]] }\n"
         "bearings = { from = 225, to = 315, step = 5 }\n", "percent of the wind"),
    )):
        out = tmp_path / f"out{number}"
        assert main(["mounts", str(case(mounts)), "--out", str(out)]) == 0
        page = (out / "summary.txt").read_text(encoding="utf-8")
        assert word in page or word.replace("0.5833", "0.4167") in page, page


@pytest.mark.parametrize("mounts, word", [
    ("count = 2\n", "reach"),
    ("reach = { greatest = 3.0 }\nstretch = { }\n", "beside"),
    ("reach = { greatest = 3.0, gratest = 2 }\n", "greatest"),
    ('reach = { greatest = 3.0 }\ncarries = ["cub"]\n', "cup"),
    ('reach = { greatest = 3.0 }\nlimit = "most"\n', "mast"),
    ("reach = { greatest = 3.0 }\nkeep_out = [[1, 2]]\n", "keep_out"),
    ("reach = { greatest = 3.0 }\ndirections = [0]\n", "direction"),
])
def test_a_case_that_cannot_be_searched_is_refused_at_its_key(case, mounts, word):
    with pytest.raises(ob.InputError, match=word) as refused:
        read_case(case(mounts))
    assert "mounts" in str(refused.value), refused.value

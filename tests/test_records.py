"""Records on file: what is read, what is kept out and listed, what is written, and the command."""

import csv
import json
import os
import tracemalloc

import numpy as np
import pytest
from numpy.testing import assert_allclose

import offbody as ob
from offbody import records, reports
from offbody.cases import read_case
from offbody.command import main
from offbody.records import Columns, correct_record, prepare, read_settings, side_file

CASE = """\
title = "Sorrel Quay, short mast"
length_unit = "m"
[stream]
bearings = 5
[[body]]
name = "mast"
shape = "circle"
diameter = 0.3
[[sensor]]
name = "cup"
kind = "point"
reads = "speed"
boom = { bearing = 195, length = 1.5, from = "axis" }
[[sensor]]
name = "vane"
kind = "point"
reads = "direction"
boom = { bearing = 285, length = 1.2, from = "axis" }
"""
RECORD = {"time": "when", "speed": {"cup": "ws"}, "bearing": {"vane": "wd"}}
BOTH = Columns({"cup": "ws"}, {"vane": "wd"}, time="when")


@pytest.fixture(scope="module")
def correction():
    mast = ob.solve(ob.circle(0.3))
    angle = np.radians([195.0, 285.0])
    (x, other_x), (y, other_y) = 1.5 * np.sin(angle), 1.5 * np.cos(angle)
    cup = ob.PointSensor(x, y, name="cup", reads="speed")
    vane = ob.PointSensor(other_x, other_y, name="vane", reads="direction")
    return ob.Correction.from_survey(ob.survey(mast, [cup, vane], bearings=range(360)))


def corrected(text, correction, tmp_path, columns=BOTH, **options):
    """The rows written for a record, as dicts, and the tally."""
    record, out = tmp_path / "record.csv", tmp_path / "out.csv"
    record.write_bytes(text if isinstance(text, bytes) else text.encode())
    tally = correct_record(record, correction, columns, out, **options)
    with open(out, encoding="utf-8", errors="surrogateescape", newline="") as file:
        return list(csv.DictReader(file, delimiter=columns.separator)), tally


def test_rows_are_corrected_as_arrays_are_and_the_time_is_carried_over(correction, tmp_path):
    speed, bearing = [8.0, 5.25, 7.5], [200.0, 240.5, 330.25]
    lines = [f"2031-04-01 00:{n}0,{s},{b},x" for n, s, b in zip(range(3), speed, bearing,
                                                                strict=True)]
    rows, tally = corrected("\n".join(["when,ws,wd,note", *lines]), correction, tmp_path)
    expected = correction.correct(speed, bearing)
    # Written to seven digits, and to a thousandth of a degree.
    assert_allclose([float(row["undisturbed_speed"]) for row in rows], expected.speed, rtol=1e-6)
    assert_allclose(
        [float(row["undisturbed_bearing"]) for row in rows], expected.direction, atol=6e-4
    )
    assert [row["when"] for row in rows] == [line.split(",")[0] for line in lines]
    assert [row["line"] for row in rows] == ["2", "3", "4"]
    assert {row["speed_sensor"] for row in rows} == {"cup"}
    assert (tally.rows, tally.unreadable) == (3, 0)
    assert not side_file(tmp_path / "out.csv").exists()


UNREADABLE = """\
when,ws,wd
1,8.0,200
2,abc,200
3,8.0
4,8.0,200,7
5,,200
6,nan,NaN
7,"8.0",200

9,"8.0,200
10,8_0,200
11,8.0,-999
12,8.0,20
"""


def test_unreadable_rows_are_listed_by_line_and_kept_out(correction, tmp_path):
    columns = Columns({"cup": "ws"}, {"vane": "wd"}, "when", missing=[-999])
    rows, tally = corrected(UNREADABLE, correction, tmp_path, columns)
    assert [row["line"] for row in rows] == ["2", "6", "7", "8", "12", "13"]
    assert [row["reason"] for row in rows] == [
        "ok", "missing", "missing", "ok", "missing", "untrusted"
    ]
    assert rows[1]["undisturbed_speed"] == "" and rows[1]["bearing_reason"] == "ok"
    with open(side_file(tmp_path / "out.csv"), newline="") as file:
        listed = list(csv.DictReader(file))
    assert [(row["line"], row["why"]) for row in listed] == [
        ("3", "ws is not a number"),
        ("4", "2 cells where the header has 3"),
        ("5", "4 cells where the header has 3"),
        ("9", "empty line"),
        ("10", "quotes do not close"),
        ("11", "ws is not a number"),
    ]
    assert (tally.rows, tally.unreadable, tally.read) == (12, 6, 6)
    assert "lines 3, 4, 5, 9, 10, 11" in tally.summary(tmp_path / "out.csv", True)


def test_every_line_is_written_or_listed_however_the_file_is_cut(correction, tmp_path, monkeypatch):
    generator = np.random.default_rng(3)
    good = ["7,8.0,200", "8,,200", '9,"8.5",210']
    bad = ["7,8.0", "x,y,z,", '"', "8,8.0,north"]
    picks = generator.integers(0, 7, 500)
    text = "when,ws,wd\n" + "".join((good + bad)[pick] + "\n" for pick in picks)
    outcomes = []
    for size in (1, 7, 100, 1 << 22):
        monkeypatch.setattr(records, "BYTES_AT_ONCE", size)
        rows, _ = corrected(text, correction, tmp_path, overwrite=True)
        with open(side_file(tmp_path / "out.csv"), newline="") as file:
            listed = list(csv.DictReader(file))
        numbers = sorted(int(row["line"]) for row in rows + listed)
        assert numbers == list(range(2, 502))
        assert len(rows) == np.count_nonzero(picks < 3)
        outcomes.append((rows, listed))
    assert all(outcome == outcomes[0] for outcome in outcomes)


def test_bytes_that_are_no_text_are_carried_over_as_they_are(correction, tmp_path):
    text = b"\xef\xbb\xbfwhen,ws,wd\r\n\xff\xe9t\xe9,8.0,200\r\n\xff,8\xff,200\r\n"
    _, tally = corrected(text, correction, tmp_path)
    assert (tmp_path / "out.csv").read_bytes().splitlines()[1].startswith(b"2,\xff\xe9t\xe9,8.")
    assert tally.unreadable == 1


def test_decimal_commas_are_read_and_written(correction, tmp_path):
    columns = Columns({"cup": "ws"}, {"vane": "wd"}, "when", separator=";", decimal=",")
    rows, tally = corrected("when;ws;wd\n1;8,5;200,5\n2;8.5;200\n", correction, tmp_path, columns)
    expected = correction.correct(8.5, 200.5)
    assert_allclose(float(rows[0]["undisturbed_speed"].replace(",", ".")), expected.speed,
                    rtol=1e-6)
    assert tally.unreadable == 1


def test_a_spread_and_uncertainties_have_columns_of_their_own(correction, tmp_path):
    mast = ob.solve(ob.circle(0.3))
    table = ob.survey(mast, ob.PointSensor(0.0, 1.5, name="sonic"), bearings=range(360))
    doubt = ob.uncertainty(table, speed_calibration=ob.Normal(0.01), alignment=ob.Normal(1.0))
    correction = ob.Correction.from_survey(table, uncertainty=doubt)
    columns = Columns({"sonic": "ws"}, {"sonic": "wd"}, spread="sd")
    rows, tally = corrected("ws,wd,sd\n8,45,12\n8,300,0\n", correction, tmp_path, columns)
    expected = correction.correct([8.0, 8.0], [45.0, 300.0], [12.0, 0.0])
    for name, values in {
        "speed_standard_uncertainty": expected.speed_uncertainty,
        "bearing_standard_uncertainty": expected.direction_uncertainty,
        "speed_change_by_spread": expected.speed_change_by_spread,
    }.items():
        assert_allclose([float(row[name]) for row in rows], values, rtol=1e-2, atol=1e-12)
    assert "the spread of the bearing changes the speed by" in tally.summary("out.csv", True)


def test_north_is_written_as_zero(correction, tmp_path):
    bearings = np.arange(357.0, 363.0, 0.0005) % 360.0
    text = "when,ws,wd\n" + "".join(f"0,8,{bearing:.4f}\n" for bearing in bearings)
    rows, _ = corrected(text, correction, tmp_path)
    written = [float(row["undisturbed_bearing"]) for row in rows]
    assert 0.0 <= min(written) and max(written) < 360.0


# --- what stands on the disc ----------------------------------------------------------------------


def test_a_run_that_fails_leaves_nothing_behind(correction, tmp_path):
    with pytest.raises(ob.InputError, match="no row that can be read"):
        corrected("when,ws,wd\n1,a,b\n", correction, tmp_path)
    assert os.listdir(tmp_path) == ["record.csv"]

    def interrupt(size):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        corrected("when,ws,wd\n1,8,200\n", correction, tmp_path, progress=interrupt)
    assert os.listdir(tmp_path) == ["record.csv"]


def test_nothing_is_replaced_unasked_and_the_record_never(correction, tmp_path):
    text = "when,ws,wd\n1,8,200\n2,8\n"
    corrected(text, correction, tmp_path)
    with pytest.raises(ob.InputError, match="exists already"):
        corrected(text, correction, tmp_path)
    corrected("when,ws,wd\n1,8,200\n", correction, tmp_path, overwrite=True)
    assert not side_file(tmp_path / "out.csv").exists(), "the old list belongs to the old output"
    record = tmp_path / "record.csv"
    with pytest.raises(ob.InputError, match="record itself"):
        correct_record(record, correction, BOTH, record, overwrite=True)
    with pytest.raises(ob.InputError, match="no folder"):
        correct_record(record, correction, BOTH, tmp_path / "none" / "out.csv")
    with pytest.raises(ob.InputError, match="cannot read the record"):
        correct_record(tmp_path / "none.csv", correction, BOTH, tmp_path / "other.csv")


def test_progress_counts_every_byte(correction, tmp_path, monkeypatch):
    monkeypatch.setattr(records, "BYTES_AT_ONCE", 50)
    text = "when,ws,wd\n" + "1,8,200\n" * 100
    sizes = []
    corrected(text, correction, tmp_path, progress=sizes.append)
    assert sum(sizes) == len(text) and len(sizes) > 10


def test_a_record_four_times_as_long_takes_no_more_memory(correction, tmp_path, monkeypatch):
    monkeypatch.setattr(records, "BYTES_AT_ONCE", 1 << 14)
    peaks = []
    for count in (5_000, 20_000):
        (tmp_path / "record.csv").write_text("when,ws,wd\n" + "1,8.25,200.5\n" * count)
        tracemalloc.start()
        correct_record(tmp_path / "record.csv", correction, BOTH, tmp_path / "out.csv", True)
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    # A tenth for what the first run keeps, such as the inverted curves.
    assert peaks[1] < 1.1 * peaks[0], peaks


@pytest.mark.parametrize("text, words", [
    ("", "line 1 is empty"),
    ("when,ws,direction\n", "no column 'wd'"),
    ("when;ws;wd\n", "is ',' its separator"),
    ("when,ws,wd,wd\n", "2 columns named 'wd'"),
    ('when,"ws,wd\n', "no line of columns' names"),
    ("when,ws,wd\n", "it has none"),
    ("when,ws,wd\n1,8,200\n" + "8" * records.LONGEST_LINE * 2, "has no end"),
], ids=["empty", "column", "separator", "twice", "quotes", "no rows", "endless line"])
def test_records_that_cannot_be_used_are_refused(correction, tmp_path, text, words):
    with pytest.raises(ob.InputError, match=words):
        corrected(text, correction, tmp_path)


# --- settings -------------------------------------------------------------------------------------


@pytest.mark.parametrize("arguments, words", [
    ({"speed": {"cup": "ws"}, "direction": {}}, "names no column"),
    ({"speed": ["ws"], "direction": {"vane": "wd"}}, "column per sensor"),
    ({"speed": {"cup": 3}, "direction": {"vane": "wd"}}, "column per sensor"),
    ({"speed": {}, "direction": {"vane": "wd"}, "time": 4}, "time"),
    ({"speed": {}, "direction": {"vane": "wd"}, "missing": "x"}, "missing"),
    ({"speed": {}, "direction": {"vane": "wd"}, "separator": "::"}, "one character"),
    ({"speed": {}, "direction": {"vane": "wd"}, "decimal": ","}, "both"),
])
def test_layouts_that_cannot_be_used_are_named(arguments, words):
    with pytest.raises(ob.InputError, match=words):
        Columns(**arguments)


def test_a_table_of_bearings_takes_no_directions_nor_unknown_keys():
    with pytest.raises(ob.InputError, match="say every angle one way"):
        read_settings({"direction": {"vane": "wd"}}, by_bearing=True)
    with pytest.raises(ob.InputError, match="say every angle one way"):
        read_settings({"bearing": {"vane": "wd"}}, by_bearing=False)
    with pytest.raises(ob.InputError, match="did you mean 'speed'"):
        read_settings({"speeds": {}}, by_bearing=True)
    columns, settings = read_settings({"bearing": {"vane": "wd"}, "calm_below": 1}, True)
    assert columns == {"direction": {"vane": "wd"}} and settings == {"calm_below": 1}


# --- the command ----------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def surveyed(tmp_path_factory):
    """The survey.json of the case, beside the case."""
    folder = tmp_path_factory.mktemp("case")
    (folder / "case.toml").write_text(CASE)
    case = read_case(folder / "case.toml")
    path = folder / "survey.json"
    reports.write_json(path, case, case.survey(case.solve()))
    document = json.loads(path.read_text())
    document["case"]["record"] = RECORD
    path.write_text(json.dumps(document))
    return path


def run(capsys, *words):
    status = main(["correct", *map(str, words)])
    return status, *capsys.readouterr()


def test_the_command_corrects_as_the_library_does(surveyed, tmp_path, capsys):
    record = tmp_path / "record.csv"
    record.write_text("when,ws,wd\n1,8,200\n2,x,200\n3,7,300\n")
    status, page, complaint = run(
        capsys, record, "--with", surveyed, "--out", tmp_path / "out.csv")
    assert (status, complaint) == (0, "")
    assert "3 rows, 2 read" in page and "lines 3" in page
    with open(tmp_path / "out.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    angle = np.radians([195.0, 285.0])
    places = np.array([1.5, 1.2]) * np.sin(angle), np.array([1.5, 1.2]) * np.cos(angle)
    cup = ob.PointSensor(places[0][0], places[1][0], name="cup", reads="speed")
    vane = ob.PointSensor(places[0][1], places[1][1], name="vane", reads="direction")
    table = ob.survey(ob.solve(ob.circle(0.3)), [cup, vane], bearings=np.arange(0, 360, 5))
    expected = ob.Correction.from_survey(table).correct([8.0, 7.0], [200.0, 300.0])
    assert_allclose([float(row["undisturbed_speed"]) for row in rows], expected.speed, rtol=1e-6)


def test_the_survey_on_file_and_the_survey_in_memory_correct_alike(surveyed):
    case = read_case(surveyed.with_name("case.toml"))
    one = ob.Correction.from_survey(case.survey(case.solve()))
    other = ob.Correction.from_survey(surveyed)
    assert one.names == other.names and one.by_bearing == other.by_bearing
    for name in ("angles", "speed_ratio", "direction_error", "trust"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)
    assert other.case["title"] == "Sorrel Quay, short mast"


def test_flags_count_before_the_case(surveyed, tmp_path, capsys):
    record = tmp_path / "record.csv"
    record.write_text("t;v;d\n1;8,0;200\n2;0,2;200\n3;x;200\n4;8;197\n")
    status, page, _ = run(
        capsys, record, "--with", surveyed, "--out", tmp_path / "out.csv", "--time", "t",
        "--speed", "cup=v", "--bearing", "vane=d", "--separator", ";", "--decimal", ",",
        "--missing", "x", "--calm-below", "0.5", "--north-offset", "vane=3")
    assert status == 0 and "calm 1" in page and "missing 1" in page
    with open(tmp_path / "out.csv", newline="") as file:
        rows = list(csv.DictReader(file, delimiter=";"))
    expected = ob.Correction.from_survey(surveyed, north_offset={"vane": 3.0}).correct(8.0, 200.0)
    assert_allclose(float(rows[0]["undisturbed_bearing"].replace(",", ".")), expected.direction,
                    atol=6e-4)


def test_a_saved_correction_serves_in_place_of_a_survey(surveyed, tmp_path, capsys):
    record = tmp_path / "record.csv"
    record.write_text("when,ws,wd\n1,8,200\n")
    ob.Correction.from_survey(surveyed, north_offset=2.0).save(tmp_path / "saved.json")
    assert run(capsys, record, "--with", tmp_path / "saved.json", "--out", tmp_path / "a")[0] == 0
    assert run(capsys, record, "--with", surveyed, "--north-offset", "2", "--out",
               tmp_path / "b")[0] == 0
    assert (tmp_path / "a").read_text() == (tmp_path / "b").read_text()
    status, _, complaint = run(capsys, record, "--with", tmp_path / "saved.json", "--calms",
                               "blank", "--out", tmp_path / "c")
    assert status == 2 and "saved correction" in complaint


@pytest.mark.parametrize("words, complaint", [
    (["--speed", "cup"], "SENSOR=COLUMN"),
    (["--speed", "cap=ws"], "did you mean 'cup'"),
    (["--speed", "vane=ws"], "'vane' is no sensor that reads it"),
    (["--direction", "vane=wd"], "say every angle one way"),
    (["--time", "t"], "no column 't'"),
    (["--north-offset", "three"], "north_offset"),
    (["--calm-below", "-1"], "calm_below"),
])
def test_the_command_refuses_in_one_line_and_writes_nothing(
    surveyed, tmp_path, capsys, words, complaint
):
    record = tmp_path / "record.csv"
    record.write_text("when,ws,wd\n1,8,200\n")
    status, page, said = run(capsys, record, "--with", surveyed, "--out", tmp_path / "o", *words)
    assert (status, page) == (2, "")
    assert complaint in said and said.count("\n") == 1
    assert os.listdir(tmp_path) == ["record.csv"]


def test_a_damaged_survey_is_refused_by_name(surveyed, tmp_path, capsys):
    document = json.loads(surveyed.read_text())
    del document["data"]["trust"]
    (tmp_path / "survey.json").write_text(json.dumps(document))
    (tmp_path / "record.csv").write_text("when,ws,wd\n1,8,200\n")
    status, _, said = run(capsys, tmp_path / "record.csv", "--with", tmp_path / "survey.json",
                          "--out", tmp_path / "o")
    assert status == 2 and "survey.json" in said and "trust" in said


def test_the_columns_are_those_that_the_case_names(surveyed):
    correction, columns = prepare(surveyed, {}, {})
    assert correction.names == ("cup", "vane")
    assert columns.speed == {"cup": "ws"} and columns.direction == {"vane": "wd"}

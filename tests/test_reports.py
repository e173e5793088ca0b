"""What is kept of a survey reads back to the last digit, and a folder is whole or not there."""

import csv
import json
import math

import numpy as np
import pytest

import offbody as ob
from offbody import reports
from offbody.cases import read_case

CASE = """\
title = "Osterlund pier, mast 1"
length_unit = "cm"
stream = { bearings = 15, speed = 10.0, speed_unit = "m/s" }

[[body]]
name = "mast"
shape = "circle"
diameter = 40

[[sensor]]
name = "cup, upper"
kind = "point"
reads = "speed"
boom = { bearing = 240, length = 190, from = "axis" }

[[sensor]]
name = "vane"
kind = "point"
reads = "direction"
x = 100
y = 0

[[sensor]]
name = "sonic"
kind = "path"
start = [-90, 100]
end = [-110, 100]

[[sensor]]
name = "tap"
kind = "wall_port"
arc_fraction = 0.0
"""


@pytest.fixture(scope="module")
def surveyed(tmp_path_factory):
    path = tmp_path_factory.mktemp("case") / "pier.toml"
    path.write_text(CASE, encoding="utf-8")
    case = read_case(path)
    return case, case.survey(case.solve())


# --- tables ---------------------------------------------------------------------------------------


def test_the_csv_gives_back_every_digit_of_the_table(surveyed, tmp_path):
    case, table = surveyed
    reports.write_csv(tmp_path / "survey.csv", case, table)
    with open(tmp_path / "survey.csv", newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == table.speed_ratio.size
    for name, values in [("speed_ratio", table.speed_ratio),
                         ("direction_error_degrees", table.direction_error),
                         ("static_error", table.static_error),
                         ("speed_ratio_gradient_x_per_cm", table.speed_ratio_gradient[..., 0])]:
        read = np.array([float(row[name] or "nan") for row in rows])
        np.testing.assert_array_equal(read.reshape(values.shape), values, err_msg=name)
    assert [row["trust"] == "true" for row in rows] == table.trust.ravel().tolist()
    assert [float(row["bearing_degrees"]) for row in rows[::4]] == table.bearings.tolist()


def test_the_json_gives_back_table_units_and_case(surveyed, tmp_path):
    case, table = surveyed
    reports.write_json(tmp_path / "survey.json", case, table)
    text = (tmp_path / "survey.json").read_text(encoding="utf-8")
    kept = json.loads(text, parse_constant=lambda word: pytest.fail(f"{word} is not JSON"))
    assert kept["offbody"] == ob.__version__
    assert kept["case"] == case.entries
    assert kept["columns"]["speed_ratio_gradient_x"]["unit"] == "1/cm"
    assert kept["columns"]["direction_error"]["unit"] == "degrees"
    read = [math.nan if value is None else value for value in kept["data"]["speed_ratio"]]
    np.testing.assert_array_equal(np.reshape(read, table.speed_ratio.shape), table.speed_ratio)
    assert set(kept["data"]) == set(kept["columns"])


def test_reasons_and_notes_bear_the_names_of_the_case(surveyed, tmp_path):
    case, table = surveyed
    reports.write_json(tmp_path / "survey.json", case, table)
    kept = json.loads((tmp_path / "survey.json").read_text(encoding="utf-8"))
    assert set(kept["data"]["reason"]) == {"", "in the lee of mast"}
    assert kept["notes"][0].startswith("No drag coefficient is given for mast (circle")


def test_the_field_file_holds_the_grid_with_its_axes(surveyed, tmp_path):
    case, _ = surveyed
    x, y, model = np.linspace(-60, 60, 7), np.linspace(30, 60, 3), case.solve()
    directions = np.array([0.0, 30.0])
    velocity = np.stack([model.grid(x, y, direction) for direction in directions])
    reports.write_field(tmp_path / "field.npz", case, x, y, directions, velocity)
    with np.load(tmp_path / "field.npz") as kept:
        assert kept["u"].shape == (2, 3, 7)
        np.testing.assert_array_equal(kept["x"], x)
        np.testing.assert_array_equal(kept["u"], velocity[..., 0])
        np.testing.assert_array_equal(kept["stream_bearing"], [270.0, 240.0])
        np.testing.assert_allclose(
            kept["pressure_coefficient"], 1 - kept["speed_ratio"] ** 2, rtol=0, atol=1e-14
        )
        assert str(kept["length_unit"]) == "cm"
        assert json.loads(str(kept["case"])) == case.entries


# --- the page -------------------------------------------------------------------------------------


def test_the_page_says_sectors_worst_wind_and_trust_of_each_sensor(surveyed):
    case, table = surveyed
    page = reports.summary(case, table)
    cup, vane, sonic, tap = page[page.index("SENSORS"):page.index("READ")].split("\n\n")[1:5]
    # With q = (20/190)^2 = 0.0111 the ratio is 1 - q cos(2 theta) to first order, theta from the
    # boom's bearing 240 (circle theorem, Milne-Thomson): within 1 percent at 15 to 75 degrees
    # and at 105 to 165, either side. At 165 the cup is in the lee, 49 cm off its middle line
    # where the strip is 20 + 184 tan(10) = 52 cm wide.
    assert "speed within 1 percent     90 to 135, 165 to 225, 255 to 315, 345 to 30\n" in cup
    assert "not trusted                45 to 75: in the lee of mast" in cup
    assert "direction within 1 degree" not in cup
    assert "direction within 1 degree" in vane
    assert "worst speed" not in vane
    assert "(clockwise positive)" in vane
    assert "square to the path" in sonic
    assert "pressure coefficient" in tap


def test_the_page_names_its_limits(surveyed):
    page = reports.summary(*surveyed, cautions=["The gap is narrow."])
    for words in ("two-dimensional", "without turbulence", "is not predicted", "local codes",
                  "licensed practice", "wake's displacement is left out", "The gap is narrow."):
        assert words in " ".join(page.split()), words
    longest = max(page.splitlines(), key=len)
    assert len(longest) <= 100, longest


def test_the_worst_of_the_page_is_the_worst_of_the_table(surveyed):
    case, table = surveyed
    angle, ratio = table.worst()[0]
    percent = f"{100 * (ratio - 1):+.2f} percent ({10 * (ratio - 1):+.2f} m/s)"
    assert f"{percent} at bearing {angle:g}" in reports.summary(case, table)


# --- a whole folder -------------------------------------------------------------------------------


def fill(folder, text="new"):
    (folder / "summary.txt").write_text(text, encoding="utf-8")


def test_a_folder_appears_only_when_it_is_whole(tmp_path):
    with reports.whole_folder(tmp_path / "out") as folder:
        fill(folder)
        assert not (tmp_path / "out").exists()
    assert [entry.name for entry in tmp_path.iterdir()] == ["out"]
    assert (tmp_path / "out" / "summary.txt").read_text() == "new"


@pytest.mark.parametrize("failure", [OSError("disk full"), KeyboardInterrupt(), SystemExit(1)])
def test_a_failure_on_the_way_leaves_nothing(tmp_path, failure):
    with pytest.raises(type(failure)), reports.whole_folder(tmp_path / "out") as folder:
        fill(folder)
        raise failure
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("failure", [OSError("disk full"), KeyboardInterrupt()])
def test_a_failure_on_the_way_leaves_the_old_folder_as_it_was(tmp_path, failure):
    (tmp_path / "out").mkdir()
    fill(tmp_path / "out", "old")
    with pytest.raises(type(failure)), reports.whole_folder(tmp_path / "out", True) as folder:
        fill(folder)
        raise failure
    assert [entry.name for entry in tmp_path.iterdir()] == ["out"]
    assert (tmp_path / "out" / "summary.txt").read_text() == "old"


def test_a_failure_of_the_last_step_brings_the_old_folder_back(tmp_path, monkeypatch):
    (tmp_path / "out").mkdir()
    fill(tmp_path / "out", "old")
    rename = reports.Path.rename

    def fail_with_the_new_one(path, target):
        if path.name.endswith(".new"):
            raise OSError("no more renaming")
        return rename(path, target)

    monkeypatch.setattr(reports.Path, "rename", fail_with_the_new_one)
    with pytest.raises(OSError), reports.whole_folder(tmp_path / "out", True) as folder:
        fill(folder)
    assert [entry.name for entry in tmp_path.iterdir()] == ["out"]
    assert (tmp_path / "out" / "summary.txt").read_text() == "old"


def test_an_existing_folder_is_replaced_only_when_told_to(tmp_path):
    (tmp_path / "out").mkdir()
    fill(tmp_path / "out", "old")
    with pytest.raises(ob.InputError, match="exists already; give another name, or --overwrite"):
        with reports.whole_folder(tmp_path / "out"):
            pytest.fail("the block ran")
    with reports.whole_folder(tmp_path / "out", overwrite=True) as folder:
        fill(folder)
    assert (tmp_path / "out" / "summary.txt").read_text() == "new"
    assert [entry.name for entry in tmp_path.iterdir()] == ["out"]


@pytest.mark.parametrize("name", ["thesis.doc", "case.toml", "survey.csv.bak"])
def test_a_folder_with_files_of_somebody_else_is_never_replaced(tmp_path, name):
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / name).write_text("years of work", encoding="utf-8")
    with pytest.raises(ob.InputError, match=f"holds '{name}', which is not offbody's"):
        with reports.whole_folder(tmp_path / "out", overwrite=True):
            pytest.fail("the block ran")
    assert (tmp_path / "out" / name).read_text() == "years of work"


def test_a_file_in_the_way_and_a_missing_parent_are_refused(tmp_path):
    (tmp_path / "out").write_text("a file", encoding="utf-8")
    with pytest.raises(ob.InputError, match="not a folder"):
        with reports.whole_folder(tmp_path / "out", overwrite=True):
            pytest.fail("the block ran")
    with pytest.raises(ob.InputError, match="there is no folder"):
        with reports.whole_folder(tmp_path / "nowhere" / "out"):
            pytest.fail("the block ran")

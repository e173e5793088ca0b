"""One command turns a case into a folder of tables and pictures, or says in one line why not."""

import csv
import errno
import json
import subprocess
import sys
from importlib import resources

import numpy as np
import pytest

import offbody as ob
from offbody import command, reports

CASE = """\
title = "Osterlund pier, mast 1"
length_unit = "m"
stream = { bearings = 5 }

[[body]]
name = "mast"
shape = "circle"
diameter = 0.4

[[sensor]]
name = "cup"
kind = "point"
reads = "speed"
boom = { bearing = 270, length = 2.0, from = "axis" }

[field]
points = [24, 20]
"""


@pytest.fixture
def case(tmp_path):
    path = tmp_path / "case.toml"
    path.write_text(CASE, encoding="utf-8")
    return path


@pytest.fixture
def without_pictures(monkeypatch):
    """An environment in which matplotlib is not installed."""
    monkeypatch.setitem(sys.modules, "matplotlib", None)


def run(*words):
    return command.main([str(word) for word in words])


def names(folder):
    return sorted(entry.name for entry in folder.iterdir())


def test_a_survey_is_tables_pictures_and_a_page_that_is_printed_too(case, tmp_path, capsys):
    assert run("survey", case, "--out", tmp_path / "out") == 0
    assert names(tmp_path / "out") == [
        "map.png", "report.html", "sensors.png", "summary.txt", "survey.csv", "survey.json",
    ]
    printed = capsys.readouterr()
    assert printed.err == ""  # no progress bar where there is no terminal, no warnings
    page = (tmp_path / "out" / "summary.txt").read_text(encoding="utf-8")
    assert printed.out.startswith(page)
    assert "map.png" in printed.out[len(page):]
    for picture in ("map.png", "sensors.png"):
        assert (tmp_path / "out" / picture).read_bytes().startswith(b"\x89PNG"), picture


def test_five_diameters_upstream_of_a_tube_the_table_says_99_percent(
    case, tmp_path, without_pictures
):
    run("survey", case, "--out", tmp_path / "out")
    with open(tmp_path / "out" / "survey.csv", newline="", encoding="utf-8") as file:
        rows = {float(row["bearing_degrees"]): row for row in csv.DictReader(file)}
    # Facing the wind 1 - (a/r)^2, across it 1 + (a/r)^2, at 45 degrees sqrt(1 + (a/r)^4):
    # Milne-Thomson, Theoretical Hydrodynamics. To the accuracy of the default panels.
    for bearing, exact in [(270, 0.99), (0, 1.01), (180, 1.01), (225, np.sqrt(1 + 1e-4))]:
        assert float(rows[bearing]["speed_ratio"]) == pytest.approx(exact, abs=1e-9), bearing
    assert rows[270]["trust"] == "true"
    assert rows[90]["reason"] == "in the lee of mast"


def test_a_field_is_the_dense_grid_with_its_axes_and_its_picture(case, tmp_path):
    assert run("field", case, "--out", tmp_path / "out") == 0
    assert names(tmp_path / "out") == ["field.npz", "field.png"]
    with np.load(tmp_path / "out" / "field.npz") as kept:
        assert kept["u"].shape == (1, 20, 24)
        z = kept["x"] + 1j * kept["y"][:, None]
        stream = np.exp(1j * np.radians(kept["stream_direction"][0]))
        # W = conj(U) - a^2 U / z^2: the circle theorem, Milne-Thomson.
        exact = np.conj(stream) - stream * (0.2 / z) ** 2
        exact = np.where(np.abs(z) < 0.2, complex(np.nan, np.nan), exact)
        np.testing.assert_allclose(kept["u"][0], exact.real, rtol=0, atol=1e-9)
        np.testing.assert_allclose(kept["v"][0], -exact.imag, rtol=0, atol=1e-9)
        # Nobody has said which wind to show: it is the one the cup reads worst, facing it or from
        # straight across, where it is 1 percent off alike.
        assert kept["stream_bearing"][0] in (0.0, 180.0, 270.0)


def test_every_wind_asked_for_has_a_picture_of_its_own(case, tmp_path):
    case.write_text(CASE + "bearing = [240, 60.5]\n", encoding="utf-8")
    assert run("field", case, "--out", tmp_path / "out") == 0
    assert names(tmp_path / "out") == ["field-240.png", "field-60.5.png", "field.npz"]


def test_below_the_ground_there_is_no_flow(case, tmp_path, without_pictures):
    text = CASE.replace("stream = { bearings = 5 }", 'stream = { directions = "all" }\n'
                        'surroundings = { kind = "ground", y = -0.5 }')
    text = text.replace("bearing = 270", "direction = 180")
    case.write_text(text + "x = [-1, 1]\ny = [-1, 1]\n", encoding="utf-8")
    assert run("field", case, "--out", tmp_path / "out") == 0
    with np.load(tmp_path / "out" / "field.npz") as kept:
        below = kept["y"] < -0.5
        assert np.isnan(kept["u"][0, below]).all()
        assert np.isfinite(kept["u"][0, ~below][:, 0]).all()


def test_without_a_drawing_library_the_tables_still_come_and_a_line_says_why(
    case, tmp_path, capsys, without_pictures
):
    assert run("survey", case, "--out", tmp_path / "out") == 0
    assert names(tmp_path / "out") == [
        "report.html", "summary.txt", "survey.csv", "survey.json",
    ]
    last = capsys.readouterr().out.splitlines()[-1]
    assert last.startswith("no pictures: ") and "pip install 'offbody[plot]'" in last


def test_the_demo_is_a_whole_survey_that_a_person_can_start_from(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    assert run("demo") == 0
    folder = tmp_path / "offbody-demo"
    assert {"case.toml", "map.png", "sensors.png", "summary.txt"} <= set(names(folder))
    built_in = resources.files("offbody") / "demo.toml"
    assert (folder / "case.toml").read_bytes() == built_in.read_bytes()
    page = capsys.readouterr().out
    for words in ("cup (disc, reads speed)", "sonic (path", "speed within 1 percent",
                  "worst speed", "in the lee of mast", "360 wind bearings"):
        assert words in page, words
    kept = json.loads((folder / "survey.json").read_text(encoding="utf-8"))
    ratio = [value for value, trust in zip(kept["data"]["speed_ratio"], kept["data"]["trust"],
                                           strict=True) if trust and value is not None]
    # Eight mast diameters out: a mast of Cd = 1.2 takes (a/r)^2 + Cd b/(4 pi r), 1.6 percent here.
    assert 0.98 < min(ratio) < 0.99 and 1.0 < max(ratio) < 1.02, (min(ratio), max(ratio))
    assert run("demo") == 2
    assert "exists already" in capsys.readouterr().err


def test_a_demo_case_that_was_edited_is_not_overwritten(tmp_path, capsys, without_pictures):
    assert run("demo", "--out", tmp_path / "out") == 0
    assert run("demo", "--out", tmp_path / "out", "--overwrite") == 0
    with open(tmp_path / "out" / "case.toml", "a", encoding="utf-8") as file:
        file.write("# my own\n")
    assert run("demo", "--out", tmp_path / "out", "--overwrite") == 2
    assert "'case.toml', which is not offbody's to replace" in capsys.readouterr().err


def test_a_bad_case_is_one_line_and_status_2(case, tmp_path, capsys):
    case.write_text(CASE.replace("diameter", "diametre"), encoding="utf-8")
    assert run("survey", case, "--out", tmp_path / "out") == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert printed.err == (
        f"offbody: {case}: body[1].diametre: unknown key; did you mean 'diameter'?\n"
    )
    assert names(tmp_path) == ["case.toml"]


@pytest.mark.parametrize(
    ("failure", "status", "line"),
    [
        (OSError(errno.ENOSPC, "No space left on device"), 2, "No space left on device"),
        (PermissionError(errno.EACCES, "Permission denied"), 2, "Permission denied"),
        (MemoryError(), 2, "not enough memory"),
        (KeyboardInterrupt(), 130, "interrupted; nothing was written"),
    ],
)
def test_a_failure_while_writing_is_one_line_and_leaves_nothing(
    case, tmp_path, capsys, monkeypatch, without_pictures, failure, status, line
):
    def fail(*_):
        raise failure

    monkeypatch.setattr(reports, "write_json", fail)
    assert run("survey", case, "--out", tmp_path / "out") == status
    error = capsys.readouterr().err
    assert line in error and error.count("\n") == 1, error
    assert names(tmp_path) == ["case.toml"]


def test_what_the_library_warns_of_is_on_the_page(
    case, tmp_path, capsys, monkeypatch, without_pictures
):
    solve = ob.solve

    def warn(*words, **names):
        import warnings

        warnings.warn("the gap is narrow", ob.AccuracyWarning, stacklevel=2)
        return solve(*words, **names)

    monkeypatch.setattr(ob, "solve", warn)
    assert run("survey", case, "--out", tmp_path / "out") == 0
    printed = capsys.readouterr()
    assert "- the gap is narrow\n" in printed.out
    assert printed.err == ""


@pytest.mark.parametrize("words", [[], ["survey"], ["survey", "case.toml"], ["fly", "--out", "x"]])
def test_a_command_that_cannot_be_understood_is_status_2(words, capsys):
    with pytest.raises(SystemExit) as stop:
        run(*words)
    assert stop.value.code == 2
    assert capsys.readouterr().err.startswith("usage: offbody")


def test_help_tells_the_exit_status_and_where_the_keys_are_listed(capsys):
    with pytest.raises(SystemExit) as stop:
        run("survey", "--help")
    assert stop.value.code == 0
    text = capsys.readouterr().out
    assert "exit status: 0 done; 2 " in text and "pydoc offbody.cases" in text


def test_the_module_runs_as_a_program_of_its_own():
    done = subprocess.run(
        [sys.executable, "-m", "offbody", "--version"], capture_output=True, text=True, check=True
    )
    assert done.stdout == f"offbody {ob.__version__}\n"

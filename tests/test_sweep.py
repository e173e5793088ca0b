"""A sweep is the survey of every case, whoever works it out; one bad case harms no other."""

import json
import os
from concurrent.futures import BrokenExecutor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from multiprocessing import get_context

import numpy as np
import pytest
from numpy.testing import assert_array_equal

import offbody as ob
from offbody import sweeps

LENGTHS = (1.5, 2.0, 3.0)


def mast(length, **more):
    """A tube with a cup on a boom to the west."""
    return {
        "length_unit": "m",
        "stream": {"bearings": 30},
        "body": [{"shape": "circle", "diameter": 0.4, "drag_coefficient": 1.2}],
        "sensor": [{"kind": "point", "reads": "speed", "name": "cup",
                    "boom": {"bearing": 270, "length": length, "from": "axis"}}],
        **more,
    }


def variants():
    return {f"boom {length} m": mast(length) for length in LENGTHS}


def direct(length):
    """The same survey by the library itself."""
    model = ob.solve(ob.circle(0.4), wakes=ob.Wake(1.2))
    return ob.survey(model, ob.PointSensor(-length, 0.0, reads="speed"),
                     bearings=np.arange(0, 360, 30))


def processes(workers=2):
    # Forked children of a process that has threads may hang; these are started afresh.
    return ProcessPoolExecutor(workers, mp_context=get_context("forkserver"))


def check(results):
    assert [result.error for result in results] == [None] * len(LENGTHS)
    for result, length in zip(results, LENGTHS, strict=True):
        table = direct(length)
        assert result.name == f"boom {length} m" and result.sensors == ("cup",)
        assert_array_equal(result.angles, table.angles)
        # The same sums in the same order, whatever the number of threads: equal to the last bit,
        # but for a boom's tip, which rounding puts a unit in the last place off the axis.
        np.testing.assert_allclose(result.columns["speed_ratio"], table.speed_ratio, rtol=1e-14)
        assert_array_equal(result.columns["trust"], table.trust)
        assert np.isnan(result.columns["direction_error"]).all()


def test_a_sweep_is_the_survey_of_every_case():
    check(ob.sweep(variants()))


def test_threads_find_the_same():
    with ThreadPoolExecutor(2) as executor:
        check(ob.sweep(variants(), executor))


def test_processes_find_the_same_and_one_that_is_bad_does_not_stop_them():
    cases = {"bad": mast(0.1), **variants()}
    with processes() as executor:
        bad, *rest = ob.sweep(cases, executor)
    check(rest)
    assert "lies inside or across body 1" in bad.error and bad.columns is None, bad.error


def test_dask_finds_the_same():
    distributed = pytest.importorskip("distributed")
    options = dict(n_workers=2, threads_per_worker=1, processes=False, dashboard_address=None)
    with distributed.LocalCluster(**options) as cluster, distributed.Client(cluster) as client:
        check(ob.sweep(variants(), client.get_executor()))


@pytest.mark.parametrize(
    ("broken", "reason"),
    [
        (mast(0.1), "lies inside or across"),
        (mast(2.0, body=[]), "at least one [[body]]"),
        (mast(2.0, panel={}), "panel: unknown key; did you mean 'panels'?"),
        ({"length_unit": "m", 7: 8}, "TypeError"),
        ("nowhere.toml", "no such case file"),
    ],
)
def test_every_kind_of_bad_case_is_reported_in_its_place(broken, reason, tmp_path):
    cases = {"first": mast(2.0), "broken": broken, "last": mast(3.0)}
    first, bad, last = ob.sweep(cases, folder=tmp_path)
    assert reason in bad.error
    assert first.error is None and last.error is None
    assert sorted(entry.name for entry in tmp_path.iterdir()) == ["first.json", "last.json"]


class Dying:
    """An executor whose first worker dies, and which takes no more than one case after that."""

    def __init__(self):
        self.taken = 0

    def submit(self, function, job):
        self.taken += 1
        if self.taken == 3:
            raise BrokenExecutor("a worker died before")
        future = Future()
        if self.taken == 1:
            future.set_exception(BrokenExecutor("a worker died"))
        else:
            future.set_result(function(job))
        return future


def test_a_worker_that_dies_loses_its_own_cases_only():
    lost, done, refused = ob.sweep(variants(), Dying())
    assert "a worker died" in lost.error and "a worker died before" in refused.error
    assert done.error is None


def test_an_interrupt_cancels_what_has_not_begun():
    futures = [Future() for _ in LENGTHS]
    futures[0].set_result(sweeps.Swept("x", None))
    taken = iter(futures)
    executor = type("Idle", (), {"submit": lambda self, *job: next(taken)})()
    run = sweeps._run([None] * len(LENGTHS), executor)
    next(run)
    run.close()
    assert [future.cancelled() for future in futures] == [False, True, True]


# --- the folder of results ------------------------------------------------------------------------


@pytest.fixture
def counted(monkeypatch):
    """Names of the cases that are worked out."""
    names, surveyed = [], sweeps._surveyed

    def count(job):
        names.append(job.name)
        return surveyed(job)

    monkeypatch.setattr(sweeps, "_surveyed", count)
    return names


def test_a_sweep_goes_on_where_it_was_broken_off(tmp_path, counted, monkeypatch):
    keep = sweeps._Store.keep

    def interrupted(self, job, result):
        keep(self, job, result)
        if len(counted) == 2:
            raise KeyboardInterrupt

    with monkeypatch.context() as patch, pytest.raises(KeyboardInterrupt):
        patch.setattr(sweeps._Store, "keep", interrupted)
        ob.sweep(variants(), folder=tmp_path)
    assert counted == ["boom 1.5 m", "boom 2.0 m"]
    check(ob.sweep(variants(), folder=tmp_path))
    assert counted == ["boom 1.5 m", "boom 2.0 m", "boom 3.0 m"]
    check(ob.sweep(variants(), folder=tmp_path))
    assert len(counted) == 3


def test_a_kept_result_reads_back_to_the_last_digit(tmp_path):
    columns = ("speed_ratio", "direction_error", "reason", "in_wake", "speed_ratio_gradient")
    first = ob.sweep(variants(), folder=tmp_path, columns=columns)
    again = ob.sweep(variants(), folder=tmp_path, columns=columns)
    for one, other in zip(first, again, strict=True):
        assert (one.name, one.sensors, one.notes) == (other.name, other.sensors, other.notes)
        assert_array_equal(one.angles, other.angles)
        for name in columns:
            assert_array_equal(one.columns[name], other.columns[name], err_msg=name)
            assert one.columns[name].dtype == other.columns[name].dtype, name


def test_another_case_of_the_same_name_is_worked_out_anew(tmp_path, counted):
    ob.sweep({"mast": mast(2.0)}, folder=tmp_path)
    (result,) = ob.sweep({"mast": mast(3.0)}, folder=tmp_path)
    np.testing.assert_allclose(result.columns["speed_ratio"], direct(3.0).speed_ratio, rtol=1e-14)
    ob.sweep({"mast": mast(3.0)}, folder=tmp_path, columns=["trust"])
    assert counted == ["mast"] * 3


def test_a_file_that_a_case_names_is_part_of_it(tmp_path, counted):
    case = tmp_path / "plate.toml"
    case.write_text(
        'length_unit = "m"\nstream = { directions = [0] }\n'
        'body = [{ shape = "points", file = "plate.csv", corner_radius = 0.05 }]\n'
        'sensor = [{ kind = "point", reads = "both", x = -3, y = 0 }]\n', encoding="utf-8"
    )
    for side in (1.0, 1.0, 1.5):
        square = f"{-side},{-side}\n{side},{-side}\n{side},{side}\n{-side},{side}\n"
        (tmp_path / "plate.csv").write_text(square, encoding="utf-8")
        (result,) = ob.sweep([case], folder=tmp_path / "results")
        assert result.error is None
    assert counted == ["plate", "plate"]


def test_a_file_that_is_no_result_is_not_replaced(tmp_path):
    (tmp_path / "mast.json").write_text(json.dumps({"mine": 1}), encoding="utf-8")
    with pytest.raises(ob.InputError, match="'mast.json' is no result of a sweep"):
        ob.sweep({"mast": mast(2.0)}, folder=tmp_path)
    assert json.loads((tmp_path / "mast.json").read_text(encoding="utf-8")) == {"mine": 1}


# --- what is refused ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        ({"cases": []}, "cases is empty"),
        ({"cases": "one.toml"}, "is one path: give a list"),
        ({"cases": 3}, "cases must be a mapping or a list"),
        ({"cases": [3]}, r"cases\[0\] must be a path or a dict"),
        ({"cases": {"a/b": {}}}, "without /"),
        ({"cases": [os.path.join("a", "mast.toml"), "mast.toml"]}, "two are named 'mast'"),
        ({"cases": [{}], "columns": ["speed"]}, "columns: 'speed' is unknown"),
        ({"cases": [{}], "executor": object()}, "has no submit"),
        ({"cases": [{}], "folder": os.path.join(__file__, "under")}, "folder = .* cannot be made"),
    ],
)
def test_what_a_sweep_cannot_use_is_refused_before_it_starts(words, complaint):
    with pytest.raises(ob.InputError, match=complaint):
        ob.sweep(**words)

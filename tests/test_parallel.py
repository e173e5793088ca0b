"""Threads: how many, that they agree, and that a forked child is not left hanging."""

import os
import subprocess
import sys
import textwrap
import threading

import numpy as np
import pytest
from numpy.testing import assert_array_equal

import offbody as ob
from offbody import parallel

LINUX = pytest.mark.skipif(not hasattr(os, "sched_getaffinity"), reason="no affinity here")
PROCESSORS = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()


@pytest.fixture(autouse=True)
def no_choice(monkeypatch):
    """Each test starts without a choice of threads, and leaves none behind."""
    monkeypatch.setattr(parallel, "_chosen", None)


def in_a_process(code, **environment):
    """What a fresh interpreter prints; it has 60 seconds."""
    kept = {k: v for k, v in os.environ.items() if k != "OMP_NUM_THREADS"}
    done = subprocess.run([sys.executable, "-c", textwrap.dedent(code)], text=True,
                          capture_output=True, timeout=60, env={**kept, **environment})
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


def test_a_choice_of_threads_holds_until_the_next():
    assert ob.threads(3) == 3
    assert ob.threads() == 3
    assert ob.threads(np.int64(1)) == 1 == ob.threads()


@pytest.mark.parametrize("count, message", [
    (0, r"count must be at least 1, got 0"), (-2, r"count must be at least 1, got -2"),
    (1.0, r"count must be a whole number, got 1\.0"), (True, r"count must be a whole number"),
    ("2", r"count must be a whole number, got '2'"), (np.nan, r"count must be a whole number"),
])
def test_a_count_that_is_none_is_refused_and_changes_nothing(count, message):
    ob.threads(2)
    with pytest.raises(ob.InputError, match=message):
        ob.threads(count)
    assert ob.threads() == 2


@pytest.mark.parametrize("wish, expected", [
    ("1", 1), ("2,4", min(2, PROCESSORS)), (" 1 ", 1), ("100000", PROCESSORS), ("", PROCESSORS),
    ("0", PROCESSORS), ("many", PROCESSORS), ("-3", PROCESSORS),
])
def test_the_environment_is_heeded_but_never_beyond_the_processors(wish, expected, monkeypatch):
    monkeypatch.setenv("OMP_NUM_THREADS", wish)
    assert ob.threads() == expected
    assert ob.threads(PROCESSORS + 3) == PROCESSORS + 3, "a choice is the caller's own"


def test_without_a_wish_there_are_as_many_as_processors_allowed(monkeypatch):
    monkeypatch.delenv("OMP_NUM_THREADS", raising=False)
    assert ob.threads() == PROCESSORS


def test_a_fresh_process_heeds_the_environment():
    assert in_a_process("import offbody; print(offbody.threads())", OMP_NUM_THREADS="1") == "1"


@LINUX
def test_a_process_confined_to_one_processor_has_one_thread():
    code = """
        import os
        os.sched_setaffinity(0, {min(os.sched_getaffinity(0))})
        import offbody
        print(offbody.threads())
    """
    assert in_a_process(code) == "1"
    assert in_a_process(code, OMP_NUM_THREADS="2") == "1"


@pytest.mark.parametrize("targets", [0, 1, 1023, 1024, 1025, 10_000])
@pytest.mark.parametrize("threads", [1, 2, 5])
def test_chunks_cover_every_target_once(targets, threads):
    ob.threads(threads)
    seen = np.zeros(targets, int)
    lock = threading.Lock()

    def work(part):
        with lock:
            seen[part] += 1

    parallel.over_chunks(work, targets, 10**6)
    assert_array_equal(seen, 1)


def test_work_worth_it_is_shared_among_threads_and_little_work_is_not():
    ob.threads(3)
    workers, together = set(), threading.Barrier(3, timeout=30)

    def work(part):
        workers.add(threading.get_ident())
        if part.start < 3 * parallel.CHUNK:
            together.wait()  # passes only if three are at work at once

    parallel.over_chunks(work, 4 * parallel.CHUNK, 10**6)
    assert len(workers) == 3, f"{len(workers)} threads"
    alone = set()
    parallel.over_chunks(lambda part: alone.add(threading.get_ident()), 4 * parallel.CHUNK, 1)
    assert alone == {threading.get_ident()}


def test_a_failure_in_any_thread_reaches_the_caller():
    ob.threads(2)

    def work(part):
        if part.start == 5 * parallel.CHUNK:
            raise MemoryError("no room")

    with pytest.raises(MemoryError, match="no room"):
        parallel.over_chunks(work, 8 * parallel.CHUNK, 10**6)
    assert threading.active_count() < 50


def test_results_are_the_same_to_the_last_bit_for_any_number_of_threads():
    model = ob.solve([ob.circle(1.0), ob.ellipse(2.0, 1.0, (2.0, 0.5), 20.0)])
    points = np.random.default_rng(4).uniform(-3, 3, (5000, 2))
    directions = np.linspace(0.0, 320.0, 9)
    found = []
    for count in (1, 2, 3):
        ob.threads(count)
        found.append([model.velocity(points, 20.0), model.velocity(points[:2500], directions),
                      model.velocity_gradient(points, 20.0), model.stream_function(points, 20.0)])
    for other in found[1:]:
        for one, two in zip(found[0], other, strict=True):
            assert_array_equal(two, one)


def test_a_solve_is_the_same_for_any_number_of_threads():
    speeds = []
    for count in (1, 2):
        ob.threads(count)
        speeds.append(ob.solve(ob.circle(1.0), panels=80).surface(0).speed)
    # LAPACK's threads are its own affair.
    np.testing.assert_allclose(speeds[1], speeds[0], rtol=0, atol=1e-12)


@pytest.mark.skipif(not hasattr(os, "fork"), reason="no fork here")
def test_a_child_forked_after_threaded_work_goes_on_working():
    code = """
        import os
        import warnings
        warnings.simplefilter("ignore")   # of a fork among threads: that is what is tried here
        import numpy as np
        import offbody
        offbody.threads(2)
        model = offbody.solve(offbody.circle(1.0))
        points = np.random.default_rng(4).uniform(1, 3, (20000, 2))
        here = model.velocity(points)
        child = os.fork()
        if child == 0:
            there = offbody.solve(offbody.circle(1.0)).velocity(points)
            os._exit(0 if np.allclose(here, there) else 3)
        print(os.waitstatus_to_exitcode(os.waitpid(child, 0)[1]))
    """
    assert in_a_process(code) == "0"


def test_other_threads_run_while_a_sum_is_under_way():
    ob.threads(1)
    model = ob.solve(ob.circle(1.0), panels=100, sums=ob.Sums(fast=False))
    points = np.random.default_rng(4).uniform(1, 3, (60_000, 2))
    ticks, done = [], threading.Event()

    def tick():
        while not done.wait(1e-4):
            ticks.append(None)

    ticker = threading.Thread(target=tick)
    ticker.start()
    model.velocity(points)
    done.set()
    ticker.join()
    # The kernels hold the lock nowhere; one pass takes a tenth of a second.
    assert len(ticks) > 20, f"{len(ticks)} ticks during the sum"

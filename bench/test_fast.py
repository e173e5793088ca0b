"""Fast sums and the matrix-free solve against the plain NumPy sums, and how their cost grows.

The plan is made anew in every round: the figures are what one evaluation costs a caller. The plain
NumPy sum does a stated part of the work, and its time is scaled up. Cases without an opponent (the
growth of cost and of steps) note their figures in the JSON, under ``extra_info``::

    pytest bench/test_fast.py --benchmark-json=run.json
"""

import tracemalloc
from statistics import median
from time import perf_counter

import numpy as np
import pytest

import offbody as ob
from conftest import QUICK
from offbody import _kernels, flow, krylov, reference
from offbody.equation import Equation
from offbody.fast_sum import GridPlan, Plan
from offbody.krylov import Iteration
from offbody.laying import lay, measure
from offbody.panels import assemble

NODES = 640 if QUICK else 10_000
POINTS = 2_000 if QUICK else 100_000
LINES = 60 if QUICK else 1000    # of a grid, each way
ROUNDS = 3 if QUICK else 7
PART = 0.05 if QUICK else 0.002  # of the targets that the reference serves
TOLERANCE = 1e-9


def laid(outlines, panels, order=16):
    walls, gaps = measure(outlines, ob.OpenStream())
    ends = lay(walls, gaps, [panels] * len(walls))
    return assemble(walls, ends, order, ob.OpenStream())


def section(order, nodes=NODES):
    return laid([ob.ellipse(2.0, 1.0)], nodes // order, order)


def lobed():
    """A round body with a wavy outline of 20 lobes."""

    def points(s):
        angle = 2 * np.pi * np.asarray(s)
        radius = 1 + 0.1 * np.cos(20 * angle)
        return np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=-1)

    return [ob.curve(points)]


def ellipses():
    """Fifty ellipses 2:1, each a tenth of its length from the next."""
    return [ob.ellipse(1.0, 0.5, centre=(1.1 * k, 0.0)) for k in range(50)]


def density(panels):
    strength = np.cos(2 * np.pi * panels.arcs / panels.weights.sum())
    return flow._velocity_density(panels, strength[None])


def plain(kernels, panels, given, z):
    out = np.zeros((1, len(z)), complex)
    kernels.field(panels.geometry, *given, z, out)
    return out


def scattered(count):
    random = np.random.default_rng(5)
    return random.uniform(-2, 2, count) + 1j * random.uniform(-2, 2, count)


def onset(panels):
    return np.stack([panels.tangents.real, panels.tangents.imag])


@pytest.fixture
def compare(benchmark):
    """Time run() and, alternately, opponent(), which does a part of the work; note the ratio."""

    def timed(work, size, run, opponent, part, difference):
        times = []

        def before_each_round():
            start = perf_counter()
            opponent()
            times.append(perf_counter() - start)

        benchmark.pedantic(run, setup=before_each_round, rounds=ROUNDS, warmup_rounds=1)
        if benchmark.disabled:
            return
        fast, slow = benchmark.stats.stats.median, median(times) / part
        benchmark.extra_info.update(
            work=work, size=size, compiled=fast, reference=slow, part=part, ratio=slow / fast,
            difference=float(difference()), error=None,
        )

    return timed


@pytest.mark.parametrize("order", [16, 1])
def test_fast_sum_at_scattered_points(compare, order):
    panels, z = section(order), scattered(POINTS)
    given, some = density(panels), z[: round(PART * POINTS)]

    def difference():
        found, expected = Plan(panels, z).apply(*given), plain(_kernels, panels, given, some)
        return np.abs(found[:, : len(some)] - expected).max() / np.abs(found).max()

    compare(
        "fast sum, scattered points", f"{NODES:,} nodes x {POINTS:,}, order {order}, 1e-9",
        lambda: Plan(panels, z, TOLERANCE).apply(*given),
        lambda: plain(reference, panels, given, some), PART, difference,
    )


@pytest.mark.parametrize("order", [16, 1])
def test_fast_sum_on_a_grid(compare, order):
    panels, axis = section(order), np.linspace(-2, 2, LINES)
    given, places = density(panels), (axis + 1j * axis[:, None]).ravel()
    step = round(1 / PART)
    some = places[::step].copy()

    def difference():
        found = GridPlan(panels, axis, axis).apply(*given).reshape(1, -1)
        expected = plain(_kernels, panels, given, some)
        return np.abs(found[:, ::step] - expected).max() / np.abs(found).max()

    part = len(some) / len(places) * (1.0 if QUICK else 0.2)
    few = some if QUICK else some[::5].copy()
    compare(
        "fast sum, grid", f"{NODES:,} nodes x {LINES:,} x {LINES:,}, order {order}, 1e-9",
        lambda: GridPlan(panels, axis, axis, TOLERANCE).apply(*given),
        lambda: plain(reference, panels, given, few), part, difference,
    )


@pytest.mark.parametrize("nodes", [NODES // 10, NODES])
@pytest.mark.parametrize("points", [POINTS // 100, POINTS // 10])
def test_where_the_fast_sum_overtakes_the_plain_one(benchmark, nodes, points):
    """Both times and the choice, for the costs that ``fast_sum.worth_it`` goes by."""
    panels, z = section(16, nodes), scattered(points)
    given, times = density(panels), []

    def before_each_round():
        start = perf_counter()
        flow.over_chunks(lambda some: plain(_kernels, panels, given, z[some]), points, nodes)
        times.append(perf_counter() - start)

    benchmark.pedantic(
        lambda: Plan(panels, z, TOLERANCE).apply(*given), setup=before_each_round, rounds=ROUNDS,
        warmup_rounds=1,
    )
    benchmark.extra_info.update(nodes=nodes, points=points, plain=median(times))


@pytest.mark.parametrize("points", [POINTS // 10, POINTS, 10 * POINTS])
def test_growth_of_the_fast_sum_with_points(benchmark, points):
    panels, z = section(16), scattered(points)
    given = density(panels)
    benchmark.pedantic(
        lambda: Plan(panels, z, TOLERANCE).apply(*given), rounds=ROUNDS, warmup_rounds=1
    )
    benchmark.extra_info.update(points=points)


@pytest.mark.parametrize("nodes", [NODES // 10, NODES, 10 * NODES])
def test_growth_of_the_fast_sum_with_nodes(benchmark, nodes):
    panels, axis = section(16, nodes), np.linspace(-2, 2, LINES)
    given = density(panels)
    benchmark.pedantic(
        lambda: GridPlan(panels, axis, axis, TOLERANCE).apply(*given), rounds=ROUNDS,
        warmup_rounds=1,
    )
    benchmark.extra_info.update(nodes=nodes)


@pytest.mark.parametrize("nodes", [480 if QUICK else 2_000])
def test_iteration_against_factorisation(compare, nodes):
    """The opponent is the dense equation with the matrix of plain NumPy."""
    panels = section(16, nodes)
    tangential = onset(panels)
    right = -tangential    # an ellipse: the mean of either is nothing

    def dense():
        compiled, flow._kernels = flow._kernels, reference
        try:
            return Equation(panels, ob.OpenStream()).vortices(tangential.copy())
        finally:
            flow._kernels = compiled

    def iterated():
        return krylov.solve(panels, ob.OpenStream(), right)

    compare(
        "matrix-free solve, two directions", f"{nodes:,} nodes, order 16", iterated, dense, 1.0,
        lambda: np.abs(iterated() - dense()).max(),
    )


@pytest.mark.parametrize("bodies", [lobed, ellipses], ids=["lobes", "ellipses"])
@pytest.mark.parametrize("nodes", [4_800] if QUICK else [4_800, 10_000, 32_000, 100_000])
def test_matrix_free_solve(benchmark, bodies, nodes):
    """Outlines to wall speeds of both directions, to 1e-9: steps, residual and memory noted."""
    notes = {}

    def from_outlines():
        outlines = bodies()
        panels = laid(outlines, nodes // 16 // len(outlines))
        iteration = Iteration(panels, ob.OpenStream(), TOLERANCE)
        notes["nodes"] = len(panels.nodes)
        notes["steps"], notes["residuals"] = [], []
        right = -onset(panels)
        for body in range(panels.bodies):
            part = panels.node_slice(body)
            weights = panels.weights[part]
            right[:, part] -= (right[:, part] @ weights)[:, None] / weights.sum()
        for row in right:
            iteration(row[None])
            notes["steps"].append(len(iteration.residuals))
            notes["residuals"].append(iteration.residuals[-1])

    benchmark.pedantic(from_outlines, rounds=2 if nodes > 50_000 else 3)
    tracemalloc.start()
    from_outlines()
    notes["memory_MB"] = tracemalloc.get_traced_memory()[1] / 1e6
    tracemalloc.stop()
    benchmark.extra_info.update(notes)

"""The compiled kernels against the same mathematics in the fastest plain NumPy.

Each case runs both in one process, one after the other, round by round; the ratio is that of the
medians. Both go through the same Python, threads and LAPACK: only the kernels are exchanged. Where
the reference would take long it does a stated part of the work, and its time is scaled up.

Full sizes take about a minute, ``OFFBODY_BENCH=quick`` a few seconds::

    pytest bench --benchmark-json=run.json && python bench/table.py run.json
"""

from contextlib import contextmanager
from statistics import median
from time import perf_counter

import numpy as np
import pytest

import offbody as ob
from conftest import QUICK
from offbody import flow, reference
from offbody.parallel import over_chunks

DIAMETER = 2.0
LEAST_ROUNDS, MOST_ROUNDS = 3, 25
SECONDS = 0.3 if QUICK else 3.0  # that the reference may take in all rounds of a case


@contextmanager
def plain_numpy():
    """Exchange the compiled kernels for the reference."""
    compiled, flow._kernels = flow._kernels, reference
    try:
        yield
    finally:
        flow._kernels = compiled


@pytest.fixture
def compare(benchmark):
    """Time run(1.0) compiled and run(part) by the reference, alternately, and note the ratio."""

    def timed(work, size, run, part=1.0, error=None):
        times = []

        def opponent():
            with plain_numpy():
                start = perf_counter()
                result = run(part)
                times.append(perf_counter() - start)
            return result

        def before_each_round():
            opponent()

        found, expected = run(1.0), opponent()
        opponent()
        rounds = int(np.clip(SECONDS / times.pop(), LEAST_ROUNDS, MOST_ROUNDS))
        times.clear()
        benchmark.pedantic(run, args=(1.0,), setup=before_each_round, rounds=rounds)
        if benchmark.disabled:
            return
        compiled, plain = benchmark.stats.stats.median, median(times) / part
        benchmark.extra_info.update(
            work=work, size=size, compiled=compiled, reference=plain, part=part,
            ratio=plain / compiled, difference=difference(found, expected),
            error=None if error is None else float(error(found)),
        )

    return timed


def difference(found, expected):
    """The largest difference of the first results, of the largest value."""
    found = np.asarray(found)[: len(expected)]
    if not np.array_equal(np.isnan(found), np.isnan(expected)):
        return np.inf
    return float(np.nanmax(np.abs(found - expected)) / np.nanmax(np.abs(expected)))


def first(array, part):
    return array[: round(part * len(array))]


def tube(nodes, order=None, **more):
    """A circle with about so many nodes of an order, the default unless given."""
    panels = nodes if order == 1 else round(nodes / 16)
    return ob.solve(ob.circle(DIAMETER), panels=panels, order=order, **more)


def exact_velocity(points):
    z = points[..., 0] + 1j * points[..., 1]
    w = 1.0 - (0.5 * DIAMETER / z) ** 2
    return np.stack([w.real, -w.imag], axis=-1)


def worst(found, points):
    """The largest error outside the wall, of the onset speed."""
    return np.nanmax(np.hypot(*np.moveaxis(found - exact_velocity(points), -1, 0)))


def points_about(count):
    """Points in a square of three diameters, a tenth of them 1e-6 to 0.1 radii from the wall."""
    random = np.random.default_rng(2)
    points = random.uniform(-1.5 * DIAMETER, 1.5 * DIAMETER, (count, 2))
    close = count // 10
    radius = 0.5 * DIAMETER * (1.0 + 10.0 ** random.uniform(-6.0, -1.0, close))
    angle = random.uniform(0.0, 2.0 * np.pi, close)
    points[:close] = np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=-1)
    return random.permutation(points)


@pytest.mark.parametrize(
    "nodes, order", [(64, 1), (64, 16)] if QUICK else [(1000, 1), (4000, 1), (1008, 16)]
)
def test_influence_matrices(compare, nodes, order):
    panels = tube(nodes, order)._panels
    by_panel = panels.tangents.reshape(-1, order)
    real, imag = np.zeros((2, nodes, nodes))
    smooth = 2.0 + panels.nodes.real

    def assemble(part):
        rows = round(part * nodes)

        def work(some):
            flow._kernels.influence(
                panels.geometry, panels.modes, by_panel, panels.nodes[some],
                panels.tangents[some], real[some], imag[some],
            )

        over_chunks(work, rows, nodes)
        # What the two say of a smooth strength: single entries of high orders are known to less.
        return np.stack([real[:rows:50] @ smooth, imag[:rows:50] @ smooth], axis=-1)

    part = 0.25 if nodes > 2000 else 1.0
    compare("influence matrices", f"{nodes:,} x {nodes:,}, order {order}", assemble, part)


@pytest.mark.parametrize("nodes, order", [(64, 1), (64, 16)] if QUICK else [(1000, 1), (1008, 16)])
def test_velocity_at_scattered_points(compare, nodes, order):
    model, points = tube(nodes, order), points_about(2_000 if QUICK else 100_000)
    compare(
        "velocity at scattered points, near wall included",
        f"{nodes:,} nodes x {len(points):,}, order {order}",
        lambda part: model.velocity(first(points, part)),
        part=1.0 if QUICK else 0.1,
        error=lambda found: worst(found, points),
    )


@pytest.mark.parametrize("nodes", [64] if QUICK else [1008])
def test_velocity_on_a_grid(compare, nodes):
    model = tube(nodes)
    axis = np.linspace(-1.5 * DIAMETER, 1.5 * DIAMETER, 40 if QUICK else 300)
    compare(
        "velocity on a grid",
        f"{nodes:,} nodes x {len(axis)} x {len(axis)}, order {model.order}",
        lambda part: model.grid(axis, first(axis, part)),
        part=1.0 if QUICK else 0.1,
        error=lambda found: worst(found, np.stack(np.meshgrid(axis, axis), axis=-1)),
    )


@pytest.mark.parametrize("nodes", [64] if QUICK else [208, 1008])
def test_solve(compare, nodes):
    def wall_speed(part):
        return tube(nodes).surface(0).speed

    def error(found):
        return np.abs(found + 2.0 * tube(nodes).walls[0][:, 1] / (0.5 * DIAMETER)).max()

    compare("solve", f"{nodes:,} nodes, order 16", wall_speed, error=error)


@pytest.mark.parametrize("wake", [None, ob.Wake(1.2)], ids=["no wake", "wake"])
@pytest.mark.parametrize("nodes", [64] if QUICK else [208])
def test_survey(compare, nodes, wake):
    model = tube(nodes, wakes=wake)
    angles = np.arange(10) * 0.6
    sensors = [ob.PointSensor(2.0 * np.cos(a), 2.0 * np.sin(a)) for a in angles]
    directions = np.arange(0.0, 360.0, 10.0 if QUICK else 1.0)

    def readings(part):
        table = ob.survey(model, sensors, directions)
        return np.stack([table.speed_ratio, table.direction_error])

    size = f"{nodes} nodes, {len(directions)} directions x {len(sensors)} point sensors"
    compare("survey" if wake is None else "survey with wake", size, readings)


@pytest.mark.parametrize("nodes", [64] if QUICK else [400])
def test_streamlines(compare, nodes):
    model = tube(nodes)
    starts = np.stack([np.full(20, -4.0), np.linspace(-1.5, 1.6, 20)], axis=-1)
    length = 2.0 if QUICK else 8.0

    def lines(part):
        return np.concatenate(model.streamlines(starts, length=length))

    def drift(found):
        """How far the exact stream function changes along a line, over the radius."""
        z = [line[:, 0] + 1j * line[:, 1] for line in model.streamlines(starts, length=length)]
        return max(np.ptp((line + (0.5 * DIAMETER) ** 2 / line).imag) for line in z)

    compare("streamlines", f"{nodes} nodes, {len(starts)} lines", lines, error=drift)

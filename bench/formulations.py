"""Which equation, which order, how far the closed form: error and time against exact solutions.

    python bench/formulations.py [--quick] [--orders 1 8 16] [--bodies circle edge]

Three formulations stand on the same panels, nodes and kernels, all scaled by the square roots of
the arc-length weights:

vortex   the library's: tangential velocity zero just inside, the surface speed itself as unknown
source   normal velocity zero outside, a source strength at each node and one uniform vortex
         strength per body for its circulation: after J. L. Hess and A. M. O. Smith,
         Prog. Aeronaut. Sci. 8 (1967) 1-138, here at any order
stream   stream function constant on each wall, vortices as unknown: an equation of the first kind
         (an older alternative, common practice; assembled here without care for its time)

Errors are the largest, over the onset speed. "Near", "beside" and "far" are 1e-6 (with a sharp edge
0.002), 0.05 and 2 off the wall, in radii, half-lengths of an ellipse, or chords. The surface speed
is compared at the nodes, but for the last 1e-4 of the chord at a sharp edge. Times are medians of
the processor's time, on one thread, for assembly and solution on panels already laid, the
formulations taken in turns: so that others at work on the machine change them little.
"""

import argparse
import os
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from statistics import median
from unittest.mock import patch

if __name__ == "__main__":
    os.environ["OMP_NUM_THREADS"] = "1"  # read by the libraries when they are loaded

import numpy as np
from scipy.linalg import lu_factor, lu_solve

import offbody as ob
from offbody import _kernels, flow, panels
from offbody.equation import Equation
from offbody.laying import lay, measure

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
import exact

ORDERS = (1, 2, 4, 8, 12, 16)
TARGETS = (1e-3, 1e-6, 1e-9)
REACHES = (1.5, 2.0, 2.5, 3.0, 3.5, 4.0, 5.0, 6.0, 8.0, 10.0, 14.0)
REACH_ORDERS = (2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 14, 16)
SIDES = (np.arange(720) + 0.5) / 720
OPEN = ob.OpenStream()


@dataclass(frozen=True)
class Case:
    """Bodies in a stream whose flow is known; speed(body, s) along the wall, velocity(z) off it."""

    name: str
    outlines: tuple
    walls: tuple
    direction: float
    velocity: Callable
    speed: Callable
    circulation: float = 0.0
    edge: bool = False

    @property
    def onset(self):
        return np.exp(-1j * np.radians(self.direction))


def single(name, outline, solution, direction=25.0, circulation=0.0, edge=False):
    return Case(name, (outline,), (solution,), direction,
                lambda z: solution.velocity(z, direction),
                lambda body, s: solution.surface_speed(s, direction), circulation, edge)


def neighbours(gap, direction=30.0):
    pair = exact.TwoCircles.with_gap(1.0, 1.0, gap)
    circles = tuple(ob.circle(2.0, (c.centre, 0.0)) for c in pair.bodies)
    return Case(f"gap {gap}", circles, pair.bodies, direction,
                lambda z: pair.velocity(z, direction),
                lambda body, s: pair.surface_speed(body, s, direction))


def all_cases():
    section = exact.KarmanTrefftz(edge=0.0)  # the edge at the origin: nothing cancels there
    outline = ob.curve(exact.as_function(section), sharp=0.0)
    return {
        "circle": single("circle", ob.circle(2.0), exact.Circle()),
        "ellipse": single("ellipse 10:1", ob.ellipse(2.0, 0.2), exact.Ellipse(2.0, 0.2)),
        "slender": single("ellipse 100:1", ob.ellipse(2.0, 0.02), exact.Ellipse(2.0, 0.02)),
        "edge": single("sharp edge", outline, section, 10.0, section.circulation(10.0), True),
        "gap": neighbours(0.05),
        "narrow": neighbours(0.001),
    }


class Laid:
    """The panels of a case: a multiple of those that the library would lay."""

    def __init__(self, case, order, scale=1.0):
        self.walls, lengths = measure(case.outlines, OPEN)
        ends = lay(self.walls, lengths, [None] * len(self.walls), 1.0 / scale)
        self.panels = panels.assemble(self.walls, ends, order, OPEN)
        self.root = np.sqrt(self.panels.weights)
        self.nodes = len(self.root)
        self.onset = self.panels.tangents * case.onset  # tangential - i normal
        counts = np.diff(self.panels.starts) * order
        self.bodies = np.repeat(np.eye(len(counts)), counts, axis=0)  # 1 on a body's own nodes


# --- the formulations: LU factors, strengths gamma + i v, surface speed ------------------------


def vortex(laid, case):
    equation = Equation(laid.panels, OPEN)
    if case.edge:
        onset = np.stack([laid.onset.real, np.zeros(laid.nodes)])
        still, spin = equation.vortices(onset, np.array([[0.0], [1.0]]))
        speed = still - spin * (still[0] + still[-1]) / (spin[0] + spin[-1])
    else:
        speed = equation.vortices(laid.onset.real[None])[0]
    return equation._factors, speed, speed


def source(laid, case):
    count, total = laid.nodes, sum(laid.bodies.shape)
    tangential, normal = np.empty((2, count, count))
    root, part, along = laid.root, laid.panels, laid.panels.tangents
    _kernels.influence(part.geometry, part.modes, along.reshape(-1, part.order), part.nodes, along,
                       tangential, normal)
    # Turned by a right angle: a source's normal velocity is the tangential one of a vortex, its
    # tangential velocity the normal one reversed.
    around, through = tangential @ laid.bodies, normal @ laid.bodies
    matrix = np.eye(total)  # no net circulation, but where a Kutta row says so
    matrix[:count, :count] = tangential * (root[:, None] / root)
    matrix[:count, count:] = through * root[:, None]
    right = np.concatenate([-laid.onset.imag * root, np.zeros(total - count)])
    if case.edge:
        matrix[count, :count] = -normal[[0, -1]].sum(axis=0) / root
        matrix[count, count] = around[[0, -1]].sum()
        right[count] = -laid.onset.real[[0, -1]].sum()
    factors = lu_factor(matrix, overwrite_a=True, check_finite=False)
    unknown = lu_solve(factors, right, check_finite=False)
    out, turning = unknown[:count] / root, unknown[count:]
    speed = laid.onset.real - normal @ out + around @ turning
    return factors, laid.bodies @ turning + 1j * out, speed


def stream(laid, case):
    count, total, root = laid.nodes, sum(laid.bodies.shape), laid.root
    cuts = np.tile(laid.panels.starts[:-1], (count, 1))
    z = laid.panels.nodes
    unit = flow.potential(laid.panels, OPEN, np.eye(count), cuts, np.zeros(count), z).imag.T
    matrix = np.zeros((total, total))
    matrix[:count, :count] = unit * (root[:, None] / root)
    matrix[:count, count:] = -laid.bodies * root[:, None]
    matrix[count:, :count] = laid.bodies.T * root
    if case.edge:
        matrix[count, :count] = 0.0
        matrix[count, [0, count - 1]] = 1.0 / root[[0, -1]]
    right = np.concatenate([-(z * case.onset).imag * root, np.zeros(total - count)])
    factors = lu_factor(matrix, overwrite_a=True, check_finite=False)
    speed = lu_solve(factors, right, check_finite=False)[:count] / root
    return factors, speed, speed


# --- measures ---------------------------------------------------------------------------------


def surface_error(laid, case, speed):
    worst = []
    for body, wall in enumerate(laid.walls):
        part = laid.panels.node_slice(body)
        s = wall.parameter(laid.panels.arcs[part])
        miss = np.abs(speed[part] - case.speed(body, s))
        worst.append(miss[np.abs(case.walls[body].wall(s)) > 1e-4 if case.edge else ...].max())
    return max(worst)


def off_body_error(laid, case, strengths, distance):
    z = np.concatenate([wall.offset_points(SIDES, distance) for wall in case.walls])
    if len(case.walls) > 1:
        z = z[np.all([np.abs(z - w.centre) > w.radius for w in case.walls], axis=0)]
    found = flow.velocity(laid.panels, OPEN, strengths[None], z)[0] + case.onset
    return np.abs(found - case.velocity(z)).max()


def condition(factors):
    lower = np.tril(factors[0], -1) + np.eye(len(factors[0]))
    return np.linalg.cond(lower @ np.triu(factors[0]))


def times(calls, repeats):
    """Median ms of processor time of each call, taken in turns."""
    taken = [[] for _ in calls]
    for _ in range(repeats):
        for call, record in zip(calls, taken, strict=True):
            start = time.process_time()
            call()
            record.append(1e3 * (time.process_time() - start))
    return [median(record) for record in taken]


# --- tables -----------------------------------------------------------------------------------


def print_table(title, heads, rows):
    print(f"\n{title}\n\n| {' | '.join(heads)} |\n|{'---|' * len(heads)}")
    print("\n".join(f"| {' | '.join(row)} |" for row in rows), flush=True)


def print_errors(cases, orders, repeats):
    rows = []
    for case, order in ((case, order) for case in cases for order in orders):
        laid, columns = Laid(case, order), []
        for formulation in (vortex, source, stream):
            factors, strengths, speed = formulation(laid, case)
            around = laid.panels.weights * strengths.real @ laid.bodies
            distances = (0.002 if case.edge else 1e-6, 0.05, 2.0)
            columns.append([surface_error(laid, case, speed),
                            *(off_body_error(laid, case, strengths, d) for d in distances),
                            np.abs(around - case.circulation).max(), condition(factors)])
        cells = [" / ".join(f"{x:.0e}" for x in row) for row in zip(*columns, strict=True)]
        taken = times([lambda f=f, m=laid, c=case: f(m, c) for f in (vortex, source)], repeats)
        rows.append([case.name, str(order), str(laid.nodes), *cells,
                     " / ".join(f"{t:.1f}" for t in taken)])
    print_table("Errors on the panels laid by default: vortex / source / stream",
                ["body", "order", "nodes", "surface", "near", "beside", "far", "circulation",
                 "condition", "ms: vortex / source"], rows)


def first_to_reach(case, order, most):
    """{(formulation, target): the first panels, of ever more, that bring it within the target}."""
    found, scale = {}, 0.3
    while len(found) < 2 * len(TARGETS) and (laid := Laid(case, order, scale)).nodes <= most:
        for formulation in (vortex, source):
            _, strengths, speed = formulation(laid, case)
            error = max(surface_error(laid, case, speed),
                        off_body_error(laid, case, strengths, 0.05))
            for target in TARGETS:
                if error <= target:
                    found.setdefault((formulation, target), laid)
        scale *= 2**0.25
    return found


def print_soonest(cases, orders, most, repeats):
    nodes, taken = {}, {}
    for case, order in ((case, order) for case in cases for order in orders):
        found = first_to_reach(case, order, most)
        calls = [lambda f=f, m=m, c=case: f(m, c) for (f, _), m in found.items()]
        for (formulation, target), ms in zip(found, times(calls, repeats), strict=True):
            key = case.name, target, formulation, order
            nodes[key], taken[key] = found[formulation, target].nodes, ms

    def cell(*key):
        return f"{nodes[key]}, {taken[key]:.1f}" if key in nodes else "-"

    def ratio(target, formulation, order):
        """Time over the soonest vortex order's, geometric mean over the bodies that it reaches."""
        logs = [np.log(taken[c.name, target, formulation, order]
                       / min(taken.get((c.name, target, vortex, q), np.inf) for q in orders))
                for c in cases if (c.name, target, formulation, order) in taken]
        return f"{np.exp(np.mean(logs)):.1f}, {len(logs)} of {len(cases)}" if logs else "-"

    heads = ["error", "formulation", *(f"order {q}" for q in orders)]
    kinds = [(target, formulation) for target in TARGETS for formulation in (vortex, source)]
    print_table(f"Nodes, and ms, to an error on the wall and beside it ({most} nodes at most)",
                ["body", *heads],
                [[c.name, f"{t:.0e}", f.__name__, *(cell(c.name, t, f, q) for q in orders)]
                 for c in cases for t, f in kinds])
    print_table("Time over that of the soonest vortex order (geometric mean), bodies reached",
                heads, [[f"{t:.0e}", f.__name__, *(ratio(t, f, q) for q in orders)]
                        for t, f in kinds])


def print_reach(case, scale, repeats):
    """Too short a reach shows the error of the node sum, too long a one the lost digits."""
    rows = []
    for order in REACH_ORDERS:
        errors, calls = [], []
        for reach in REACHES:
            with patch.object(panels, "reach", lambda _, tried=reach: tried):
                laid = Laid(case, order, scale)
            _, strengths, _ = vortex(laid, case)
            errors.append(off_body_error(laid, case, strengths, 0.05))
            calls.append(lambda part=laid.panels: flow.wall_influence(part, OPEN))
        in_use = panels.reach(order)
        pairs = zip(errors, times(calls, repeats), strict=True)
        rows.append([str(order), f"{in_use:.2g}", *(f"{e:.0e}, {ms:.1f}" for e, ms in pairs)])
    print_table(f"Error beside the wall, and ms of assembly, by reach in half-chords: {case.name}, "
                f"{scale:g} times the default panels",
                ["order", "in use", *(f"{r:g}" for r in REACHES)], rows)


def main():
    cases = all_cases()
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="fewer nodes and repeats")
    parser.add_argument("--orders", type=int, nargs="+", default=ORDERS, metavar="ORDER")
    parser.add_argument("--bodies", nargs="+", default=[*cases], choices=[*cases])
    options = parser.parse_args()
    chosen = [cases[name] for name in options.bodies]
    repeats, most = (3, 600) if options.quick else (9, 2000)
    print_errors(chosen, options.orders, repeats)
    print_soonest(chosen, options.orders, most, repeats)
    for name, scale in (("circle", 8.0), ("ellipse", 1.0)):
        print_reach(cases[name], scale, repeats)


if __name__ == "__main__":
    main()

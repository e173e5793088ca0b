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
assembly and solution on panels already laid, the formulations taken in turns.
"""

import argparse
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from statistics import median
from unittest.mock import patch

import numpy as np
from scipy.linalg import lu_factor, lu_solve

import offbody as ob
from offbody import flow, panels

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


def solved(case, order, scale=1.0):
    """The model of a case, with a multiple of the panels that the library would lay."""
    model = ob.solve(case.outlines, order=order)
    if scale == 1.0:
        return model
    counts = [max(2, round(count * scale)) for count in model.panel_counts]
    return ob.solve(case.outlines, order=order, panels=counts)


# --- the formulations: LU factors, strengths gamma + i v, surface speed ------------------------


def vortex(model, case):
    model._factorise()
    bodies = range(len(case.outlines))
    speed = np.concatenate([model.surface(body, case.direction).speed for body in bodies])
    return model._factors, speed, speed


def source(model, case):
    laid, bodies, root = model._panels, uniform(model), np.sqrt(model._panels.weights)
    # Turned by a right angle, the normal velocity of a source is the tangential one of a vortex.
    tangential, source_tangential = flow.wall_influence(laid, OPEN)
    around, onset, count = tangential @ bodies, laid.tangents * case.onset, len(root)
    matrix = np.eye(count + laid.bodies)  # no net circulation, but where a Kutta row says so
    matrix[:count, :count] = tangential * (root[:, None] / root)
    matrix[:count, count:] = -(source_tangential @ bodies) * root[:, None]
    right = np.concatenate([-onset.imag * root, np.zeros(laid.bodies)])
    if case.edge:
        sides = [0, -1]
        matrix[count, :count] = source_tangential[sides].sum(axis=0) / root
        matrix[count, count] = around[sides].sum()
        right[count] = -onset.real[sides].sum()
    factors = lu_factor(matrix, overwrite_a=True, check_finite=False)
    unknown = lu_solve(factors, right, check_finite=False)
    out, turning = unknown[:count] / root, unknown[count:]
    speed = onset.real + source_tangential @ out + around @ turning
    return factors, bodies @ turning + 1j * out, speed


def stream(model, case):
    laid, bodies, root = model._panels, uniform(model), np.sqrt(model._panels.weights)
    count = len(root)
    cuts = np.tile(laid.starts[:-1], (count, 1))
    unit = flow.potential(laid, OPEN, np.eye(count), cuts, np.zeros(count), laid.nodes).imag.T
    matrix = np.zeros((count + laid.bodies,) * 2)
    matrix[:count, :count] = unit * (root[:, None] / root)
    matrix[:count, count:] = -bodies * root[:, None]
    matrix[count:, :count] = bodies.T * root
    if case.edge:
        matrix[count, :count] = 0.0
        matrix[count, [0, count - 1]] = 1.0 / root[[0, -1]]
    right = np.concatenate([-(laid.nodes * case.onset).imag * root, np.zeros(laid.bodies)])
    factors = lu_factor(matrix, check_finite=False)
    speed = lu_solve(factors, right, check_finite=False)[:count] / root
    return factors, speed, speed


def uniform(model):
    """(N, bodies): one on a body's own nodes, zero on the others'."""
    laid = model._panels
    return np.repeat(np.eye(laid.bodies), np.diff(laid.starts) * laid.order, axis=0)


# --- measures ---------------------------------------------------------------------------------


def surface_error(model, case, speed):
    worst = []
    for body, wall in enumerate(model._arcs):
        part = model._panels.node_slice(body)
        s = wall.parameter(model._panels.arcs[part])
        miss = np.abs(speed[part] - case.speed(body, s))
        worst.append(miss[np.abs(case.walls[body].wall(s)) > 1e-4 if case.edge else ...].max())
    return max(worst)


def off_body_error(model, case, strengths, distance):
    z = np.concatenate([wall.offset_points(SIDES, distance) for wall in case.walls])
    if len(case.walls) > 1:
        z = z[np.all([np.abs(z - w.centre) > w.radius for w in case.walls], axis=0)]
    found = flow.velocity(model._panels, OPEN, strengths[None], z)[0] + case.onset
    return np.abs(found - case.velocity(z)).max()


def condition(factors):
    lower = np.tril(factors[0], -1) + np.eye(len(factors[0]))
    return np.linalg.cond(lower @ np.triu(factors[0]))


def times(calls, repeats):
    """Median ms of each call, taken in turns so that a busy machine hurts all alike."""
    taken = [[] for _ in calls]
    for _ in range(repeats):
        for call, record in zip(calls, taken, strict=True):
            start = time.perf_counter()
            call()
            record.append(1e3 * (time.perf_counter() - start))
    return [median(record) for record in taken]


# --- tables -----------------------------------------------------------------------------------


def print_table(title, heads, rows):
    print(f"\n{title}\n\n| {' | '.join(heads)} |\n|{'---|' * len(heads)}")
    print("\n".join(f"| {' | '.join(row)} |" for row in rows), flush=True)


def print_errors(cases, orders, repeats):
    rows = []
    for case, order in ((case, order) for case in cases for order in orders):
        model, columns = solved(case, order), []
        part = model._panels.node_slice(0)
        for formulation in (vortex, source, stream):
            factors, strengths, speed = formulation(model, case)
            around = strengths.real[part] @ model._panels.weights[part]
            distances = (0.002 if case.edge else 1e-6, 0.05, 2.0)
            columns.append([surface_error(model, case, speed),
                            *(off_body_error(model, case, strengths, d) for d in distances),
                            abs(around - case.circulation), condition(factors)])
        cells = [" / ".join(f"{x:.0e}" for x in row) for row in zip(*columns, strict=True)]
        taken = times([lambda f=f, m=model, c=case: f(m, c) for f in (vortex, source)], repeats)
        rows.append([case.name, str(order), str(model.node_count), *cells,
                     " / ".join(f"{t:.1f}" for t in taken)])
    print_table("Errors on the panels laid by default: vortex / source / stream",
                ["body", "order", "nodes", "surface", "near", "beside", "far", "circulation",
                 "condition", "ms: vortex / source"], rows)


def first_to_reach(case, order, most):
    """{(formulation, target): the first model, of ever more panels, within the target}."""
    found, scale = {}, 0.15
    while len(found) < 2 * len(TARGETS):
        model = solved(case, order, scale)
        if model.node_count > most:
            break
        for formulation in (vortex, source):
            _, strengths, speed = formulation(model, case)
            error = max(surface_error(model, case, speed),
                        off_body_error(model, case, strengths, 0.05))
            for target in TARGETS:
                if error <= target:
                    found.setdefault((formulation, target), model)
        scale *= 2**0.25
    return found


def print_soonest(cases, orders, most, repeats):
    nodes, taken = {}, {}
    for case, order in ((case, order) for case in cases for order in orders):
        found = first_to_reach(case, order, most)
        calls = [lambda f=f, m=m, c=case: f(m, c) for (f, _), m in found.items()]
        for (formulation, target), ms in zip(found, times(calls, repeats), strict=True):
            key = case.name, target, formulation, order
            nodes[key], taken[key] = found[formulation, target].node_count, ms

    def ratio(target, formulation, order):
        """Time over the soonest vortex order's, geometric mean over the bodies that it reaches."""
        logs = [np.log(taken[name, target, formulation, order]
                       / min(taken.get((name, target, vortex, q), np.inf) for q in orders))
                for name in (case.name for case in cases)
                if (name, target, formulation, order) in taken]
        return f"{np.exp(np.mean(logs)):.1f}, {len(logs)} of {len(cases)}" if logs else "-"

    heads = ["error", "formulation", *(f"order {q}" for q in orders)]
    kinds = [(target, formulation) for target in TARGETS for formulation in (vortex, source)]
    rows = [[name, f"{t:.0e}", f.__name__,
             *(f"{nodes[name, t, f, q]}, {taken[name, t, f, q]:.1f}"
               if (name, t, f, q) in nodes else "-" for q in orders)]
            for name in (case.name for case in cases) for t, f in kinds]
    print_table(f"Nodes, and ms, to an error on the wall and beside it ({most} nodes at most)",
                ["body", *heads], rows)
    print_table("Time over that of the soonest vortex order (geometric mean), bodies reached",
                heads, [[f"{t:.0e}", f.__name__, *(ratio(t, f, q) for q in orders)]
                        for t, f in kinds])


def print_reach(case, scale, repeats):
    """Too short a reach shows the error of the node sum, too long a one the lost digits."""
    rows = []
    for order in REACH_ORDERS:
        errors, calls = [], []
        for reach in REACHES:
            with patch.dict(panels.REACH, {order: reach}):
                model = solved(case, order, scale)
            _, strengths, _ = vortex(model, case)
            errors.append(off_body_error(model, case, strengths, 0.05))
            calls.append(lambda laid=model._panels: flow.wall_influence(laid, OPEN))
        in_use = panels.REACH.get(order, panels.REACH_OF_HIGH_ORDERS)
        pairs = zip(errors, times(calls, repeats), strict=True)
        rows.append([str(order), f"{in_use:g}", *(f"{e:.0e}, {ms:.1f}" for e, ms in pairs)])
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

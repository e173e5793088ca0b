"""Error against cost on exact flows, by order, number of nodes and distance off the wall.

    python bench/accuracy.py [--orders 1 8 16]

Prints one Markdown table for each body. Panels are those laid by default, times 1, 2 and 4. Errors
are the largest of the velocity, over the onset speed, at 400 places along the wall and at distances
from 1e-12 to 1e3 of the body's half-length or radius; "wall" is the surface speed at the nodes, of
a section but for the last 1e-7 of its chord at the edge. Times are the processor's, of one thread,
for laying and solution, the best of three; "per point" that of the field at the 400 places.
"""

import argparse
import os
import sys
import time
from pathlib import Path

if __name__ == "__main__":
    os.environ["OMP_NUM_THREADS"] = "1"  # read by the libraries when they are loaded

import numpy as np

import offbody as ob

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
import exact

ORDERS = (1, 2, 4, 8, 12, 16)
TIMES = (1, 2, 4)
DISTANCES = (1e-12, 1e-9, 1e-6, 1e-3, 1e-2, 0.1, 1.0, 10.0, 1e3)
SIDES = (np.arange(400) + 0.5) / 400
MOST_NODES = 3000
PAIR = exact.TwoCircles.with_gap(1.0, 0.5, 0.05)
SECTION = exact.KarmanTrefftz()


def cases():
    """Yield name, outlines, solution, the wall that distances are off, direction and options."""
    yield "circle", ob.circle(2.0), exact.Circle(1.0), None, 25.0, {}
    for length, thickness in ((2.0, 1.0), (2.0, 0.2), (2.0, 0.02)):
        solution = exact.Ellipse(length, thickness)
        name = f"ellipse {length / thickness:.0f}:1"
        yield name, ob.ellipse(length, thickness), solution, None, 25.0, {}
    outline = ob.curve(exact.as_function(SECTION), sharp=0.0)
    yield "section with a sharp edge of 12 degrees", outline, SECTION, None, 10.0, {}
    circles = [ob.circle(2 * c.radius, (c.centre.real, 0.0)) for c in PAIR.bodies]
    yield "two circles, gap a tenth of the smaller radius", circles, PAIR, PAIR.bodies[0], 30.0, {}
    ducted = exact.CircleInDuct(1.0, -2.0, 2.0)
    yield "circle in a duct, half blocked", ob.circle(2.0), ducted, None, 0.0, {
        "surroundings": ob.Duct(-2.0, 2.0)}


def errors(model, solution, wall, direction):
    """Greatest error on the wall, and at each distance off it; NaN where all points lie within."""
    surface = model.surface(0, direction)
    z = exact.as_complex(surface.points)
    speed = exact.along_wall(surface.points, exact.as_velocity(solution.velocity(z, direction)))
    away = np.abs(z - SECTION.edge) > (1e-7 if solution is SECTION else 0.0)
    yield np.abs(surface.speed - speed)[away].max()
    for distance in DISTANCES:
        points = wall.offset_points(SIDES, distance)
        found = model.velocity(exact.as_pairs(points), direction)
        wrong = np.hypot(*(found - exact.as_velocity(solution.velocity(points, direction))).T)
        yield wrong[np.isfinite(wrong)].max() if np.isfinite(wrong).any() else np.nan


def best(work):
    """The last result of three calls, and the least processor's time of one, in ms."""
    spent = []
    for _ in range(3):
        start = time.process_time()
        result = work()
        spent.append(1e3 * (time.process_time() - start))
    return result, min(spent)


def main(arguments=None):
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--orders", type=int, nargs="+", default=ORDERS)
    options = parser.parse_args(arguments)
    print("Error against cost: the greatest error over the onset speed, on and off the wall")
    for name, outlines, solution, wall, direction, given in cases():
        columns = ["wall", *(f"{distance:g}" for distance in DISTANCES)]
        print(f"\n{name}, direction {direction:g}\n")
        print(f"| order | nodes | ms | us per point | {' | '.join(columns)} |")
        print("|---" * (len(columns) + 4) + "|")
        for order in options.orders:
            laid = np.array(ob.solve(outlines, order=order, **given).panel_counts)
            for times in TIMES:
                if times * laid.sum() * order > MOST_NODES:
                    continue
                model, spent = best(lambda: ob.solve(
                    outlines, order=order, panels=(times * laid).tolist(), **given))  # noqa: B023
                around = exact.as_pairs((wall or solution).offset_points(SIDES, 1.0))
                _, per_point = best(lambda: model.velocity(around, direction))  # noqa: B023
                found = errors(model, solution, wall or solution, direction)
                values = " | ".join("-" if np.isnan(e) else f"{e:.0e}" for e in found)
                print(f"| {order} | {model.node_count} | {spent:.1f} | "
                      f"{1e3 * per_point / len(SIDES):.2f} | {values} |", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())

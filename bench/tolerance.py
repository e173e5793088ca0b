"""How well ob.Tolerance is met on random smooth bodies and pairs, judged by far finer panels.

    python bench/tolerance.py [--first 0] [--count 200]

The bodies of ``tests/random_bodies.py`` are asked for the tolerances 1e-4, 1e-5 ... 1e-9 in turn.
The judge has half as many panels again, and again if its own estimated error is not a hundredth of
the model's. The error is the greatest difference of surface speed at the judge's nodes, which lie
between the model's, in nine directions.
"""

import argparse
import os
import sys
import time
from pathlib import Path

if __name__ == "__main__":
    os.environ.setdefault("OMP_NUM_THREADS", "1")  # read by the libraries when they are loaded

import numpy as np

import offbody as ob

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))
from random_bodies import judged, random_bodies

TOLERANCES = (1e-4, 1e-5, 1e-6, 1e-7, 1e-8, 1e-9)


def main(arguments=None):
    """Print a line for each body and the shares that met their tolerance."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--first", type=int, default=0, help="the first body")
    parser.add_argument("--count", type=int, default=200, help="how many bodies")
    options = parser.parse_args(arguments)
    ratios = []
    for seed in range(options.first, options.first + options.count):
        tolerance = TOLERANCES[seed // 2 % len(TOLERANCES)]   # of one body, then of a pair
        bodies, start = random_bodies(seed), time.process_time()
        model = ob.solve(bodies, panels=ob.Tolerance(tolerance))
        spent = time.process_time() - start
        error, doubt = judged(bodies, model)
        ratios.append(error / tolerance)
        print(f"{seed:4d} {len(bodies)} bodies, tolerance {tolerance:.0e}: error {error:.1e}, "
              f"estimated {model.estimated_error:.1e}, {model.node_count} nodes, {model.solves} "
              f"solves, {1e3 * spent:.0f} ms; the judge's own estimate {doubt:.0e}", flush=True)
    ratios = np.array(ratios)
    print(f"{len(ratios)} bodies: {np.mean(ratios <= 1):.1%} met the tolerance; the greatest error "
          f"over the tolerance was {ratios.max():.2f}, the median {np.median(ratios):.2f}")
    return int(np.mean(ratios <= 1) < 0.95 or ratios.max() > 10)


if __name__ == "__main__":
    sys.exit(main())

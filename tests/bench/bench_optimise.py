"""Seconds of the optimiser against its targets on one core: `python tests/bench/bench_optimise.py [million]`.

Instances are invented: square grids on [−1, 1]², limits at what a number of evenly spread sites would give.
"""

from __future__ import annotations

import resource
import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

from random_problems import grid_problem

from sampler.optimise.blocks import split
from sampler.optimise.relaxation import relax
from sampler.optimise.search import search

# name, side of the grid, order, evenly spread sites, region points a side, seconds for the bound, for the search
ROWS = [
    ("324 × 12, terms", 18, 2, 32.02, 0, 0.2, 1.0),
    ("324 × 12, terms, bound nearly whole", 18, 2, 31.0, 0, 0.2, 1.0),
    ("10,404 × 20, terms", 102, 3, 43.5, 0, 3.0, 10.0),
    ("324 × 12, 882 region rows", 18, 2, 50.0, 21, 0.2, None),
    ("10,404 × 20, 3,362 region rows", 102, 3, 108.0, 41, 3.0, None),
    ("324 × 12, terms, near saturation", 18, 2, 10.0, 0, 0.2, 1.0),
    ("900 × 12, terms, near saturation", 30, 2, 10.0, 0, 0.3, 1.5),
    ("900 × 20, 961 places, both axes", 30, 3, 77.8, 31, 0.2, 10.0),
]
MILLION = [
    ("1,000,000 × 12, terms", 1000, 2, 31.0, 0, 3.0, 15.0),
    ("1,000,000 × 20, terms", 1000, 3, 43.5, 0, 6.0, 30.0),
]
SEARCH_SECONDS = 30.0


def main() -> None:
    print(f"{'instance':36} {'split':>7} {'bound':>9} {'seconds':>8} {'ratio':>6}   {'found':>5} {'proof':>9} {'seconds':>8} "
          f"{'ratio':>6} {'log det':>9} {'MB':>6}")
    for name, side, order, sites, points, bound_target, search_target in ROWS + (MILLION if "million" in sys.argv else []):
        problem = grid_problem(side, order, sites, points)
        began = time.perf_counter()
        parts = split(problem)
        middle = time.perf_counter()
        relaxed = relax(parts, problem, seconds=60.0)
        ended = time.perf_counter()
        line = (f"{name:36} {middle - began:7.3f} {relaxed.bound:9.4f} {ended - began:8.3f} "
                f"{(ended - began) / bound_target:6.2f}   ")
        if search_target is not None:
            del parts, relaxed
            result = search(problem, seconds=SEARCH_SECONDS, seed=1)
            at = max(second for second, _, _ in result.history)
            line += (f"{len(result.chosen):5} {result.status:>9} {at:8.3f} {at / search_target:6.2f} {result.seconds:9.3f}")
        print(f"{line:103} {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:6.0f}", flush=True)


if __name__ == "__main__":
    main()

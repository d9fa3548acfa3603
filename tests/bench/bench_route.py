"""Routes on one core: gap to the optimum and seconds, targets of the issue beside them.

    OMP_NUM_THREADS=1 python tests/bench/bench_route.py

Optima of TSPLIB instances are published, that of the lattice is a theorem, both confirmed here; those on the machine
come from the exact solver of the tests. Where it runs out of time the gap is to the lower bound: at most what is shown.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "route"))
from known_tours import PUBLISHED, exact_tour, lattice, points, rounded_euclidean

from sampler.route.bound import site_seconds_lower, tour_lower_bound
from sampler.route.machine import Machine, travel_seconds
from sampler.route.stops import candidate_stops
from sampler.route.tour import tour, tour_cost
from sampler.route.visit import plan_route

SEEDS = range(5)
UNEVEN = Machine(speed_mm_s=(300.0, 1000.0), acceleration_mm_s2=(1000.0, 9806.65))
ROW = "{:34s} {:>5s} {:>10s} {:>10s} {:>9s} {:>8s} {:>8s}  {}"


def timed(call):
    began = time.perf_counter()
    return call(), time.perf_counter() - began


def gaps(name, cost, closed, optimum=None, exact_seconds=120.0):
    """One line: worst gap and time over the seeds, the bound, and where the optimum comes from."""
    runs = [timed(lambda seed=seed: tour_cost(cost, tour(cost, closed=closed, rng=np.random.default_rng(seed)), closed))
            for seed in SEEDS]
    worst, slowest = max(run[0] for run in runs), max(run[1] for run in runs)
    bound, bound_seconds = timed(lambda: tour_lower_bound(cost, closed=closed, upper=min(run[0] for run in runs)))
    proven = exact_tour(cost if closed else np.pad(cost, (0, 1)), seconds=exact_seconds)
    source = "exact" if optimum is None else "known, confirmed" if proven is not None else "known"
    assert optimum is None or proven is None or abs(proven - optimum) < 1e-6, (name, proven, optimum)
    best = optimum if optimum is not None else proven
    if best is None:
        best, source = bound, "bound only"
    gap = worst / best - 1
    print(ROW.format(name, str(len(cost)), f"{100 * gap:.3f} %", f"{100 * (1 - bound / best):.3f} %", f"{slowest:.2f} s",
                     f"{bound_seconds:.2f} s", "met" if gap <= 0.01 and slowest <= 1 else "MISSED", source), flush=True)


def tours():
    print(ROW.format("instance", "n", "worst gap", "bound low", "slowest", "bound", "<=1%,1s", "optimum"))
    for name, (text, optimum) in PUBLISHED.items():
        gaps(name, rounded_euclidean(points(text)), True, optimum)
    xy = lattice(12, 12)
    gaps("lattice 12x12", np.linalg.norm(xy[:, None] - xy, axis=2), True, 144.0, exact_seconds=30.0)
    for n in (52, 100, 150):
        xy = np.random.default_rng(n).uniform(-250, 250, (n, 2))
        for label, machine in (("even axes", Machine()), ("uneven axes", UNEVEN)):
            for closed in (True, False):
                cost = travel_seconds(machine, xy[:, None], xy)
                gaps(f"machine, {label}, {'closed' if closed else 'open'}", cost, closed)


def rest():
    print()
    for n in (150, 300, 1000):
        xy = np.random.default_rng(n).uniform(-250, 250, (n, 2))
        side = np.where(np.arange(n) % 3, "front", "back")
        route, seconds = timed(lambda xy=xy, side=side: plan_route(xy, UNEVEN, (510.0, 515.0), side=side))
        print(f"route over two sides with bound, {n} sites: {seconds:.2f} s, travel {route.travel_s:.2f} s, "
              f"at most {route.within_s:.2f} s from the quickest")
    for n, field in ((10_000, (5.0, 5.0)), (100_000, (5.0, 5.0)), (10_000, (40.0, 30.0))):
        xy = np.random.default_rng(1).uniform(-255, 255, (n, 2))
        stops, seconds = timed(lambda xy=xy, field=field: candidate_stops(xy, field))
        print(f"stops of {n} marks, field {field}: {len(stops)} in {seconds:.2f} s")
    for n in (10_000, 100_000):
        xy = np.random.default_rng(1).uniform(-255, 255, (n, 2))
        _, seconds = timed(lambda xy=xy: site_seconds_lower(xy, UNEVEN))
        print(f"seconds per site, {n} candidates: {seconds:.2f} s")


if __name__ == "__main__":
    tours()
    rest()

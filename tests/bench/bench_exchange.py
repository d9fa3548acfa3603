"""Exchange, D-optimal sets and the bound on log det against their targets: `python tests/bench/bench_exchange.py`.

Instances are invented: square grids on [−1, 1]² or random points on it; limits a common factor times the variances of evenly
spread sites or of the D-optimal weights, or the same position limit everywhere, with the factor set so that the linear bound
is the one named.
Seconds are of processor time, on one core.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from random_problems import both_axes, polynomial, square_grid

from sampler.optimise.blocks import split
from sampler.optimise.exchange import fewest
from sampler.optimise.informative import d_optimal
from sampler.optimise.log_det import log_det, log_det_bound
from sampler.optimise.log_det_tree import branched_log_det_bound
from sampler.optimise.problem import site_problem
from sampler.optimise.relaxation import relax

# name, side, order, region points a side, D-optimal proportions, the linear bound, sites to find, seconds
FEWEST = [
    ("324 × 12, terms", 18, 2, 0, False, 23.09, 24, 0.1),
    ("10,404 × 20, terms", 102, 3, 0, False, 29.24, 30, 2.0),
    ("324 × 12, terms, D-optimal", 18, 2, 0, True, 23.09, 24, 0.1),
    ("10,404 × 20, terms, D-optimal", 102, 3, 0, True, 29.24, 30, 2.0),
    ("900 × 20, position on 41 × 41", 30, 3, 41, False, 14.8, 17, 10.0),
    ("324 × 12, near saturation", 18, 2, 0, False, 6.96, 9, 0.1),
    ("900 × 12, near saturation", 30, 2, 0, False, 6.96, 9, 0.2),
    ("2,916 × 12, near saturation", 54, 2, 0, False, 6.96, 9, 0.5),
    ("101,124 × 12, near saturation", 318, 2, 0, False, 6.96, 9, 2.0),
]
SEEDS = 5


def limited(side, order, points, d_proportions, bound):
    """The problem whose linear bound is `bound`, and its relaxation."""
    blocks = square_grid(side, order)
    p = blocks.shape[2]
    directions = np.eye(p) if not points else square_grid(points, order).reshape(-1, p)
    weights = np.full(len(blocks), 1.0 / len(blocks))
    if d_proportions:
        free = site_problem(blocks, np.zeros((0, p)), np.zeros(0))
        weights = log_det_bound(split(free), free, 1.0).weights
    covariance = np.linalg.inv(np.einsum("i,imp,imq->pq", weights, blocks, blocks))
    variance = np.einsum("lp,pq,lq->l", directions, covariance, directions)
    variance = np.full(len(directions), variance.max()) if points else variance
    factor = 1.0 / bound
    for _ in range(6):
        problem = site_problem(blocks, directions, np.sqrt(factor * variance))
        parts = split(problem)
        relaxed = relax(parts, problem, seconds=60.0)
        if abs(relaxed.bound - bound) < 1e-3:
            break
        factor *= relaxed.bound / bound
    return problem, parts, relaxed


def fewest_sites() -> None:
    print(f"{'fewest':32} {'bound':>7} {'wanted':>6} {'found in each of the seeds, seconds':>40} {'ratio':>6}")
    for name, side, order, points, d_proportions, bound, wanted, target in FEWEST:
        problem, parts, relaxed = limited(side, order, points, d_proportions, bound)
        seen, slowest = [], 0.0
        for seed in range(SEEDS):
            began, at = time.process_time(), [np.inf]

            def found(chosen, began=began, at=at, wanted=wanted):
                if len(chosen) <= wanted:
                    at.append(time.process_time() - began)

            chosen = fewest(parts, problem, weights=relaxed.weights, reduced_costs=relaxed.reduced_costs,
                            lower=float(np.ceil(relaxed.bound)), rng=np.random.default_rng(seed),
                            deadline=time.monotonic() + 2 * target + 1, on_found=found)
            reached = min(at)
            seen.append(f"{len(chosen)} {reached:.2f}")
            slowest = max(slowest, reached)
        print(f"{name:32} {relaxed.bound:7.3f} {wanted:6} {'  '.join(seen):>40} {slowest / target:6.2f}", flush=True)


def most_informative_sets() -> None:
    side = np.linspace(-1, 1, 51)
    x, y = (a.ravel() for a in np.meshgrid(side, side))
    random = np.random.default_rng(0).uniform(-1, 1, (10000, 2))
    print(f"\n{'D-optimal':24} {'best':>14} {'hits':>8} {'slowest':>8} {'ratio':>6} {'bound':>11} {'seconds':>8} "
          f"{'branched gap':>13} {'nodes':>6} {'seconds':>8}")
    for name, rows, count, best, target in (("P1, 20 of 2,601", polynomial(x, y, 2), 20, 13.310424001, 0.1),
                                            ("P2, 30 of 10,000", polynomial(*random.T, 3), 30, 17.494150599, 2.0)):
        problem = site_problem(rows[:, None, :], np.zeros((0, rows.shape[1])), np.zeros(0))
        parts = split(problem)
        hits, slowest = 0, 0.0
        for seed in range(10):
            began = time.process_time()
            chosen = d_optimal(parts, problem, count, rng=np.random.default_rng(seed))
            slowest = max(slowest, time.process_time() - began)
            hits += abs(log_det(parts, problem, chosen) - best) < 1e-8
        began = time.process_time()
        bound = log_det_bound(parts, problem, count).value
        middle = time.process_time()
        branched = branched_log_det_bound(parts, problem, count, attained=best, gap=0.05 if count == 30 else 0.02)
        print(f"{name:24} {best:14.9f} {hits:2} of 10 {slowest:8.3f} {slowest / target:6.2f} {bound:11.6f} {middle - began:8.3f} "
              f"{branched.value - best:13.4f} {branched.nodes:6} {time.process_time() - middle:8.2f}", flush=True)
    blocks = both_axes(polynomial(*np.random.default_rng(1).uniform(-1, 1, (10**6, 2)).T, 2))
    problem = site_problem(blocks, np.zeros((0, 12)), np.zeros(0))
    parts = split(problem)
    began = time.process_time()
    bound = log_det_bound(parts, problem, 24).value
    middle = time.process_time()
    chosen = d_optimal(parts, problem, 24, rng=np.random.default_rng(0), deadline=time.monotonic() + 10)
    print(f"24 of 1,000,000 × 12: log det {log_det(parts, problem, chosen):.4f} in {time.process_time() - middle:.1f} s, "
          f"bound {bound:.4f} in {middle - began:.1f} s")


if __name__ == "__main__":
    fewest_sites()
    most_informative_sets()

"""The decision tree against its targets on one core: `python tests/bench/bench_tree.py [region]`.

Instances are invented: square grids on [−1, 1]². "near-saturated": quadratic in both axes, each term's variance at most
FACTOR × its value at the relaxed D-optimal weights for n = 12; at 1.64 × 8 sites can do it. "k×k": one
response, the limits of `test_tree.grid_question`. "region": cubic, one response, the predicted variance at most τ² at
41×41 points, τ² such that the relaxation's bound is 14.8.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "optimise"))

from test_tree import d_optimal_weights, evidence, grid_question, quadratic, square

from sampler.optimise.blocks import split
from sampler.optimise.problem import SiteProblem, site_problem
from sampler.optimise.relaxation import relax
from sampler.optimise.tree import decide
from sampler.tasks.proof_check import check_proof

FACTOR = 1.6
NEARER = 1.62
REGION_TAU_SQUARED = 0.6910851
REGION_SECONDS = 600.0


def both_axes(k: int, factor: float) -> SiteProblem:
    rows = quadratic(square(k))
    weights = d_optimal_weights(rows, 12)
    variance = np.diag(np.linalg.inv(rows.T @ (weights[:, None] * rows)))
    blocks = np.zeros((len(rows), 2, 12))
    blocks[:, 0, :6] = blocks[:, 1, 6:] = rows
    return site_problem(blocks, np.eye(12), np.sqrt(factor * np.concatenate([variance, variance])))


def cubic(xy: np.ndarray) -> np.ndarray:
    x, y = xy.T
    return np.stack([x**(power - j) * y**j for power in range(4) for j in range(power + 1)], axis=1)


def region(k: int = 30, points: int = 41) -> SiteProblem:
    places = cubic(square(points))
    return site_problem(cubic(square(k))[:, None, :], places, np.full(len(places), np.sqrt(REGION_TAU_SQUARED)))


# name, problem, count, target seconds
ROWS = [(f"near-saturated, {k * k:,}", lambda k=k: both_axes(k, FACTOR), 8, target)
        for k, target in ((18, 0.7), (30, 1.5), (54, 2.0), (318, 10.0))]
ROWS += [("nearer the edge, 2,916", lambda: both_axes(54, NEARER), 8, 8.0)]
ROWS += [(f"{k}×{k}", lambda k=k: grid_question(k), 12, target)
         for k, target in ((5, 0.1), (7, 0.3), (11, 1.0), (21, 1.5), (51, 1.0))]
REGION = [("900, cubic, region", region, count, REGION_SECONDS) for count in (15, 16)]


def main() -> None:
    print(f"{'instance':24} {'bound':>8} {'count':>5} {'answer':>10} {'nodes':>6} {'seconds':>8} {'CPU':>7} {'ratio':>6} "
          f"{'checked in':>10}")
    for name, make, count, target in ROWS + (REGION if "region" in sys.argv else []):
        problem = make()
        parts = split(problem)
        relaxed = relax(parts, problem, seconds=60.0)
        began, cpu = time.perf_counter(), time.process_time()
        answer = decide(parts, problem, count, rows=relaxed.rows, weights=relaxed.weights, seconds=4 * target + 10)
        seconds, cpu = time.perf_counter() - began, time.process_time() - cpu
        line = (f"{name:24} {relaxed.bound:8.3f} {count:5} {answer.status:>10} {answer.nodes:6} {seconds:8.2f} {cpu:7.2f} "
                f"{seconds / target:6.2f}")
        if answer.certificate is not None:
            began = time.perf_counter()
            check_proof(evidence(problem), answer.certificate)
            line += f" {time.perf_counter() - began:10.2f}"
        print(line, flush=True)


if __name__ == "__main__":
    main()

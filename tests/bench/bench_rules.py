"""Seconds of the optimiser under rules against their targets on one core: `python tests/bench/bench_rules.py`, with any of
`lost`, `spacing` and `cells` for a part of it.

Instances are invented: square grids on [−1, 1]² (taken as 510 mm wide where a spacing is meant), with limits that evenly
spread sites on a grid of 18 × 18 would give; and 6 × 6 cells with terms of their own.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from random_problems import equal_weight_tau, polynomial, square_grid

from sampler.optimise.problem import site_problem
from sampler.optimise.search import search

SPACING_30_MM = 2.0 * 30.0 / 510.0
# name, side of the grid, evenly spread sites, region points a side, lost, spacing, target seconds, target gap
SITES = [
    ("spacing 30 mm, 2,916, terms", 54, 32.03, 0, 0, SPACING_30_MM, 3.0, 0),
    ("lost 1, 324, terms", 18, 32.03, 0, 1, 0.0, 5.0, 0),
    ("lost 1, 2,916, terms", 54, 32.03, 0, 1, 0.0, 5.0, 0),
    ("lost 1, 324, region", 18, 51.6, 21, 1, 0.0, 20.0, 3),
    ("lost 1, 2,916, region", 54, 51.6, 21, 1, 0.0, 20.0, 3),
    ("lost 2, 324, terms", 18, 32.03, 0, 2, 0.0, 20.0, 3),
]
# name, cells a side, marks a side in a cell, limit as a share of a reading's standard uncertainty, target seconds
CELLS = [
    ("36 cells × 9, loose", 6, 3, 1.6, 5.0),
    ("36 cells × 9, middle", 6, 3, 1.2, 5.0),
    ("36 cells × 9, tight", 6, 3, 1.0, 5.0),
    ("36 cells × 25, middle", 6, 5, 1.2, 60.0),
    ("36 cells × 25, tight", 6, 5, 1.0, 60.0),
    ("100 cells × 49, middle", 10, 7, 1.2, 60.0),
]


def on_grid(side, sites, points, lost, spacing):
    reference, blocks = square_grid(18, 2), square_grid(side, 2)
    directions = square_grid(points, 2).reshape(-1, 12) if points else np.eye(12)
    tau = equal_weight_tau(reference, directions, sites)
    grid = np.linspace(-1.0, 1.0, side)
    xy = np.stack([part.ravel() for part in np.meshgrid(grid, grid)], axis=1)
    return replace(site_problem(blocks, directions, np.full(len(tau), tau.max()) if points else tau), lost=lost,
                   xy=xy if spacing else None, spacing=spacing)


def pooled(cells, marks, limit, points=5):
    """Order 2 over the panel, and 6 terms per cell with a prior as wide as a reading is uncertain; position limits."""
    centre, half = (np.arange(cells) + 0.5) / cells * 2.0 - 1.0, 1.0 / cells
    cx, cy = (part.ravel() for part in np.meshgrid(centre, centre))
    number = cells * cells

    def rows(place):
        u, v = (part.ravel() for part in np.meshgrid(place, place))
        panel = polynomial((cx[:, None] + half * u).ravel(), (cy[:, None] + half * v).ravel(), 2)
        wide = np.zeros((len(panel), 6 + 3 * number))
        wide[:, :6] = panel
        cell = np.repeat(np.arange(number), len(u))
        for term, value in enumerate((np.ones(len(u)), u, v)):
            wide[np.arange(len(panel)), 6 + 3 * cell + term] = np.tile(value, number)
        both = np.zeros((len(panel), 2, 2 * wide.shape[1]))
        both[:, 0, :wide.shape[1]] = both[:, 1, wide.shape[1]:] = wide
        return both

    blocks, directions = rows(np.linspace(-0.8, 0.8, marks)), rows(np.linspace(-1.0, 1.0, points))
    p = blocks.shape[2]
    prior = np.tile(np.append(np.zeros(6), np.ones(3 * number)), 2)
    return site_problem(blocks, directions.reshape(-1, p), np.full(2 * len(directions), limit), prior_precision=np.diag(prior))


def line(name, problem, seconds, target):
    result = search(problem, seconds=seconds, seed=1)
    found = "none" if result.chosen is None else f"{len(result.chosen)}"
    gap = np.inf if result.chosen is None else problem.cost[result.chosen].sum() - np.ceil(result.lower_bound - 1e-6)
    reached = max((second for second, _, _ in result.history), default=np.nan)
    print(f"{name:32} {problem.n:6} {problem.p:5} {found:>5} {result.lower_bound:9.3f} {gap:4.0f} {result.status:>9} "
          f"{reached:8.2f} {reached / target:6.2f} {result.seconds:8.2f}", flush=True)


def main() -> None:
    wanted = sys.argv[1:] or ["spacing", "lost", "cells"]
    print(f"{'instance':32} {'n':>6} {'p':>5} {'found':>5} {'bound':>9} {'gap':>4} {'proof':>9} {'seconds':>8} {'ratio':>6} "
          f"{'in all':>8}")
    for name, side, sites, points, lost, spacing, target, _ in SITES:
        if name.split()[0] in wanted:
            line(name, on_grid(side, sites, points, lost, spacing), 30.0, target)
    for name, cells, marks, limit, target in CELLS:
        if "cells" in wanted:
            problem = pooled(cells, marks, limit)
            line(name, problem, 60.0, target)


if __name__ == "__main__":
    main()

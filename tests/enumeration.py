"""Every subset of a few sites, with what it is like after losses: for brute force."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from random_problems import proof_evidence, random_problem, variance_ratios
from scipy.spatial.distance import pdist

from sampler.optimise.search import subset


def small_problem(seed, *, lost=0, spacing=0.0, sites=9):
    """A random problem on a few sites, with limits loose enough for losses to be borne now and then."""
    problem = random_problem(seed)
    problem = subset(problem, np.arange(min(problem.n, sites)))
    rng = np.random.default_rng(seed + 1000)
    xy = rng.uniform(0, 1, (problem.n, 2)) if spacing else None
    return replace(problem, tau=problem.tau * rng.uniform(1.0, 2.0 + lost), lost=lost, xy=xy, spacing=spacing)


def cheapest(problem):
    """(cost, sites) of the cheapest subset that meets limits after any loss, rules and spacing; (inf, None) if none."""
    n = problem.n
    inside = (np.arange(2**n)[:, None] >> np.arange(n)) & 1 > 0
    worst = np.array([variance_ratios(problem, np.flatnonzero(row)).max(initial=0.0) for row in inside])
    for _ in range(problem.lost):
        after = worst.copy()
        for site in range(n):
            held = np.flatnonzero(inside[:, site])
            after[held] = np.maximum(after[held], worst[held - 2**site])
        worst = after
    fits = (worst <= 1 + 1e-9) & ~(inside & problem.forbidden).any(axis=1) & ~(~inside & problem.required).any(axis=1)
    for members, low, high in zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True):
        count = inside[:, members].sum(axis=1)
        fits &= (count >= low) & (count <= high)
    if problem.max_sites is not None:
        fits &= inside.sum(axis=1) <= problem.max_sites
    if problem.spacing:
        for row in np.flatnonzero(fits):
            distance = pdist(problem.xy[inside[row]])
            fits[row] = not len(distance) or distance.min() >= problem.spacing * (1 - 1e-12)
    cost = np.where(fits, inside @ problem.cost, np.inf)
    best = int(np.argmin(cost))
    return (float(cost[best]), np.flatnonzero(inside[best])) if np.isfinite(cost[best]) else (np.inf, None)


def ruled_evidence(problem):
    """The question as the independent checker takes it, with losses and spacing."""
    return replace(proof_evidence(problem), lost=problem.lost, xy=problem.xy, spacing=problem.spacing)

"""Small random problems for brute force, and the designs of square grids; all invented."""

from __future__ import annotations

from itertools import combinations

import numpy as np

from sampler.optimise.problem import CountRules, site_problem
from sampler.tasks.proof_check import Evidence


def polynomial(x, y, order):
    """All monomials of total degree up to `order`, (n, terms)."""
    return np.stack([x ** (degree - j) * y**j for degree in range(order + 1) for j in range(degree + 1)], axis=1)


def both_axes(rows):
    """dx and dy by the same functions each: (n, 2, 2 terms)."""
    n, q = rows.shape
    blocks = np.zeros((n, 2, 2 * q))
    blocks[:, 0, :q] = rows
    blocks[:, 1, q:] = rows
    return blocks


def square_grid(k, order):
    """k × k sites on [−1, 1]², both axes."""
    side = np.linspace(-1.0, 1.0, k)
    x, y = (a.ravel() for a in np.meshgrid(side, side))
    return both_axes(polynomial(x, y, order))


def equal_weight_tau(blocks, directions, sites, prior=0.0):
    """u of each direction when `sites` sites are spread evenly over all candidates."""
    information = np.einsum("imp,imq->pq", blocks, blocks) * sites / len(blocks) + prior
    return np.sqrt(np.einsum("lp,pq,lq->l", directions, np.linalg.inv(information), directions))


def grid_problem(k, order, sites, points=0):
    """Limits at what `sites` evenly spread sites would give: on every term, or with `points` on the position at
    points × points places, all at the worst of them."""
    blocks = square_grid(k, order)
    if not points:
        directions = np.eye(blocks.shape[2])
        return site_problem(blocks, directions, equal_weight_tau(blocks, directions, sites))
    directions = square_grid(points, order).reshape(-1, blocks.shape[2])
    tau = equal_weight_tau(blocks, directions, sites)
    return site_problem(blocks, directions, np.full(len(directions), tau.max()))


def random_problem(seed):
    """Up to 11 candidates; what a seed brings: terms or region limits, axes coupled or not, priors, costs, rules, fixed
    sites; limits about as tight as a random set of some size allows, so that tight and loose ones both occur."""
    rng = np.random.default_rng(seed)
    n = int(rng.integers(6, 12))
    xy = rng.uniform(-1, 1, (n, 2)) if rng.random() < 0.7 else rng.integers(-1, 2, (n, 2)) + 0.3 * rng.uniform(size=(n, 2))
    kind = seed % 4
    rows = [np.ones((n, 1)), polynomial(*xy.T, 1), polynomial(*xy.T, 1), polynomial(*xy.T, 2)[:, [0, 1, 2, 4]]][kind]
    blocks = both_axes(rows) if kind != 3 else rows[:, None, :]
    if kind == 2:  # one noise per site with coupled axes
        mix = np.eye(2) + 0.3 * rng.uniform(-1, 1, (n, 2, 2))
        blocks = np.einsum("iab,ibp->iap", mix, blocks)
    p = blocks.shape[2]
    prior = np.zeros((p, p))
    if rng.random() < 0.3:
        root = rng.normal(size=(p, rng.integers(1, p + 1)))
        prior = 0.5 * root @ root.T if rng.random() < 0.5 else np.diag(rng.uniform(0, 1, p) * (rng.random(p) < 0.5))
    if rng.random() < 0.5:
        directions = np.eye(p)[rng.random(p) < 0.8]
    else:
        at = rng.uniform(-1, 1, (int(rng.integers(1, 8)), 2))
        span = [np.ones((len(at), 1)), polynomial(*at.T, 1), polynomial(*at.T, 1), polynomial(*at.T, 2)[:, [0, 1, 2, 4]]][kind]
        directions = (both_axes(span) if kind != 3 else span[:, None, :]).reshape(-1, p)
    directions = directions if len(directions) else np.eye(p)
    some = rng.permutation(n)[:int(rng.integers(max(2, min(n, p // blocks.shape[1])), n + 1))]
    information = prior + np.einsum("imp,imq->pq", blocks[some], blocks[some]) + 1e-3 * np.eye(p)
    tau = np.sqrt(np.einsum("lp,pq,lq->l", directions, np.linalg.inv(information), directions))
    tau = tau * rng.uniform(0.97, 1.4, len(tau))
    required, forbidden = np.zeros(n, bool), np.zeros(n, bool)
    if rng.random() < 0.3:
        required[rng.integers(n)] = True
    if rng.random() < 0.3:
        forbidden[rng.integers(n)] = True
    forbidden &= ~required
    rules = None
    if rng.random() < 0.3:
        half = int(rng.integers(2, n))
        rules = CountRules((np.arange(half), np.arange(half, n)), np.array([1.0, 0.0]),
                           np.array([float(half), max(1.0, (n - half) / 2)]), ("left", "right"))
    return site_problem(blocks, directions, tau, prior_precision=prior, required=required, forbidden=forbidden,
                        rules=rules, cost=rng.integers(1, 4, n).astype(float) if rng.random() < 0.4 else None,
                        key=np.array([f"M{i:02d}" for i in rng.permutation(n)]))


def variance_ratios(problem, chosen):
    """var/τ² of each limit by the textbook; infinite where M does not determine it."""
    blocks = problem.blocks[list(chosen)]
    information = problem.prior_precision + np.einsum("imp,imq->pq", blocks, blocks)
    values, vectors = np.linalg.eigh(information)
    known = values > 1e-10 * max(values[-1], 1e-300)
    part = problem.directions @ vectors
    ratio = (part[:, known] ** 2 / values[known]).sum(axis=1) / problem.tau**2
    ratio[(part[:, ~known] ** 2).sum(axis=1) > 1e-10] = np.inf
    return ratio


def allowed(problem, chosen):
    """Whether required, forbidden, count rules and max_sites hold."""
    inside = np.zeros(problem.n, bool)
    inside[list(chosen)] = True
    counts = [inside[members].sum() for members in problem.rules.members]
    return (not np.any(problem.required & ~inside) and not np.any(problem.forbidden & inside)
            and all(low <= count <= high for low, count, high
                    in zip(problem.rules.lower, counts, problem.rules.upper, strict=True))
            and (problem.max_sites is None or inside.sum() <= problem.max_sites))


def all_subsets(n):
    """All subsets of n, the small ones first."""
    return (chosen for size in range(n + 1) for chosen in combinations(range(n), size))


def cheapest_by_enumeration(problem):
    """(cost, one set) over all subsets, or (inf, None)."""
    best = (np.inf, None)
    for chosen in all_subsets(problem.n):
        cost = problem.cost[list(chosen)].sum()
        if cost < best[0] and allowed(problem, chosen) and variance_ratios(problem, chosen).max() <= 1 + 1e-9:
            best = (cost, chosen)
    return best


def proof_evidence(problem):
    """The question as the independent checker takes it."""
    rules = [(np.isin(np.arange(problem.n), members), low, high) for members, low, high
             in zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True)]
    rules += [] if problem.max_sites is None else [(np.ones(problem.n, bool), 0, problem.max_sites)]
    scaled = problem.directions / problem.tau[:, None]
    return Evidence(problem.blocks, problem.prior_precision, problem.cost, problem.required, problem.forbidden,
                    tuple(rules), problem.key, lambda rows: scaled[rows["limit"]])

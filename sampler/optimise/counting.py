"""What can be counted: the fewest sites by rank alone, and whether the count rules contradict each other.

n sites of rank at most m tell at most n·m directions apart. Let V (q, s) span the directions of a block of which no prior
says anything, P₀V = 0. A v = Vα with Bᵢv = 0 at every chosen site is invisible to M, and then cᵀv must be 0 for every limit
c, or its variance is infinite. The chosen sites put Σᵢ rank(BᵢV) conditions on α, so the limits can hold only if
Σᵢ rank(BᵢV) ≥ rank(CᵀV). Near saturation this beats the relaxation.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import csr_array

from sampler.optimise.blocks import Split
from sampler.optimise.problem import SiteProblem

PRIOR_TOLERANCE = 1e-12
"""A direction with less prior than this share of what all candidates tell has none."""
RANK_TOLERANCE = 1e-9
NO_SOLUTION = 2
"""The status by which `milp` says that a program is infeasible."""


def counting_bound(split: Split, problem: SiteProblem) -> float:
    """A bound on the cost of any set that meets the limits: the best of the independent parts' counting bounds."""
    best = float(problem.cost[problem.required].sum())
    for block in split.blocks:
        values, vectors = np.linalg.eigh(block.prior)
        unknown = vectors[:, values <= PRIOR_TOLERANCE]
        rank = np.minimum((block.rows != 0.0).any(axis=2).sum(axis=1), unknown.shape[1])
        asked = unknown.T @ block.columns  # of every equal block: they stand on the same M
        if asked.size:
            needed = int(np.linalg.matrix_rank(asked / np.linalg.norm(asked, axis=0).max(), RANK_TOLERANCE))
            best = max(best, _cheapest(rank, needed, problem))
    return best


def _cheapest(rank: NDArray[np.int64], needed: int, problem: SiteProblem) -> float:
    """The least cost of required and other allowed sites whose ranks sum to `needed`, the last one in part."""
    fixed = float(problem.cost[problem.required].sum())
    left = needed - int(rank[problem.required].sum())
    useful = np.flatnonzero(~problem.required & ~problem.forbidden & (rank > 0))
    if left <= 0:
        return fixed
    each = problem.cost[useful] / rank[useful]
    order = useful[np.argsort(each, kind="stable")[:left]]
    before = np.cumsum(rank[order]) - rank[order]
    taken = np.clip(left - before, 0, rank[order])
    return fixed + float((problem.cost[order] / rank[order]) @ taken) if taken.sum() >= left else np.inf


def rules_admit(problem: SiteProblem) -> bool:
    """Whether any set at all obeys the rules, limits left aside.

    Sites that belong to the same rules are alike, so this is an integer program in as many unknowns as there are patterns.
    """
    if np.any(problem.required & problem.forbidden):
        return False
    rules = list(zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True))
    if problem.max_sites is not None:
        rules.append((np.arange(problem.n), 0.0, float(problem.max_sites)))
    if not rules:
        return True
    free = ~problem.required & ~problem.forbidden
    name = np.zeros(problem.n, np.uint64)
    for members, letter in zip((rule[0] for rule in rules),
                               np.random.default_rng(0).integers(1, 2**63, len(rules), np.uint64), strict=True):
        name[members] += letter
    pattern, place, size = np.unique(name[free], return_inverse=True, return_counts=True)
    if not len(pattern):
        pattern, size = np.zeros(1, np.uint64), np.zeros(1, np.int64)
    number = np.zeros(problem.n, np.int64)
    number[free] = place
    at, fixed = [], []
    for members, _, _ in rules:
        at.append(np.unique(number[members[free[members]]]))
        fixed.append(float(problem.required[members].sum()))
    start = np.concatenate([[0], np.cumsum([len(places) for places in at])])
    matrix = csr_array((np.ones(start[-1]), np.concatenate(at), start), shape=(len(rules), len(pattern)))
    low, high = (np.array([rule[side] for rule in rules]) - fixed for side in (1, 2))
    found = milp(np.zeros(len(pattern)), integrality=np.ones(len(pattern), int), bounds=Bounds(0.0, size.astype(float)),
                 constraints=LinearConstraint(matrix, low, high))
    return bool(found.status != NO_SOLUTION)

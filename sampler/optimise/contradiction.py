"""Rules that admit no set at all, and the smallest group of them that already contradict each other."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from math import comb

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import Bounds, LinearConstraint, milp
from scipy.sparse import csr_array, vstack

SECONDS_PER_QUESTION = 5.0
"""A question not settled by then counts as no contradiction: the search itself will find out."""
MOST_GROUPS = 3000
"""Groups of one size are tried one by one up to this many; beyond, a group is only made irreducible."""


@dataclass(frozen=True, slots=True)
class Statement:
    """One rule as the user knows it: lower ≤ rows · w ≤ upper, rows (k, n) sparse."""

    label: str
    rows: csr_array
    lower: NDArray[np.float64]
    upper: NDArray[np.float64]


def counting(label: str, members: NDArray[np.int64], n: int, lower: float, upper: float) -> Statement:
    """The statement that between `lower` and `upper` of the members are chosen."""
    row = csr_array((np.ones(len(members)), (np.zeros(len(members), int), members)), shape=(1, n))
    return Statement(label, row, np.array([lower]), np.array([upper]))


def smallest_contradiction(statements: Sequence[Statement]) -> tuple[int, ...] | None:
    """The smallest set of statements that no 0/1 w satisfies together, as indices; None when all can be satisfied.

    Groups of one, two, … statements are tried while they are few; otherwise statements are dropped one at a time as long as
    the rest still contradict (the deletion filter; Chinneck & Dravnieks 1991), which leaves an irreducible group.
    """
    everything = tuple(range(len(statements)))
    if not statements or not _contradict(statements, everything):
        return None
    size = 1
    while size < len(everything) and comb(len(everything), size) <= MOST_GROUPS:
        for group in combinations(everything, size):
            if _contradict(statements, group):
                return group
        size += 1
    kept = everything
    for statement in everything:
        rest = tuple(other for other in kept if other != statement)
        if _contradict(statements, rest):
            kept = rest
    return kept


def _contradict(statements: Sequence[Statement], group: Sequence[int]) -> bool:
    """Whether no 0/1 w satisfies the statements of the group together."""
    if not group:
        return False
    rows = vstack([statements[index].rows for index in group], format="csc")
    touched = np.flatnonzero(np.diff(rows.indptr))
    lower = np.concatenate([statements[index].lower for index in group])
    upper = np.concatenate([statements[index].upper for index in group])
    if not len(touched):
        return bool(np.any(lower > 0) or np.any(upper < 0))
    answer = milp(np.zeros(len(touched)), integrality=np.ones(len(touched), np.int64), bounds=Bounds(0, 1),
                  constraints=LinearConstraint(rows[:, touched], lower, upper),
                  options={"time_limit": SECONDS_PER_QUESTION})
    return bool(answer.status == 2)

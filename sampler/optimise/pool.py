"""The candidates that an exchange works on, and a choice among them that keeps to cost and rules."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csc_array, csr_array

from sampler.optimise.blocks import Array, Split
from sampler.optimise.problem import SiteProblem
from sampler.optimise.spacing import conflicts

Indices = NDArray[np.int64]
Mask = NDArray[np.bool_]

COST_TOLERANCE = 1e-9
"""Costs are sums of floats; a set may exceed its budget by this share of it."""
TIE = 1e-9
"""Scores closer than this, relative to their size, tie: the rounding of two orders of summation must not decide."""
TIE_DIGITS = 9


@dataclass(frozen=True, slots=True)
class Pool:
    """Candidates in the order of their keys. `index` (n,) into the problem; `rows[b]` (n, m, q) of each block;
    `members` (rules, n) 0/1, with `lower` and `upper` (rules,) on the number of chosen members. `conflicts` (n, n) 0/1 sparse:
    sites that may not both be chosen, when there is a spacing. `lost`: how many chosen sites may be lost."""

    index: Indices
    rows: tuple[Array, ...]
    cost: Array
    required: Mask
    members: csr_array
    lower: Array
    upper: Array
    max_sites: int
    conflicts: csr_array | None
    lost: int

    @property
    def n(self) -> int:
        return len(self.index)

    @property
    def plain(self) -> bool:
        """No rules, no required sites and equal costs: any site may take the place of any other."""
        return not self.members.shape[0] and not self.required.any() and self.conflicts is None \
            and bool(np.all(self.cost == self.cost[:1]))

    def places(self, chosen: Indices) -> Indices:
        """Where the chosen sites of the problem stand in the pool; all must be there."""
        order = np.argsort(self.index, kind="stable")
        at = order[np.minimum(np.searchsorted(self.index[order], chosen), self.n - 1)]
        if not np.array_equal(self.index[at], chosen):
            raise ValueError("a chosen site is not in the pool")
        return np.sort(at)


def pool(split: Split, problem: SiteProblem, keep: Indices | None = None) -> Pool:
    """The pool of the sites `keep` (all by default) that are not forbidden, and of all that are required."""
    wanted = np.ones(problem.n, bool) if keep is None else np.zeros(problem.n, bool)
    if keep is not None:
        wanted[keep] = True
    index = np.flatnonzero((wanted & ~problem.forbidden) | problem.required)
    index = index[np.argsort(key_rank(problem)[index], kind="stable")]
    place = np.full(problem.n, -1)
    place[index] = np.arange(len(index))
    rules = problem.rules
    inside = [place[members][place[members] >= 0] for members in rules.members]
    bounds = np.concatenate([[0], np.cumsum([len(members) for members in inside])]).astype(np.int64)
    columns = np.concatenate(inside) if inside else np.zeros(0, np.int64)
    members = csr_array((np.ones(len(columns)), columns, bounds), shape=(len(inside), len(index)))
    return Pool(index, tuple(np.ascontiguousarray(block.rows[index]) for block in split.blocks), problem.cost[index],
                problem.required[index], members, np.ceil(rules.lower), np.floor(rules.upper),
                len(index) if problem.max_sites is None else min(problem.max_sites, len(index)),
                conflicts(problem.xy[index], problem.spacing) if problem.xy is not None and problem.spacing > 0 else None,
                problem.lost)


class Choice:
    """Chosen sites of a pool: `sites` in the order they came, with what rules and cost still allow."""

    def __init__(self, source: Pool, sites: Indices) -> None:
        self.pool = source
        self.sites = np.asarray(sites, np.int64)
        self.inside = np.zeros(source.n, bool)
        self.inside[self.sites] = True
        self.by_site: csc_array = source.members.tocsc()
        self.counts = source.members @ self.inside.astype(float)
        self.crowd = np.zeros(source.n) if source.conflicts is None else source.conflicts @ self.inside.astype(float)

    def __len__(self) -> int:
        return len(self.sites)

    @property
    def cost(self) -> float:
        return float(self.pool.cost[self.sites].sum())

    @property
    def missing(self) -> bool:
        """Whether a rule still asks for more members."""
        return bool(np.any(self.counts < self.pool.lower))

    def copy(self) -> Choice:
        return Choice(self.pool, self.sites)

    def add(self, site: int) -> None:
        self.sites = np.append(self.sites, site)
        self.inside[site] = True
        self.counts += self._rules_of(site)
        self._crowd(site, 1.0)

    def drop(self, position: int) -> None:
        site = self.sites[position]
        self.sites = np.delete(self.sites, position)
        self.inside[site] = False
        self.counts -= self._rules_of(site)
        self._crowd(int(site), -1.0)

    def swap(self, position: int, site: int) -> None:
        """`site` takes the place of the one at `position`."""
        self.inside[self.sites[position]] = False
        self.inside[site] = True
        if len(self.counts):
            self.counts += self._rules_of(site) - self._rules_of(int(self.sites[position]))
        self._crowd(int(self.sites[position]), -1.0)
        self._crowd(site, 1.0)
        self.sites = self.sites.copy()
        self.sites[position] = site

    def _crowd(self, site: int, change: float) -> None:
        near = self.pool.conflicts
        if near is not None:
            self.crowd[near.indices[near.indptr[site]:near.indptr[site + 1]]] += change

    def _rules_of(self, site: int) -> Array:
        part = np.zeros(len(self.counts))
        part[self.by_site.indices[self.by_site.indptr[site]:self.by_site.indptr[site + 1]]] = 1.0
        return part

    def addable(self, budget: float) -> Mask:
        """Which sites may be added, (n,); while a rule asks for more, only those that serve the most such rules."""
        if len(self) >= self.pool.max_sites:
            return np.zeros(self.pool.n, bool)
        allowed = ~self.inside & (self.pool.cost <= budget - self.cost + COST_TOLERANCE * abs(budget))
        if self.pool.conflicts is not None:
            allowed &= self.crowd == 0.0
        if len(self.counts):
            full = (self.counts >= self.pool.upper).astype(float)
            allowed &= ~((full @ self.pool.members) > 0)
            if self.missing:
                served = (self.counts < self.pool.lower).astype(float) @ self.pool.members
                allowed &= served > 0
                allowed &= served >= served[allowed].max(initial=0.0)
        return allowed

    def droppable(self) -> Mask:
        """Which of the chosen may be dropped with every rule still met, (k,)."""
        allowed = ~self.pool.required[self.sites]
        if len(self.counts):
            tight = (self.counts <= self.pool.lower).astype(float)
            allowed &= ~((tight @ self.pool.members)[self.sites] > 0)
        return allowed

    def swappable(self, budget: float) -> Mask:
        """Which sites may take the place of which chosen one, (n, k)."""
        source = self.pool
        allowed = np.repeat(~self.inside[:, None], len(self), axis=1)
        if source.plain:
            return allowed
        allowed &= ~source.required[self.sites]
        slack = budget - self.cost + COST_TOLERANCE * abs(budget)
        allowed &= source.cost[:, None] - source.cost[self.sites] <= slack
        if source.conflicts is not None:
            allowed &= self.crowd[:, None] <= source.conflicts[:, self.sites].toarray()
        if len(self.counts):
            chosen = self.by_site[:, self.sites]
            full, tight = self.counts >= source.upper, self.counts <= source.lower
            blocked = (full.astype(float) @ source.members)[:, None]
            freed = (source.members[full].T @ chosen[full]).toarray()
            allowed &= blocked <= freed
            needed = tight.astype(float) @ chosen
            given = (source.members[tight].T @ chosen[tight]).toarray()
            allowed &= given >= needed
        return allowed


def key_rank(problem: SiteProblem) -> Indices:
    """The place of each site in the order of the keys, (n,)."""
    key = problem.key
    if np.all(key[:-1] <= key[1:]):
        return np.arange(problem.n)
    rank = np.empty(problem.n, np.int64)
    rank[np.argsort(key, kind="stable")] = np.arange(problem.n)
    return rank


def first_best(score: Array, best: float) -> int:
    """The first position whose score ties with the best (the least, or the greatest)."""
    if not np.isfinite(best):
        return int(np.argmax(score == best))
    return int(np.argmax(np.abs(score - best) <= TIE * max(abs(best), np.finfo(float).tiny)))


def ascending(score: Array) -> Indices:
    """Positions in the order of positive scores; those that tie keep their order."""
    with np.errstate(divide="ignore"):
        return np.argsort(np.round(np.log(score), TIE_DIGITS), kind="stable")


def cost_step(cost: Array) -> float | None:
    """The number of which every set's cost is a whole multiple, when costs are whole numbers; else None."""
    if len(cost) and np.all(cost == np.rint(cost)) and cost.max() < 2**31:
        return float(np.gcd.reduce(cost.astype(np.int64)))
    return None

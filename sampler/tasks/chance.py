"""The chance that a panel misses a limit because marks do not read."""

from __future__ import annotations

import heapq

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaincinv

from sampler.tasks.loss import Losses
from sampler.tasks.question import Question, knowledge_of, limits_achieved
from sampler.tasks.results import MissChance
from sampler.tasks.units import Visits

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

LEFT_OUT = 1e-4
"""Patterns of lost marks are worked out, the likeliest first, until the others together are less likely than this."""
MOST_PATTERNS = 20_000
"""Where that takes more patterns, panels are simulated instead."""
PANELS = 20_000
CONFIDENCE = 0.95
BETWEEN = 2e-3
"""A region's worst place may lie between raster points, up to this share above the worst of them: nearer patterns are audited."""
MOST_AUDITS = 100
CHUNK_NUMBERS = 8_000_000


def miss_chance(asked: Question, visits: Visits) -> MissChance | None:
    """The chance over all patterns of lost marks, each mark lost on its own; None when every mark always reads.

    Exact enumeration in order of probability as far as `LEFT_OUT`; else simulated panels, with the interval of Clopper and
    Pearson (1934).
    """
    rate = asked.candidates.sites.read_rate[visits.marks]
    unsure = np.flatnonzero(rate < 1.0)
    if not len(unsure) or not asked.study.limits:
        return None
    judge = _Judge(asked, visits)
    listed = _likeliest(rate[unsure])
    if listed is not None:
        lost, probability = listed
        missed, open_ = judge.misses(_spread(lost, unsure, len(rate)))
        least = float(probability[missed].sum())
        rest = max(0.0, 1.0 - float(probability.sum()))
        return MissChance(least, min(1.0, least + float(probability[open_].sum()) + rest))
    rng = np.random.default_rng(asked.study.search.seed)
    patterns, count = np.unique(rng.random((PANELS, len(unsure))) >= rate[unsure], axis=0, return_counts=True)
    missed, open_ = judge.misses(_spread(patterns, unsure, len(rate)))
    few, many = int(count[missed].sum()), int(count[missed | open_].sum())
    tail = (1.0 - CONFIDENCE) / 2.0
    low = 0.0 if few == 0 else float(betaincinv(few, PANELS - few + 1, tail))
    high = 1.0 if many == PANELS else float(betaincinv(many + 1, PANELS - many, 1.0 - tail))
    return MissChance(low, high, PANELS)


def _spread(lost: Mask, unsure: NDArray[np.int64], n: int) -> Mask:
    whole = np.zeros((len(lost), n), bool)
    whole[:, unsure] = lost
    return whole


def _likeliest(rate: Array) -> tuple[Mask, Array] | None:
    """Patterns of lost marks (patterns, marks), the likeliest first, with their probabilities, until all but LEFT_OUT of the
    chance is covered; None when that takes too many.

    From the likeliest pattern of all, each mark may be turned at the price cᵢ = |log((1 − q)/q)|. Subsets in order of their
    summed price: each set of sorted marks that ends with mark j is followed by those where j + 1 joins it or takes j's place.
    """
    likely = rate < 0.5
    best = float(np.where(likely, 1.0 - rate, rate).prod())
    price = np.abs(np.log(1.0 - rate) - np.log(rate))
    order = np.argsort(price, kind="stable")
    cost = price[order].tolist()
    n = len(cost)
    found: list[tuple[int, ...]] = [()]
    chance = [best]
    covered = best
    heap: list[tuple[float, tuple[int, ...]]] = [(cost[0], (0,))]
    while heap and covered < 1.0 - LEFT_OUT:
        if len(found) >= MOST_PATTERNS:
            return None
        total, turned = heapq.heappop(heap)
        found.append(turned)
        chance.append(best * float(np.exp(-total)))
        covered += chance[-1]
        last = turned[-1]
        if last + 1 < n:
            heapq.heappush(heap, (total + cost[last + 1], (*turned, last + 1)))
            heapq.heappush(heap, (total - cost[last] + cost[last + 1], (*turned[:-1], last + 1)))
    lost = np.repeat(likely[None], len(found), axis=0)
    for row, turned in enumerate(found):
        lost[row, order[list(turned)]] ^= True
    return lost, np.array(chance)


class _Judge:
    """Tells which patterns of lost marks miss a limit: by bounds for nearly all, exactly where these do not tell."""

    def __init__(self, asked: Question, visits: Visits) -> None:
        self.asked, self.visits, self.losses = asked, visits, Losses(asked, visits)
        in_region = np.isin(self.losses.owner, _region_limits(asked))
        self.surely = np.where(in_region, (1.0 - BETWEEN) ** 2, 1.0)

    def misses(self, lost: Mask) -> tuple[Mask, Mask]:
        """Which patterns (patterns, marks) miss a limit, and which were too many to tell."""
        missed, near = np.zeros(len(lost), bool), np.zeros(len(lost), bool)
        step = max(1, CHUNK_NUMBERS // max(1, len(self.losses.owner)))
        for start in range(0, len(lost), step):
            part = slice(start, start + step)
            missed[part], near[part] = self._by_bounds(lost[part])
        for row in np.flatnonzero(near)[:MOST_AUDITS]:
            near[row] = False
            missed[row] = self._audited(lost[row])
        return missed, near

    def _by_bounds(self, lost: Mask) -> tuple[Mask, Mask]:
        least, most = self.losses.bounds(lost, np.arange(len(self.losses.owner)))
        missed: Mask = np.any(least > 1.0, axis=1)
        near = np.zeros(len(lost), bool)
        doubtful = ~missed & (most > self.surely).any(axis=1)
        for count in np.unique(lost[doubtful].sum(axis=1)):
            rows = np.flatnonzero(doubtful & (lost.sum(axis=1) == count))
            sets = np.nonzero(lost[rows])[1].reshape(len(rows), count)
            size = max(1, CHUNK_NUMBERS // max(1, 2 * count * len(self.losses.owner)))
            for start in range(0, len(rows), size):
                after = self.losses.after(sets[start:start + size])
                at = rows[start:start + size]
                missed[at] = (after > 1.0).any(axis=1)
                near[at] = ~missed[at] & (after > self.surely).any(axis=1)
        return missed, near

    def _audited(self, lost: Mask) -> bool:
        kept = np.flatnonzero(~lost)
        visits = Visits(self.visits.marks[kept], self.visits.stop[kept], self.visits.unit)
        return any(limit.ratio > 1.0 for limit in limits_achieved(self.asked, knowledge_of(self.asked, visits)))


def _region_limits(asked: Question) -> list[int]:
    """The audited limits that are a region's."""
    found, number = [], 0
    for source, limit in enumerate(asked.study.limits):
        if source in asked.rasters:
            found.append(number)
        number += 1 if source in asked.rasters else len(getattr(limit, "terms", ()))
    return found

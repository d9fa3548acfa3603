"""D-optimal exchange: the most informative set of a given count, with or without limits.

The pair of sites whose swap raises log det most is swapped until none does (Fedorov 1972), from many starts: at the fewest
count few single swaps keep the limits, so that starts matter more than swaps.
"""

from __future__ import annotations

import numpy as np

from sampler.optimise.blocks import Array, Split
from sampler.optimise.determinant import Determinant, determinants, swap_gains, value
from sampler.optimise.exchange import FEASIBLE, LAST_RIDGE, Clock, Exchange, Stop
from sampler.optimise.pool import Choice, Indices, pool
from sampler.optimise.problem import SiteProblem

SMALL_GAIN = 1e-9
"""Gains of log det below this are rounding."""
POOL_SIZE = 2000
CHUNK = 50_000
MOST_STARTS = 200


class Climb:
    """The climb of log det in one exchange pool; `limited`: only to sets that meet every limit."""

    def __init__(self, exchange: Exchange, problem: SiteProblem, limited: bool) -> None:
        self.exchange, self.limited = exchange, limited
        self.terms: list[Determinant] = determinants(exchange.split, problem, exchange.pool.index)
        if limited:
            exchange.watch_all()

    def value(self, choice: Choice) -> float:
        return value(self.terms, choice.sites)

    def rise(self, choice: Choice) -> None:
        """Swaps the best pair until no pair gains, in place."""
        exchange = self.exchange
        ridge = exchange.ridge(LAST_RIDGE)
        while not exchange.clock.over():
            inverses = [term.inverse(choice.sites, ridge) for term in self.terms]
            gain = swap_gains(self.terms, inverses, choice.sites)
            gain[~choice.swappable(exchange.budget)] = -np.inf
            pair = self._within_limits(choice, inverses, gain) if self.limited else _best_pair(gain)
            if pair is None:
                return
            choice.swap(*pair)

    def _within_limits(self, choice: Choice, inverses: list[Array], gain: Array) -> tuple[int, int] | None:
        """The pair (position, site) that gains most of those that keep every limit."""
        limits = self.exchange.limits
        inverses = inverses[:len(self.exchange.split.blocks)]
        dropped = limits.of(inverses) + limits.changes(inverses, choice.sites, -1.0)
        best, pair = SMALL_GAIN, None
        most = gain.max(axis=0)
        for position in np.argsort(-most, kind="stable"):
            if most[position] <= best:
                break
            sites = np.flatnonzero(gain[:, position] > best)
            active = dropped[position] > 1.0
            if active.any():
                left = limits.without(inverses, int(choice.sites[position]))
                change = limits.changes(left, sites, 1.0, active)
                sites = sites[(dropped[position, active] - change <= 1.0).all(axis=1)]
            for site in sites[np.argsort(-gain[sites, position], kind="stable")]:
                if self._keeps(choice, int(position), int(site)):
                    best, pair = gain[site, position], (int(position), int(site))
                    break
        return pair

    def _keeps(self, choice: Choice, position: int, site: int) -> bool:
        """Judged without the ridge."""
        sites = choice.sites.copy()
        sites[position] = site
        return bool(self.exchange.split.ratios(self.exchange.pool.index[sites]).max(initial=0.0) <= FEASIBLE)


def _best_pair(gain: Array) -> tuple[int, int] | None:
    best = gain.max(initial=-np.inf)
    if best <= SMALL_GAIN:
        return None
    site, position = np.unravel_index(np.argmax(gain.ravel() >= best - SMALL_GAIN), gain.shape)
    return int(position), int(site)


def most_informative(split: Split, problem: SiteProblem, chosen: Indices, *, rng: np.random.Generator,
                     deadline: float = np.inf, stop: Stop | None = None, starts: int = MOST_STARTS) -> Indices:
    """A set that costs no more than `chosen`, meets the limits and rules, and has the greatest log det found.

    Never worse than `chosen`, which must meet limits and rules. Sorted indices.
    """
    clock = Clock(deadline, stop)
    budget = float(problem.cost[chosen].sum())
    best = np.sort(chosen)
    climb = _climb(split, problem, best, budget, rng, clock)
    choice = Choice(climb.exchange.pool, climb.exchange.pool.places(best))
    best_value = climb.value(choice)
    climb.rise(choice)
    for round_ in range(starts):
        if climb.value(choice) > best_value + SMALL_GAIN:
            best, best_value = np.sort(climb.exchange.pool.index[choice.sites]), climb.value(choice)
        if clock.over():
            break
        if round_ % 10 == 9:
            climb = _climb(split, problem, best, budget, rng, clock)
        current = Choice(climb.exchange.pool, climb.exchange.pool.places(best))
        moved = climb.exchange.kick(current) if round_ % 2 else climb.exchange.attempt(patience=3)
        if moved is None:
            continue
        with np.errstate(over="ignore", invalid="ignore"):
            moved, worst = climb.exchange.improve(moved)
        if worst > FEASIBLE:
            continue
        climb.rise(moved)
        choice = moved
    return best


def _climb(split: Split, problem: SiteProblem, chosen: Indices, budget: float, rng: np.random.Generator,
           clock: Clock, limited: bool = True) -> Climb:
    """A climb in a pool of the sites that are best to swap in for one of the chosen, and others at random."""
    order = np.argsort(problem.key, kind="stable")
    order = order[~problem.forbidden[order]]
    keep = order
    if len(order) > POOL_SIZE:
        terms = determinants(split, problem)
        ridge = LAST_RIDGE * len(chosen) / problem.n
        gain = np.zeros(len(order))
        inverses = [term.inverse(chosen, ridge) for term in terms]
        for start in range(0, len(order), CHUNK):
            part = order[start:start + CHUNK]
            gain[start:start + CHUNK] = swap_gains(terms, inverses, chosen, part).max(axis=1)
        keep = np.concatenate([chosen, order[np.argsort(-gain, kind="stable")[:POOL_SIZE // 2]],
                               rng.choice(order, POOL_SIZE // 2, replace=False)])
    source = pool(split, problem, keep)
    return Climb(Exchange(split, source, budget, np.full(source.n, 1.0), rng, clock), problem, limited)


def d_optimal(split: Split, problem: SiteProblem, count: float, *, rng: np.random.Generator, deadline: float = np.inf,
              stop: Stop | None = None, starts: int = MOST_STARTS) -> Indices | None:
    raise NotImplementedError

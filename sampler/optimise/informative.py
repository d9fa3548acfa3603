"""D-optimal exchange: the most informative set of a given cost, with or without limits.

The pair of sites whose swap raises log det most is swapped until none does (Fedorov 1972). Where the climbs end depends on
how many sites lie at each place of the continuous optimum, and no single swap mends that; so there are many short starts
on the candidates that the continuous optimum hardly misses, and they end when the best value has come back often enough.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from sampler.optimise.blocks import Array, Split
from sampler.optimise.determinant import Determinant, best_swaps, determinants, offset, swap_gains, value
from sampler.optimise.exchange import FEASIBLE, LAST_RIDGE, Clock, Exchange, Stop
from sampler.optimise.log_det import log_det_bound
from sampler.optimise.lost import ratios_after_loss
from sampler.optimise.pool import Choice, Indices, key_rank, pool
from sampler.optimise.problem import SiteProblem

SMALL_GAIN = 1e-9
"""Gains of log det below this are rounding."""
POOL_PER_SITE = 25
LEAST_POOL, MOST_POOL = 200, 3000
SAME_POOL = 8
"""Starts in one pool before it is drawn anew."""
POLISHED_ALWAYS = 20_000
"""Up to so many candidates every start ends with a climb among all of them; of more, a start that is the best so far."""
UNIFORM = 0.5
"""Share of the starts that draw sites evenly; the others draw by the weights of the continuous optimum."""
PATIENCE = 6
"""Kicks without gain before a new start."""
RETURNS, RETURNS_PER_GAP, SMALL_GAP = 5, 40, 0.1
"""The search ends when so many starts have come to the best value; more where the bound leaves much room above it."""
STARTS = 400


class Climb:
    """The climb of log det in one pool; `limited`: only to sets that meet every limit."""

    def __init__(self, exchange: Exchange, problem: SiteProblem, limited: bool) -> None:
        self.exchange, self.limited = exchange, limited and exchange.split.limits > 0
        self.terms = determinants(exchange.split, problem, exchange.pool.index)
        if self.limited:
            exchange.watch_all()

    def value(self, choice: Choice) -> float:
        return value(self.terms, choice.sites)

    def rise(self, choice: Choice) -> None:
        """Swaps the best pair until no pair gains, then adds what the budget still allows; in place."""
        exchange = self.exchange
        ridge = exchange.ridge(LAST_RIDGE)
        while not exchange.clock.over():
            inverses = [term.inverse(choice.sites, ridge) for term in self.terms]
            allowed = choice.addable(exchange.budget)
            if allowed.any():
                gain = sum((term.slope(inverse, slice(None)) for term, inverse in zip(self.terms, inverses, strict=True)),
                           np.zeros(len(allowed)))
                choice.add(int(np.argmax(np.where(allowed, gain / exchange.pool.cost, -np.inf))))
                continue
            gains = swap_gains(self.terms, inverses, choice.sites)
            gains[~choice.swappable(exchange.budget)] = -np.inf
            pair = self._within_limits(choice, gains) if self.limited else _best_pair(gains)
            if pair is None:
                return
            choice.swap(*pair)

    def _within_limits(self, choice: Choice, gain: Array) -> tuple[int, int] | None:
        """The pair (position, site) that gains most of those that keep every limit."""
        limits = self.exchange.limits
        held = limits.inverses(choice.sites, self.exchange.ridge(LAST_RIDGE))
        dropped = limits.of(held) + limits.changes(held, choice.sites, -1.0)
        best, pair = SMALL_GAIN, None
        most = gain.max(axis=0)
        for position in np.argsort(-most, kind="stable"):
            if most[position] <= best:
                break
            sites = np.flatnonzero(gain[:, position] > best)
            active = dropped[position] > 1.0
            if active.any():
                left = limits.without(held, int(choice.sites[position]))
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
        pool = self.exchange.pool
        return bool(ratios_after_loss(self.exchange.split, pool.index[sites], pool.lost).max(initial=0.0) <= FEASIBLE)

    def start(self, uniform: bool) -> Choice | None:
        """A set on a peak of its own, and one that meets the limits if it must."""
        choice = self.exchange.start(uniform)
        return None if choice is None else self.to_peak(choice)

    def to_peak(self, choice: Choice) -> Choice | None:
        if self.limited:
            with np.errstate(over="ignore", invalid="ignore"):
                choice, worst = self.exchange.improve(choice)
            if worst > FEASIBLE:
                return None
        self.rise(choice)
        return choice

    def wander(self, choice: Choice) -> Choice:
        """Kicks and climbs from the best set so far until none helps."""
        best, misses = self.value(choice), 0
        while misses < PATIENCE and not self.exchange.clock.over():
            other = self.to_peak(self.exchange.kick(choice))
            misses += 1
            if other is not None and self.value(other) > best + SMALL_GAIN:
                choice, best, misses = other, self.value(other), 0
        return choice


def _best_pair(gain: Array) -> tuple[int, int] | None:
    best = gain.max(initial=-np.inf)
    if best <= SMALL_GAIN:
        return None
    site, position = np.unravel_index(np.argmax(gain.ravel() >= best - SMALL_GAIN / 2), gain.shape)
    return int(position), int(site)


@dataclass(slots=True)
class _Best:
    sites: Indices
    value: float
    returns: int = 0

    def offer(self, sites: Indices, new: float) -> None:
        if new > self.value + SMALL_GAIN:
            self.sites, self.value, self.returns = sites, new, 0
        self.returns += abs(new - self.value) <= SMALL_GAIN * max(1.0, abs(new))


def most_informative(split: Split, problem: SiteProblem, chosen: Indices, *, rng: np.random.Generator,
                     deadline: float = np.inf, stop: Stop | None = None, starts: int = STARTS) -> Indices:
    """A set that costs no more than `chosen`, meets the limits and rules, and has the greatest log det found.

    Never worse than `chosen`, which must meet limits and rules. Sorted indices.
    """
    budget = float(problem.cost[chosen].sum())
    return _best_set(split, problem, budget, True, np.sort(chosen), rng, Clock(deadline, stop), starts)


def d_optimal(split: Split, problem: SiteProblem, budget: float, *, rng: np.random.Generator, deadline: float = np.inf,
              stop: Stop | None = None, starts: int = STARTS) -> Indices | None:
    """The set of greatest log det found that costs at most `budget` (that many sites when costs are one) and keeps the
    rules, whatever the limits; None when the rules admit no set that was found. Sorted indices.
    """
    found = _best_set(split, problem, budget, False, np.zeros(0, np.int64), rng, Clock(deadline, stop), starts)
    return found if len(found) else None


def _best_set(split: Split, problem: SiteProblem, budget: float, limited: bool, chosen: Indices,
              rng: np.random.Generator, clock: Clock, starts: int) -> Indices:
    peak = log_det_bound(split, problem, budget, limited=limited, deadline=clock.deadline)
    bound = peak.value - offset(split, problem) if np.isfinite(peak.value) else np.inf
    pools = _Pools(split, problem, budget, limited, peak.weights, rng, clock)
    best = _Best(chosen, value(pools.terms, chosen) if len(chosen) else -np.inf)
    if len(chosen):
        best.offer(*pools.polished(chosen, best.value))
    for number in range(starts):
        gap = float(np.clip(bound - best.value, SMALL_GAP, 1.0)) - SMALL_GAP
        if clock.over() or best.returns >= RETURNS + RETURNS_PER_GAP * gap:
            break
        if number % SAME_POOL == 0:
            climb = pools.climb(peak.gains, best.sites)
        choice = climb.start(bool(rng.uniform() < UNIFORM))
        if choice is None and len(best.sites):
            climb = pools.climb(peak.gains, best.sites)  # the pool at hand may be older than the best set
            choice = Choice(climb.exchange.pool, climb.exchange.pool.places(best.sites))
        if choice is None:
            continue
        choice = climb.wander(choice)
        found, reached = np.sort(climb.exchange.pool.index[choice.sites]), climb.value(choice)
        if problem.n <= POLISHED_ALWAYS or reached > best.value + SMALL_GAIN:
            found, reached = pools.polished(found, reached)
        best.offer(found, reached)
    return best.sites


@dataclass(slots=True)
class _Pools:
    """Climbs in pools of a problem's candidates."""

    split: Split
    problem: SiteProblem
    budget: float
    limited: bool
    weights: Array
    rng: np.random.Generator
    clock: Clock
    terms: list[Determinant] = field(init=False)
    rank: Indices = field(init=False)

    def __post_init__(self) -> None:
        self.terms = determinants(self.split, self.problem)
        self.rank = key_rank(self.problem)

    def polished(self, chosen: Indices, reached: float) -> tuple[Indices, float]:
        """The set after the climb's last steps with all candidates: in pools of those that are best to swap in."""
        while not self.clock.over():
            ridge = LAST_RIDGE * len(chosen) / self.problem.n
            inverses = [term.inverse(chosen, ridge) for term in self.terms]
            climb = self.climb(best_swaps(self.terms, inverses, chosen), chosen, spread=False)
            choice = Choice(climb.exchange.pool, climb.exchange.pool.places(chosen))
            climb.rise(choice)
            after = climb.value(choice)
            if after <= reached + SMALL_GAIN:
                break
            chosen, reached = np.sort(climb.exchange.pool.index[choice.sites]), after
        return chosen, reached

    def climb(self, gains: Array, chosen: Indices, spread: bool = True) -> Climb:
        """A climb in a pool of the candidates of greatest gain, of some others if `spread`, and of the chosen."""
        problem = self.problem
        size = int(np.clip(POOL_PER_SITE * self.budget / problem.cost.mean(), LEAST_POOL, MOST_POOL))
        allowed = np.flatnonzero(~problem.forbidden)
        keep = [chosen, allowed[_greatest(gains[allowed], self.rank[allowed], size)]]
        for members, low in zip(problem.rules.members, problem.rules.lower, strict=True):
            if low > 0:
                keep.append(members[_greatest(gains[members], self.rank[members], size // 4)])
        if spread and len(allowed) > size:
            order = allowed[np.argsort(self.rank[allowed], kind="stable")]
            keep.append(self.rng.choice(order, min(LEAST_POOL, len(order)), replace=False))
        source = pool(self.split, problem, np.concatenate(keep))
        likely = np.maximum(self.weights[source.index], 0.0) + 0.05 * self.budget / max(source.n, 1)
        return Climb(Exchange(self.split, source, self.budget, likely, self.rng, self.clock), problem, self.limited)


def _greatest(gains: Array, rank: Indices, size: int) -> Indices:
    """Positions of the greatest gains; of equal ones those of the first keys."""
    if len(gains) <= size:
        return np.arange(len(gains))
    near = np.flatnonzero(gains >= np.partition(gains, -size)[-size])
    return near[np.lexsort((rank[near], -gains[near]))[:size]]

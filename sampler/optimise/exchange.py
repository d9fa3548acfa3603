"""Exchange: cheap sets that meet the limits, found by swapping sites while a smooth worst ratio falls.

The score of a set is Σ_l v_l^ρ over its variance ratios, with ρ that rises: a smooth stand-in for the worst ratio that
sees the others too. Each swap is scored for all candidates in one pass by the formulas of `variances.py`. What comes out
is judged by `ratios_after_loss` alone: no ridge, no watched subset.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from sampler.optimise.blocks import Array, Split
from sampler.optimise.lost import ratios_after_loss
from sampler.optimise.lost_variances import LostVariances
from sampler.optimise.pool import (
    TIE,
    TIE_DIGITS,
    Choice,
    Indices,
    Mask,
    Pool,
    ascending,
    cost_step,
    first_best,
    key_rank,
    pool,
)
from sampler.optimise.problem import SiteProblem
from sampler.optimise.variances import Variances, inverted, powers

FEASIBLE = 1.0 + 1e-9
"""A variance ratio up to this meets its limit: it is rounding of the basis change and of the inverse."""
EXPONENTS = (8, 32, 128)
RIDGES = (1e-2, 1e-4)
"""Ridges of the first descents of a start, so that it may begin with too few directions; then LAST_RIDGE. Relative to the
information of an average set of that size. They steer the search only: sets are judged without."""
LAST_RIDGE = 1e-9
SMALL_CHANGE = 1e-6
"""A swap must lower the score by this share, so that rounding cannot make the search go round in circles."""
NEGLIGIBLE = 0.02
"""A limit whose term of the score was below this before a site is added only falls further: it is taken as it is."""
WATCHED = 128
"""Limits scored at first; of more limits, those that are nearly reached and some of the others stand for all."""
REDUCED_COST_CUTS = (0.3, np.inf, 0.1)
"""Candidates of a start: those whose reduced cost is below this share of an average cost, in turn."""
POOL_SIZE = 2000
PATIENCE = 20
"""Kicks without gain before a new start."""
RETURNS = 6
"""A cost is given up when this many starts ended at the same least worst ratio above 1."""
STARTS = 30
"""Starts without success before `fewest` gives up on a cost; the deadline may end it earlier."""

FIRST_REACH = 0.1
"""`fewest` first tries this share above the lower bound, and twice as far after each failure."""

Stop = Callable[[], bool]


@dataclass(slots=True)
class Clock:
    """Tells when to stop: at the deadline (of time.monotonic) or when asked to."""

    deadline: float = np.inf
    stop: Stop | None = None

    def over(self) -> bool:
        return time.monotonic() >= self.deadline or (self.stop is not None and self.stop())


@dataclass(slots=True)
class Exchange:
    """A pool under a budget, and the limits that are watched. `weights` (n,): how likely a start takes each site."""

    split: Split
    pool: Pool
    budget: float
    weights: Array
    rng: np.random.Generator
    clock: Clock
    watch: Indices = field(init=False)
    limits: Variances = field(init=False)

    def __post_init__(self) -> None:
        split = self.split
        self.watch = np.arange(split.limits)
        if split.limits > WATCHED:
            inverses = [inverted((rows * self.weights[:, None, None]).reshape(-1, block.q).T
                                      @ rows.reshape(-1, block.q) + block.prior + self.ridge(1e-6) * np.eye(block.q))
                        for rows, block in zip(self.pool.rows, split.blocks, strict=True)]
            tight = ascending(Variances(split, self.pool, self.watch).of(inverses))[-WATCHED // 2:]
            self.watch = np.union1d(tight, np.arange(0, split.limits, split.limits // (WATCHED // 2)))
        self.limits = self._scored()

    def ridge(self, share: float) -> float:
        """A share of the information that a set of average sites of this budget would give in the orthonormal basis."""
        sites = max(1.0, self.budget / self.pool.cost.mean()) if self.pool.n else 1.0
        return share * sites / max(self.split.blocks[0].n, 1)

    def _scored(self) -> Variances:
        return (LostVariances if self.pool.lost else Variances)(self.split, self.pool, self.watch)

    def ratios(self, choice: Choice) -> Array:
        """Every limit's ratio; the worst one that is not watched is watched from now on."""
        ratios = ratios_after_loss(self.split, self.pool.index[choice.sites], self.pool.lost)
        worst = first_best(ratios, ratios.max()) if len(ratios) else 0
        if len(ratios) > len(self.watch) and worst not in self.watch and ratios[worst] > ratios[self.watch].max():
            self.watch = np.append(self.watch, worst)
            self.limits = self._scored()
        return ratios

    def watch_all(self) -> None:
        if len(self.watch) < self.split.limits:
            self.watch = np.arange(self.split.limits)
            self.limits = self._scored()

    def start(self, uniform: bool = False) -> Choice | None:
        """Required sites, and others drawn by weight, or evenly, while the budget allows; None if the rules are not served."""
        choice = Choice(self.pool, np.flatnonzero(self.pool.required))
        while True:
            allowed = np.flatnonzero(choice.addable(self.budget))
            if not len(allowed):
                return None if choice.missing or np.any(choice.counts > self.pool.upper) else choice
            choice.add(int(self.rng.choice(allowed)) if uniform else self._draw(allowed))

    def _draw(self, sites: Indices) -> int:
        cumulative = np.cumsum(self.weights[sites])
        return int(sites[np.searchsorted(cumulative, self.rng.uniform(0.0, cumulative[-1]), side="right").clip(
            0, len(sites) - 1)])

    def kick(self, choice: Choice) -> Choice:
        """A copy with one to three sites swapped at random."""
        changed = choice.copy()
        for _ in range(self.rng.integers(1, 4)):
            allowed = changed.swappable(self.budget)
            positions = np.flatnonzero(allowed.any(axis=0))
            if not len(positions):
                break
            position = int(self.rng.choice(positions))
            changed.swap(position, self._draw(np.flatnonzero(allowed[:, position])))
        return changed

    def fill(self, choice: Choice, exponent: int, ridge: float) -> None:
        """Adds the sites that lower the score most for their cost while the budget allows any."""
        while True:
            allowed = choice.addable(self.budget)
            if not allowed.any():
                return
            inverses = self.limits.inverses(choice.sites, ridge)
            before = self.limits.of(inverses)
            worst = max(before.max(initial=0.0), np.finfo(float).tiny)
            after = before - self.limits.changes(inverses, None, 1.0)
            gain = ((before / worst) ** exponent).sum() - powers(np.maximum(after, 0.0) / worst, exponent).sum(axis=1)
            gain = np.where(allowed, np.maximum(gain, 0.0) / self.pool.cost, -1.0)
            choice.add(first_best(gain, gain.max()))

    def descend(self, choice: Choice, exponent: int, ridge: float) -> None:
        """Swaps until none lowers the score, in place; the sites that the set can best do without go first."""
        limits = self.limits
        inverses = limits.inverses(choice.sites, ridge)
        variance = limits.of(inverses)
        while len(variance) and not self.clock.over():
            worst = variance.max()
            score = ((variance / worst) ** exponent).sum()
            dropped = variance + limits.changes(inverses, choice.sites, -1.0)
            allowed = choice.swappable(self.budget)
            for position in ascending(powers(dropped / worst, exponent).sum(axis=1)):
                site = self._best(inverses, dropped[position] / worst, worst, int(choice.sites[position]),
                                  allowed[:, position], exponent, score)
                if site < 0:
                    continue
                held = choice.sites[position]
                choice.swap(position, site)
                inverses = limits.inverses(choice.sites, ridge)
                variance = limits.of(inverses)
                if ((variance / worst) ** exponent).sum() < score * (1.0 - SMALL_CHANGE / 2):
                    break
                choice.swap(position, held)  # rounding promised too much
                return
            else:
                return

    def _best(self, inverses: list[Array], dropped: Array, worst: float, site: int, allowed: Mask, exponent: int,
              score: float) -> int:
        """The candidate that lowers the score most in the place of `site`; −1 if none lowers it."""
        active = dropped > NEGLIGIBLE ** (1.0 / exponent)
        whole = active.all()
        change = self.limits.changes(self.limits.without(inverses, site), None, 1.0, None if whole else active)
        change /= -worst
        change += dropped if whole else dropped[active]
        after = powers(np.maximum(change, 0.0, out=change), exponent).sum(axis=1)
        after += 0.0 if whole else (dropped[~active] ** exponent).sum()
        after[~allowed] = np.inf
        least = after.min(initial=np.inf)
        return first_best(after, least) if least < score * (1.0 - SMALL_CHANGE) else -1

    def improve(self, choice: Choice) -> tuple[Choice, float]:
        """The choice after descents with every exponent, and its worst ratio."""
        for exponent in EXPONENTS:
            self.descend(choice, exponent, self.ridge(LAST_RIDGE))
            self.fill(choice, exponent, self.ridge(LAST_RIDGE))
        return choice, float(self.ratios(choice).max(initial=0.0))

    def attempt(self, patience: int) -> tuple[Choice | None, float]:
        """One start: descents, then kicks from the best set so far until none helps. The set and its worst ratio, or None
        if the rules admitted none."""
        best = self.start()
        if best is None:
            return None, np.inf
        with np.errstate(over="ignore", invalid="ignore"):
            self.limits = Variances(self.split, self.pool, self.watch)  # losses, if any, are looked at when it is nearly done
            for share in RIDGES:
                self.descend(best, EXPONENTS[0], self.ridge(share))
            self.limits = self._scored()
            best, least = self.improve(best)
            misses = 0
            while least > FEASIBLE and misses < patience and not self.clock.over():
                other, worst = self.improve(self.kick(best))
                misses = 0 if worst < least * (1.0 - SMALL_CHANGE) else misses + 1
                if worst <= least * (1.0 + TIE):
                    best, least = other, worst
        return best, least


def exchanges(split: Split, problem: SiteProblem, budget: float, *, weights: Array | None, reduced_costs: Array | None,
              rng: np.random.Generator, clock: Clock, round_: int) -> Exchange:
    """The exchange of one start: the pool changes from start to start."""
    scale = max(float(problem.cost.mean()), np.finfo(float).tiny)
    keep = np.ones(problem.n, bool)
    if reduced_costs is not None:
        keep = reduced_costs < REDUCED_COST_CUTS[round_ % len(REDUCED_COST_CUTS)] * scale
    share = np.zeros(problem.n) if weights is None else np.maximum(weights, 0.0)
    size = POOL_SIZE if not problem.lost else POOL_SIZE // 4
    if np.count_nonzero(keep) > size:
        order = np.flatnonzero(keep)
        order = order[np.argsort(key_rank(problem)[order], kind="stable")]
        first = order[np.argsort(-share[order], kind="stable")[:size // 4]]
        keep = np.zeros(problem.n, bool)
        keep[first[share[first] > 0]] = True
        keep[rng.choice(order, size - size // 4, replace=False)] = True
    source = pool(split, problem, np.flatnonzero(keep))
    likely = share[source.index]
    likely = likely / max(likely.sum(), np.finfo(float).tiny) * budget / scale + (0.05 if weights is not None else 1.0) \
        * budget / scale / max(source.n, 1)
    return Exchange(split, source, budget, likely, rng, clock)


def find(split: Split, problem: SiteProblem, count: float, *, weights: Array | None = None,
         reduced_costs: Array | None = None, rng: np.random.Generator, deadline: float = np.inf, stop: Stop | None = None,
         starts: int = STARTS, patience: int = PATIENCE) -> Indices | None:
    """A set of cost at most `count` (that many sites when costs are one) that meets limits and rules, or None.

    `weights`, `reduced_costs` (n,) of the relaxation guide it. `deadline` is a time of `time.monotonic`.
    """
    clock = Clock(deadline, stop)
    least, returns = np.inf, 0
    if len(split.impossible):
        return None
    for round_ in range(starts):
        if clock.over():
            return None
        search = exchanges(split, problem, count, weights=weights, reduced_costs=reduced_costs, rng=rng, clock=clock,
                           round_=round_)
        choice, worst = search.attempt(patience)
        if choice is not None and worst <= FEASIBLE:
            return np.sort(search.pool.index[choice.sites])
        if worst < least * (1.0 - TIE):
            least, returns = worst, 0
        returns += worst <= least * (1.0 + TIE)
        if returns >= RETURNS:
            return None
    return None


def prune(split: Split, problem: SiteProblem, chosen: Indices) -> Indices:
    """Drops sites, dearest first and then by how little they are missed, while every limit and rule is still met."""
    source = pool(split, problem, chosen)
    choice = Choice(source, source.places(chosen))
    while len(choice):
        options = np.flatnonzero(choice.droppable())
        worst = np.array([ratios_after_loss(split, source.index[np.delete(choice.sites, i)], source.lost).max(initial=0.0)
                          for i in options])
        options, worst = options[worst <= FEASIBLE], worst[worst <= FEASIBLE]
        if not len(options):
            break
        choice.drop(int(options[np.lexsort((np.round(worst, TIE_DIGITS), -source.cost[choice.sites[options]]))[0]]))
    return np.sort(source.index[choice.sites])


def fewest(split: Split, problem: SiteProblem, *, weights: Array | None = None, reduced_costs: Array | None = None,
           upper: float | None = None, lower: float = 1, rng: np.random.Generator, deadline: float = np.inf,
           stop: Stop | None = None, on_found: Callable[[Indices], None] | None = None, starts: int = STARTS) -> Indices | None:
    """The cheapest set found that meets limits and rules and costs less than `upper`; None if there was none.

    Single starts close the interval between `lower` and the best cost, first in growing steps from below; then `starts`
    starts try the next cost below the best. Every better set is told to `on_found` at once.
    """
    clock, best = Clock(deadline, stop), None
    total = float(problem.cost[~problem.forbidden].sum())
    step = cost_step(problem.cost)
    least_step = step if step is not None else max(SMALL_CHANGE * total, np.finfo(float).tiny)
    cost, low = total + least_step if upper is None else upper, float(lower)
    reach = max(2.0 * least_step, FIRST_REACH * low)
    while lower <= cost - least_step and not clock.over():
        last = low + least_step > cost - least_step
        target = cost - least_step if last else low + min((cost - least_step - low) / 2, reach)
        if step is not None:
            target = step * np.floor(target / step + SMALL_CHANGE)
        found = find(split, problem, target, weights=weights, reduced_costs=reduced_costs, rng=rng, deadline=deadline,
                     stop=stop, starts=starts if last else 1, patience=PATIENCE if last else PATIENCE // 4)
        if found is None:
            if last:
                break
            low, reach = target + least_step, 2.0 * reach
            continue
        best = prune(split, problem, found)
        cost = float(problem.cost[best].sum())
        if on_found is not None:
            on_found(best)
    return best

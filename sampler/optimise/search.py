"""The fewest sites, or the cheapest: bound from below, find from above, and decide what lies between.

1. relaxation   every limit is a family of covering rows; the duals of a few of them bound the cost of every set
2. counting     n sites of rank m tell at most n·m directions apart
3. exchange     finds sets; when its cost is the bound rounded up, that is the proof
4. decision     else the tree settles "can sites of cost c do it?" upward from the bound
5. D-optimal    among the sets of the least cost, exchange on log det, and a bound on what any of them could reach
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.arrow import Arrow, arrow, arrow_log_det
from sampler.optimise.blocks import Split, split
from sampler.optimise.certificate import bound_certificate, counting_certificate
from sampler.optimise.counting import counting_bound, rules_admit
from sampler.optimise.exchange import fewest
from sampler.optimise.informative import most_informative
from sampler.optimise.log_det import log_det, log_det_bound
from sampler.optimise.lost import ratios_after_loss
from sampler.optimise.pool import cost_step
from sampler.optimise.pooled_search import search_pooled
from sampler.optimise.problem import SearchResult, SiteProblem
from sampler.optimise.relaxation import FEASIBLE, Relaxation, relax
from sampler.optimise.spacing import spaced
from sampler.optimise.tree import decide

Progress = Callable[[float, float], None]
Indices = NDArray[np.int64]

ROUNDING = 1e-7
"""A bound this little above a whole number, relatively, is not rounded up."""
POOLED_TERMS = 60
"""With at least so many terms, of which each site tells of a few, patterns of cells take the place of fractions of sites."""
COST_GAP = 1e-3
"""Costs that are not whole numbers are closed in on to this share: sets of nearly the same cost are hard to tell apart."""
FIRST_TURN = 0.2
TURN_GROWTH = 3.0
"""Seconds that exchange, and then the tree, work before the other has its turn, and how they grow. They do not depend on
the time limit, so a longer search begins with what a shorter one does."""
LOST_TURN = 4.0
"""With losses exchange finds soon what it can, and the tree takes its time: its turns are so many times longer."""
POLISH_SHARE = 0.1
LEAST_POLISH, LEAST_BOUND = 5.0, 2.0
POLISH_STARTS = 12
"""Of the time limit this share is kept for log det; when the proof was quick, so many seconds are spent at most on raising it,
from so many starts so that one seed gives one answer, and on the bound of it so many or as long as everything before took."""
MOST_NEAR, NEARLY_PAID = 20_000, 0.1


@dataclass(slots=True)
class _Standing:
    """The interval as it stands: no set costs less than `bound`; `chosen` costs `cost`."""

    problem: SiteProblem
    parts: Split
    began: float
    progress: Progress | None
    bound: float = 0.0
    cost: float = np.inf
    chosen: Indices | None = None
    certificate: dict[str, Any] = field(default_factory=dict)
    history: list[tuple[float, float, float]] = field(default_factory=list)

    def prove(self, bound: float, certificate: dict[str, Any] | None) -> None:
        """Raises the bound if there is a certificate for more than is known."""
        if certificate is not None and bound > self.bound:
            self.bound = bound
            self.certificate = certificate
            self._tell()

    def offer(self, chosen: Indices | None) -> None:
        """Takes a set if it is the cheapest so far and meets limits and rules."""
        if chosen is not None and self.problem.cost[chosen].sum() < self.cost and meets(self.parts, self.problem, chosen):
            self.chosen, self.cost = np.sort(chosen), float(self.problem.cost[chosen].sum())
            self._tell()

    def taking(self, near: _Near) -> Callable[[Indices], None]:
        """Offers sets that are found among nearby sites."""
        return lambda found: self.offer(near.outward(found))

    def _tell(self) -> None:
        self.history.append((time.monotonic() - self.began, self.bound, self.cost))
        if self.progress is not None:
            self.progress(self.bound, self.cost)

    def result(self, status: str, *, log_det: float = np.nan, log_det_bound: float = np.nan, worst_ratio: float = np.nan,
               interrupted: bool = False) -> SearchResult:
        return SearchResult(self.chosen, status, self.bound, self.certificate, log_det, log_det_bound, tuple(self.history),
                            time.monotonic() - self.began, interrupted, worst_ratio)


def search(problem: SiteProblem, *, seconds: float, seed: int, progress: Progress | None = None,
           stop: Callable[[], bool] | None = None, warm: SearchResult | None = None) -> SearchResult:
    """The cheapest set of sites that meets limits and rules, with what is proven about it; see SearchResult.

    `stop()` true, or the end of `seconds`, ends the search with the best set and the bound so far. `warm`: the result of a
    like problem on the same sites; its set is used if it meets this one's limits.
    """
    began = time.monotonic()
    order = np.argsort(problem.key, kind="stable")
    ordered = problem if np.array_equal(order, np.arange(problem.n)) else subset(problem, order)
    place = np.argsort(order)
    start = None if warm is None or warm.chosen is None else np.sort(place[warm.chosen])
    result = _search(ordered, began, began + seconds, np.random.default_rng(seed), progress, stop, start)
    return result if result.chosen is None else replace(result, chosen=np.sort(order[result.chosen]))


def subset(problem: SiteProblem, sites: Indices) -> SiteProblem:
    """The problem on the sites named, in that order."""
    place = np.full(problem.n, -1)
    place[sites] = np.arange(len(sites))
    members = tuple(np.sort(place[inside][place[inside] >= 0]) for inside in problem.rules.members)
    return replace(problem, blocks=problem.blocks[sites], cost=problem.cost[sites], required=problem.required[sites],
                   forbidden=problem.forbidden[sites], key=problem.key[sites],
                   rules=replace(problem.rules, members=members),
                   xy=None if problem.xy is None else problem.xy[sites])


def _search(problem: SiteProblem, began: float, until: float, rng: np.random.Generator, progress: Progress | None,
            stop: Callable[[], bool] | None, start: Indices | None) -> SearchResult:
    def ended() -> bool:
        return time.monotonic() >= until or (stop is not None and stop())

    shape = arrow(problem) if problem.p >= POOLED_TERMS and not problem.lost and not problem.spacing else None
    if shape is not None and rules_admit(problem):
        return _search_pooled(problem, shape, began, until, rng, progress, stop)
    parts = split(problem)
    standing = _Standing(problem, parts, began, progress)
    if not rules_admit(problem):
        return standing.result("rules")
    relaxed = relax(parts, problem, seconds=until - time.monotonic(), progress=progress, stop=stop)
    if relaxed.worst_ratio**2 > FEASIBLE:
        return standing.result("cannot", worst_ratio=relaxed.worst_ratio)
    standing.prove(relaxed.bound, _linear_certificate(problem, relaxed))
    step = cost_step(problem.cost)
    counted = counting_bound(parts, problem)
    if step is not None and rounded_up(counted, step) > rounded_up(standing.bound, step):
        counted = rounded_up(counted, step)
        standing.prove(counted, counting_certificate(parts, problem, counted - step))
    for known in (start, heaviest(parts, problem, relaxed.weights), np.flatnonzero(~problem.forbidden)):
        standing.offer(known)

    near, pace = _Near.of(parts, problem, relaxed), time.monotonic() - began
    kept = min(max(POLISH_SHARE * (until - began), 2.0 * pace), 0.5 * (until - began))
    _close(standing, parts, relaxed, near, step, rng, until - kept, pace, stop)
    if standing.chosen is None:
        return standing.result("rules" if standing.bound > most_cost(problem) else "interval", interrupted=ended())
    proven = rounded_up(standing.bound, step) >= standing.cost * (1.0 - ROUNDING)
    now = time.monotonic()
    polished = min(until - pace, now + max(LEAST_POLISH, POLISH_SHARE * (now - began)))
    chosen = near.outward(most_informative(near.parts, near.problem, near.inward(standing.chosen), rng=rng.spawn(1)[0],
                                           deadline=polished, stop=stop, starts=POLISH_STARTS))
    now, standing.chosen, reach = time.monotonic(), chosen, np.inf
    if until - now >= pace:
        reach = log_det_bound(parts, problem, standing.cost, deadline=min(until, now + max(LEAST_BOUND, now - began))).value
    return standing.result("proven" if proven else "interval", log_det=log_det(parts, problem, chosen),
                           log_det_bound=reach, interrupted=not proven and ended())


def _search_pooled(problem: SiteProblem, shape: Arrow, began: float, until: float, rng: np.random.Generator,
                   progress: Progress | None, stop: Callable[[], bool] | None) -> SearchResult:
    """The search when each cell has terms of its own; log det has no bound there."""
    history: list[tuple[float, float, float]] = []

    def tell(bound: float, chosen: Indices | None) -> None:
        cost = np.inf if chosen is None else float(problem.cost[chosen].sum())
        history.append((time.monotonic() - began, bound, cost))
        if progress is not None:
            progress(bound, cost)

    found = search_pooled(problem, shape, seconds=until - time.monotonic(), rng=rng, tell=tell, stop=stop)
    step, cost = cost_step(problem.cost), np.inf if found.chosen is None else float(problem.cost[found.chosen].sum())
    if found.worst_ratio**2 > FEASIBLE:
        status = "cannot"
    elif found.chosen is None:
        status = "rules" if found.bound > most_cost(problem) else "interval"
    else:
        status = "proven" if rounded_up(found.bound, step) >= cost * (1.0 - ROUNDING) else "interval"
    ended = time.monotonic() >= until or (stop is not None and stop())
    value = arrow_log_det(shape, found.chosen) if found.chosen is not None and problem.interest.all() else np.nan
    return SearchResult(found.chosen, status, found.bound, found.certificate, value, np.inf, tuple(history),
                        time.monotonic() - began, status == "interval" and ended,
                        found.worst_ratio if status == "cannot" else np.nan)


@dataclass(frozen=True, slots=True)
class _Near:
    """The sites that exchange works on: all, or of very many a sample of those that the relaxation's duals nearly pay for."""

    sites: Indices
    parts: Split
    problem: SiteProblem
    weights: NDArray[np.float64]
    reduced_costs: NDArray[np.float64]

    @classmethod
    def of(cls, parts: Split, problem: SiteProblem, relaxed: Relaxation) -> _Near:
        if problem.n <= MOST_NEAR or problem.rules.members:
            return cls(np.arange(problem.n), parts, problem, relaxed.weights, relaxed.reduced_costs)
        held = problem.required | (relaxed.weights > 0)
        cheap = np.flatnonzero(~held & ~problem.forbidden & (relaxed.reduced_costs < NEARLY_PAID * problem.cost))
        some = np.random.default_rng(0).choice(cheap, min(MOST_NEAR, len(cheap)), replace=False)
        sites = np.union1d(np.flatnonzero(held), some)
        return cls(sites, replace(parts, blocks=tuple(replace(block, rows=block.rows[sites]) for block in parts.blocks)),
                   subset(problem, sites), relaxed.weights[sites], relaxed.reduced_costs[sites])

    def guided(self, weights: NDArray[np.float64]) -> _Near:
        """The same with weights (n,) that know of losses and spacing, as the relaxation's do not."""
        here = weights[self.sites]
        return replace(self, weights=here, reduced_costs=np.where(here > 0, 0.0, self.reduced_costs))

    def outward(self, chosen: Indices) -> Indices:
        return np.sort(self.sites[chosen])

    def inward(self, chosen: Indices) -> Indices:
        return np.searchsorted(self.sites, chosen)


def _close(standing: _Standing, parts: Split, relaxed: Relaxation, near: _Near, step: float | None,
           rng: np.random.Generator, until: float, pace: float, stop: Callable[[], bool] | None) -> None:
    """Exchange from above and the tree from below, in turns, until they meet or time ends; `pace`: seconds that a few
    passes over all candidates take, which the tree needs before it looks at the clock.

    When costs are not whole numbers they meet when the tree has excluded all below the best cost less COST_GAP of it.
    """
    problem, turn = standing.problem, FIRST_TURN
    while time.monotonic() < until and not (stop is not None and stop()):
        least = rounded_up(standing.bound, step)
        enough = standing.cost * (1.0 - (ROUNDING if step is not None else COST_GAP))
        if least >= enough or least > most_cost(problem):
            return
        fewest(
            near.parts, near.problem, weights=near.weights, reduced_costs=near.reduced_costs,
            upper=None if standing.chosen is None else standing.cost, lower=least, rng=rng.spawn(1)[0],
            deadline=min(until, time.monotonic() + turn), stop=stop,
            on_found=standing.taking(near))
        left = min(turn * (LOST_TURN if problem.lost else 1.0), until - time.monotonic())
        asked = least if step is not None else standing.cost * (1.0 - COST_GAP)
        if asked < standing.cost * (1.0 - ROUNDING) and left > pace:
            decision = decide(parts, problem, asked, rows=relaxed.rows, weights=relaxed.weights, stop=stop, seconds=left)
            standing.offer(decision.chosen)
            if decision.weights is not None and (problem.lost or problem.spacing):
                near = near.guided(decision.weights)
            if decision.status == "impossible":
                standing.prove(asked + (step or 0.0), decision.certificate)
                continue
        turn *= TURN_GROWTH


def _linear_certificate(problem: SiteProblem, relaxed: Relaxation) -> dict[str, Any]:
    z, limit = relaxed.rows.in_own_terms(problem)
    rules = tuple((int(rule), -float(relaxed.rule_duals[rule])) for rule in np.flatnonzero(relaxed.rule_duals))
    return bound_certificate(problem, relaxed.bound, limit, z, relaxed.duals, rules)


def meets(parts: Split, problem: SiteProblem, chosen: Indices) -> bool:
    """Whether the chosen sites meet every limit and rule, also after the losses that must be borne."""
    inside = np.zeros(problem.n, bool)
    inside[chosen] = True
    counts = np.array([inside[members].sum() for members in problem.rules.members])
    return bool(not np.any(problem.required & ~inside) and not np.any(problem.forbidden & inside)
                and np.all(counts >= problem.rules.lower) and np.all(counts <= problem.rules.upper)
                and (problem.max_sites is None or len(chosen) <= problem.max_sites)
                and (problem.xy is None or problem.spacing <= 0 or spaced(problem.xy[chosen], problem.spacing))
                and np.all(ratios_after_loss(parts, chosen, problem.lost) <= FEASIBLE))


def heaviest(parts: Split, problem: SiteProblem, weights: NDArray[np.float64]) -> Indices:
    """The fewest sites of most weight that meet the limits, rules left aside: a set to begin with.

    Adding a site never raises a variance, so the number can be bisected.
    """
    order = np.argsort(-np.where(problem.required, np.inf, weights), kind="stable")
    few, enough = int(problem.required.sum()), int((~problem.forbidden).sum())
    while few < enough:
        middle = (few + enough) // 2
        met = np.all(ratios_after_loss(parts, np.sort(order[:middle]), problem.lost) <= FEASIBLE)
        few, enough = (few, middle) if met else (middle + 1, enough)
    return np.sort(order[:enough])


def most_cost(problem: SiteProblem) -> float:
    """What the dearest set within max_sites costs; a bound above it says that no set will do."""
    allowed = np.sort(problem.cost[~problem.forbidden])[::-1]
    return float(allowed[:problem.max_sites].sum()) * (1.0 + ROUNDING)


def rounded_up(bound: float, step: float | None) -> float:
    """The least cost that the bound leaves possible."""
    return bound if step is None else step * float(np.ceil(bound / step * (1.0 - ROUNDING) - ROUNDING))

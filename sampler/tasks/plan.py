"""The main job: the fewest sites that meet every limit, the proof, and the D-optimal choice among the fewest."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.optimise.blocks import split
from sampler.optimise.informative import d_optimal
from sampler.optimise.log_det import log_det, log_det_bound
from sampler.optimise.log_det_tree import branched_log_det_bound
from sampler.optimise.lost import ratios_after_loss
from sampler.optimise.problem import SearchResult, SiteProblem
from sampler.optimise.search import search
from sampler.panel.region import RegionPoints
from sampler.route.bound import site_seconds_lower
from sampler.route.machine import to_machine_frame
from sampler.route.visit import far_side
from sampler.tasks.advise import advise
from sampler.tasks.chance import miss_chance
from sampler.tasks.loss import with_losses, worst_losses
from sampler.tasks.prove import stated
from sampler.tasks.question import (
    Question,
    achieved,
    everything,
    knowledge_of,
    limits_achieved,
    problem_of,
    question,
    region_rows,
    worst_of,
)
from sampler.tasks.results import MEETS, Audit, Plan
from sampler.tasks.rules import unit_rules
from sampler.tasks.study import RegionLimit, Study
from sampler.tasks.units import Visits
from sampler.tasks.visiting import panel_size, quicker, routed
from sampler.uncertainty.information import Knowledge
from sampler.uncertainty.limits import stack
from sampler.uncertainty.position import WorstPlace

Progress = Callable[[float, float], None]
Indices = NDArray[np.int64]

FIRST_SHARE = 0.2
"""Share of the time left that a search may take while the rows of region limits still grow."""
ROUNDS = 12
"""Rounds of adding the worst places between raster points; two or three are usual."""
SAME_SECONDS = 0.005
"""Seconds that differ by less are written alike."""
REPAIR_SECONDS, REPAIRS = 0.5, 4
POLISH_SECONDS, POLISH_SHARE = 1.0, 0.1
"""Swaps for a quicker route take this share of the search's seconds, and at least so many."""
SECOND_SEARCH = 0.5
"""Share of the search's seconds for the search for a quick panel, when that of the fewest sites is too slow."""
CLOSE_LOG_DET = 1e-3
"""The bound on log det of a given number of sites is branched on until it is this close, or time ends."""
TIGHTER = 0.999
"""Asked of the next search beyond the ratio by which marks shared between stops made the last one miss."""


def plan(study: Study, *, progress: Progress | None = None, stop: Callable[[], bool] | None = None,
         asked: Question | None = None) -> Plan:
    """The fewest candidate sites that meet every limit of the study, proven or with an honest bound.

    `progress(bound, best)` is called as they improve; `stop()` true ends the search with the best so far. Not reaching
    a limit is a result (`status` "cannot"); InputError is for a study whose terms the candidates cannot tell apart, or
    whose rules contradict each other. `asked` may be the question already built from the study.
    """
    began = time.monotonic()
    asked = question(study) if asked is None else asked
    best_possible = achieved(asked, everything(asked))
    if not best_possible.meets_limits:
        return Plan(study, asked.candidates, best_possible, "cannot", math.nan, {}, math.nan, advise(asked, best_possible),
                    study.warnings, time.monotonic() - began)
    _needs_sites(asked)
    until = began + study.search.seconds
    found = _Search(asked, until, progress, stop).run() if study.limits else _most_informative(asked, until, stop)
    if found.units is not None and (study.search.objective == "seconds" or study.search.prefer == "time"):
        loss = 1.0 if study.search.objective == "seconds" else study.search.information_loss
        found = replace(found, units=_quicker(asked, found.units, loss, stop))
    if found.units is not None and study.rules.max_seconds is not None:
        found = _within_seconds(asked, found, until, progress, stop)
    if found.units is None:
        return _nothing_found(asked, found, best_possible, began)
    return _plan(asked, found, best_possible, began)


def _needs_sites(asked: Question) -> None:
    """Raises InputError when the priors alone meet every limit and no rule asks for a site: then there is nothing to plan."""
    study = asked.study
    if asked.rules.required.any() or np.any(asked.rules.counts.lower > 0) or not study.limits:
        return
    nothing = asked.units.visits(np.zeros(0, np.int64))
    if all(limit.ratio <= MEETS for limit in limits_achieved(asked, knowledge_of(asked, nothing))):
        raise InputError(f"{study.source.path or study.title}: the priors alone meet every limit, with no mark measured; tighten "
                         "the limits, or leave the priors out")


def _plan(asked: Question, found: Found, best_possible: Audit, began: float) -> Plan:
    study, units = asked.study, found.units
    assert units is not None
    visits, route = routed(asked, units)
    audit = with_floors(with_losses(achieved(asked, visits), asked, visits), best_possible)
    efficiency = math.exp(min(0.0, (audit.log_det - found.log_det_bound) / len(study.model))) \
        if math.isfinite(found.log_det_bound) else math.nan
    seconds_at_least = math.nan
    proven = found.count_bound > len(units) - 1 + 1e-6 and study.search.sites is None
    if study.search.objective == "seconds":
        seconds_at_least = found.bound
        proven = route.seconds - seconds_at_least < SAME_SECONDS
    grouped = asked.units.stops is not None
    return Plan(study, asked.candidates, audit, "proven" if proven else "interval", found.count_bound, found.certificate,
                efficiency, (), study.warnings, time.monotonic() - began, found.interrupted, route,
                visits.stop + 1 if grouped else None, asked.units.xy_mm[visits.unit] if grouped else None,
                seconds_at_least, miss_chance(asked, visits))


def _quicker(asked: Question, units: Indices, loss: float, stop: Callable[[], bool] | None) -> Indices:
    spent = max(POLISH_SECONDS, POLISH_SHARE * asked.study.search.seconds)
    return quicker(asked, units, loss, time.monotonic() + spent, stop)


def _most_informative(asked: Question, until: float, stop: Callable[[], bool] | None) -> Found:
    """The D-optimal choice of a given number, without limits."""
    count = asked.study.search.sites
    assert count is not None
    problem = problem_of(asked)
    parts = split(problem)
    chosen = d_optimal(parts, problem, count, rng=np.random.default_rng(asked.study.search.seed), deadline=until, stop=stop)
    reach = log_det_bound(parts, problem, count, limited=False, deadline=max(until, time.monotonic() + POLISH_SECONDS)).value
    if chosen is not None:
        attained = log_det(parts, problem, chosen)
        branched = branched_log_det_bound(parts, problem, count, attained=attained, gap=CLOSE_LOG_DET, limited=False,
                                          deadline=until, stop=stop)
        reach = min(reach, branched.value)
    return Found(chosen, math.nan, math.nan, reach, {}, stop is not None and stop())


def _within_seconds(asked: Question, found: Found, until: float, progress: Progress | None,
                    stop: Callable[[], bool] | None) -> Found:
    """The found units if their panel takes no longer than max_seconds; else others that do; else none, with what is known of
    the seconds that any panel takes."""
    most, units = asked.study.rules.max_seconds, found.units
    assert most is not None and units is not None

    def slow(units: Indices) -> bool:
        return routed(asked, units, bound=False)[1].seconds > most + SAME_SECONDS

    if not slow(units):
        return found
    units = _quicker(asked, units, 1.0, stop)
    if not slow(units):
        return replace(found, units=units)
    options = asked.study.search
    if options.objective == "seconds" or options.sites is not None:
        return replace(found, units=None, too_slow=True,
                       seconds_bound=found.bound if options.objective == "seconds" else math.nan)
    timed = replace(asked, study=replace(asked.study, search=replace(options, objective="seconds")))
    until = max(until, time.monotonic() + max(POLISH_SECONDS, SECOND_SEARCH * options.seconds))
    other = _Search(timed, until, progress, stop).run()
    if other.units is not None:
        units = _quicker(asked, other.units, 1.0, stop)
        if not slow(units):
            return replace(found, units=units, log_det_bound=math.nan)
    return replace(found, units=None, seconds_bound=other.bound, too_slow=True)


@dataclass(frozen=True, slots=True)
class Found:
    """`units`: the best set that an audit has confirmed, or None. `bound` is on the search's objective, in sites, stops or
    seconds; `seconds_bound` on the seconds of any panel, where those stand in the way. `excluded`: that no set meets limits and
    rules is proven, not just that none was found."""

    units: Indices | None
    bound: float
    count_bound: float
    log_det_bound: float
    certificate: dict[str, Any]
    interrupted: bool
    seconds_bound: float = math.nan
    too_slow: bool = False
    excluded: bool = False


class _Search:
    """Searches, audits, and searches on where the audit shows what the search's rows did not.

    A region's raster only relaxes its limit, and a mark in two chosen stops counts twice in the search but once in the
    audit; so every bound holds for the limits themselves, and a set counts as found only when its audit meets them.
    """

    def __init__(self, asked: Question, until: float, progress: Progress | None, stop: Callable[[], bool] | None):
        self.asked, self.until, self.progress, self.stop = asked, until, progress, stop
        self.limits, self.tighten = asked.limits, 1.0
        self.bound = -math.inf
        self.certificate: dict[str, Any] = {}
        self.best: SearchResult | None = None
        self.pace = math.inf
        self.excluded = False
        self.cost, self.constant = _costs(asked)

    def run(self) -> Found:
        last: SearchResult | None = None
        growing = bool(self.asked.rasters)
        for turn in range(ROUNDS):
            began = time.monotonic()
            left = max(0.0, self.until - began)
            share = FIRST_SHARE * left if growing and turn < ROUNDS - 1 else left
            result = search(self._problem(), seconds=share, seed=self.asked.study.search.seed, progress=self.progress,
                            stop=self.stop, warm=last)
            self.pace = min(self.pace, time.monotonic() - began)
            self._note_bound(result)
            if result.chosen is None:
                self.excluded = result.status != "interval" and self.tighten == 1.0
                if result.status != "interval" or self._over():
                    break
                growing = False  # its share of the time was too short
                continue
            last = result
            missed = self._missed(result.chosen)
            if not missed:
                self._note_found(result)
                if not growing or result.status == "proven":
                    break
                growing = False
            if self._over():
                break
        if self.best is None and last is not None:
            self._repair(last)
        return self._found()

    def _stopped(self) -> bool:
        return self.stop is not None and self.stop()

    def _over(self) -> bool:
        return time.monotonic() >= self.until or self._stopped()

    def _problem(self) -> SiteProblem:
        problem = problem_of(self.asked, self.limits, self.tighten)
        return problem if self.cost is None else replace(problem, cost=self.cost)

    def _note_bound(self, result: SearchResult) -> None:
        """A bound of the untightened problem is one for the study."""
        if self.tighten == 1.0 and result.lower_bound > self.bound:
            self.bound = result.lower_bound
            self.certificate = stated(result.certificate, self.asked.study, self.limits) if result.certificate else {}

    def _note_found(self, result: SearchResult) -> None:
        assert result.chosen is not None
        if self.best is None or self._objective(result) < self._objective(self.best) or (
                self._objective(result) == self._objective(self.best) and result.log_det >= self.best.log_det):
            self.best = result

    def _objective(self, result: SearchResult) -> float:
        assert result.chosen is not None
        return float(len(result.chosen) if self.cost is None else self.cost[result.chosen].sum())

    def _missed(self, chosen: Indices) -> bool:
        """Whether the audit of a set misses a limit; then the rows, or the tightness, grow so that the next one will not."""
        asked = self.asked
        visits = asked.units.visits(chosen)
        knowledge = knowledge_of(asked, visits)
        worst = float(np.max(knowledge.variance(asked.limits.directions) / asked.limits.tau**2))
        places = self._between(knowledge)
        if asked.study.rules.lost:
            lost = self._after_loss(visits)
            places += lost[0]
            worst = max(worst, lost[1])
        if places:
            rows = [region_rows(asked.study, asked.assumed, source, RegionPoints(
                np.array([place.xy_mm]), {name: np.array([cell]) for name, cell in place.cell.items()}))
                for source, place in places]
            self.limits = stack([self.limits, *rows])
        if worst > MEETS**2 and math.isfinite(worst):
            self.tighten *= TIGHTER / math.sqrt(worst)
        return bool(places) or worst > MEETS**2

    def _between(self, knowledge: Knowledge) -> list[tuple[int, WorstPlace]]:
        """The worst places of the region limits that are missed between raster points."""
        found = []
        for source, limit in enumerate(self.asked.study.limits):
            if isinstance(limit, RegionLimit):
                worst = worst_of(self.asked, knowledge, source)
                if self.asked.study.coverage_factor * worst.u_um > limit.position_um * MEETS:
                    found.append((source, worst))
        return found

    def _after_loss(self, visits: Visits) -> tuple[list[tuple[int, WorstPlace]], float]:
        """Where the worst loss makes a region limit fail, and the worst squared ratio where the search cannot have seen it:
        of marks that several chosen stops share."""
        study, places, worst = self.asked.study, [], 0.0
        after = iter(worst_losses(self.asked, visits, study.rules.lost))
        for source, limit in enumerate(study.limits):
            if isinstance(limit, RegionLimit):
                loss = next(after)
                if loss.k_u > limit.position_um * MEETS and loss.place is not None:
                    places.append((source, loss.place))
                    worst = max(worst, (loss.k_u / limit.position_um) ** 2)
            else:
                worst = max([worst, *((next(after).k_u / limit.maximum) ** 2 for _ in limit.terms)])
        return places, worst if self.asked.units.stops is not None else 0.0

    def _repair(self, last: SearchResult) -> None:
        """Time is over and the only set misses a limit by a hair: ask again, shortly, for a little more than the limits."""
        for _ in range(REPAIRS):
            result = search(self._problem(), seconds=max(REPAIR_SECONDS, 1.5 * self.pace), seed=self.asked.study.search.seed,
                            warm=last)
            if result.chosen is None:
                return
            last = result
            if not self._missed(result.chosen):
                self._note_found(result)
                return

    def _found(self) -> Found:
        best, bound = self.best, self.bound + self.constant
        fixed = self.asked.study.search.sites is not None  # then the count is given, and nothing is proven of it
        count_bound = bound if self.cost is None and not fixed else math.nan
        certificate = {} if fixed or self.cost is not None else self.certificate
        if best is None:
            return Found(None, bound, count_bound, math.nan, certificate, self._stopped(), excluded=self.excluded)
        proven = self.cost is None and math.ceil(self.bound - 1e-6) >= self._objective(best)
        return Found(best.chosen, bound, count_bound, best.log_det_bound, certificate, not proven and self._stopped())


def _costs(asked: Question) -> tuple[NDArray[np.float64] | None, float]:
    """Seconds that each unit costs at least, and what every panel costs; None when the objective is the count."""
    study = asked.study
    if study.search.objective != "seconds":
        return None, 0.0
    far = far_side(len(asked.units), asked.units.side)
    seen = to_machine_frame(asked.units.xy_mm, study.machine, panel_size(asked), far)
    seconds = site_seconds_lower(seen, study.machine, far=far, read_s=asked.units.read_s,
                                 spacing_mm=study.rules.min_spacing_mm or 0.0)
    return seconds.site_s, seconds.constant_s


def with_floors(audit: Audit, best_possible: Audit) -> Audit:
    """The audit with each limit's floor: what it is with every candidate measured."""
    return replace(audit, limits=tuple(replace(limit, floor=floor.predicted)
                                       for limit, floor in zip(audit.limits, best_possible.limits, strict=True)))


def _nothing_found(asked: Question, found: Found, best_possible: Audit, began: float) -> Plan:
    """All candidates together meet the limits, but no set within the rules was found."""
    return Plan(asked.study, asked.candidates, best_possible, "cannot", found.count_bound, found.certificate, math.nan,
                (_hindrance(asked, found),), asked.study.warnings, time.monotonic() - began, found.interrupted,
                excluded=found.excluded)


def _hindrance(asked: Question, found: Found) -> str:
    """Which rule stands in the way, and by how much."""
    rules, options = asked.study.rules, asked.study.search
    noun = "sites" if asked.units.stops is None else "stops"
    if rules.max_sites is not None and found.count_bound > rules.max_sites + 1e-6:
        return (f"the limits need at least {math.ceil(found.count_bound - 1e-6)} {noun}, and max_sites allows "
                f"{rules.max_sites}: raise it, or loosen the limits")
    if found.too_slow and rules.max_seconds is not None:
        short = found.seconds_bound - rules.max_seconds
        if short > SAME_SECONDS:
            return (f"a panel that meets the limits takes at least {found.seconds_bound:.1f} s, and max_seconds allows "
                    f"{rules.max_seconds:g}: raise it by {short:.1f} s or more, or loosen the limits")
        known = f"; none takes less than {found.seconds_bound:.1f} s" if math.isfinite(found.seconds_bound) else ""
        return f"no panel was found that meets the limits within max_seconds = {rules.max_seconds:g}{known}: raise it"
    if options.sites is not None:
        free = replace(asked, study=replace(asked.study, search=replace(options, sites=None)))
        least = search(problem_of(replace(free, rules=unit_rules(free.study, free.units))), seconds=REPAIR_SECONDS,
                       seed=options.seed).lower_bound
        return (f"the limits need at least {math.ceil(least - 1e-6)} {noun}, and [search] sites asks for {options.sites}: "
                "raise it, or loosen the limits")
    if rules.lost:
        problem = problem_of(asked)
        worst = math.sqrt(float(ratios_after_loss(split(problem), np.arange(problem.n), rules.lost).max(initial=0.0)))
        if worst > MEETS:
            return (f"after the loss of any {rules.lost} of all candidates a limit is missed by a factor of {worst:.3g}: add "
                    "marks, loosen the limits, or lower lost")
    return "the search ended without a set that meets every limit and rule: give it more [search] seconds, or relax the rules"

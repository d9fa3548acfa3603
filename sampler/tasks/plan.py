"""The main job: the fewest sites that meet every limit, the proof, and the D-optimal choice among the fewest."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.problem import SearchResult, SiteProblem
from sampler.optimise.search import search
from sampler.panel.region import RegionPoints
from sampler.route.bound import site_seconds_lower
from sampler.route.machine import to_machine_frame
from sampler.route.visit import Route, far_side, plan_route
from sampler.tasks.advise import advise
from sampler.tasks.prove import stated
from sampler.tasks.question import (
    Question,
    achieved,
    everything,
    knowledge_of,
    problem_of,
    question,
    region_rows,
    worst_of,
)
from sampler.tasks.results import MEETS, Audit, Plan
from sampler.tasks.study import RegionLimit, Study
from sampler.tasks.units import Visits
from sampler.uncertainty.information import Knowledge
from sampler.uncertainty.limits import Limits, stack

Progress = Callable[[float, float], None]
Indices = NDArray[np.int64]

FIRST_SHARE = 0.2
"""Share of the time left that a search may take while the rows of region limits still grow."""
ROUNDS = 12
"""Rounds of adding the worst places between raster points; two or three are usual."""
SAME_SECONDS = 0.005
"""Seconds that differ by less are written alike."""
REPAIR_SECONDS = 0.5
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
    searched = _Search(asked, began + study.search.seconds, progress, stop)
    found = searched.run()
    if found.units is None:
        return _nothing_found(asked, found, best_possible, began)
    return _plan(asked, found, best_possible, began)


def _plan(asked: Question, found: Found, best_possible: Audit, began: float) -> Plan:
    study, units = asked.study, found.units
    assert units is not None
    visits, route = routed(asked, units)
    audit = with_floors(achieved(asked, visits), best_possible)
    efficiency = math.exp(min(0.0, (audit.log_det - found.log_det_bound) / len(study.model)))
    seconds_at_least = math.nan
    proven = found.proven
    if study.search.objective == "seconds":
        seconds_at_least = found.bound
        proven = route.seconds - seconds_at_least < SAME_SECONDS
    grouped = asked.units.stops is not None
    return Plan(study, asked.candidates, audit, "proven" if proven else "interval", found.count_bound, found.certificate,
                efficiency, (), study.warnings, time.monotonic() - began, found.interrupted, route,
                visits.stop + 1 if grouped else None, asked.units.xy_mm[visits.unit] if grouped else None,
                seconds_at_least)


@dataclass(frozen=True, slots=True)
class Found:
    """`units`: the best set that an audit has confirmed, or None. `bound` is on the search's objective, in sites, stops or
    seconds."""

    units: Indices | None
    bound: float
    count_bound: float
    proven: bool
    log_det_bound: float
    certificate: dict[str, Any]
    interrupted: bool


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
        self.cost, self.constant = _costs(asked)

    def run(self) -> Found:
        result: SearchResult | None = None
        growing = bool(self.asked.rasters)
        for turn in range(ROUNDS):
            left = max(0.0, self.until - time.monotonic())
            share = FIRST_SHARE * left if growing and turn < ROUNDS - 1 else left
            result = search(self._problem(), seconds=share, seed=self.asked.study.search.seed, progress=self.progress,
                            stop=self.stop, warm=result)
            self._note_bound(result)
            if result.chosen is None:
                break
            missed = self._missed(result.chosen)
            if not missed:
                self._note_found(result)
                if not growing or result.status == "proven":
                    break
                growing = False
            if self._over():
                if self.best is None:
                    self._repair(result)
                break
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
        knowledge = knowledge_of(self.asked, self.asked.units.visits(chosen))
        more = self._between(knowledge)
        if more is not None:
            self.limits = stack([self.limits, more])
        worst = float(np.max(knowledge.variance(self.asked.limits.directions) / self.asked.limits.tau**2))
        if worst > MEETS**2:
            self.tighten *= TIGHTER / math.sqrt(worst)
        return more is not None or worst > MEETS**2

    def _between(self, knowledge: Knowledge) -> Limits | None:
        """Rows for the worst places of the region limits that are missed between raster points, or None."""
        asked, rows = self.asked, []
        for source, limit in enumerate(asked.study.limits):
            if not isinstance(limit, RegionLimit):
                continue
            worst = worst_of(asked, knowledge, source)
            if asked.study.coverage_factor * worst.u_um > limit.position_um * MEETS:
                rows.append(region_rows(asked.study, asked.assumed, source, RegionPoints(
                    np.array([worst.xy_mm]), {name: np.array([cell]) for name, cell in worst.cell.items()})))
        return stack(rows) if rows else None

    def _repair(self, result: SearchResult) -> None:
        """Time is over and the only set misses a limit by a hair: ask once more, shortly, for a little more than the limits."""
        for _ in range(ROUNDS):
            result = search(self._problem(), seconds=REPAIR_SECONDS, seed=self.asked.study.search.seed, warm=result)
            if result.chosen is None:
                return
            if not self._missed(result.chosen):
                self._note_found(result)
                return

    def _found(self) -> Found:
        best, bound = self.best, self.bound + self.constant
        if best is None:
            return Found(None, bound, bound if self.cost is None else math.nan, False, math.nan, self.certificate,
                         self._stopped())
        proven = self.cost is None and math.ceil(self.bound - 1e-6) >= self._objective(best)
        return Found(best.chosen, bound, bound if self.cost is None else math.nan, proven, best.log_det_bound,
                     self.certificate, not proven and self._stopped())


def _costs(asked: Question) -> tuple[NDArray[np.float64] | None, float]:
    """Seconds that each unit costs at least, and what every panel costs; None when the objective is the count."""
    study = asked.study
    if study.search.objective != "seconds":
        return None, 0.0
    size = (study.layout.width_mm, study.layout.height_mm)
    far = far_side(len(asked.units), asked.units.side)
    seconds = site_seconds_lower(to_machine_frame(asked.units.xy_mm, study.machine, size, far), study.machine, far=far,
                                 read_s=asked.units.read_s, spacing_mm=study.rules.min_spacing_mm or 0.0)
    return seconds.site_s, seconds.constant_s


def routed(asked: Question, units: Indices) -> tuple[Visits, Route]:
    """The chosen units in visiting order, as readings, and the route over them."""
    study = asked.study
    route = plan_route(asked.units.xy_mm[units], study.machine, (study.layout.width_mm, study.layout.height_mm),
                       side=asked.units.side[units], read_s=asked.units.read_s[units], key=asked.units.key[units],
                       seed=study.search.seed)
    return asked.units.visits(units[route.order]), route


def with_floors(audit: Audit, best_possible: Audit) -> Audit:
    """The audit with each limit's floor: what it is with every candidate measured."""
    return replace(audit, limits=tuple(replace(limit, floor=floor.predicted)
                                       for limit, floor in zip(audit.limits, best_possible.limits, strict=True)))


def _nothing_found(asked: Question, found: Found, best_possible: Audit, began: float) -> Plan:
    """All candidates together meet the limits, but no set within the rules was found."""
    study, rules = asked.study, asked.study.rules
    noun = "sites" if asked.units.stops is None else "stops"
    if rules.max_sites is not None and found.count_bound > rules.max_sites + 1e-6:
        advice = (f"the limits need at least {math.ceil(found.count_bound - 1e-6)} {noun}, and max_sites allows "
                  f"{rules.max_sites}: raise it, or loosen the limits",)
    else:
        advice = ("the search ended without a set that meets every limit and rule: give it more [search] seconds, or relax "
                  "the rules",)
    return Plan(study, asked.candidates, best_possible, "cannot", found.count_bound, found.certificate, math.nan, advice,
                study.warnings, time.monotonic() - began, found.interrupted)

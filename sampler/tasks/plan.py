"""The main job: the fewest sites that meet every limit, the proof, and the D-optimal choice among the fewest."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.problem import SearchResult
from sampler.optimise.search import search
from sampler.panel.region import RegionPoints
from sampler.tasks.advise import advise
from sampler.tasks.question import (
    Question,
    achieved,
    knowledge_of,
    limits_achieved,
    problem_of,
    question,
    region_rows,
    worst_of,
)
from sampler.tasks.results import Plan
from sampler.tasks.study import RegionLimit, Study
from sampler.uncertainty.limits import Limits, stack

Progress = Callable[[float, float], None]

MEETS = 1.0 + 1e-9
"""A ratio to the limit up to this meets it: rounding of the variances, far below any digit shown."""
FIRST_SHARE = 0.2
"""Share of the time left that a search may take while the rows of region limits still grow."""
ROUNDS = 12
"""Rounds of adding the worst places between raster points; two or three are usual."""


def plan(study: Study, *, progress: Progress | None = None, stop: Callable[[], bool] | None = None,
         asked: Question | None = None) -> Plan:
    """The fewest candidate sites that meet every limit of the study, proven or with an honest bound.

    `progress(bound, best)` is called as they improve; `stop()` true ends the search with the best so far. Not reaching
    a limit is a result (`status` "cannot"); InputError is for a study whose terms the candidates cannot tell apart.
    `asked` may be the question already built from the study.
    """
    began = time.monotonic()
    asked = question(study) if asked is None else asked
    allowed = ~np.isin(asked.candidates.sites.id, study.rules.forbidden)
    everything = limits_achieved(asked, knowledge_of(asked, allowed))
    if any(limit.ratio > MEETS for limit in everything):
        audit = achieved(asked, np.flatnonzero(allowed))
        return Plan(study, asked.candidates, audit, "cannot", math.nan, {}, math.nan, advise(asked, audit),
                    study.warnings, time.monotonic() - began)
    found = _search(asked, began + study.search.seconds, progress, stop)
    if found.rows is None:
        return _nothing_found(asked, found, np.flatnonzero(allowed), began)
    audit = achieved(asked, visiting(asked, found.rows))
    count = len(found.rows)
    efficiency = math.exp(min(0.0, (audit.log_det - found.log_det_bound) / len(study.model)))
    return Plan(study, asked.candidates, audit, "proven" if math.ceil(found.bound - 1e-6) >= count else "interval",
                found.bound, found.certificate, efficiency, (), study.warnings, time.monotonic() - began,
                found.interrupted)


@dataclass(frozen=True, slots=True)
class Found:
    """`rows`: the best set that an audit has confirmed, or None; `bound` on the count of any set that meets the limits."""

    rows: NDArray[np.int64] | None
    bound: float
    log_det_bound: float
    certificate: dict
    status: str
    interrupted: bool


def _search(asked: Question, until: float, progress: Progress | None, stop: Callable[[], bool] | None) -> Found:
    """Searches, audits between the raster points, adds the worst places as rows, and searches on.

    A region's raster only relaxes its limit, so every bound holds for the limit itself; a set counts as found only when
    its audit meets the limit everywhere.
    """
    seed = asked.study.search.seed
    limits, grown, best = asked.limits, not asked.rasters, Found(None, 0.0, math.nan, {}, "", False)
    result: SearchResult | None = None
    for turn in range(ROUNDS):
        left = max(0.0, until - time.monotonic())
        share = left if grown or turn == ROUNDS - 1 else FIRST_SHARE * left
        result = search(problem_of(asked, limits), seconds=share, seed=seed, progress=progress, stop=stop, warm=result)
        more = None if result.chosen is None else _between(asked, result.chosen)
        bound, certificate = (result.lower_bound, result.certificate) if result.lower_bound >= best.bound else \
            (best.bound, best.certificate)
        if result.chosen is not None and more is None and (best.rows is None or len(result.chosen) <= len(best.rows)):
            best = Found(result.chosen, bound, result.log_det_bound, certificate, result.status, result.interrupted)
        else:
            best = Found(best.rows, bound, best.log_det_bound, certificate, result.status, result.interrupted)
        over = result.interrupted or time.monotonic() >= until or result.chosen is None
        if more is not None:
            limits = stack([limits, more])
        elif grown or result.status == "proven":
            break
        grown = more is None
        if over and (best.rows is not None or result.chosen is None):
            break
    return best


def _between(asked: Question, chosen: NDArray[np.int64]) -> Limits | None:
    """Rows for the worst places of the region limits that the chosen sites miss between raster points, or None."""
    knowledge = knowledge_of(asked, chosen)
    rows = []
    for source, limit in enumerate(asked.study.limits):
        if not isinstance(limit, RegionLimit):
            continue
        worst = worst_of(asked, knowledge, source)
        if asked.study.coverage_factor * worst.u_um > limit.position_um * MEETS:
            rows.append(region_rows(asked.study, asked.assumed, source, RegionPoints(
                np.array([worst.xy_mm]), {name: np.array([cell]) for name, cell in worst.cell.items()})))
    return stack(rows) if rows else None


def visiting(asked: Question, rows: NDArray[np.int64]) -> NDArray[np.int64]:
    """The chosen candidates in visiting order."""
    from sampler.route.machine import Machine
    from sampler.route.tour import visiting_order

    sites = asked.candidates.sites.take(rows)
    return rows[visiting_order(sites.xy_mm, Machine(), seed=asked.study.search.seed, key=sites.id)]


def _nothing_found(asked: Question, found: Found, allowed: NDArray[np.int64], began: float) -> Plan:
    """All candidates together meet the limits, but no set within the rules was found."""
    study, rules = asked.study, asked.study.rules
    audit = achieved(asked, allowed)
    bound = math.ceil(found.bound - 1e-6)
    if rules.max_sites is not None and bound > rules.max_sites:
        advice = (f"the limits need at least {bound} sites, and max_sites allows {rules.max_sites}: raise it, or loosen "
                  "the limits",)
    else:
        advice = (f"the search ended without a set that meets every limit (at least {bound} sites are needed): give it "
                  "more [search] seconds",)
    return Plan(study, asked.candidates, audit, "cannot", found.bound, found.certificate, math.nan, advice,
                study.warnings, time.monotonic() - began, found.interrupted)




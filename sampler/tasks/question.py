"""A study turned into numbers, and what a set of sites achieves on them; every task that predicts starts here."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.model.basis import design_blocks, places
from sampler.optimise.problem import SiteProblem, site_problem
from sampler.panel.candidates import Candidates, candidates
from sampler.panel.region import RegionPoints
from sampler.tasks.results import Audit, AuditedLimit, AuditedTerm, PositionMap
from sampler.tasks.study import RegionLimit, Study, TermLimit
from sampler.uncertainty.information import Knowledge, information, whiten
from sampler.uncertainty.limits import Limits, stack
from sampler.uncertainty.position import WorstPlace, position_u, raster, worst_place
from sampler.uncertainty.separate import in_words, inseparable

Array = NDArray[np.float64]

SEARCH_STEPS = 40
"""Raster steps along the longer side of a region for the rows that the search holds; what lies between is audited."""
MAP_STEPS = 100


@dataclass(frozen=True, slots=True)
class Question:
    """`whitened` (n, 2, p): the candidates' readings. `limits`: the rows that the search holds; a region's rows are a
    raster, and `rasters` holds the finer one on which its worst place is sought (by region and polygon position)."""

    study: Study
    candidates: Candidates
    whitened: Array
    limits: Limits
    rasters: dict[int, RegionPoints]
    panel_raster: RegionPoints

    @property
    def n(self) -> int:
        return len(self.whitened)


def question(study: Study) -> Question:
    """Candidates, readings and limit rows of a study. Raises InputError when its terms cannot be told apart."""
    found = candidates(study.layout)
    sites = found.sites
    if not len(sites):
        raise InputError(f"{study.layout_source.path or study.layout.name}: no mark may be measured "
                         f"({'; '.join(f'{n} {why}' for why, n in found.counts().items()) or 'the layout has none'}); "
                         "add marks, or shrink keep-outs or the edge exclusion")
    whitened = whiten(design_blocks(study.model, places(study.layout, sites.xy_mm)), study.noise.sigma_um(sites))
    groups = inseparable(information(whitened))
    if groups:
        where = study.source.path or study.title
        raise InputError([f"{where}: [model] {sentence}" for sentence in in_words(groups, study.model.names)])
    rasters = {source: raster(study.layout, limit.region, limit.polygon_mm)
               for source, limit in enumerate(study.limits) if isinstance(limit, RegionLimit)}
    return Question(study, found, whitened, limit_rows(study), rasters, raster(study.layout, "panel"))


def limit_rows(study: Study) -> Limits:
    """The study's limits as rows: one per limited term, two (dx, dy) per raster point of each region."""
    return stack([_term_rows(study, source, limit) if isinstance(limit, TermLimit)
                  else region_rows(study, source, raster(study.layout, limit.region, limit.polygon_mm, SEARCH_STEPS))
                  for source, limit in enumerate(study.limits)])


def _term_rows(study: Study, source: int, limit: TermLimit) -> Limits:
    columns = [study.model.names.index(name) for name in limit.terms]
    count = len(columns)
    return Limits(np.eye(len(study.model))[columns], np.full(count, limit.maximum),
                  tuple(study.model.units[column] for column in columns), limit.terms, np.full(count, source),
                  np.full((count, 2), np.nan), np.full(count, -1), study.coverage_factor)


def region_rows(study: Study, source: int, points: RegionPoints) -> Limits:
    """The dx and dy rows of a region limit at the given points."""
    limit = study.limits[source]
    assert isinstance(limit, RegionLimit)
    rows = design_blocks(study.model, places(study.layout, points.xy_mm, points.cell)).reshape(-1, len(study.model))
    seen = (rows != 0).any(axis=1)  # outside a grid its terms predict nothing, and nothing is certain
    count = len(rows)
    label = region_label(limit)
    return Limits(rows[seen], np.full(count, limit.position_um)[seen], ("µm",) * int(seen.sum()),
                  (label,) * int(seen.sum()), np.full(count, source)[seen], np.repeat(points.xy_mm, 2, axis=0)[seen],
                  np.tile([0, 1], len(points.xy_mm))[seen], study.coverage_factor)


def region_label(limit: RegionLimit) -> str:
    return {"panel": "position over the panel", "marks": "position at the marks",
            "polygon": "position in the polygon"}.get(limit.region, f"position in the cells of "
                                                      f"{limit.region.removeprefix('cells:')}")


def problem_of(asked: Question, limits: Limits | None = None) -> SiteProblem:
    """The question as the optimiser sees it; `limits` replaces the raster's rows when more have been added."""
    limits = asked.limits if limits is None else limits
    rules, ids = asked.study.rules, asked.candidates.sites.id
    return site_problem(asked.whitened, limits.directions, limits.tau, required=np.isin(ids, rules.required),
                        forbidden=np.isin(ids, rules.forbidden), key=ids, max_sites=rules.max_sites)


def worst_of(asked: Question, knowledge: Knowledge, source: int) -> WorstPlace:
    """The worst place of the study's region limit `source`."""
    limit = asked.study.limits[source]
    assert isinstance(limit, RegionLimit)
    return worst_place(asked.study.model, asked.study.layout, knowledge, limit.region, limit.polygon_mm,
                       asked.rasters[source])


def limits_achieved(asked: Question, knowledge: Knowledge) -> tuple[AuditedLimit, ...]:
    """Every limit of the study against what is known, in its order; a region at its worst place."""
    study = asked.study
    u = study.coverage_factor * np.sqrt(knowledge.variance(asked.limits.directions))
    audited: list[AuditedLimit] = []
    for source, limit in enumerate(study.limits):
        if isinstance(limit, TermLimit):
            audited += [AuditedLimit(asked.limits.label[row], limit.maximum, float(u[row]), asked.limits.unit[row])
                        for row in np.flatnonzero(asked.limits.source == source)]
        else:
            worst = worst_of(asked, knowledge, source)
            audited.append(AuditedLimit(region_label(limit), limit.position_um, study.coverage_factor * worst.u_um, "µm",
                                        worst.xy_mm, ("dx", "dy")[worst.axis]))
    return tuple(audited)


def knowledge_of(asked: Question, rows: NDArray) -> Knowledge:
    """What the given candidates (indices or mask) tell."""
    return Knowledge.of(information(asked.whitened[rows]))


def achieved(asked: Question, rows: NDArray[np.int64]) -> Audit:
    """The audit of a set of candidates, listed in the order given."""
    study, factor = asked.study, asked.study.coverage_factor
    knowledge = knowledge_of(asked, rows)
    limits = limits_achieved(asked, knowledge)
    held: dict[str, float] = {}
    for limit in study.limits:
        if isinstance(limit, TermLimit):
            held |= {name: min(limit.maximum, held.get(name, np.inf)) for name in limit.terms}
    u = factor * np.sqrt(knowledge.variance(np.eye(len(study.model))))
    terms = tuple(AuditedTerm(name, unit, float(value), held.get(name, np.nan))
                  for name, unit, value in zip(study.model.names, study.model.units, u, strict=True))
    worst = worst_place(study.model, study.layout, knowledge, "panel", None, asked.panel_raster)
    return Audit(asked.candidates.sites.take(rows), limits, terms, knowledge.log_det(), _position_map(study, knowledge),
                 AuditedLimit("position over the panel", np.nan, factor * worst.u_um, "µm", worst.xy_mm,
                              ("dx", "dy")[worst.axis]))


def _position_map(study: Study, knowledge: Knowledge) -> PositionMap:
    from sampler.panel.region import inside_region

    layout = study.layout
    half = np.asarray(layout.half_mm)
    counts = np.maximum(2, np.rint(MAP_STEPS * half / half.max()).astype(int) + 1)
    x, y = (np.linspace(-half[axis], half[axis], counts[axis]) for axis in (0, 1))
    xy = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    inside = inside_region(layout, "panel", None, xy)
    k_u = np.full((len(xy), 2), np.nan)
    k_u[inside] = study.coverage_factor * position_u(study.model, layout, knowledge, xy[inside])
    return PositionMap(x, y, k_u.reshape(len(y), len(x), 2))

"""A study turned into numbers, and what a set of sites achieves on them; every task that predicts starts here."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.model.basis import places
from sampler.optimise.problem import SiteProblem, site_problem
from sampler.panel.candidates import Candidates, candidates
from sampler.panel.region import RegionPoints, inside_region
from sampler.route.machine import SIDES
from sampler.tasks.results import Audit, AuditedLimit, AuditedTerm, PositionMap
from sampler.tasks.rules import UnitRules, barred, check_rules, not_on_side, unit_rules
from sampler.tasks.study import RegionLimit, Study, TermLimit
from sampler.tasks.units import Units, Visits, units_of
from sampler.uncertainty.assumed import NO_TERMS, Assumed, SharedErrors
from sampler.uncertainty.field import local_field
from sampler.uncertainty.information import Knowledge, information, whiten
from sampler.uncertainty.limits import Limits, no_limits, stack
from sampler.uncertainty.position import WorstPlace, position_u, raster, worst_place
from sampler.uncertainty.separate import in_words, inseparable

Array = NDArray[np.float64]

SEARCH_STEPS = 40
"""Raster steps along the longer side of a region for the rows that the search holds; what lies between is audited."""
MOST_POINTS = 10_000
"""Points of one region whose rows the search holds from the start."""
MAP_STEPS = 100
SMALLEST_SHARE = 1e-3
"""Where the fixed part of a displacement alone exceeds its limit, this share of the limit stands for "cannot be met"."""


@dataclass(frozen=True, slots=True)
class Question:
    """`assumed`: the corrected terms and what may be there beside them, p of them in all.

    `whitened` (n, 2, p): the candidates' readings. `units`: what the search chooses, marks or stops. `limits`: the rows that
    the search holds; a region's rows are a raster, and `rasters` holds the finer one on which its worst place is sought,
    by the position of the limit in the study.
    """

    study: Study
    assumed: Assumed
    candidates: Candidates
    whitened: Array
    units: Units
    rules: UnitRules
    limits: Limits
    rasters: dict[int, RegionPoints]
    panel_raster: RegionPoints

    @property
    def n(self) -> int:
        return len(self.whitened)


def question(study: Study) -> Question:
    """Candidates, readings and limit rows of a study. Raises InputError when its terms cannot be told apart."""
    found = _measurable(study)
    sites = found.sites
    if not len(sites):
        raise InputError(f"{study.layout_source.path or study.layout.name}: no mark may be measured "
                         f"({'; '.join(f'{n} {why}' for why, n in found.counts().items()) or 'the layout has none'}); "
                         "add marks, or shrink keep-outs or the edge exclusion")
    assumed = assumed_of(study)
    sigma = assumed.sigma_um(study.noise, sites)
    if study.measure.field_of_view_mm is None:
        sigma = np.hypot(sigma, study.measure.stop_um)
    sites = replace(sites, sigma_um=sigma)
    whitened = whiten(assumed.readings(places(study.layout, sites.xy_mm), sites.side), sigma)
    groups = inseparable(information(whitened, assumed.prior_precision))
    if groups:
        where = study.source.path or study.title
        raise InputError([f"{where}: [model] {sentence}" for sentence in in_words(groups, study.model.names)])
    rasters = {source: raster(study.layout, limit.region, limit.polygon_mm)
               for source, limit in enumerate(study.limits) if isinstance(limit, RegionLimit)}
    units = units_of(sites, study.measure.field_of_view_mm, study.measure.stop_um)
    rules = unit_rules(study, units)
    check_rules(study, units, rules)
    return Question(study, assumed, replace(found, sites=sites), whitened, units, rules, limit_rows(study, assumed), rasters,
                    raster(study.layout, "panel"))


def _measurable(study: Study) -> Candidates:
    """The candidates that side and rules leave, each with its read rate, and why the other marks are left out."""
    found = candidates(study.layout)
    marks = study.layout.marks
    reason = found.reason.astype("U80")
    for why in (not_on_side(study.layout, study.measure.side),
                np.where(barred(study.rules, marks), "forbidden by [rules]", "")):
        reason = np.where(reason == "", why, reason)
    sites = marks.take(np.flatnonzero(reason == ""))
    rate = sites.read_rate.copy()
    for kind, given in study.measure.read_rate:
        rate[(sites.kind == kind) & (rate == 1.0)] = given
    return Candidates(replace(sites, read_rate=rate), reason)


def assumed_of(study: Study) -> Assumed:
    """The study's corrected terms with their priors, its potential terms and its local field."""
    sd = np.full(len(study.model), np.inf)
    for prior in study.priors:
        sd[[study.model.names.index(name) for name in prior.terms]] = prior.sd
    field = None
    if study.noise.local_range_mm and max(study.noise.local_um) > 0:
        field = local_field(study.layout.width_mm, study.layout.height_mm, study.noise.local_range_mm, study.noise.local_um)
    potential, deviation = NO_TERMS, None
    if study.potential is not None:
        potential, deviation = study.potential.terms, np.full(len(study.potential.terms), study.potential.sd_um)
    return Assumed(study.model, sd, potential, deviation, field, _shared(study))


def _shared(study: Study) -> SharedErrors:
    """Errors common to all marks of one side, and to all read after turning over; only on sides that are measured."""
    measure, marks = study.measure, study.layout.marks
    sides = [side for side in SIDES if measure.side in ("both", side) and np.any(marks.side == side)]
    found: list[tuple[tuple[str, ...], tuple[float, float]]] = [((side,), measure.side_um)
                                                               for side in sides if max(measure.side_um) > 0]
    second = [side for side in sides if side != study.machine.first_side]
    if second and len(sides) > 1 and max(measure.flip_um) > 0:
        found.append((tuple(second), measure.flip_um))
    return SharedErrors(tuple(on for on, _ in found), tuple(sd for _, sd in found))


def limit_rows(study: Study, assumed: Assumed) -> Limits:
    """The study's limits as rows: one per limited term, two (dx, dy) per raster point of each region."""
    if not study.limits:
        return no_limits(assumed.size, study.coverage_factor)
    return stack([_term_rows(study, assumed, source, limit) if isinstance(limit, TermLimit)
                  else region_rows(study, assumed, source, thinned(raster(study.layout, limit.region, limit.polygon_mm,
                                                                          SEARCH_STEPS)))
                  for source, limit in enumerate(study.limits)])


def thinned(points: RegionPoints, most: int = MOST_POINTS) -> RegionPoints:
    """At most about `most` of a region's points, the outermost and one for each square of a lattice over them.

    The search may hold fewer rows than the region has points: where its plan misses the limit in between, the audit finds
    the place and the search goes on with it.
    """
    if len(points) <= most:
        return points
    xy = points.xy_mm
    low, size = xy.min(axis=0), np.maximum(np.ptp(xy, axis=0), 1e-9)
    side = int(np.sqrt(most))
    square = np.minimum((xy - low) / size * side, side - 1).astype(np.int64) @ np.array([1, side])
    _, first = np.unique(square, return_index=True)
    angle = np.linspace(0, 2 * np.pi, 64, endpoint=False)
    outermost = np.argmax(xy @ np.stack([np.cos(angle), np.sin(angle)]), axis=0)
    rows = np.union1d(first, outermost)
    return RegionPoints(xy[rows], {name: index[rows] for name, index in points.cell.items()})


def _term_rows(study: Study, assumed: Assumed, source: int, limit: TermLimit) -> Limits:
    columns = [study.model.names.index(name) for name in limit.terms]
    count = len(columns)
    return Limits(np.eye(assumed.size)[columns], np.full(count, limit.maximum),
                  tuple(study.model.units[column] for column in columns), limit.terms, np.full(count, source),
                  np.full((count, 2), np.nan), np.full(count, -1), study.coverage_factor)


def region_rows(study: Study, assumed: Assumed, source: int, points: RegionPoints) -> Limits:
    """The dx and dy rows of a region limit at the given points.

    The share of a local field that its directions leave out is a fixed part of a displacement's variance: the rest of the
    limit is what the directions may use.
    """
    limit = study.limits[source]
    assert isinstance(limit, RegionLimit)
    rows = assumed.position(places(study.layout, points.xy_mm, points.cell), limit.of).reshape(-1, assumed.size)
    fixed = study.coverage_factor * assumed.fixed_um(points.xy_mm, limit.of).ravel()
    maximum = np.sqrt(np.maximum(limit.position_um**2 - fixed**2, (SMALLEST_SHARE * limit.position_um) ** 2))
    seen = (rows != 0).any(axis=1)  # outside a grid its terms predict nothing, and nothing is certain
    count = len(rows)
    label = region_label(limit)
    return Limits(rows[seen], maximum[seen], ("µm",) * int(seen.sum()),
                  (label,) * int(seen.sum()), np.full(count, source)[seen], np.repeat(points.xy_mm, 2, axis=0)[seen],
                  np.tile([0, 1], len(points.xy_mm))[seen], study.coverage_factor)


def region_label(limit: RegionLimit) -> str:
    words = {"panel": "position over the panel", "marks": "position at the marks",
            "polygon": "position in the polygon"}
    said = words.get(limit.region, f"position in the cells of {limit.region.removeprefix('cells:')}")
    return said if limit.of == "correction" else said.replace("position", "displacement")


def problem_of(asked: Question, limits: Limits | None = None, tighten: float = 1.0) -> SiteProblem:
    """The question as the optimiser sees it, in units.

    `limits` replaces the raster's rows when more have been added; `tighten` < 1 asks for more than the limits. A mark that
    reads with probability q counts with its expected information, √q times its rows. A spacing is in the panel's plane,
    whatever the sides.
    """
    limits = asked.limits if limits is None else limits
    rules, rate = asked.study.rules, asked.candidates.sites.read_rate
    spacing = rules.min_spacing_mm or 0.0
    whitened = asked.whitened if np.all(rate == 1.0) else asked.whitened * np.sqrt(rate)[:, None, None]
    return site_problem(asked.units.rows(whitened), limits.directions, limits.tau * tighten,
                        prior_precision=asked.assumed.prior_precision, required=asked.rules.required, key=asked.units.key,
                        interest=asked.assumed.interest, rules=asked.rules.counts, max_sites=rules.max_sites,
                        lost=rules.lost, xy=asked.units.xy_mm if spacing else None, spacing=spacing)


def worst_of(asked: Question, knowledge: Knowledge, source: int) -> WorstPlace:
    """The worst place of the study's region limit `source`."""
    limit = asked.study.limits[source]
    assert isinstance(limit, RegionLimit)
    return worst_place(asked.assumed, asked.study.layout, knowledge, limit.region, limit.polygon_mm,
                       asked.rasters[source], limit.of)


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


def knowledge_of(asked: Question, visits: Visits) -> Knowledge:
    """What the visited marks tell when all of them read."""
    return Knowledge.of(information(asked.units.readings(visits, asked.whitened), asked.assumed.prior_precision))


def everything(asked: Question) -> Visits:
    """Every mark that may be measured, each in a stop of its own or in as many stops as it takes."""
    return asked.units.visits(np.arange(len(asked.units)))


def achieved(asked: Question, visits: Visits) -> Audit:
    """The audit of visits, its sites listed in their order."""
    study, factor = asked.study, asked.study.coverage_factor
    knowledge = knowledge_of(asked, visits)
    limits = limits_achieved(asked, knowledge)
    held: dict[str, float] = {}
    for limit in study.limits:
        if isinstance(limit, TermLimit):
            held |= {name: min(limit.maximum, held.get(name, np.inf)) for name in limit.terms}
    u = factor * np.sqrt(knowledge.variance(np.eye(asked.assumed.size)[:asked.assumed.corrected]))
    bias = asked.assumed.bias(asked.units.readings(visits, asked.whitened))
    terms = tuple(AuditedTerm(name, unit, float(value), held.get(name, np.nan), float(shift))
                  for name, unit, value, shift in zip(study.model.names, study.model.units, u, bias, strict=True))
    worst = worst_place(asked.assumed, study.layout, knowledge, "panel", None, asked.panel_raster)
    worst_position = AuditedLimit("position over the panel", np.nan, factor * worst.u_um, "µm", worst.xy_mm,
                                  ("dx", "dy")[worst.axis])
    return Audit(asked.candidates.sites.take(visits.marks), limits, terms, knowledge.log_det(asked.assumed.interest),
                 _position_map(asked, knowledge), worst_position)


def _position_map(asked: Question, knowledge: Knowledge) -> PositionMap:
    study, layout = asked.study, asked.study.layout
    half = np.asarray(layout.half_mm)
    counts = np.maximum(2, np.rint(MAP_STEPS * half / half.max()).astype(int) + 1)
    x, y = (np.linspace(-half[axis], half[axis], counts[axis]) for axis in (0, 1))
    xy = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    inside = inside_region(layout, "panel", None, xy)
    k_u = np.full((len(xy), 2), np.nan)
    k_u[inside] = study.coverage_factor * position_u(asked.assumed, layout, knowledge, xy[inside])
    return PositionMap(x, y, k_u.reshape(len(y), len(x), 2))

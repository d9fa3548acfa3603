"""What a review looks at: the plan, what the loss of each site would cost, and the other choices of a trade-off beside it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.panel.region import inside_region
from sampler.route.visit import Route, follow, plan_route
from sampler.tasks.loss import demands
from sampler.tasks.plan import with_floors
from sampler.tasks.question import Question, achieved, everything, knowledge_of, question
from sampler.tasks.results import Audit, Plan, PositionMap
from sampler.tasks.study import RegionLimit, Source, Study
from sampler.tasks.units import Visits
from sampler.uncertainty.information import RANK_TOLERANCE, Knowledge
from sampler.uncertainty.position import position_u

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

LAST_READING = 1e-9
"""Share of a reading's variance that all the others leave it, below which the reading is the only one of its kind."""
CHUNK_NUMBERS = 4_000_000
ROUTE_ITERATIONS = 50
"""Improvements tried on the order of each choice of a trade-off; some hundredths of a second each."""


@dataclass(frozen=True, slots=True)
class Losses:
    """What is left when one site is lost, for each site of an audit (n,): the worst ratio of the limits then, infinite when
    a limit is no longer determined, and which of the audit's limits that is. Empty without limits."""

    ratio: Array
    limit: Indices


@dataclass(frozen=True, slots=True)
class Choice:
    """A set of sites in visiting order. `path_mm` (s, 2): where the stage stands, stop by stop.

    `limit_ratio` (r, c): k·u of the position over its limit on the raster of `audit.position`, NaN where no position limit
    holds. `ratio_at_least`: what no set of as many sites can beat, NaN when not known.
    """

    audit: Audit
    losses: Losses
    limit_ratio: Array
    route: Route
    path_mm: Array
    ratio_at_least: float = math.nan

    @property
    def count(self) -> int:
        """Sites, or stops where a stop reads several marks."""
        return len(self.path_mm)


@dataclass(frozen=True, slots=True)
class TradeOffPoint:
    """One point of a trade-off: ids of its sites, and the lower bound on the worst ratio with as many sites."""

    ids: tuple[str, ...]
    ratio_at_least: float = math.nan


@dataclass(frozen=True, slots=True)
class Verdict:
    """What an independent check says of the plan: one sentence, whether the plan held, and what was found, a line each."""

    held: bool
    summary: str
    findings: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Claims:
    """What a written plan says that only another search could find again, and the files it was made from.

    `stop`, `stop_xy_mm` as in `Plan`.
    """

    status: str
    lower_bound: float
    d_efficiency_at_least: float
    seconds: float
    study: Source
    layout: Source
    advice: tuple[str, ...] = ()
    warnings: tuple[str, ...] = ()
    interrupted: bool = False
    stop: tuple[int, ...] = ()
    stop_xy_mm: tuple[tuple[float, float], ...] = ()
    seconds_at_least: float = math.nan


@dataclass(frozen=True, slots=True)
class Page:
    """What the report page shows. `chosen` is None when the limits cannot be met: then nothing was chosen.

    `limit_ratio` is of the plan's audit, as in `Choice`. `others`: the choices of a trade-off by
    rising count. `command` repeats the plan; `version` made it.
    """

    plan: Plan
    chosen: Choice | None
    limit_ratio: Array
    others: tuple[Choice, ...]
    verdict: Verdict | None
    command: str
    version: str


def review(plan: Plan, *, points: Sequence[TradeOffPoint] = (), verdict: Verdict | None = None, command: str = "",
           version: str = "", asked: Question | None = None) -> Page:
    """Everything a page shows of a plan and the points of its trade-off, computed from the sites alone.

    Raises InputError for a point with sites that are not candidates. `asked` may be the question already built.
    """
    asked = question(plan.study) if asked is None else asked
    rows_of = {str(name): row for row, name in enumerate(asked.candidates.sites.id)}
    chosen = None
    if plan.status != "cannot":
        rows = _rows(rows_of, [str(name) for name in plan.sites.id], "the plan")
        chosen = _choice(asked, _visits(rows, plan.stop), plan.audit, plan.stop_xy_mm, plan.route)
        limit_ratio = chosen.limit_ratio
    else:
        limit_ratio = _limit_ratio(asked, knowledge_of(asked, everything(asked)), plan.audit.position)
    best_possible = plan.audit if plan.status == "cannot" else achieved(asked, everything(asked)) if points else None
    others = []
    for point in points:
        rows = _rows(rows_of, point.ids, f"the trade-off's point of {len(point.ids)} sites")
        xy = asked.candidates.sites.xy_mm[rows]
        route = plan_route(xy, plan.study.machine, _size(plan.study), side=asked.candidates.sites.side[rows],
                           read_s=asked.candidates.sites.seconds[rows], key=asked.candidates.sites.id[rows],
                           seed=plan.study.search.seed, iterations=ROUTE_ITERATIONS, bound=False)
        visits = _visits(rows[route.order], None)
        assert best_possible is not None
        others.append(_choice(asked, visits, with_floors(achieved(asked, visits), best_possible), None, route,
                              point.ratio_at_least))
    return Page(plan, chosen, limit_ratio, tuple(sorted(others, key=lambda choice: choice.count)), verdict, command, version)


def recalled(study: Study, ids: Sequence[str], claims: Claims, asked: Question | None = None) -> Plan:
    """The plan that was written: its audit computed anew from the ids in visiting order, its proof as claimed.

    The warnings say so when study or layout are no longer those the plan was made from. Raises InputError for ids that
    are not candidates of the study as it is now.
    """
    asked = question(study) if asked is None else asked
    best_possible = achieved(asked, everything(asked))
    changed = [f"{name} changed since the plan was made; its proof may no longer hold: plan again"
               for name, then, now in (("the study", claims.study, study.source),
                                       ("the layout", claims.layout, study.layout_source)) if then.sha256 != now.sha256]
    warnings = (*changed, *claims.warnings)
    if claims.status == "cannot":
        return Plan(study, asked.candidates, best_possible, "cannot", claims.lower_bound, {}, math.nan, claims.advice, warnings,
                    claims.seconds, claims.interrupted)
    rows = _rows({str(name): row for row, name in enumerate(asked.candidates.sites.id)}, ids, "the plan")
    stop = np.array(claims.stop, np.int64) if claims.stop else None
    stop_xy_mm = np.array(claims.stop_xy_mm, float) if claims.stop else None
    audit = with_floors(achieved(asked, _visits(rows, stop)), best_possible)
    return Plan(study, asked.candidates, audit, claims.status, claims.lower_bound, {}, claims.d_efficiency_at_least,
                claims.advice, warnings, claims.seconds, claims.interrupted, None, stop, stop_xy_mm, claims.seconds_at_least)


def _rows(rows_of: dict[str, int], ids: Sequence[str], what: str) -> Indices:
    unknown = [name for name in ids if name not in rows_of]
    if unknown:
        raise InputError(f"{what} has sites that are no candidates of the study: {', '.join(unknown[:10])}"
                         f"{' and more' if len(unknown) > 10 else ''}; plan again")
    return np.array([rows_of[name] for name in ids], np.int64)


def _visits(rows: Indices, stop: Indices | None) -> Visits:
    """Readings of sites in visiting order; `stop` (n,) from 1 joins those read in one stop."""
    stop = np.arange(len(rows)) if stop is None else np.asarray(stop) - 1
    return Visits(rows, stop, np.arange(int(stop.max(initial=-1)) + 1))


def _size(study: Study) -> tuple[float, float]:
    return study.layout.width_mm, study.layout.height_mm


def _choice(asked: Question, visits: Visits, audit: Audit, stop_xy_mm: Array | None, route: Route | None,
            ratio_at_least: float = math.nan) -> Choice:
    study, sites = asked.study, audit.sites
    path = sites.xy_mm if stop_xy_mm is None else stop_xy_mm
    if route is None:
        first = np.unique(visits.stop, return_index=True)[1]
        read = np.full(len(path), -np.inf)
        np.maximum.at(read, visits.stop, np.nan_to_num(sites.seconds, nan=-np.inf))
        route = follow(np.arange(len(path)), path, study.machine, _size(study), side=sites.side[first],
                       read_s=np.where(np.isfinite(read), read, np.nan))
    knowledge = knowledge_of(asked, visits)
    return Choice(audit, losses(asked, visits, audit, knowledge), _limit_ratio(asked, knowledge, audit.position), route, path,
                  ratio_at_least)


def losses(asked: Question, visits: Visits, audit: Audit, knowledge: Knowledge | None = None) -> Losses:
    """What each loss of one site costs, all at once.

    For the readings B (2, p) of a site, v₋ⱼ = vⱼ + gⱼᵀ(I − H)⁻¹gⱼ with gⱼ = B M⁻¹cⱼ and H = B M⁻¹Bᵀ. A direction in which
    I − H vanishes is one that only this site tells. Regions are looked at on their raster; no ratio is below the audit's.
    """
    if not audit.limits:
        return Losses(np.zeros(0), np.zeros(0, np.int64))
    knowledge = knowledge_of(asked, visits) if knowledge is None else knowledge
    half = knowledge.vectors[:, knowledge.known] / np.sqrt(knowledge.values[knowledge.known]) / knowledge.scale[:, None]
    demanded = demands(asked)
    directions, maximum, fixed, owner = demanded.directions, demanded.maximum, demanded.fixed, demanded.owner
    told, variance = directions @ half, knowledge.variance(directions)
    begins = np.flatnonzero(np.r_[True, owner[1:] != owner[:-1]])
    present = np.array([limit.ratio for limit in audit.limits])
    ratio = np.empty((len(visits.marks), len(present)))
    rows = _alone(asked, visits) @ half
    step = max(1, CHUNK_NUMBERS // (2 * len(directions)))
    for start in range(0, len(rows), step):
        part = rows[start:start + step]
        left, turn = np.linalg.eigh(np.eye(2) - part @ part.transpose(0, 2, 1))
        gone = left <= LAST_READING
        part = turn.transpose(0, 2, 1) @ part
        known = np.where(gone, 0.0, 1.0 / np.sqrt(np.where(gone, 1.0, left)))
        rise = (known[:, :, None] * part).reshape(-1, part.shape[2]) @ told.T
        rise *= rise
        rise = rise[::2] + rise[1::2]
        for site, reading in np.argwhere(gone):
            rise[site, (told @ part[site, reading]) ** 2 > RANK_TOLERANCE * (told**2).sum(axis=1)] = np.inf
        k_u = np.sqrt(asked.study.coverage_factor**2 * (variance + rise) + fixed)
        ratio[start:start + step] = np.maximum.reduceat(k_u / maximum, begins, axis=1)
    ratio = np.maximum(ratio, present)
    return Losses(ratio.max(axis=1), ratio.argmax(axis=1))


def _alone(asked: Question, visits: Visits) -> Array:
    """What the visits would lose with each mark, as whitened readings (n, 2, p): M − M₋ᵢ = BᵢᵀBᵢ.

    In a stop whose marks share an error, R = D(I + vvᵀ)D, and losing mark i costs the information of its row of R⁻¹F
    divided by √(R⁻¹)ᵢᵢ (block elimination of a generalised least-squares reading).
    """
    whitened = asked.whitened[visits.marks]
    if asked.units.stops is None:
        return whitened
    v = np.asarray(asked.units.stop_um) / asked.units.sites.sigma_um[visits.marks]
    total = 1.0 + np.stack([np.bincount(visits.stop, v[:, axis] ** 2, len(visits.unit)) for axis in (0, 1)], axis=1)
    shared = np.zeros((len(visits.unit), *whitened.shape[1:]))
    np.add.at(shared, visits.stop, v[:, :, None] * whitened)
    scaled = v / total[visits.stop]
    return (whitened - scaled[:, :, None] * shared[visits.stop]) / np.sqrt(1.0 - v * scaled)[:, :, None]


def _limit_ratio(asked: Question, knowledge: Knowledge, position: PositionMap) -> Array:
    """k·u of the worse axis over the tightest position limit that holds at each raster point, (r, c).

    A limit at the marks holds at points of no area, so it is not on the raster.
    """
    xy = np.stack(np.meshgrid(position.x_mm, position.y_mm), axis=-1).reshape(-1, 2)
    ratio = np.full(len(xy), np.nan)
    for limit in asked.study.limits:
        if isinstance(limit, RegionLimit) and limit.region != "marks":
            inside = inside_region(asked.study.layout, limit.region, limit.polygon_mm, xy)
            u = position_u(asked.assumed, asked.study.layout, knowledge, xy[inside], of=limit.of)
            ratio[inside] = np.fmax(ratio[inside], asked.study.coverage_factor * u.max(axis=1) / limit.position_um)
    return ratio.reshape(len(position.y_mm), len(position.x_mm))

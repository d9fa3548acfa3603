"""A lot of panels: how many to measure and at how many sites each, so that their mean corrects the lot for the fewest seconds.

Feedback corrects every panel of a lot with the mean of the measured ones; feed-forward corrects each panel from its own.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.panel.thinning import thinned
from sampler.tasks.plan import plan
from sampler.tasks.question import Question, question
from sampler.tasks.study import Study
from sampler.tasks.visiting import routed
from sampler.uncertainty.information import information

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Progress = Callable[[str], None]

MOST_COUNTS = 8
MOST_SITES = 80
LEAST_MOST = 3
"""The curve goes at least this far beyond the fewest sites that determine the model."""
MOST_GROUPS = 4
"""Different site sets among which complementary plans alternate."""
START = 100.0
MOST_TRIED, MOST_ROWS = 1500, 60
"""Candidates and rows of limits that take part in ordering sites; sets are judged by all rows."""
PLAN_S = 20.0
ROUTE_ITERATIONS = 50
MEETS = 1.0 + 1e-9
SINGULAR = 1e-12


@dataclass(frozen=True, slots=True)
class Spread:
    """How panels of a lot vary about its mean: covariance (k, k) of `terms`, in their units."""

    terms: tuple[str, ...]
    covariance: Array


@dataclass(frozen=True, slots=True)
class Choice:
    """`panels` of the lot measured at `sites` each; with `groups` > 1 they alternate among so many site sets `ids`.
    `ratio`: worst k·u of the lot mean over its limit. `seconds` of all measured panels."""

    sites: int
    panels: int
    groups: int
    seconds: float
    ratio: float
    ids: tuple[tuple[str, ...], ...]


@dataclass(frozen=True, slots=True)
class Floor:
    """What feedback leaves of a limit: k times the spread of a panel about the lot mean, which no measuring of others
    lowers."""

    label: str
    unit: str
    maximum: float
    k_u: float


@dataclass(frozen=True, slots=True)
class LotResult:
    """`curve`: for each number of sites the fewest panels whose mean meets the limits, cheapest scheme of each; `best` of
    them. `forward`: each panel from its own sites, None when no set meets the limits. `floors`: one for each limit, at
    its worst place."""

    study: Study
    lot: int
    curve: tuple[Choice, ...]
    forward: Choice | None
    floors: tuple[Floor, ...]
    notes: tuple[str, ...]

    @property
    def best(self) -> Choice | None:
        return min(self.curve, key=lambda choice: (choice.seconds, choice.ratio), default=None)

    @property
    def feedback_useless(self) -> bool:
        """Whether single panels miss a limit however well the lot mean is known."""
        return any(floor.k_u > floor.maximum * MEETS for floor in self.floors)

    @property
    def met(self) -> bool:
        return self.forward is not None if self.feedback_useless else self.best is not None

    @property
    def answer(self) -> str:
        worst = max(self.floors, key=lambda floor: floor.k_u / floor.maximum)
        if self.feedback_useless:
            said = (f"feedback cannot meet the limits: panels vary about their lot's mean, {worst.label} by k·u "
                    f"{worst.k_u:.3g} {worst.unit} where {worst.maximum:g} is allowed, however many are measured; ")
            return said + ("not even feed-forward can: no set of sites meets the limits on one panel" if self.forward is None else
                           f"only feed-forward can: {self.forward.sites} sites on each of {self.lot:,} panels, "
                           f"{self.forward.seconds:,.0f} s")
        if self.best is None:
            return f"the lot's mean cannot meet the limits, even with all {self.lot:,} panels measured"
        sets = f", alternating among {self.best.groups} site sets" if self.best.groups > 1 else ""
        return (f"measure {self.best.panels} of {self.lot:,} panels at {self.best.sites} sites each{sets}: "
                f"{self.best.seconds:,.0f} s for the lot")


def lot(study: Study, spread: Spread, size: int, *, panel_s: float | None = None, site_s: float | None = None,
        progress: Progress | None = None) -> LotResult:
    """The cheapest number of panels and sites for a lot of `size`, the whole curve, and feed-forward beside it.

    Seconds of a panel are `panel_s` + sites · `site_s`; without them those of the study's machine on a good route.
    Raises InputError for a study without limits, or that reads several marks in a stop.
    """
    tell = progress or (lambda text: None)
    if not study.limits:
        raise InputError("the study has no limits, so any panel would do; give at least one table [[limit]]")
    if study.measure.field_of_view_mm is not None:
        raise InputError("[measure] field_of_view_mm: a lot is worked out for marks read one by one; leave it out")
    known = set(spread.terms) & set(study.model.names)
    if not known:
        raise InputError(f"the process file says how {', '.join(spread.terms[:4])} vary, none of which the study's model has; "
                         "characterise with this model")
    bare = replace(study, priors=(), rules=replace(study.rules, lost=0))
    asked = question(bare)
    vary, notes = _covariance(study, spread)
    tell("planning a single panel")
    alone = plan(replace(study, search=replace(study.search, seconds=min(study.search.seconds, PLAN_S))))
    own = None if alone.status == "cannot" or not len(alone.sites) else np.array(
        [asked.candidates.sites.id.tolist().index(name) for name in alone.sites.id.tolist()], np.int64)
    p = len(study.model)
    least = -(-p // 2)
    most = min(max(len(own) if own is not None else MOST_SITES, LEAST_MOST * least), asked.n, MOST_SITES)
    counts = sorted({round(n) for n in np.geomspace(max(1, least // 2), most, MOST_COUNTS)})
    seconds = _Seconds(asked, panel_s, site_s)
    curve = []
    tell("ordering sites")
    order = _order(asked, min(MOST_GROUPS * most, asked.n))
    for count in counts:
        tell(f"{count} sites on each measured panel")
        tried = []
        for groups in range(1, MOST_GROUPS + 1):
            total = count * groups
            if total < least or total > asked.n:
                continue
            sets = [own] if own is not None and groups == 1 and count == len(own) else _dealt(asked, order[:total], groups)
            if (found := _fewest(asked, sets, vary, size)) is not None:
                used = sets[:found[0]]
                tried.append(Choice(count, found[0], len(used), found[0] * seconds.of(sets[0]), found[1],
                                    tuple(tuple(asked.candidates.sites.id[rows].tolist()) for rows in used)))
        if tried:
            curve.append(min(tried, key=lambda choice: (choice.seconds, choice.groups)))
    forward = None if own is None else Choice(len(own), size, 1, size * seconds.of(own), float(alone.audit.worst.ratio),
                                             (tuple(alone.sites.id.tolist()),))
    return LotResult(study, size, tuple(curve), forward, _floors(asked, vary), (*notes, _ASSUMED))


_ASSUMED = ("local distortion is taken to differ from panel to panel; what repeats on all of them does not average out, and "
            "belongs into the model")


def _covariance(study: Study, spread: Spread) -> tuple[Array, list[str]]:
    """Of the study's terms; terms that the process says nothing of are taken not to vary, and named."""
    names = study.model.names
    vary = np.zeros((len(names), len(names)))
    at = [(names.index(name), i) for i, name in enumerate(spread.terms) if name in names]
    for row, i in at:
        for column, j in at:
            vary[row, column] = spread.covariance[i, j]
    silent = [name for name in names if name not in spread.terms]
    more = " and others" if len(silent) > 4 else ""
    return vary, [f"nothing is known of how {', '.join(silent[:4])}{more} vary; they are taken to be the same on all "
                  "panels"] if silent else []


@dataclass(frozen=True, slots=True)
class _Seconds:
    asked: Question
    panel_s: float | None
    site_s: float | None

    def of(self, rows: Indices) -> float:
        """Seconds of one panel measured at these candidates."""
        machine = self.asked.study.machine
        if self.panel_s is not None and self.site_s is not None:
            return self.panel_s + len(rows) * self.site_s
        route = routed(self.asked, rows, iterations=ROUTE_ITERATIONS, bound=False)[1]
        handling = machine.load_s + machine.unload_s
        sites = route.seconds - handling if self.site_s is None else len(rows) * self.site_s
        return sites + (handling if self.panel_s is None else self.panel_s)


def _order(asked: Question, count: int) -> Indices:
    """Candidates one after another, each the one that lowers the mean variance of the limits most (their ratio squared),
    starting from terms that vary START times as much as all candidates together would leave them."""
    n = asked.n
    tried = thinned(asked.candidates.sites.xy_mm, MOST_TRIED)
    rows = asked.whitened[tried]
    size, p = rows.shape[2], asked.assumed.corrected
    whole = information(asked.whitened, asked.assumed.prior_precision)
    first = asked.assumed.prior_precision.copy()
    first[np.arange(p), np.arange(p)] = np.diag(whole)[:p] / (n * START**2)
    covariance = np.linalg.inv(first)
    some = np.linspace(0, len(asked.limits) - 1, min(len(asked.limits), MOST_ROWS)).astype(int)
    wanted = covariance @ (asked.limits.directions[some] / asked.limits.tau[some, None]).T
    seen = rows.reshape(-1, size) @ covariance
    chosen: list[int] = []
    free = np.ones(len(tried), bool)
    for _ in range(min(count, len(tried))):
        seen_by = seen.reshape(len(tried), 2, size)
        own = np.eye(2) + np.einsum("nap,nbp->nab", seen_by, rows)
        told_of = np.einsum("nap,pl->nal", rows, wanted)
        gain = (told_of * np.linalg.solve(own, told_of)).sum(axis=(1, 2))
        best = int(np.where(free, gain, -1.0).argmax())
        free[best] = False
        chosen.append(int(tried[best]))
        update = np.linalg.solve(own[best], seen_by[best])
        wanted = wanted - seen_by[best].T @ np.linalg.solve(own[best], told_of[best])
        seen = seen - (seen @ rows[best].T) @ update
    return np.array(chosen, np.int64)


def _dealt(asked: Question, rows: Indices, groups: int) -> list[Indices]:
    """Sites dealt to so many panels, so that each panel's are spread: by angle about the centre, in turns."""
    xy = asked.candidates.sites.xy_mm[rows]
    order = rows[np.lexsort((np.hypot(*xy.T), np.round(np.arctan2(xy[:, 1], xy[:, 0]), 6)))]
    return [np.sort(order[start::groups]) for start in range(groups)]


def told(asked: Question, rows: Indices) -> Array:
    """The information (p, p) of one panel's sites on its corrected terms, everything beside them taken out."""
    p = asked.assumed.corrected
    whole = information(asked.whitened[rows], asked.assumed.prior_precision)
    if whole.shape[0] == p:
        return whole
    beside = np.linalg.solve(whole[p:, p:], whole[p:, :p])
    return whole[:p, :p] - whole[:p, p:] @ beside


def mean_covariance(informations: list[Array], vary: Array, size: int) -> Array | None:
    """Covariance (p, p) of the estimated mean of a lot of `size` from panels with these informations; None when they do
    not determine it.

    Panel g tells W = A (I + Σ A)⁻¹ of the mean; the weighted mean of them errs by (Σ_g W_g)⁻¹ about the mean of all panels that
    ever could be, and by Σ / size less about that of the lot (finite population; Cochran 1977, sec. 2.6, for a vector).
    """
    p = len(vary)
    total = sum((a @ np.linalg.inv(np.eye(p) + vary @ a) for a in informations), np.zeros((p, p)))
    total = (total + total.T) / 2
    scale = np.sqrt(np.maximum(np.diag(total), 0.0))
    if (scale <= 0).any():
        return None
    values, vectors = np.linalg.eigh(total / np.outer(scale, scale))
    if values[0] <= SINGULAR * values[-1] * p:
        return None
    half = vectors / np.sqrt(values) / scale[:, None]
    return half @ half.T - vary / size


def _ratio(asked: Question, informations: list[Array], vary: Array, size: int) -> float:
    covariance = mean_covariance(informations, vary, size)
    if covariance is None:
        return math.inf
    rows = asked.limits.directions[:, :asked.assumed.corrected]
    variance = ((rows @ covariance) * rows).sum(axis=1)
    return float(np.sqrt(max(float((variance / asked.limits.tau**2).max()), 0.0)))


def _fewest(asked: Question, sets: list[Indices], vary: Array, size: int) -> tuple[int, float] | None:
    """The fewest panels of the lot whose mean meets the limits when they take the site sets in turn, and the ratio."""
    each = [told(asked, rows) for rows in sets]

    def ratio(panels: int) -> float:
        return _ratio(asked, [each[g % len(each)] for g in range(panels)], vary, size)

    if ratio(size) > MEETS:
        return None
    low, high = 0, size
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if ratio(middle) <= MEETS else (middle, high)
    return high, ratio(high)


def _floors(asked: Question, vary: Array) -> tuple[Floor, ...]:
    limits = asked.limits
    rows = limits.directions[:, :asked.assumed.corrected]
    k_u = limits.coverage_factor * np.sqrt(np.maximum(((rows @ vary) * rows).sum(axis=1), 0.0))
    found: dict[tuple[int, str], Floor] = {}
    for row in range(len(limits)):
        key = (int(limits.source[row]), limits.label[row])
        if key not in found or k_u[row] > found[key].k_u:
            found[key] = Floor(limits.label[row], limits.unit[row], float(limits.maximum[row]), float(k_u[row]))
    return tuple(found.values())

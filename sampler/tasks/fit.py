"""Production: the plan's sites measured on panels, turned into corrections, and whether the plan still holds."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import fdtrc, ndtri

from sampler.errors import InputError
from sampler.estimation.charts import Individuals, Pooled, individuals, likeness, pooled
from sampler.estimation.doubts import doubts
from sampler.estimation.flags import Flagged, flags
from sampler.estimation.least_squares import Factored, Fit, chance_above, in_words
from sampler.estimation.model_choice import LADDER, panel_terms
from sampler.estimation.readings import Averages, Pattern, Readings
from sampler.estimation.robust import FLAG_CHANCE, outliers
from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.panel.layout import Sites
from sampler.tasks.question import assumed_of, region_label
from sampler.tasks.study import RegionLimit, Study, TermLimit
from sampler.uncertainty.assumed import Assumed
from sampler.uncertainty.position import raster

Array = NDArray[np.float64]

WINDOW = 5
"""Panels of the latest verdict."""
DOUBT = 0.001
"""A chance below this is called a change: with a verdict a day, one false alarm in three years."""
MATERIAL = 1.1
"""Residuals this many times the assumed sigma are as assumed, whatever many panels can tell: no pilot knows it better."""
MEETS = 1.0 + 1e-9


@dataclass(frozen=True, slots=True)
class Verdict:
    """Something assumed against what panels show: `text` in words, `holds`, and the chance it rests on."""

    text: str
    holds: bool
    p_value: float


@dataclass(frozen=True, slots=True)
class FitResult:
    """Fitted panels in order of time, P of them, with p corrected terms of the study's model.

    `theta`, `u` (P, p): terms and their standard uncertainties, in the terms' units; the corrections to enter are
    `corrections`, the negated terms. `chi_square`, `degrees_of_freedom`, `p_above` (P,): residuals against the assumed
    noise. `read`, `lost`, `missing` (P,): planned or given marks read, tried in vain, and without any row.
    `limit_label`, `limit_maximum`, `limit_unit` (L,) and `predicted` (P, L): each limit again with the marks that were
    really read, k·u. Row by row of `averages` (m,), NaN where not used: `residual_um`, `standardised` (by the assumed
    noise), `leverage`, `cook` (m, 2). `skipped`: panels without a fit, and why.
    """

    study: Study
    readings: Readings
    panel: tuple[str, ...]
    theta: Array
    u: Array
    covariance: Array
    chi_square: Array
    degrees_of_freedom: NDArray[np.int64]
    p_above: Array
    read: NDArray[np.int64]
    lost: NDArray[np.int64]
    missing: NDArray[np.int64]
    limit_label: tuple[str, ...]
    limit_maximum: Array
    limit_unit: tuple[str, ...]
    predicted: Array
    averages: Averages
    residual_um: Array
    standardised: Array
    leverage: Array
    cook: Array
    outliers: tuple[Flagged, ...]
    charts: dict[str, Individuals]
    verdicts: tuple[Verdict, ...]
    skipped: tuple[tuple[str, str], ...]
    warnings: tuple[str, ...]

    @property
    def k_u(self) -> Array:
        """k·u of each term, (P, p)."""
        return self.study.coverage_factor * self.u

    @property
    def corrections(self) -> Array:
        """What to enter to take the distortion away: the negated terms, (P, p)."""
        return -self.theta

    @property
    def meets_limits(self) -> NDArray[np.bool_]:
        """Panels whose marks that really read meet every limit, (P,)."""
        return np.asarray((self.predicted <= self.limit_maximum * MEETS).all(axis=1))

    @property
    def holds(self) -> bool:
        return all(verdict.holds for verdict in self.verdicts)

    def predicted_um(self, panel: int, xy_mm: Array) -> tuple[Array, Array]:
        """The displacement that panel's terms predict at points (n, 2), and its k·u, both (n, 2) in µm."""
        rows = design_blocks(self.study.model, places(self.study.layout, xy_mm))
        variance = np.einsum("nap,pq,naq->na", rows, self.covariance[panel], rows)
        return rows @ self.theta[panel], self.study.coverage_factor * np.sqrt(np.maximum(variance, 0.0))


@dataclass(frozen=True, slots=True)
class _Context:
    """What all panels share: the assumed model at the measured marks (sites, 2, size), reading and other sigma (sites,
    2), prior."""

    assumed: Assumed
    rows: Array
    reading_um: Array
    other_um: Array
    prior_sd: Array
    prior_mean: Array

    @classmethod
    def of(cls, study: Study, sites: Sites) -> _Context:
        assumed = assumed_of(study)
        total = assumed.sigma_um(study.noise, sites)
        reading = np.where(np.isnan(sites.sigma_um), np.asarray(study.noise.mark_um), sites.sigma_um)
        precision = np.diag(assumed.prior_precision)
        with np.errstate(divide="ignore"):
            sd = 1.0 / np.sqrt(precision)
        mean = np.zeros(assumed.size)
        for prior in study.priors:
            mean[[study.model.names.index(name) for name in prior.terms]] = prior.mean
        return cls(assumed, assumed.readings(places(study.layout, sites.xy_mm), sites.side),
                   np.hypot(reading, study.measure.stop_um), np.sqrt(np.maximum(total**2 - reading**2, 0.0)), sd, mean)

    def sigma(self, pattern: Pattern) -> Array:
        """Standard uncertainty of each mean of repeats, (n,): only the reading averages out."""
        return np.hypot(pattern.of(self.reading_um) / np.sqrt(pattern.count.ravel()[pattern.seen]), pattern.of(self.other_um))

    def solve(self, pattern: Pattern) -> Fit | str:
        """The fit, or in words why there is none."""
        sigma = self.sigma(pattern)
        design = Factored.of(pattern.of(self.rows) / sigma[:, None], self.prior_sd)
        if design.rank < self.assumed.size:
            return in_words(design.inseparable(), (*self.assumed.model.names, *self.assumed.potential.names))
        return design.solve(pattern.y / sigma, self.prior_mean)


def fit(study: Study, readings: Readings, sites: Sites | None = None) -> FitResult:
    """Corrections of every panel with their uncertainty, and verdicts on noise and model.

    `sites`: the planned marks, to say which were never measured. Panels whose marks do not determine the model are
    skipped and named. Readings that do not belong are flagged and taken out of the fit. Raises InputError when no panel
    can be fitted.
    """
    context = _Context.of(study, readings.sites)
    where = "readings"
    warnings = [*readings.warnings, *doubts(readings, readings.averaged(), study.noise.mark_um, where)]
    everything = readings.averaged()
    flagged, named = _outliers(context, readings, everything)
    averages = everything.without(flagged)
    skipped: dict[int, str] = dict.fromkeys(range(readings.panels), "nothing was read")
    P, p = readings.panels, context.assumed.corrected
    theta, covariance = np.full((P, p), np.nan), np.full((P, p, p), np.nan)
    chi_square, dof = np.full(P, np.nan), np.zeros(P, np.int64)
    residual, standardised, leverage, cook = (np.full((len(averages), 2), np.nan) for _ in range(4))
    limits = _LimitRows.of_study(study, context.assumed)
    predicted = np.full((P, len(limits.maximum)), np.nan)
    for pattern in averages.patterns():
        found = context.solve(pattern)
        if isinstance(found, str):
            marks = int((pattern.count > 0).any(axis=1).sum())
            for panel in pattern.panels:
                skipped[int(panel)] = f"{marks} {'mark' if marks == 1 else 'marks'} read, too few for the model: {found}"
            continue
        for panel in pattern.panels:
            del skipped[int(panel)]
        full = found.design.covariance()
        theta[pattern.panels], covariance[pattern.panels] = found.theta[:, :p], full[:p, :p]
        chi_square[pattern.panels], dof[pattern.panels] = found.chi_square, found.design.degrees_of_freedom
        predicted[pattern.panels] = limits.predicted(full)
        at = pattern.rows[:, pattern.mark], np.broadcast_to(pattern.axis, found.residual.shape)
        residual[at] = found.residual * context.sigma(pattern)
        standardised[at] = found.standardised()
        leverage[at] = found.design.leverage
        cook[at] = found.cook()
    fitted = np.array([panel for panel in range(P) if panel not in skipped], np.int64)
    names = readings.panel_names
    if not len(fitted):
        raise InputError([f"{where}: panel {names[panel]}: {why}" for panel, why in skipped.items()])
    read, lost, missing = _counts(readings, sites)
    verdicts = _verdicts(study, readings, averages, chi_square[fitted], dof[fitted], fitted, standardised, context)
    charts = {name: individuals(theta[fitted, j]) for j, name in enumerate(study.model.names)}
    return FitResult(
        study, readings, tuple(names[i] for i in fitted), theta[fitted],
        np.sqrt(np.diagonal(covariance[fitted], axis1=1, axis2=2)), covariance[fitted], chi_square[fitted], dof[fitted],
        chance_above(chi_square[fitted], dof[fitted]), read[fitted], lost[fitted], missing[fitted], limits.label, limits.maximum,
        limits.unit, predicted[fitted], averages, residual, standardised, leverage, cook, named, charts, verdicts,
        tuple((names[panel], why) for panel, why in skipped.items()), tuple(warnings))


def _counts(readings: Readings, sites: Sites | None) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
    """Marks read (either axis), tried in vain and, of the planned ones, never tried, on each panel, (P,) each."""
    averages = readings.averaged()
    got = averages.count.any(axis=1)
    read = np.bincount(averages.panel[got], minlength=readings.panels)
    lost = np.bincount(averages.panel[~got], minlength=readings.panels)
    if sites is None:
        return read, lost, np.zeros(readings.panels, np.int64)
    planned = np.isin(readings.sites.id, sites.id)[averages.site]
    return read, lost, len(sites) - np.bincount(averages.panel[planned], minlength=readings.panels)


def _outliers(context: _Context, readings: Readings, averages: Averages) -> tuple[NDArray[np.bool_], tuple[Flagged, ...]]:
    """Means (m, 2) that do not belong to the rest of their panel, and the same for people."""
    flagged, studentised = np.zeros((len(averages), 2), bool), np.full((len(averages), 2), np.nan)
    for pattern in averages.patterns():
        sigma = context.sigma(pattern)
        design = Factored.of(pattern.of(context.rows) / sigma[:, None], context.prior_sd)
        y = pattern.y / sigma
        at = pattern.rows[:, pattern.mark], np.broadcast_to(pattern.axis, y.shape)
        if design.rank < context.assumed.size or design.degrees_of_freedom < 3:
            continue
        if not len(design.with_prior):
            found = outliers(design.q, y)
            flagged[at], studentised[at] = found.flagged, found.studentised
        else:
            flagged[at], studentised[at] = _with_priors(design, y, context.prior_mean)
    return flagged, flags(readings, averages, flagged, studentised)


def _with_priors(design: Factored, y: Array, prior_mean: Array) -> tuple[NDArray[np.bool_], Array]:
    """Outliers where priors hold some of the terms: the largest residual over its standard deviation by the assumed
    noise (or the panel's own if that is larger, from the median) is taken out, again and again, while it passes the
    normal quantile at FLAG_CHANCE."""
    flagged, score = np.zeros(y.shape, bool), np.zeros(y.shape)
    cut = float(ndtri(1 - FLAG_CHANCE / (2 * y.shape[1])))
    sd = np.full(design.terms, np.inf)
    sd[design.with_prior] = design.prior_sd
    for i, values in enumerate(y):
        good = np.ones(len(values), bool)
        for _ in range(len(values) // 4):
            part = design if good.all() else Factored.of(design.rows[good], sd)
            if part.rank < design.terms:
                break
            standard = part.solve(values[good][None], prior_mean).standardised()[0]
            own = max(1.0, 1.4826 * float(np.nanmedian(np.abs(standard))))
            worst = int(np.nanargmax(np.abs(standard)))
            row = np.flatnonzero(good)[worst]
            if abs(standard[worst]) <= cut * own:
                break
            good[row], flagged[i, row], score[i, row] = False, True, standard[worst] / own
    return flagged, score


@dataclass(frozen=True, slots=True)
class _LimitRows:
    """Rows (k, size) of all limits, the limit `of` (k,) each belongs to and the fixed part of its variance (k,)."""

    label: tuple[str, ...]
    maximum: Array
    unit: tuple[str, ...]
    rows: Array
    fixed_um2: Array
    of: NDArray[np.int64]
    coverage_factor: float

    @classmethod
    def of_study(cls, study: Study, assumed: Assumed) -> _LimitRows:
        label: list[str] = []
        maximum, unit, rows, fixed, of = [], [], [], [], []
        for limit in study.limits:
            if isinstance(limit, TermLimit):
                for name in limit.terms:
                    column = study.model.names.index(name)
                    rows.append(np.eye(assumed.size)[[column]])
                    fixed.append(np.zeros(1))
                    of.append(np.array([len(label)]))
                    label.append(name)
                    maximum.append(limit.maximum)
                    unit.append(study.model.units[column])
                continue
            assert isinstance(limit, RegionLimit)
            points = raster(study.layout, limit.region, limit.polygon_mm)
            part = assumed.position(places(study.layout, points.xy_mm, points.cell), limit.of).reshape(-1, assumed.size)
            rows.append(part)
            fixed.append(assumed.fixed_um(points.xy_mm, limit.of).ravel() ** 2)
            of.append(np.full(len(part), len(label)))
            label.append(region_label(limit))
            maximum.append(limit.position_um)
            unit.append("µm")
        return cls(tuple(label), np.array(maximum), tuple(unit), np.concatenate(rows), np.concatenate(fixed), np.concatenate(of),
                   study.coverage_factor)

    def predicted(self, covariance: Array) -> Array:
        """k·u of each limit, (L,); a region at the worst point of its raster."""
        used = np.flatnonzero((self.rows != 0).any(axis=0))
        rows = self.rows[:, used]
        variance = ((rows @ covariance[np.ix_(used, used)]) * rows).sum(axis=1) + self.fixed_um2
        worst = np.zeros(len(self.label))
        np.maximum.at(worst, self.of, variance)
        return self.coverage_factor * np.sqrt(worst)


def _verdicts(study: Study, readings: Readings, averages: Averages, chi_square: Array, dof: NDArray[np.int64],
              fitted: NDArray[np.int64], standardised: Array, context: _Context) -> tuple[Verdict, ...]:
    """The noise on the latest panels and on all, and the model against the next rung of the ladder."""
    alike = likeness(averages.site, standardised)
    verdicts = []
    windows = [(f"the last {WINDOW} panels", slice(-WINDOW, None))] if len(fitted) > WINDOW else []
    whole = "the panel" if len(fitted) == 1 else f"all {len(fitted)} panels"
    for name, part in [*windows, (whole, slice(None))]:
        verdicts.append(_noise_verdict(name, pooled(chi_square[part], dof[part], alike)))
    added = _next_terms(study.model)
    if added is not None:
        verdicts.append(_model_verdict(study, readings, averages, context, *added, fitted[-WINDOW:], alike))
    return tuple(verdicts)


def _noise_verdict(on: str, found: Pooled) -> Verdict:
    if found.degrees_of_freedom <= 0:
        return Verdict(f"{on}: no more readings than terms, so the noise cannot be checked", True, 1.0)
    said = f"residual {found.ratio:.3g} × the assumed sigma on {on}, p = "
    if found.p_value < DOUBT and found.ratio <= MATERIAL:
        return Verdict(f"{said}{found.p_value:.2g}: more than assumed, by less than a pilot can tell", True, found.p_value)
    if found.p_value < DOUBT:
        return Verdict(f"{said}{found.p_value:.2g}: characterise again", False, found.p_value)
    if found.p_below < DOUBT:
        return Verdict(f"{said}{found.p_below:.2g}: less than assumed, fewer sites may do; characterise again to know", True,
                       found.p_below)
    return Verdict(f"{said}{found.p_value:.2g}: the assumed noise holds", True, found.p_value)


def _next_terms(model: Model) -> tuple[str, Model] | None:
    """The lowest rung of the ladder with panel terms that the model lacks (and does not say in another way), and those
    terms."""
    has = {term.term for term in model.terms if term.grid is None}
    if "magnification" in has:
        has |= {"scale_x"}
    for family in LADDER:
        lacks = [name for name in panel_terms(family) if name not in has and name != "magnification"]
        if family != "similarity" and lacks:
            return family, Model(tuple(ModelTerm(name) for name in lacks))
    return None


def _model_verdict(study: Study, readings: Readings, averages: Averages, context: _Context, family: str, added: Model,
                   panels: NDArray[np.int64], alike: float) -> Verdict:
    """Whether the next rung's terms take more from the residuals than their number, on the latest panels: an F test, so
    that a wrong assumed noise alone does not speak against the model."""
    extra = design_blocks(added, places(study.layout, readings.sites.xy_mm))
    fall, left = 0.0, 0.0
    more = rest = 0
    tested = 0
    for pattern in averages.patterns():
        among = np.isin(pattern.panels, panels)
        if not among.any():
            continue
        sigma = context.sigma(pattern)
        rows, y = pattern.of(context.rows) / sigma[:, None], pattern.y[among] / sigma
        small = Factored.of(rows, context.prior_sd)
        large = Factored.of(np.concatenate([rows, pattern.of(extra) / sigma[:, None]], axis=1),
                            np.concatenate([context.prior_sd, np.full(len(added), np.inf)]))
        if small.rank < small.terms or large.rank < large.terms or large.degrees_of_freedom < 1:
            continue
        count = int(among.sum())
        after = float(large.solve(y, np.concatenate([context.prior_mean, np.zeros(len(added))])).chi_square.sum())
        fall += float(small.solve(y, context.prior_mean).chi_square.sum()) - after
        left, tested = left + after, tested + count
        more, rest = more + count * len(added), rest + count * large.degrees_of_freedom
    if not tested:
        return Verdict(f"the marks read cannot tell whether {family} terms are needed", True, 1.0)
    shrink = 1 + (tested - 1) * alike**2
    ratio = fall / more / (left / rest)
    p_value = float(fdtrc(more / shrink, rest / shrink, max(ratio, 0.0)))
    on = "the panel" if tested == 1 else f"the last {tested} panels"
    if p_value < DOUBT:
        return Verdict(f"{family} terms, which the model lacks, show on {on}: {np.sqrt(ratio):.2g} × what noise would put on "
                       f"them, p = {p_value:.2g}: choose the model again", False, p_value)
    return Verdict(f"no sign of {family} terms, which the model lacks, on {on}, p = {p_value:.2g}", True, p_value)

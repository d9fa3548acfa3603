"""Pilot panels, measured densely, turned into what a plan assumes: outliers, model, noise, variation, read rates."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.estimation.doubts import doubts
from sampler.estimation.flags import Flagged, flags
from sampler.estimation.least_squares import Factored, in_words
from sampler.estimation.model_choice import EACH, LADDER, ModelChoice, choose_model, model_of, panel_terms
from sampler.estimation.noise_parts import AxisNoise, assumed_noise, axis_noise, repeats_share
from sampler.estimation.rates import ReadRate, often_lost, read_rates
from sampler.estimation.readings import Averages, Readings
from sampler.estimation.robust import outliers
from sampler.estimation.variance import Variation, variation
from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.panel.layout import Layout
from sampler.uncertainty.field import local_field
from sampler.uncertainty.noise import Noise

Array = NDArray[np.float64]
Progress = Callable[[str], None]

READINGS_PER_TERM = 2
"""The robust fit before the model is chosen takes the highest rung with at least this many readings a term."""


@dataclass(frozen=True, slots=True)
class Characterisation:
    """What pilot panels say. `choice`: the models tried and the one recommended, `model` its terms. `axes`: the noise
    of dx and dy, `noise` what a plan should assume of it. `theta`, `u` (P, p) of the panel and shared terms `terms`,
    one row for each of `panel` (P); `variation` of them, None with one panel; `each_sd` of single cells' terms, by
    name. `averages` with `residual_um` (m, 2), NaN where a reading was lost or flagged. `notes`: what was found, in
    words; `warnings`: what to check."""

    layout: Layout
    readings: Readings
    outliers: tuple[Flagged, ...]
    choice: ModelChoice
    model: Model
    axes: tuple[AxisNoise, AxisNoise]
    noise: Noise
    terms: Model
    panel: tuple[str, ...]
    theta: Array
    u: Array
    variation: Variation | None
    each_sd: dict[str, float]
    rates: tuple[ReadRate, ...]
    often_lost: tuple[tuple[str, int, int], ...]
    averages: Averages
    residual_um: Array
    skipped: tuple[tuple[str, str], ...]
    notes: tuple[str, ...]
    warnings: tuple[str, ...]

    @property
    def priors(self) -> dict[str, tuple[float, float]]:
        """Mean and standard deviation of each term that varies from panel to panel, by name (single cells' terms about
        zero)."""
        found = {}
        if self.variation is not None and not np.isnan(self.variation.sd).any():
            found = {name: (float(mean), float(sd)) for name, mean, sd
                     in zip(self.terms.names, self.variation.mean, self.variation.sd, strict=True) if sd > 0}
        return found | {name: (0.0, sd) for name, sd in self.each_sd.items() if sd > 0}


def characterise(layout: Layout, readings: Readings, noise: Noise | None = None, *, seed: int = 1,
                 progress: Progress | None = None) -> Characterisation:
    """Everything that pilot readings say about model, noise and variation.

    `noise`, the study's own, only serves to doubt the columns' units and to split reading from local distortion when
    there are neither repeats nor a range. Panels with too few marks are skipped and named. Raises InputError when no
    panel is left.
    """
    tell = progress or (lambda text: None)
    rng = np.random.default_rng(seed)
    everything = readings.averaged()
    warnings = [*readings.warnings, *doubts(readings, everything, None if noise is None else noise.mark_um, "readings")]
    tell("looking for readings that do not belong")
    everything, skipped = _enough(readings, everything)
    basis = design_blocks(model_of("order3", layout), places(layout, readings.sites.xy_mm))
    flagged, _, sigma = _flag(everything, basis, _highest(layout, everything))
    tell("choosing the model")
    choice = choose_model(layout, readings, everything.without(flagged), sigma)
    model = model_of(choice.family, layout, choice.shared, choice.each)
    blocks = design_blocks(model, places(layout, readings.sites.xy_mm))
    flagged, studentised, sigma = _flag(everything, blocks, None)
    averages = everything.without(flagged)
    residual, freedom = _residuals(averages, blocks, sigma)
    tell("taking the noise apart")
    axes = [axis_noise(readings, averages, blocks, residual, freedom, axis, rng) for axis in (0, 1)]
    assumed, notes = assumed_noise((axes[0], axes[1]), noise)
    tell("comparing panels")
    terms = model_of(choice.family, layout, choice.shared)
    compared = _Compared.of(layout, readings, averages, terms, choice.each, assumed, sigma)
    panels = compared.panels
    found = variation(compared.theta, compared.own, readings.lot[panels]) if len(panels) > 1 else None
    notes += _variation_notes(found)
    return Characterisation(
        layout, readings, flags(readings, everything, flagged, studentised), choice, model, (axes[0], axes[1]), assumed, terms,
        tuple(readings.panel_names[i] for i in panels), compared.theta,
        np.sqrt(np.diagonal(compared.covariance, axis1=1, axis2=2)), found, compared.each_sd, read_rates(readings),
        often_lost(readings), averages, residual, (*skipped, *compared.skipped), tuple(notes), tuple(warnings))


def _enough(readings: Readings, averages: Averages) -> tuple[Averages, tuple[tuple[str, str], ...]]:
    """Without the panels whose marks cannot carry even the lowest rung twice over."""
    least = READINGS_PER_TERM * len(panel_terms("similarity"))
    count = np.bincount(averages.panel, (averages.count > 0).sum(axis=1), minlength=averages.panels).astype(int)
    few = count < least
    skipped = tuple((readings.panel_names[i], f"{count[i]} readings, too few for any model (at least {least})")
                    for i in np.flatnonzero(few))
    if few.all():
        raise InputError([f"readings: panel {name}: {why}" for name, why in skipped])
    drop = few[averages.panel]
    return averages.without(np.repeat(drop[:, None], 2, axis=1)), skipped


def _highest(layout: Layout, averages: Averages) -> Callable[[int], NDArray[np.int64]]:
    """Which columns of order 3 the robust fit takes with n readings."""
    names = model_of("order3", layout).names
    families = [[names.index(name) for name in panel_terms(family)] for family in LADDER if family != "similarity"]

    def columns(n: int) -> NDArray[np.int64]:
        fit = [columns for columns in families if n >= READINGS_PER_TERM * len(columns)]
        return np.array(fit[-1] if fit else families[0][:2])
    return columns


def _flag(averages: Averages, blocks: Array,
          columns: Callable[[int], NDArray[np.int64]] | None) -> tuple[NDArray[np.bool_], Array, tuple[float, float]]:
    """Flagged means (m, 2), their studentised residuals, and the noise of dx and dy of those not flagged."""
    flagged, studentised = np.zeros((len(averages), 2), bool), np.full((len(averages), 2), np.nan)
    squares, weight = np.zeros(2), np.zeros(2)
    for pattern in averages.patterns():
        rows = pattern.of(blocks)
        q = Factored.of(rows if columns is None else rows[:, columns(len(rows))]).q
        found = outliers(q, pattern.y, pattern.axis)
        at = pattern.rows[:, pattern.mark], np.broadcast_to(pattern.axis, found.flagged.shape)
        flagged[at], studentised[at] = found.flagged, found.studentised
        for axis in range(found.sigma.shape[1]):
            known = ~np.isnan(found.sigma[:, axis])
            readings = float((pattern.axis == axis).sum())
            squares[axis] += readings * float((found.sigma[known, axis] ** 2).sum())
            weight[axis] += readings * float(known.sum())
    sigma = np.sqrt(np.divide(squares, weight, out=np.zeros(2), where=weight > 0))
    sigma = np.where(sigma > 0, sigma, sigma.max() if sigma.max() > 0 else 1.0)
    return flagged, studentised, (float(sigma[0]), float(sigma[1]))


def _residuals(averages: Averages, blocks: Array, sigma: tuple[float, float]) -> tuple[Array, Array]:
    """What weighted least squares leaves of each mean (m, 2), and the degrees of freedom of dx and of dy."""
    residual, freedom = np.full((len(averages), 2), np.nan), np.zeros(2)
    for pattern in averages.patterns():
        weight = np.asarray(sigma)[pattern.axis]
        q = Factored.of(pattern.of(blocks) / weight[:, None]).q
        y = pattern.y / weight
        at = pattern.rows[:, pattern.mark], np.broadcast_to(pattern.axis, y.shape)
        residual[at] = (y - (y @ q) @ q.T) * weight
        rest = 1.0 - (q**2).sum(axis=1)
        freedom += len(y) * np.bincount(pattern.axis, rest, 2)
    return residual, freedom


def _variation_notes(found: Variation | None) -> list[str]:
    if found is None:
        return ["one panel only: nothing can be said of how panels vary, and there are no priors"]
    if np.isnan(found.panel).any():
        return ["one panel in every lot: what varies from panel to panel and from lot to lot cannot be told apart, and there are "
                "no priors"]
    return [] if found.lots > 1 else ["one lot only: nothing can be said of how lots vary"]


@dataclass(frozen=True, slots=True)
class _Compared:
    """Least-squares terms `theta` (P, p) of `panels` (P,), with the covariance of their error (P, p, p): all of it, and
    `own`, the part that differs from panel to panel. `each_sd` of single cells' terms by name."""

    panels: NDArray[np.int64]
    theta: Array
    covariance: Array
    own: Array
    each_sd: dict[str, float]
    skipped: tuple[tuple[str, str], ...]

    @classmethod
    def of(cls, layout: Layout, readings: Readings, averages: Averages, terms: Model, each: tuple[str, ...], assumed: Noise,
           sigma: tuple[float, float]) -> _Compared:
        """The terms are fitted alone; what else moves marks (local distortion, single cells) is in their covariance.

        Local distortion that repeats on every panel shifts all panels' terms alike: it is no part of how they differ.
        """
        at = places(layout, readings.sites.xy_mm)
        blocks = design_blocks(terms, at)
        P, p = readings.panels, len(terms)
        theta, covariance, own = np.full((P, p), np.nan), np.full((P, p, p), np.nan), np.full((P, p, p), np.nan)
        residual = np.full((len(averages), 2), np.nan)
        skipped, designs = [], []
        for pattern in averages.patterns():
            weight = np.asarray(sigma)[pattern.axis]
            design = Factored.of(pattern.of(blocks) / weight[:, None])
            if design.rank < p:
                skipped += [(readings.panel_names[i], in_words(design.inseparable(), terms.names)) for i in pattern.panels]
                continue
            fit = design.solve(pattern.y / weight)
            theta[pattern.panels] = fit.theta
            residual[pattern.rows[:, pattern.mark], pattern.axis] = fit.residual * weight
            designs.append((pattern, design.estimator() / weight))
        each_sd = _each_sd(layout, readings, averages, each, residual, sigma)
        mark = np.asarray(assumed.mark_um)
        alike = np.array([repeats_share(averages, residual[:, axis], axis, mark[axis] ** 2) for axis in (0, 1)])
        differs = 1.0 - np.where(np.isnan(alike), 0.0, alike)
        beside = _beside(layout, readings, each, each_sd, assumed)
        for pattern, estimator in designs:
            read = (mark**2)[pattern.axis] / pattern.count.ravel()[pattern.seen]
            local = np.zeros(2) if assumed.local_range_mm else np.asarray(assumed.local_um) ** 2
            for share, into in ((np.ones(2), covariance), (differs, own)):
                moved = estimator @ (pattern.of(beside) * np.sqrt(share)[pattern.axis][:, None])
                error = (estimator * (read + (local * share)[pattern.axis])) @ estimator.T + moved @ moved.T
                into[pattern.panels] = error
        panels = np.flatnonzero(~np.isnan(theta[:, 0]))
        if not len(panels):
            raise InputError([f"readings: panel {name}: {why}" for name, why in skipped])
        return cls(panels, theta[panels], covariance[panels], own[panels], each_sd, tuple(skipped))


def _beside(layout: Layout, readings: Readings, each: tuple[str, ...], each_sd: dict[str, float], assumed: Noise) -> Array:
    """What moves marks beside the terms, as independent directions of unit variance, (sites, 2, k): local field and
    single cells."""
    at = places(layout, readings.sites.xy_mm)
    parts = [np.zeros((len(at), 2, 0))]
    if assumed.local_range_mm and max(assumed.local_um) > 0:
        field = local_field(layout.width_mm, layout.height_mm, assumed.local_range_mm, assumed.local_um)
        basis = field.basis(at.xy_mm)
        for axis in (0, 1):
            part = np.zeros((len(at), 2, field.rank))
            part[:, axis] = basis * assumed.local_um[axis]
            parts.append(part)
    for name in each:
        grid = layout.grid(name)
        cells = Model(tuple(ModelTerm(term, name, cell, grid.cell_label(cell)) for cell in range(grid.cells) for term in EACH))
        parts.append(design_blocks(cells, at) * np.tile([each_sd[f"{name}.{term}"] for term in EACH], grid.cells))
    return np.concatenate(parts, axis=2)


def _each_sd(layout: Layout, readings: Readings, averages: Averages, each: tuple[str, ...], residual: Array,
             sigma: tuple[float, float]) -> dict[str, float]:
    """Standard deviation of single cells' terms about the panel's, over cells and panels, the variance of their
    estimates taken out."""
    found: dict[str, float] = {}
    at = places(layout, readings.sites.xy_mm)
    for name in each:
        grid = layout.grid(name)
        local = design_blocks(Model(tuple(ModelTerm(term, name) for term in EACH)), at)
        squares, estimates, count = np.zeros(len(EACH)), np.zeros(len(EACH)), 0
        for pattern in averages.patterns():
            weight = np.asarray(sigma)[pattern.axis]
            rows = pattern.of(local) / weight[:, None]
            y = residual[pattern.rows[:, pattern.mark], pattern.axis] / weight
            if np.isnan(y).any():
                continue
            cell = at.cell[name][pattern.site][pattern.mark]
            for number in range(grid.cells):
                design = Factored.of(rows[cell == number]) if (cell == number).sum() > len(EACH) else None
                if design is not None and design.rank == len(EACH):
                    squares += (design.solve(y[:, cell == number]).theta ** 2).sum(axis=0)
                    estimates += len(y) * np.diag(design.covariance())
                    count += len(y)
        sd = np.sqrt(np.maximum(squares - estimates, 0.0) / max(count, 1))
        found |= {f"{name}.{term}": float(value) for term, value in zip(EACH, sd, strict=True)}
    return found

"""The noise of pilot panels taken apart: reading, local distortion with its range, and what of it repeats from panel to
panel."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sampler.estimation.readings import Averages, Readings
from sampler.estimation.spatial import Field, Moran, Variogram, VariogramFit, fit_variogram, moran, thinned, variogram
from sampler.estimation.variance import MeanSquare, difference_interval, one_way
from sampler.uncertainty.noise import Noise

Array = NDArray[np.float64]
Interval = tuple[float, float]

CORRELATED = 0.01
"""Moran's I with a chance below this is called correlation."""
LEAST_MARKS = 12
"""Fewer marks on a panel show no range."""
MOST_PANELS = 30
LEAST_NUGGET_SHARE = 0.05
"""A mark is read no better than this share of the local distortion: a variogram cannot tell a smaller nugget from none.
"""

LEAST_UM = 1e-6
"""Noise of zero would weigh a reading without bound."""


@dataclass(frozen=True, slots=True)
class AxisNoise:
    """One axis (`axis` "dx" or "dy"), standard deviations in µm with 95 % intervals.

    `left_um`: of a mark's mean reading about the model, with `degrees_of_freedom` (effective ones when correlated).
    `reading_um`: of one reading about the mark's mean, from repeats; None without repeats. `local_um`: what is left
    beyond reading, the root of the smooth sill when correlated; None when it cannot be told. `variogram` with its
    `fits`, the better first, and `moran`; None with too few marks. `repeats_share`: the share of the local variance
    that is the same on all panels; NaN for a single panel. `averaged_out`: what repeats leave of the reading variance
    in a mean, on average.
    """

    axis: str
    left_um: float
    left_interval: Interval
    degrees_of_freedom: float
    reading_um: float | None
    reading_interval: Interval | None
    local_um: float | None
    local_interval: Interval | None
    variogram: Variogram | None
    fits: tuple[VariogramFit, ...]
    moran: Moran | None
    repeats_share: float
    averaged_out: float = 1.0

    @property
    def correlated(self) -> bool:
        """Whether neighbouring marks are alike, and the smooth family sees a range within the panel."""
        return self.moran is not None and self.moran.p_value < CORRELATED and self.smooth is not None and self.smooth.sill_um2 > 0

    @property
    def smooth(self) -> VariogramFit | None:
        """The fit of the family that the planner's local field has."""
        return next((fit for fit in self.fits if fit.family == "smooth"), None)


def axis_noise(readings: Readings, averages: Averages, blocks: Array, residual_um: Array, freedom: Array, axis: int,
               rng: np.random.Generator, simulations: int = 200) -> AxisNoise:
    """The noise of one axis. `blocks` (sites, 2, p): the model; `residual_um` (m, 2): what it leaves of each mean, NaN
    where none; `freedom` (2,): degrees of freedom of each axis' residuals."""
    name = ("dx", "dy")[axis]
    r = residual_um[:, axis]
    used = ~np.isnan(r)
    count = averages.count[:, axis]
    left = MeanSquare(float((r[used] ** 2).sum()), float(freedom[axis]))
    within = MeanSquare(float(averages.within_um2[used, axis].sum()), float(np.maximum(count[used] - 1, 0).sum()))
    averaged_out = float((1.0 / count[used]).mean()) if used.any() else 1.0
    reading = reading_interval = local = local_interval = None
    if within.degrees_of_freedom > 0:
        reading, reading_interval = float(np.sqrt(within.value)), _roots(within.interval())
        own = MeanSquare(within.sum_of_squares * averaged_out, within.degrees_of_freedom)
        local = float(np.sqrt(max(left.value - own.value, 0.0)))
        local_interval = _roots(difference_interval(left, own))
    fields = _fields(readings, averages, blocks, axis, rng)
    share = repeats_share(averages, r, axis, within.value if reading is not None else 0.0)
    found = AxisNoise(name, float(np.sqrt(left.value)), _roots(left.interval()), left.degrees_of_freedom, reading,
                      reading_interval, local, local_interval, None, (), None, share, averaged_out)
    if not fields:
        return found
    found = replace(found, variogram=variogram(fields), fits=fit_variogram(fields, rng, simulations), moran=moran(fields, rng))
    smooth = found.smooth
    if not found.correlated or smooth is None:
        return found
    # Correlated residuals are worth fewer than their number, and the model takes part of their variance with it: the sill is what
    # was there before.
    worth = sum(field.worth(smooth) for field in fields) / sum(field.degrees_of_freedom for field in fields)
    fewer = MeanSquare(left.sum_of_squares * worth, left.degrees_of_freedom * worth)
    return replace(found, left_interval=_roots(fewer.interval()), degrees_of_freedom=fewer.degrees_of_freedom,
                   local_um=float(np.sqrt(smooth.sill_um2)), local_interval=_roots(smooth.sill_interval))


def repeats_share(averages: Averages, r: Array, axis: int, reading_um2: float) -> float:
    """The share of the local variance in residuals r (m,) that is the same on all panels: between marks against within
    marks; NaN when no mark is on two panels."""
    used, readings_per_mean = np.flatnonzero(~np.isnan(r)), averages.count[:, axis]
    site, count = averages.site[used], np.bincount(averages.site[used])
    several = used[count[site] > 1]
    if not len(several) or len(np.unique(averages.site[several])) < 3:
        return np.nan
    found = one_way(r[several], averages.site[several])
    common = max(found.variance_between, 0.0)
    own = max(found.within.value - reading_um2 * float((1.0 / readings_per_mean[several]).mean()), 0.0)
    return common / (common + own) if common + own > 0 else np.nan


def _roots(interval: Interval) -> Interval:
    return float(np.sqrt(max(interval[0], 0.0))), float(np.sqrt(max(interval[1], 0.0)))


def _fields(readings: Readings, averages: Averages, blocks: Array, axis: int, rng: np.random.Generator) -> list[Field]:
    """Residuals of one axis by marks that all of some panels read, so that one small matrix serves them all."""
    rows = blocks[:, axis]
    rows = rows[:, (rows != 0).any(axis=0)]
    parts = _common(averages, axis)
    fields = []
    for site, y in parts:
        keep = thinned(readings.sites.xy_mm[site], rng)
        if len(keep) >= LEAST_MARKS and len(keep) >= 1.5 * np.linalg.matrix_rank(rows[site[keep]]):
            fields.append(Field.fitted(readings.sites.xy_mm[site[keep]], rows[site[keep]], y[:, keep]))
    return fields


def _common(averages: Averages, axis: int) -> list[tuple[NDArray[np.int64], Array]]:
    """Marks (k,) and their means (g, k): those read on all panels when that is most marks, otherwise each panel's own,
    a few panels."""
    patterns = sorted(averages.patterns(), key=lambda pattern: -len(pattern.site) * len(pattern.panels))
    single: list[tuple[NDArray[np.int64], Array]] = []
    for pattern in patterns:
        ok = pattern.count[:, axis] > 0
        single.append((pattern.site[ok], pattern.dxy_um[:, ok, axis]))
        if sum(len(y) for _, y in single) >= MOST_PANELS:
            break
    site = single[0][0]
    for other, _ in single[1:]:
        site = np.intersect1d(site, other)
    typical = np.median([len(other) for other, _ in single])
    if len(site) >= 0.5 * typical:
        rows = [y[:, np.searchsorted(other, site)] for other, y in single]
        return [(site, np.concatenate(rows)[:MOST_PANELS])]
    return [(other, y[:MOST_PANELS]) for other, y in single[:6]]


def assumed_noise(axes: tuple[AxisNoise, AxisNoise], given: Noise | None) -> tuple[Noise, list[str]]:
    """What a plan should assume, and how it was split, one sentence each; `given` is the noise assumed so far."""
    correlated = [axis for axis in axes if axis.correlated]
    if correlated:
        return _with_field(axes, correlated)
    mark, local, notes = [], [], []
    for number, axis in enumerate(axes):
        if axis.reading_um is not None:
            mark.append(axis.reading_um)
            local.append(axis.local_um or 0.0)
        elif given is not None and given.mark_um[number] < axis.left_um:
            mark.append(given.mark_um[number])
            local.append(float(np.sqrt(axis.left_um**2 - mark[-1] ** 2)))
            notes.append(f"{axis.axis}: without repeats the reading sigma is the study's {mark[-1]:.3g} µm, the rest is local")
        else:
            mark.append(axis.left_um)
            local.append(0.0)
            notes.append(f"{axis.axis}: without repeats reading and local distortion cannot be told apart; both are in mark_um")
        mark[-1] = max(mark[-1], LEAST_NUGGET_SHARE * axis.left_um, LEAST_UM)
    return Noise((mark[0], mark[1]), (local[0], local[1])), notes


def _with_field(axes: tuple[AxisNoise, AxisNoise], correlated: list[AxisNoise]) -> tuple[Noise, list[str]]:
    mark, local, notes = [], [], []
    for axis in axes:
        fit = axis.smooth if axis in correlated else None
        if fit is None:
            mark.append(max(axis.left_um, LEAST_UM))
            local.append(0.0)
            continue
        reading = 0.0 if axis.reading_um is None else axis.reading_um
        # What repeats averaged out is there again when a mark is read once.
        nugget = fit.nugget_um2 + reading**2 * (1 - axis.averaged_out)
        local.append(float(np.sqrt(fit.sill_um2)))
        mark.append(float(np.sqrt(max(nugget, reading**2, (LEAST_NUGGET_SHARE * local[-1]) ** 2, LEAST_UM**2))))
        if fit is not axis.fits[0]:
            notes.append(f"{axis.axis}: correlation that falls off at once (range {axis.fits[0].range_mm:.3g} mm) fits the "
                         "variogram better than the smooth one a plan assumes; the smooth one's range is given")
        if not fit.bounded:
            notes.append(f"{axis.axis}: the local distortion bends over the whole panel: its range and sigma are lower bounds, "
                         "and a higher model may serve better")
    fits = [axis.smooth for axis in correlated if axis.smooth is not None]
    weight = np.array([fit.sill_um2 for fit in fits])
    reach = float(np.exp((weight * np.log([fit.range_mm for fit in fits])).sum() / weight.sum()))
    if max(fit.range_mm for fit in fits) > 2 * min(fit.range_mm for fit in fits):
        notes.append(f"ranges of dx and dy differ ({fits[0].range_mm:.3g} and {fits[-1].range_mm:.3g} mm); a plan assumes one, "
                     f"{reach:.3g} mm")
    return Noise((mark[0], mark[1]), (local[0], local[1]), reach), notes

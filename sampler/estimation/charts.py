"""Charts over panels in time, and whether what was assumed of them still holds."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtr

from sampler.estimation.least_squares import chance_above

Array = NDArray[np.float64]

RANGE_OF_TWO = 1.1283791670955126
"""Mean range of two normal values over their standard deviation, 2/√π."""


@dataclass(frozen=True, slots=True)
class Individuals:
    """A chart of single values (Shewhart): `mean`, `sigma` from the mean moving range of neighbours, limits at mean ± 3
    sigma, and which values (P,) lie outside. A slow drift widens the values but hardly the moving range, so that it
    shows. NaN with fewer than two values."""

    mean: float
    sigma: float
    lower: float
    upper: float
    outside: NDArray[np.bool_]


def individuals(values: Array) -> Individuals:
    """The chart of values (P,) in order of time; NaN values take no part."""
    known = values[~np.isnan(values)]
    mean = float(known.mean()) if len(known) else np.nan
    sigma = float(np.abs(np.diff(known)).mean() / RANGE_OF_TWO) if len(known) > 1 else np.nan
    lower, upper = mean - 3 * sigma, mean + 3 * sigma
    with np.errstate(invalid="ignore"):
        return Individuals(mean, sigma, lower, upper, (values < lower) | (values > upper))


@dataclass(frozen=True, slots=True)
class Pooled:
    """Chi-square of several panels together: `ratio` of the residuals' standard deviation to the assumed one, and the
    chances of one at least as large, `p_value`, and at most as large, `p_below`."""

    panels: int
    ratio: float
    degrees_of_freedom: float
    p_value: float
    p_below: float


def pooled(chi_square: Array, degrees_of_freedom: NDArray[Any], likeness: float) -> Pooled:
    """Panels (P,) together; `likeness` is the correlation of residuals at the same mark between panels.

    Panels whose local distortion repeats tell the same thing twice: the sum of P squares with correlation r has the
    variance of 1 + (P − 1) r² times as many, so that the degrees of freedom shrink by that factor (Satterthwaite 1946).
    """
    panels, dof = len(chi_square), float(degrees_of_freedom.sum())
    if dof <= 0:
        return Pooled(panels, np.nan, 0.0, 1.0, 1.0)
    effective = dof / (1 + (panels - 1) * likeness**2)
    mean_square = float(chi_square.sum()) / dof
    return Pooled(panels, float(np.sqrt(mean_square)), effective, float(chance_above(mean_square * effective, effective)),
                  float(chdtr(effective, mean_square * effective)))


def likeness(site: NDArray[np.int64], residual: Array) -> float:
    """Correlation of standardised residuals (m, 2) at the same mark between panels, between 0 and 1; 0 for a single
    panel.

    From all pairs of panels of each mark: Σ r_i r_j over Σ r² of the marks with at least two.
    """
    cross, squares = 0.0, 0.0
    for axis in (0, 1):
        r = residual[:, axis]
        known = ~np.isnan(r)
        count = np.bincount(site[known])
        total = np.bincount(site[known], r[known])
        own = np.bincount(site[known], r[known] ** 2)
        several = count > 1
        cross += float((total[several] ** 2 - own[several]).sum())
        squares += float((own[several] * (count[several] - 1)).sum())
    return float(np.clip(cross / squares, 0.0, 1.0)) if squares > 0 else 0.0

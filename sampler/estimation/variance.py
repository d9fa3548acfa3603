"""Variance components: one-way analysis of variance, repeats, and how terms vary from panel to panel and lot to lot."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri, fdtrc, fdtri

Array = NDArray[np.float64]
Codes = NDArray[np.int64]

LEVEL = 0.95
"""Confidence level of every interval."""


def variance_interval(sum_of_squares: Array | float, degrees_of_freedom: Array | float, level: float = LEVEL) -> Array:
    """Chi-square interval of a variance, (…, 2); (0, ∞) without degrees of freedom."""
    squares, dof = np.broadcast_arrays(np.asarray(sum_of_squares, float), np.asarray(degrees_of_freedom, float))
    tail = (1 - level) / 2
    safe = np.where(dof > 0, dof, 1.0)
    return np.stack([np.where(dof > 0, squares / chdtri(safe, tail), 0.0),
                     np.where(dof > 0, squares / chdtri(safe, 1 - tail), np.inf)], axis=-1)


@dataclass(frozen=True, slots=True)
class MeanSquare:
    """A sum of squares with its degrees of freedom; `value` is the mean square, NaN without any."""

    sum_of_squares: float
    degrees_of_freedom: float

    @property
    def value(self) -> float:
        return self.sum_of_squares / self.degrees_of_freedom if self.degrees_of_freedom > 0 else np.nan

    def interval(self, level: float = LEVEL) -> tuple[float, float]:
        low, high = variance_interval(self.sum_of_squares, self.degrees_of_freedom, level)
        return float(low), float(high)


@dataclass(frozen=True, slots=True)
class OneWay:
    """One-way analysis of variance. `size` is the group size that stands for unequal ones in E(between) = σ² + size
    σ_b²."""

    between: MeanSquare
    within: MeanSquare
    size: float

    @property
    def f(self) -> float:
        return self.between.value / self.within.value

    @property
    def p_value(self) -> float:
        """The chance of an F at least this large when the groups do not differ."""
        return float(fdtrc(self.between.degrees_of_freedom, self.within.degrees_of_freedom, self.f))

    @property
    def variance_between(self) -> float:
        """The groups' own variance; negative when they differ less than chance would have them."""
        return (self.between.value - self.within.value) / self.size

    def interval_between(self, level: float = LEVEL) -> tuple[float, float]:
        """Interval of the groups' own variance, its ends not below 0."""
        low, high = difference_interval(self.between, self.within, level)
        return max(low / self.size, 0.0), max(high / self.size, 0.0)


def one_way(y: Array, group: Codes) -> OneWay:
    """Analysis of variance of readings y (n,) in groups (n,), which need not be of equal size (Searle 1971, sec. 10.2).
    """
    _, code, count = np.unique(group, return_inverse=True, return_counts=True)
    mean = np.bincount(code, y - y[0]) / count  # from the first reading, so that a large common offset costs no digits
    off = y - y[0] - mean[code]
    centred = mean - (count * mean).sum() / len(y)
    groups = len(count)
    size = (len(y) - (count**2).sum() / len(y)) / max(groups - 1, 1)
    return OneWay(MeanSquare(float((count * centred**2).sum()), groups - 1), MeanSquare(float((off**2).sum()), len(y) - groups),
                  float(size))


def difference_interval(first: MeanSquare, second: MeanSquare, level: float = LEVEL) -> tuple[float, float]:
    """Interval of the difference of two expected mean squares: modified large sample (Ting et al. 1990; Burdick &
    Graybill 1992).

    The ends may be negative; infinite without degrees of freedom.
    """
    alpha = (1 - level) / 2
    n1, n2 = first.degrees_of_freedom, second.degrees_of_freedom
    s1, s2 = first.value, second.value
    if not (n1 > 0 and n2 > 0):
        return -np.inf, np.inf

    g1, h1 = 1 - n1 / chdtri(n1, alpha), n1 / chdtri(n1, 1 - alpha) - 1
    g2, h2 = 1 - n2 / chdtri(n2, alpha), n2 / chdtri(n2, 1 - alpha) - 1
    f_high, f_low = fdtri(n1, n2, 1 - alpha), fdtri(n1, n2, alpha)
    g12 = ((f_high - 1) ** 2 - (g1 * f_high) ** 2 - h2**2) / f_high
    h12 = ((1 - f_low) ** 2 - (h1 * f_low) ** 2 - g2**2) / f_low
    below = (g1 * s1) ** 2 + (h2 * s2) ** 2 + g12 * s1 * s2
    above = (h1 * s1) ** 2 + (g2 * s2) ** 2 + h12 * s1 * s2
    return s1 - s2 - np.sqrt(max(below, 0.0)), s1 - s2 + np.sqrt(max(above, 0.0))


@dataclass(frozen=True, slots=True)
class Variation:
    """How terms vary. `mean` (p,) with its covariance; `panel` and `lot` (p, p): covariance of a panel's terms within
    its lot and of a lot's mean, both positive semidefinite; their 95 % intervals of standard deviation (p, 2). `lot` is
    zero and its interval NaN with fewer than two lots; all is NaN with a single panel in every lot."""

    mean: Array
    mean_covariance: Array
    panel: Array
    panel_interval: Array
    lot: Array
    lot_interval: Array
    panels: int
    lots: int

    @property
    def sd(self) -> Array:
        """Standard deviation of a panel of any lot about the mean, (p,)."""
        return np.sqrt(np.diag(self.panel) + np.diag(self.lot))


def variation(theta: Array, covariance: Array, lot: Codes) -> Variation:
    """Panel-to-panel and lot-to-lot covariance of estimated terms, the covariance of the estimates taken out.

    `theta` (P, p) with estimation covariance (P, p, p), `lot` (P,) codes. Moments: the pooled sample covariance within
    lots estimates panel + mean estimation covariance; that of the lots' means estimates lot + (panel + estimation) / n.
    Intervals within lots from the generalised Q statistic (Viechtbauer 2007), exact for normal terms; between lots by
    modified large sample on unweighted means (Thomas & Hultquist 1978).
    """
    P, p = theta.shape
    _, code, count = np.unique(lot, return_inverse=True, return_counts=True)
    lots = len(count)
    means = np.stack([theta[code == i].mean(axis=0) for i in range(lots)])
    off = theta - means[code]
    dof = P - lots
    estimation = covariance.mean(axis=0)
    nothing = np.full((p, p), np.nan)
    no_interval = np.full((p, 2), np.nan)
    if dof < 1:
        return Variation(theta.mean(axis=0), nothing if P > 1 else covariance[0], nothing, no_interval, np.zeros((p, p)),
                         no_interval, P, lots)
    within = off.T @ off / dof
    panel = positive(within - _pooled(covariance, code, count, dof))
    interval = np.sqrt(q_profile(theta, np.diagonal(covariance, axis1=1, axis2=2), code))
    if lots < 2:
        return Variation(theta.mean(axis=0), (panel + estimation) / P, panel, interval, np.zeros((p, p)), no_interval, P, lots)
    harmonic = lots / (1.0 / count).sum()
    between = np.cov(means.T).reshape(p, p)
    lot_cov = positive(between - within / harmonic)
    lot_interval = np.empty((p, 2))
    for j in range(p):
        low, high = difference_interval(MeanSquare(harmonic * between[j, j] * (lots - 1), lots - 1),
                                        MeanSquare(within[j, j] * dof, dof))
        lot_interval[j] = np.sqrt(np.maximum([low, high], 0.0) / harmonic)
    return Variation(means.mean(axis=0), between / lots, panel, interval, lot_cov, lot_interval, P, lots)


def _pooled(covariance: Array, code: Codes, count: Codes, dof: int) -> Array:
    """What estimation adds to the pooled sample covariance within lots, (p, p): unequal covariances weigh by 1 − 1/n.
    """
    return np.einsum("i,ijk->jk", 1 - 1 / count[code], covariance) / dof


def positive(matrix: Array) -> Array:
    """The nearest positive semidefinite matrix when every variance is scaled to 1, so that units do not matter; a
    variance that is not positive becomes 0 with its row."""
    size = np.sqrt(np.maximum(np.diag(matrix), 0.0))
    scale = np.where(size > 0, size, 1.0)
    scaled = np.where(np.outer(size > 0, size > 0), matrix / np.outer(scale, scale), 0.0)
    values, vectors = np.linalg.eigh((scaled + scaled.T) / 2)
    if values[0] >= 0:
        return scaled * np.outer(scale, scale)
    return (vectors * np.maximum(values, 0.0)) @ vectors.T * np.outer(scale, scale)


def q_profile(theta: Array, variance: Array, group: Codes, level: float = LEVEL) -> Array:
    """Interval of the variance among true values within groups, (p, 2), from estimates (P, p) with known variances (P,
    p).

    Q(v) = Σ (θ − weighted group mean)² / (v + variance) has a chi-square distribution at the true v; its ends are where
    Q reaches the quantiles, 0 where it never does. Decreasing in v, so bisection in log v is safe.
    """
    tail = (1 - level) / 2
    groups = int(group.max()) + 1
    dof = len(theta) - len(np.unique(group))
    member = (group[:, None] == np.arange(groups)).astype(float)

    def q(v: Array) -> Array:
        weight = 1.0 / (v + variance)
        total = member.T @ weight
        mean = np.divide(member.T @ (weight * theta), total, out=np.zeros_like(total), where=total > 0)
        return (weight * (theta - mean[group]) ** 2).sum(axis=0)

    ends = []
    spread = np.maximum(theta.var(axis=0), variance.max(axis=0)) + 1e-300
    for quantile in (chdtri(dof, tail), chdtri(dof, 1 - tail)):
        low, high = np.full(theta.shape[1], -60.0), np.full(theta.shape[1], np.log(len(theta) * 1e8))
        for _ in range(60):
            middle = (low + high) / 2
            above = q(spread * np.exp(middle)) > quantile
            low, high = np.where(above, middle, low), np.where(above, high, middle)
        with np.errstate(divide="ignore", invalid="ignore"):
            ends.append(np.where(q(np.zeros(theta.shape[1])) > quantile, spread * np.exp(low), 0.0))
    return np.stack(ends, axis=1)

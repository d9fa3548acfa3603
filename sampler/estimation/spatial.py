"""Whether what a model leaves at a mark resembles what it leaves nearby: Moran's I, variogram, range.

Correlation functions of distance d: `smooth` exp(−d² / 2 range²), which is that of the planner's local field, and
`rough` exp(−d / range). One axis at a time. A fit takes part of a correlated field away and makes its residuals
negatively correlated far apart; the variogram is therefore fitted through the fit: with M = I − qqᵀ the residuals'
covariance is M (sill R + nugget I) M, so that the expected value of every bin is linear in sill and nugget and nothing
is biased.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist

Array = NDArray[np.float64]

Correlation = Callable[[Array, float], Array]

FAMILIES: dict[str, Correlation] = {"smooth": lambda d, reach: np.exp(-(d**2) / (2 * reach**2)),
                                    "rough": lambda d, reach: np.exp(-d / reach)}
MOST_MARKS = 700
"""Marks of one field that take part; of more, half are spread at random and half stand in close groups, for short
distances."""
GROUP = 12
BINS = 24
RANGES = 36
"""Ranges tried, equally spaced in logarithm from half the closest distance to the largest; the best is refined between
them."""
NEIGHBOURS = 8
PERMUTATIONS = 999
SIMULATIONS = 200
LEVEL = 0.95


@dataclass(frozen=True, slots=True)
class Field:
    """Residuals of one axis on panels that read the same marks: `xy_mm` (n, 2), orthonormal basis `q` (n, r) of what
    was fitted, `residual` (g, n), one row for each panel."""

    xy_mm: Array
    q: Array
    residual: Array

    @classmethod
    def fitted(cls, xy_mm: Array, rows: Array, y: Array) -> Field:
        """Fits the axis' own design rows (n, p) to the readings (g, n)."""
        u, size, _ = np.linalg.svd(rows / np.maximum(np.linalg.norm(rows, axis=0), 1e-300), full_matrices=False)
        q = u[:, size > 1e-10 * max(size[0], 1e-300)] if rows.shape[1] else np.zeros((len(rows), 0))
        return cls(xy_mm, q, y - (y @ q) @ q.T)

    @property
    def degrees_of_freedom(self) -> int:
        return len(self.residual) * (len(self.q) - self.q.shape[1])

    def left(self, matrix: Array) -> Array:
        """M matrix M."""
        once = matrix - self.q @ (self.q.T @ matrix)
        return once - (once @ self.q) @ self.q.T


    def worth(self, fit: VariogramFit) -> float:
        """Effective degrees of freedom of the mean square under a fit, tr(K)² / tr(K²) for each panel (Satterthwaite
        1946)."""
        d = cdist(self.xy_mm, self.xy_mm)
        covariance = self.left(fit.sill_um2 * FAMILIES[fit.family](d, fit.range_mm) + fit.nugget_um2 * np.eye(len(d)))
        return len(self.residual) * float(np.trace(covariance) ** 2 / (covariance**2).sum())


def thinned(xy_mm: Array, rng: np.random.Generator, most: int = MOST_MARKS) -> NDArray[np.int64]:
    """At most about `most` of the points: half at random, half in close groups."""
    if len(xy_mm) <= most:
        return np.arange(len(xy_mm))
    spread = rng.choice(len(xy_mm), most // 2, replace=False)
    centres = rng.choice(len(xy_mm), most // 2 // GROUP, replace=False)
    near = np.asarray(cKDTree(xy_mm).query(xy_mm[centres], GROUP)[1])
    return np.unique(np.r_[spread, near.ravel()])


@dataclass(frozen=True, slots=True)
class Moran:
    """Moran's I with the mean it has without correlation, and the chance of one at least as large."""

    i: float
    expected: float
    p_value: float


def neighbour_weights(xy_mm: Array, count: int = NEIGHBOURS) -> csr_array:
    """Row-standardised weights of the `count` nearest other points, (n, n)."""
    n = len(xy_mm)
    count = min(count, n - 1)
    near = np.asarray(cKDTree(xy_mm).query(xy_mm, count + 1)[1])
    rows = np.arange(n)[:, None]
    # Of points at one place the query may not list the point itself first, or at all.
    own = near == rows
    own[~own.any(axis=1), -1] = True
    others = near[~own].reshape(n, count)
    return csr_array((np.full(n * count, 1.0 / count), (np.repeat(rows, count), others.ravel())), shape=(n, n))


def morans_i(values: Array, weights: csr_array) -> Array:
    """I = (n / Σw) Σ w z z' / Σ z² of each row of values (g, n) about its mean (Moran 1950; Cliff & Ord 1981)."""
    z = values - values.mean(axis=1, keepdims=True)
    squares = (z**2).sum(axis=1)
    cross = (z * (weights @ z.T).T).sum(axis=1)
    return values.shape[1] / weights.sum() * np.divide(cross, squares, out=np.zeros_like(squares), where=squares > 0)


def moran(fields: list[Field], rng: np.random.Generator, permutations: int = PERMUTATIONS) -> Moran:
    """The mean of I over all panels; values change places within their panel only."""
    observed, expected, panels = 0.0, 0.0, 0
    drawn = np.zeros(permutations)
    for field in fields:
        weights = neighbour_weights(field.xy_mm)
        g, n = field.residual.shape
        observed += float(morans_i(field.residual, weights).sum())
        expected += g * -1.0 / (n - 1)
        panels += g
        for k in range(permutations):
            drawn[k] += morans_i(rng.permuted(field.residual, axis=1), weights).sum()
    p = (1 + (drawn >= observed - 1e-12 * abs(observed)).sum()) / (permutations + 1)
    return Moran(observed / panels, expected / panels, float(p))


@dataclass(frozen=True, slots=True)
class Variogram:
    """Half the mean squared difference of pairs on the same panel, by bins of distance: `distance_mm`, `gamma_um2` and
    `pairs` (b,)."""

    distance_mm: Array
    gamma_um2: Array
    pairs: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class VariogramFit:
    """nugget + sill (1 − correlation(d; range)), with 95 % intervals from simulated fields, refitted; `misfit` is the
    weighted sum of squares over the bins. `curve_um2` (b,): what the fit expects of each bin, the loss by fitting
    included. A range at the end of the ranges that the marks can show is `bounded` false: then the field is a slow
    bend, and sill and range are lower bounds."""

    family: str
    nugget_um2: float
    sill_um2: float
    range_mm: float
    misfit: float
    curve_um2: Array
    bounded: bool
    nugget_interval: tuple[float, float]
    sill_interval: tuple[float, float]
    range_interval: tuple[float, float]


@dataclass(frozen=True, slots=True)
class _Bins:
    """Which pairs of each field fall into which bin: upper-triangle indices and bin numbers."""

    upper: list[tuple[NDArray[np.int64], NDArray[np.int64]]]
    bin: list[NDArray[np.int64]]
    weight: list[float]
    pairs: Array
    distance: Array

    def mean(self, per_field: list[Array]) -> Array:
        """Half the mean squared difference in each bin, of matrices of mean products (n, n), one for each field."""
        total = np.zeros(len(self.pairs))
        for (i, j), label, weight, matrix in zip(self.upper, self.bin, self.weight, per_field, strict=True):
            diagonal = np.diag(matrix)
            total += weight * np.bincount(label, (diagonal[i] + diagonal[j]) / 2 - matrix[i, j], len(total))
        return total / self.pairs


def _bins(fields: list[Field]) -> _Bins:
    reach = 0.6 * max(float(np.linalg.norm(np.ptp(field.xy_mm, axis=0))) for field in fields)
    edges = reach * np.linspace(0, 1, BINS + 1) ** 1.5
    upper, label, weight = [], [], []
    pairs, distance = np.zeros(BINS), np.zeros(BINS)
    for field in fields:
        i, j = np.triu_indices(len(field.xy_mm), 1)
        d = np.linalg.norm(field.xy_mm[i] - field.xy_mm[j], axis=1)
        at = np.searchsorted(edges, d) - 1
        inside = (at >= 0) & (at < BINS)
        upper.append((i[inside], j[inside]))
        label.append(at[inside])
        weight.append(float(len(field.residual)))
        pairs += weight[-1] * np.bincount(at[inside], minlength=BINS)
        distance += weight[-1] * np.bincount(at[inside], d[inside], BINS)
    used = np.flatnonzero(pairs)
    place = np.full(BINS, -1)
    place[used] = np.arange(len(used))
    return _Bins(upper, [place[at] for at in label], weight, pairs[used], distance[used] / pairs[used])


def variogram(fields: list[Field]) -> Variogram:
    """The pooled variogram of residuals, up to 0.6 of the diagonal; bins widen with distance, empty ones are left out.
    """
    bins = _bins(fields)
    return Variogram(bins.distance, bins.mean(_products(fields)), bins.pairs.astype(np.int64))


def fit_variogram(fields: list[Field], rng: np.random.Generator, simulations: int = SIMULATIONS) -> tuple[VariogramFit, ...]:
    """Both families fitted to the pooled variogram, the better (smaller misfit) first.

    Weighted least squares with weights pairs / expected² (Cressie 1985), twice reweighted; for each range the nugget
    and the sill, not negative, follow linearly.
    """
    bins = _bins(fields)
    observed = bins.mean(_products(fields))
    distances = [cdist(field.xy_mm, field.xy_mm) for field in fields]
    closest = min(float(np.min(d[d > 1e-9], initial=np.inf)) for d in distances)
    ranges = np.geomspace(closest / 2, max(float(d.max()) for d in distances), RANGES)
    nugget = bins.mean([field.left(np.eye(len(d))) for field, d in zip(fields, distances, strict=True)])
    found = []
    for family, correlation in FAMILIES.items():
        sill = np.stack([bins.mean([field.left(correlation(d, reach)) for field, d in zip(fields, distances, strict=True)])
                         for reach in ranges])
        n, s, at, misfit, curve = (part[0] for part in _fit(observed[None], bins.pairs, nugget, sill))
        reach = float(np.exp(np.interp(at, np.arange(RANGES), np.log(ranges))))
        drawn = _simulated(fields, distances, bins, float(n), float(s), correlation, reach, rng, simulations)
        n_sim, s_sim, at_sim, _, _ = _fit(drawn, bins.pairs, nugget, sill)
        shown = at_sim[s_sim > 0.01 * (s_sim + n_sim)]
        reaches = np.exp(np.interp(shown, np.arange(RANGES), np.log(ranges)))
        found.append(VariogramFit(family, float(n), float(s), reach, float(misfit), curve, bool(at < RANGES - 1.5),
                                  _middle(n_sim), _middle(s_sim),
                                  _middle(reaches) if len(shown) else (float(ranges[0]), float(ranges[-1]))))
    return tuple(sorted(found, key=lambda fit: fit.misfit))


def _middle(values: Array) -> tuple[float, float]:
    low, high = np.quantile(values, [(1 - LEVEL) / 2, (1 + LEVEL) / 2])
    return float(low), float(high)


def _products(fields: list[Field]) -> list[Array]:
    return [field.residual.T @ field.residual / len(field.residual) for field in fields]


def _simulated(fields: list[Field], distances: list[Array], bins: _Bins, nugget: float, sill: float, correlation: Correlation,
               reach: float, rng: np.random.Generator, simulations: int) -> Array:
    """Variograms (simulations, b) of fields drawn from a fit."""
    roots = []
    for field, d in zip(fields, distances, strict=True):
        values, vectors = np.linalg.eigh(sill * correlation(d, reach))
        root = vectors * np.sqrt(np.maximum(values, 0.0))
        roots.append((root - field.q @ (field.q.T @ root), field))
    drawn = []
    for _ in range(simulations):
        products = []
        for root, field in roots:
            g, n = field.residual.shape
            white = rng.normal(size=(g, n)) * np.sqrt(nugget)
            y = rng.normal(size=(g, n)) @ root.T + white - (white @ field.q) @ field.q.T
            products.append(y.T @ y / g)
        drawn.append(bins.mean(products))
    return np.array(drawn).reshape(simulations, len(bins.pairs))


def _fit(observed: Array, pairs: Array, nugget: Array, sill: Array) -> tuple[Array, Array, Array, Array, Array]:
    """Nugget, sill, place among the ranges, misfit and curve of each observed variogram (s, b).

    `nugget` (b,) and `sill` (ranges, b) are the bins' expected values per unit.
    """
    expected = np.repeat(np.maximum(observed.mean(axis=1, keepdims=True), 1e-300), observed.shape[1], axis=1)
    for _ in range(3):
        weight = pairs / np.maximum(expected, 1e-6 * expected.max(axis=1, keepdims=True)) ** 2
        n, s, misfit = _linear(observed, weight, nugget, sill[None])
        best = misfit.argmin(axis=1)
        at = _between(misfit, best)
        low = np.clip(np.floor(at).astype(int), 0, len(sill) - 2)
        part = (at - low)[:, None]
        here = sill[low] * (1 - part) + sill[low + 1] * part
        n, s, misfit = (value[:, 0] for value in _linear(observed, weight, nugget, here[:, None]))
        expected = n[:, None] * nugget + s[:, None] * here
    return n, s, at, misfit, expected


def _linear(observed: Array, weight: Array, nugget: Array, sill: Array) -> tuple[Array, Array, Array]:
    """Least squares of n nugget + s sill with n, s ≥ 0: n, s and misfit, each (s, ranges); `sill` (s or 1, ranges, b).
    """
    aa = (weight * nugget**2).sum(axis=1)[:, None]
    ay = (weight * nugget * observed).sum(axis=1)[:, None]
    ab = ((weight * nugget)[:, None] * sill).sum(axis=2)
    bb = (weight[:, None] * sill**2).sum(axis=2)
    by = ((weight * observed)[:, None] * sill).sum(axis=2)
    yy = (weight * observed**2).sum(axis=1)[:, None]
    only_n, only_s = np.maximum(ay / aa, 0.0), np.maximum(by / np.maximum(bb, 1e-300), 0.0)
    det = aa * bb - ab**2
    singular = det <= 1e-12 * aa * bb
    safe = np.where(singular, 1.0, det)
    n, s = (ay * bb - by * ab) / safe, (aa * by - ab * ay) / safe
    free = ~singular & (n >= 0) & (s >= 0)
    miss_n = yy - 2 * only_n * ay + only_n**2 * aa
    miss_s = yy - 2 * only_s * by + only_s**2 * bb
    take_n = miss_n <= miss_s
    n = np.where(free, n, np.where(take_n, only_n, 0.0))
    s = np.where(free, s, np.where(take_n, 0.0, only_s))
    return n, s, yy - 2 * n * ay - 2 * s * by + n**2 * aa + s**2 * bb + 2 * n * s * ab


def _between(misfit: Array, best: NDArray[np.int64]) -> Array:
    """The minimum between the tried ranges, by a parabola through the best and its neighbours."""
    middle = np.clip(best, 1, misfit.shape[1] - 2)
    rows = np.arange(len(misfit))
    left, centre, right = (misfit[rows, middle + k] for k in (-1, 0, 1))
    bend = left - 2 * centre + right
    shift = np.where(bend > 0, (left - right) / (2 * np.where(bend > 0, bend, 1.0)), 0.0)
    return np.where(best == middle, middle + np.clip(shift, -0.5, 0.5), best)

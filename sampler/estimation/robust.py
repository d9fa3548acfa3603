"""Robust fits: M-estimates by reweighting, and readings that do not belong to the rest.

The design is given by an orthonormal basis q (n, r) of its columns, so the weighted normal equations stay well
conditioned.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

Array = NDArray[np.float64]

HUBER, BISQUARE = 1.345, 4.685
"""Tuning constants for 95 % efficiency at normal noise (Huber 1981; Beaton & Tukey 1974)."""
MAD_TO_SIGMA = 1.482602218505602
FLAG_CHANCE = 0.01
"""Chance that a panel without any outlier has a reading flagged: Bonferroni over its readings."""
STEPS = 200
SETTLED = 1e-10
"""Fitted values that move less than this share of the scale have settled."""
SUSPECTS_SETTLED = 1e-3
"""The same where the estimate only says whom to suspect: least squares without them decides."""
CHUNK = 4_000_000
"""Largest number of elements of a temporary array."""


@dataclass(frozen=True, slots=True)
class MEstimate:
    """`coefficients` (g, r) on the basis, `scale` (g, groups), `weight` (g, n) between 0 and 1."""

    coefficients: Array
    scale: Array
    weight: Array


def m_estimate(q: Array, y: Array, bisquare: bool = False, group: NDArray[np.int64] | None = None,
               start: Array | None = None, settled: float = SETTLED) -> MEstimate:
    """Huber's, or the bisquare, M-estimate of each row of y (g, n) by iteratively reweighted least squares.

    The scale is 1.4826 times the median absolute residual, renewed at every step, apart for each `group` (n,) of
    readings. `start` (g, r) defaults to least squares; the bisquare wants a robust one.
    """
    group = np.zeros(len(q), np.int64) if group is None else group
    members = [np.flatnonzero(group == label) for label in range(int(group.max()) + 1)]
    coefficients = y @ q if start is None else start.copy()
    scale = np.zeros((len(y), len(members)))
    weight = np.ones_like(y)
    active = np.arange(len(y))
    for _ in range(STEPS):
        fitted = coefficients[active] @ q.T
        residual = np.abs(y[active] - fitted)
        for column, rows in enumerate(members):
            scale[active, column] = MAD_TO_SIGMA * np.median(residual[:, rows], axis=1) if len(rows) else 0.0
        per_reading = scale[active][:, group]
        weight[active] = _weights(residual, per_reading, bisquare)
        new = weighted(q, y[active], weight[active] / np.where(per_reading > 0, per_reading, 1.0) ** 2)
        moved = np.abs((new - coefficients[active]) @ q.T)
        coefficients[active] = new
        active = active[(moved > settled * per_reading + 1e-15 * np.abs(y[active])).any(axis=1)]
        if not len(active):
            break
    return MEstimate(coefficients, scale, weight)


def _weights(residual: Array, scale: Array, bisquare: bool) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        off = np.where(residual > 0, residual / scale, 0.0)  # a scale of zero keeps only what fits exactly
        if bisquare:
            return np.where(off < BISQUARE, (1 - (np.minimum(off, BISQUARE) / BISQUARE) ** 2) ** 2, 0.0)
        return np.minimum(1.0, HUBER / np.maximum(off, HUBER))


def weighted(q: Array, y: Array, weight: Array) -> Array:
    """Weighted least squares of each row of y (g, n) with weights (g, n) on q (n, r): coefficients (g, r)."""
    coefficients = np.empty((len(y), q.shape[1]))
    for part in _parts(len(y), q.size):
        gram = np.matmul(q.T * weight[part][:, None, :], q)
        moments = (weight[part] * y[part]) @ q
        coefficients[part] = (np.linalg.pinv(gram, hermitian=True) @ moments[:, :, None])[:, :, 0]
    return coefficients


@dataclass(frozen=True, slots=True)
class Outliers:
    """`flagged` (g, n); `studentised` (g, n): the residual of each reading against a fit to all good readings but
    itself, over its standard deviation; `sigma` (g, groups) of the good ones."""

    flagged: NDArray[np.bool_]
    studentised: Array
    sigma: Array


def outliers(q: Array, y: Array, group: NDArray[np.int64] | None = None) -> Outliers:
    """Readings that do not belong: Huber then bisquare, then least squares on the rest until the flags stay.

    A reading is flagged when its externally studentised residual passes Student's t at FLAG_CHANCE, Bonferroni over the
    n readings. Its noise is that of its `group` (n,).
    """
    group = np.zeros(len(q), np.int64) if group is None else group
    n, rank = q.shape
    groups = int(group.max()) + 1
    if n - rank < 3:
        nothing = np.full(y.shape, np.nan)
        return Outliers(np.zeros(y.shape, bool), nothing, np.full((len(y), groups), np.nan))
    first = m_estimate(q, y, False, group, None, SUSPECTS_SETTLED)
    second = m_estimate(q, y, True, group, first.coefficients, SUSPECTS_SETTLED)
    flagged = second.weight < _weights(np.array(3.5), np.array(1.0), True)  # suspects beyond 3.5 robust sigmas
    # More than half flagged is no set of outliers: then the robust fit has found a minority, and nothing is flagged.
    flagged[flagged.mean(axis=1) > 0.5] = False
    studentised, sigma, dof = _deleted(q, y, group, groups, flagged)
    for _ in range(10):
        cut = stdtrit(np.maximum(dof - 1, 1.0), 1 - FLAG_CHANCE / (2 * n))[:, group]
        now = np.abs(studentised) > cut
        now[now.mean(axis=1) > 0.5] = False
        if (now == flagged).all():
            break
        flagged = now
        studentised, sigma, dof = _deleted(q, y, group, groups, flagged)
    return Outliers(flagged, studentised, sigma)


def _deleted(q: Array, y: Array, group: NDArray[np.int64], groups: int,
             flagged: NDArray[np.bool_]) -> tuple[Array, Array, Array]:
    """Externally studentised residuals (g, n) against the fit to readings not flagged, and its sigma with its degrees
    of freedom, both (g, groups)."""
    studentised, sigma, freedom = np.empty_like(y), np.empty((len(y), groups)), np.empty((len(y), groups))
    tiny = 1e-14 * np.abs(y).max(axis=1, keepdims=True) + 1e-300
    for part in _parts(len(y), q.size):
        good = (~flagged[part]).astype(float)
        inverse = np.linalg.pinv(np.matmul(q.T * good[:, None, :], q), hermitian=True)
        residual = y[part] - (inverse @ ((good * y[part]) @ q)[:, :, None])[:, :, 0] @ q.T
        leverage = (np.matmul(q, inverse) * q).sum(axis=2)
        squares = good * residual**2
        inside = flagged[part] == 0
        rest = np.where(inside, 1 - leverage, 1 + leverage)
        ok = rest > 1e-9
        own = residual**2 / np.where(ok, rest, 1.0)
        for label in range(groups):
            of = group == label
            dof = np.maximum((good - good * leverage)[:, of].sum(axis=1, keepdims=True), 1e-9)
            total = squares[:, of].sum(axis=1, keepdims=True)
            sigma[part, label], freedom[part, label] = np.sqrt(total / dof)[:, 0], dof[:, 0]
            # Without the reading itself: one degree of freedom and its own share of the squares less.
            spread = np.where(inside[:, of], (total - own[:, of]) / np.maximum(dof - 1, 1e-9), total / dof)
            root = np.maximum(np.sqrt(np.maximum(spread, 0.0)), tiny[part])
            single = residual[:, of] / np.sqrt(np.where(ok, rest, 1.0))[:, of] / root
            studentised[part, of] = np.where(ok[:, of], single, 0.0)
    return studentised, sigma, freedom


def _parts(count: int, each: int) -> list[slice]:
    step = max(1, CHUNK // max(each, 1))
    return [slice(start, min(start + step, count)) for start in range(0, count, step)]

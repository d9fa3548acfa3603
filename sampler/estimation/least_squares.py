"""Weighted least squares by orthogonal factors, for many panels that share their marks at once.

Rows are whitened: divided by the standard uncertainty of their reading, so that residuals have unit variance when the
noise is as assumed. A term with a prior adds one row (its value over its standard deviation); nothing else is ever
added.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr, solve_triangular
from scipy.linalg.lapack import dtrcon
from scipy.special import chdtr, chdtrc

Array = NDArray[np.float64]

PART_TOLERANCE = 1e-7
"""A term whose part in a null direction (all terms scaled to equal effect) is smaller than this is not in it."""

PIVOTED_COLUMNS = 40
SURELY_DETERMINED = 1e-9
"""Reciprocal condition from which on no pivoting is needed to know the rank: far above rounding, which is near 1e-14."""


@dataclass(frozen=True, slots=True)
class Factored:
    """A design's QR factors with column scaling and pivoting: rows[:, order] / scale[order] = q r, cut to its rank.

    `rows` (n, p) are the readings', `q` (n, rank) their part of the orthonormal factor and `q_prior` (m, rank) that of
    the m prior rows, which belong to the terms `with_prior` (m,) of standard deviation `prior_sd` (m,).
    """

    rows: Array
    q: Array
    q_prior: Array
    r: Array
    order: NDArray[np.int64]
    scale: Array
    with_prior: NDArray[np.int64]
    prior_sd: Array

    @classmethod
    def of(cls, rows: Array, prior_sd: Array | None = None) -> Factored:
        """Factors of whitened rows (n, p); `prior_sd` (p,) with inf for a term without prior."""
        n, p = rows.shape
        with_prior = np.flatnonzero(np.isfinite(prior_sd)) if prior_sd is not None else np.zeros(0, np.int64)
        sd = prior_sd[with_prior] if prior_sd is not None else np.zeros(0)
        prior = np.zeros((len(with_prior), p))
        prior[np.arange(len(with_prior)), with_prior] = 1.0 / sd
        whole = np.concatenate([rows, prior])
        norm = np.linalg.norm(whole, axis=0)
        scale = np.where(norm > 0, norm, 1.0)
        q, r, order = _factors(whole / scale)
        size = np.abs(np.diag(r))
        # Rounding of the factorisation itself (Golub & Van Loan 2013, sec. 5.5.8): below it a pivot carries nothing.
        rank = int((size > max(whole.shape) * np.finfo(float).eps).sum())
        return cls(rows, q[:n, :rank], q[n:, :rank], r[:rank], np.asarray(order, np.int64), scale, with_prior, sd)

    @property
    def terms(self) -> int:
        return self.rows.shape[1]

    @property
    def rank(self) -> int:
        return len(self.r)

    @property
    def degrees_of_freedom(self) -> int:
        """Readings plus prior rows less the terms that they determine."""
        return len(self.rows) + len(self.q_prior) - self.rank

    @property
    def leverage(self) -> Array:
        """Diagonal of the hat matrix, (n,)."""
        return (self.q**2).sum(axis=1)

    def inseparable(self) -> list[list[int]]:
        """Groups of terms that the readings cannot tell apart, one for each missing rank; a group of one has no effect.
        """
        if self.rank == self.terms:
            return []
        relation = solve_triangular(self.r[:, :self.rank], self.r[:, self.rank:])
        return [sorted([int(self.order[self.rank + column]),
                        *(int(self.order[i]) for i in np.flatnonzero(np.abs(relation[:, column]) > PART_TOLERANCE))])
                for column in range(self.terms - self.rank)]

    def _half(self) -> Array:
        """r⁻¹ with pivoting and scaling undone, (p, rank): the terms are `half @ (qᵀ y)`."""
        assert self.rank == self.terms, "only a design of full rank has a solution"
        half = np.empty((self.terms, self.rank))
        half[self.order] = solve_triangular(self.r, np.eye(self.rank))
        return half / self.scale[:, None]

    def covariance(self) -> Array:
        """Covariance of the terms (p, p) when the noise is as assumed."""
        half = self._half()
        return half @ half.T

    def estimator(self) -> Array:
        """The matrix (p, n) that turns whitened readings into terms, prior means of zero."""
        return self._half() @ self.q.T

    def solve(self, y: Array, prior_mean: Array | None = None) -> Fit:
        """Terms of each panel's whitened readings y (g, n); `prior_mean` (p,), zero by default."""
        mean = np.zeros(len(self.with_prior)) if prior_mean is None else prior_mean[self.with_prior]
        target = mean / self.prior_sd
        moments = y @ self.q + target @ self.q_prior
        theta = np.empty((len(y), self.terms))
        theta[:, self.order] = solve_triangular(self.r, moments.T).T
        theta /= self.scale
        residual = y - theta @ self.rows.T
        missed = target - theta[:, self.with_prior] / self.prior_sd
        return Fit(theta, residual, (residual**2).sum(axis=1) + (missed**2).sum(axis=1), self)


def _factors(scaled: Array) -> tuple[Array, Array, NDArray[np.int64]]:
    """Economic QR factors and column order. Pivoting, which is several times slower, only where the rank is in doubt."""
    rows, columns = scaled.shape
    if rows >= columns > PIVOTED_COLUMNS:
        plain: Any = qr(scaled, mode="economic")
        if dtrcon(plain[1])[0] > SURELY_DETERMINED:
            return plain[0], plain[1], np.arange(columns)
    factors: Any = qr(scaled, mode="economic", pivoting=True)
    return factors


@dataclass(frozen=True, slots=True)
class Fit:
    """Panels (g,) fitted on one design: `theta` (g, p), whitened `residual` (g, n), and `chi_square` (g,), the sum of
    their squares and of the prior rows' squares."""

    theta: Array
    residual: Array
    chi_square: Array
    design: Factored

    @property
    def p_above(self) -> Array:
        """The chance of a chi-square at least this large when noise, priors and model are as assumed, (g,)."""
        return chance_above(self.chi_square, self.design.degrees_of_freedom)

    @property
    def p_below(self) -> Array:
        """The chance of a chi-square at most this large, (g,)."""
        return chdtr(self.design.degrees_of_freedom, self.chi_square)

    def standardised(self) -> Array:
        """Residuals over their standard deviation as assumed, (g, n); NaN at leverage 1."""
        return self.residual / _root_of_rest(self.design.leverage)

    def studentised(self) -> tuple[Array, Array]:
        """Internally and externally studentised residuals (g, n), with the noise taken from the residuals themselves.

        External: the residual against a fit without that reading (Cook & Weisberg 1982, sec. 2.2). NaN at leverage 1 or
        without degrees of freedom.
        """
        dof = self.design.degrees_of_freedom
        with np.errstate(invalid="ignore", divide="ignore"):
            internal = self.standardised() / np.sqrt(self.chi_square / dof)[:, None] if dof > 0 else self.residual * np.nan
            external = internal * np.sqrt((dof - 1) / np.maximum(dof - internal**2, 0.0))
        return internal, external

    def cook(self) -> Array:
        """Cook's distance of each reading, (g, n) (Cook 1977)."""
        leverage = self.design.leverage
        internal, _ = self.studentised()
        return internal**2 * (leverage / _root_of_rest(leverage) ** 2) / self.design.rank


def chance_above(chi_square: Array | float, degrees_of_freedom: NDArray[Any] | float) -> Array:
    """Upper tail of chi-square; 1 without degrees of freedom."""
    dof = np.asarray(degrees_of_freedom, float)
    return np.where(dof > 0, chdtrc(np.maximum(dof, 1e-9), chi_square), 1.0)


def _root_of_rest(leverage: Array) -> Array:
    """√(1 − leverage), NaN where a reading is fitted whatever it says."""
    rest = 1.0 - leverage
    return np.sqrt(np.where(rest > 1e-12, rest, np.nan))


def in_words(groups: list[list[int]], names: tuple[str, ...]) -> str:
    """Which terms the readings do not determine, for people."""
    said = []
    for group in groups:
        quoted = [f"`{names[column]}`" for column in group]
        said.append(f"{quoted[0]} acts on none of the marks read" if len(group) == 1
                    else f"{', '.join(quoted[:-1])} and {quoted[-1]} cannot be told apart by the marks read")
    return "; ".join(said)

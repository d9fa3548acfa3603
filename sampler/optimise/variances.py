"""Variances of the limits while sites come and go: rank-m formulas for all candidates in one pass.

With M₋ = M − BⱼᵀBⱼ, and S = I ± B M⁻¹ Bᵀ the m × m matrix of the site that comes (+) or goes (−),

    M±⁻¹ = M⁻¹ ∓ M⁻¹Bᵀ S⁻¹ B M⁻¹,        v_l± = v_l ∓ ‖S^(−1/2) B M⁻¹ c_l‖².
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.blocks import Array, Split
from sampler.optimise.pool import Indices, Pool

LEAST_PIVOT = 1e-12
"""1 − leverage of a site that M cannot do without, as far as floats tell: dropping it leaves next to nothing known."""


def inverted(matrix: Array) -> Array:
    """M⁻¹ of a positive definite matrix."""
    return np.asarray(np.linalg.inv(matrix), np.float64)


def information(rows: Array, prior: Array, ridge: float) -> Array:
    """P₀ + Σ BᵢᵀBᵢ + ridge·I of the given rows (k, m, q)."""
    flat = rows.reshape(-1, rows.shape[2])
    total = prior + flat.T @ flat
    total[np.diag_indices_from(total)] += ridge
    return total


def weighted_information(rows: Array, prior: Array, weights: Array) -> Array:
    """P₀ + Σ wᵢBᵢᵀBᵢ of rows (n, m, q)."""
    flat = rows.reshape(-1, rows.shape[2])
    return prior + (flat * np.repeat(weights, rows.shape[1])[:, None]).T @ flat


def leverages(rows: Array, inverse: Array) -> Array:
    """Bᵢ M⁻¹ Bᵢᵀ of each site, (n, m, m)."""
    if rows.shape[1] == 1:
        return np.einsum("ij,ij->i", rows[:, 0] @ inverse, rows[:, 0])[:, None, None]
    return np.einsum("iaq,ibq->iab", rows @ inverse, rows)


def whiten(leverage: Array, sign: float, readings: Array) -> Array:
    """S^(−1/2) readings with S = I + sign · leverage (n, m, m), readings (n, m, K); S is kept from being singular."""
    if leverage.shape[1] == 1:
        return readings / np.sqrt(np.maximum(1.0 + sign * leverage, LEAST_PIVOT))
    values, vectors = np.linalg.eigh(np.eye(leverage.shape[1]) + sign * leverage)
    return (vectors / np.sqrt(np.maximum(values, LEAST_PIVOT))[:, None, :]).transpose(0, 2, 1) @ readings


def without(inverse: Array, rows: Array) -> Array:
    """(M − BᵀB)⁻¹ from M⁻¹ and the site's rows (m, q)."""
    moved = inverse @ rows.T
    part = whiten((rows @ moved)[None], -1.0, moved.T[None])[0]
    return inverse + part.T @ part


class Variances:
    """The variance ratios of some of the limits, the watched ones, for sets of sites of a pool.

    `limits` (W,) are the watched limits of the split. In each block, column k belongs to watched limit `owner[b][k]`.
    """

    def __init__(self, split: Split, source: Pool, limits: Indices) -> None:
        self.split, self.pool, self.limits = split, source, limits
        number = np.full(split.limits, -1)
        number[limits] = np.arange(len(limits))
        self.columns, self.owner, self.sums = [], [], []
        for block in split.blocks:
            used = np.flatnonzero(number[block.owner] >= 0)
            owner = number[block.owner[used]]
            order = np.argsort(owner, kind="stable")
            self.columns.append(np.ascontiguousarray(block.columns[:, used[order]]))
            self.owner.append(owner[order])
            self.sums.append(not np.array_equal(owner[order], np.arange(len(limits))))

    def inverses(self, sites: Indices, ridge: float) -> list[Array]:
        return [inverted(information(rows[sites], block.prior, ridge))
                for rows, block in zip(self.pool.rows, self.split.blocks, strict=True)]

    def of(self, inverses: list[Array]) -> Array:
        """The watched ratios at M, (W,)."""
        total = np.zeros(len(self.limits))
        for inverse, columns, owner in zip(inverses, self.columns, self.owner, strict=True):
            total += np.bincount(owner, weights=(columns * (inverse @ columns)).sum(axis=0), minlength=len(total))
        return total

    def changes(self, inverses: list[Array], sites: Indices | None, sign: float,
                active: NDArray[np.bool_] | None = None) -> Array:
        """‖S^(−1/2) Bᵢ M⁻¹ c_l‖² of the sites (all by default) and the active watched limits, (n, active)."""
        total: Array | None = None
        number = len(self.limits) if active is None else int(np.count_nonzero(active))
        for b, inverse in enumerate(inverses):
            rows = self.pool.rows[b] if sites is None else self.pool.rows[b][sites]
            columns, owner, sums = self.columns[b], self.owner[b], self.sums[b]
            if active is not None:
                used = active[owner]
                columns, owner = columns[:, used], (np.cumsum(active) - 1)[owner[used]]
            n, m, q = rows.shape
            readings = (rows.reshape(n * m, q) @ (inverse @ columns)).reshape(n, m, columns.shape[1])
            if m == 1:
                part = readings[:, 0]
                part *= part
                part /= np.maximum(1.0 + sign * leverages(rows, inverse)[:, 0], LEAST_PIVOT)
            else:
                part = (whiten(leverages(rows, inverse), sign, readings) ** 2).sum(axis=1)
            if sums:
                gathered = np.zeros((n, number))
                np.add.at(gathered.T, owner, part.T)
                part = gathered
            total = part if total is None else total + part
        return np.zeros((self.pool.n if sites is None else len(sites), number)) if total is None else total

    def without(self, inverses: list[Array], site: int) -> list[Array]:
        """The inverses when this site is dropped."""
        return [without(inverse, rows[site]) for inverse, rows in zip(inverses, self.pool.rows, strict=True)]


def powers(ratio: Array, exponent: int) -> Array:
    """ratio^exponent in place, for an exponent that is a power of two."""
    while exponent > 1:
        ratio *= ratio
        exponent //= 2
    return ratio

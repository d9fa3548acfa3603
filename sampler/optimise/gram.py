"""Coefficients of covering rows: ‖Bᵢz‖² is linear in the packed BᵢᵀBᵢ, so that rows of all sites are one product."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.blocks import Split

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

PACKED_ENTRIES = 30_000_000
"""Up to this many numbers the packed products are held (240 MB); beyond it they are formed in chunks when needed."""
CHUNK_SITES = 50_000


def pack(matrix: Array) -> Array:
    """The upper triangle of a symmetric (q, q) matrix as a vector, off-diagonal entries twice."""
    row, column = np.triu_indices(len(matrix))
    return matrix[row, column] * np.where(row == column, 1.0, 2.0)


@dataclass(frozen=True, slots=True)
class Loss:
    """What a row has to do without: the coefficients of the lost `sites` are zero. For each (count set T, θ) of `within`,
    known to hold a chosen site, coefficients inside T are at least θ, and the row demands θ more (see `lost.py`)."""

    sites: Indices
    within: tuple[tuple[int, float], ...] = ()


@dataclass(frozen=True, slots=True)
class Row:
    """A covering row: limit l at a point. `z[b]` (q_b, k), one for each of the limit's columns in block b, turned back into
    the problem's own terms by the block's lifts `lift[b]` (k,). `loss`: sites that it does without.

    `packed`: the sums Σ_k z_kz_kᵀ of all blocks, packed, so that site i's coefficient is its packed BᵢᵀBᵢ times it.
    `prior` = Σ zᵀP₀z − Σθ. For every w that meets the limit: Σ wᵢaᵢ + prior ≥ 1.
    """

    limit: int
    z: tuple[Array, ...]
    lift: tuple[Indices, ...]
    packed: Array
    prior: float
    loss: Loss | None = None


def cover(split: Split, limit: int, z: list[Array], lift: list[Indices], loss: Loss | None = None) -> Row:
    """The covering row of a limit from its parts in each block."""
    squares = [part @ part.T for part in z]
    prior = sum(float((square * block.prior).sum()) for square, block in zip(squares, split.blocks, strict=True))
    return Row(limit, tuple(z), tuple(lift), np.concatenate([pack(square) for square in squares]),
               prior if loss is None else prior - sum(theta for _, theta in loss.within), loss)


class Gram:
    """Packed BᵢᵀBᵢ of all sites and blocks, in one array (n, Σ q(q+1)/2), or in chunks when that is too large."""

    def __init__(self, split: Split, order: Indices) -> None:
        self.rows = [block.rows for block in split.blocks]
        self.order = order
        self.n = len(order)
        self.width = sum(rows.shape[2] * (rows.shape[2] + 1) // 2 for rows in self.rows)
        self.packed = self._form(order) if self.n * self.width <= PACKED_ENTRIES else None

    def _form(self, at: Indices) -> Array:
        parts = []
        for rows in self.rows:
            here = rows[at]
            row, column = np.triu_indices(rows.shape[2])
            parts.append(sum((here[:, a, row] * here[:, a, column] for a in range(rows.shape[1])),
                             np.zeros((len(at), len(row)))))
        return np.concatenate(parts, axis=1)

    def of(self, sites: Indices) -> Array:
        """Packed products of the sites, (s, width)."""
        return self._form(self.order[sites]) if self.packed is None else self.packed[sites]

    def coefficients(self, packed_row: Array, sites: Indices | None = None) -> Array:
        """Coefficients of the sites (all by default) in rows (width,) or (width, r)."""
        if self.packed is not None:
            return (self.packed if sites is None else self.packed[sites]) @ packed_row
        at = np.arange(self.n) if sites is None else sites
        return np.concatenate([self._form(self.order[at[start:start + CHUNK_SITES]]) @ packed_row
                               for start in range(0, len(at), CHUNK_SITES)])

"""Covering rows: what one direction z of feature space demands of every set that meets a limit.

For positive definite M, cᵀM⁻¹c = max over z of (cᵀz)² / (zᵀMz), reached at z = M⁻¹c. Hence a limit cᵀM(w)⁻¹c ≤ 1 is the
same as one linear row for every z with cᵀz = 1:

    Σᵢ wᵢ ‖Bᵢ z‖²  ≥  1 − zᵀ P₀ z.

A limit that lies in several blocks has one piece z_k per column k of it, with Σ_k c_kᵀ z_k = 1; the squares add up.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.blocks import Array, Block, Split
from sampler.optimise.problem import SiteProblem

CHUNK_NUMBERS = 8_000_000
"""Numbers held at once while rows or prices are computed over all candidates: 64 MB."""

Sites = NDArray[np.int64] | None


@dataclass(frozen=True, slots=True)
class RowPool:
    """R rows. `limit` (R,): the split's limit of each. Per block b, `pieces[b]` (q, K): the z_k; `row[b]` (K,): the row
    each belongs to; `lift[b]` (K,): which of the block's lifts turns it into the problem's own terms."""

    split: Split
    limit: NDArray[np.int64]
    pieces: tuple[Array, ...]
    row: tuple[NDArray[np.int64], ...]
    lift: tuple[NDArray[np.int64], ...]

    def __len__(self) -> int:
        return len(self.limit)

    @property
    def right_hand_side(self) -> Array:
        """1 − zᵀ P₀ z of each row, (R,)."""
        total = np.ones(len(self))
        for block, z, row in zip(self.split.blocks, self.pieces, self.row, strict=True):
            total -= np.bincount(row, weights=((block.prior @ z) * z).sum(axis=0), minlength=len(self))
        return total

    def coefficients(self, sites: Sites = None) -> Array:
        """‖Bᵢ z‖² of every row at the given sites (all by default), (R, sites)."""
        number = self.split.blocks[0].n if sites is None else len(sites)
        total = np.zeros((len(self), number))
        for block, z, row in zip(self.split.blocks, self.pieces, self.row, strict=True):
            if not z.shape[1]:
                continue
            step = max(1, CHUNK_NUMBERS // (max(1, block.rows.shape[1]) * z.shape[1]))
            for start in range(0, number, step):
                part = block.rows[start:start + step] if sites is None else block.rows[sites[start:start + step]]
                squares = ((part @ z) ** 2).sum(axis=1).T
                np.add.at(total[:, start:start + step], row, squares)
        return total

    def quadratic(self, duals: Array) -> list[Array]:
        """Z_b = Σ_k y_k z_k z_kᵀ of each block, so that Σ_k y_k ‖Bᵢ z_k‖² = Σ_b tr(B_bᵢ Z_b B_bᵢᵀ)."""
        return [(z * duals[row]) @ z.T for z, row in zip(self.pieces, self.row, strict=True)]

    def prices(self, duals: Array, sites: Sites = None) -> Array:
        """Σ_k y_k ‖Bᵢ z_k‖² at the given sites (all by default): what the rows pay for each site.

        Summed as squares, which nothing cancels in, of at most q columns per block.
        """
        number = self.split.blocks[0].n if sites is None else len(sites)
        total = np.zeros(number)
        for block, z, row in zip(self.split.blocks, self.pieces, self.row, strict=True):
            root = z * np.sqrt(duals[row])
            if root.shape[1] > block.q:
                turn, size, _ = np.linalg.svd(root, full_matrices=False)
                root = turn * size
            if not root.any():
                continue
            step = max(1, CHUNK_NUMBERS // max(1, 2 * block.rows.shape[1] * block.q))
            for start in range(0, number, step):
                part = block.rows[start:start + step] if sites is None else block.rows[sites[start:start + step]]
                seen = part.reshape(-1, block.q) @ root
                total[start:start + step] += np.einsum("ij,ij->i", seen, seen).reshape(len(part), -1).sum(axis=1)
        return total

    def take(self, index: NDArray[np.int64]) -> RowPool:
        """The rows named, in that order."""
        number = np.full(len(self), -1)
        number[index] = np.arange(len(index))
        kept = [np.flatnonzero(number[row] >= 0) for row in self.row]
        return RowPool(self.split, self.limit[index],
                       tuple(z[:, k] for z, k in zip(self.pieces, kept, strict=True)),
                       tuple(number[row[k]] for row, k in zip(self.row, kept, strict=True)),
                       tuple(lift[k] for lift, k in zip(self.lift, kept, strict=True)))

    def in_own_terms(self, problem: SiteProblem) -> tuple[Array, NDArray[np.int64]]:
        """z (R, p) in the problem's own terms, with directions[l]ᵀz / τ_l = 1 exactly, and the problem's limits l, (R,)."""
        total = np.zeros((len(self), problem.p))
        for block, z, row, lift in zip(self.split.blocks, self.pieces, self.row, self.lift, strict=True):
            for number, matrix in enumerate(block.lifts):
                mine = lift == number
                np.add.at(total, row[mine], (matrix @ z[:, mine]).T)
        limit = self.split.limit_index[self.limit]
        demanded = (problem.directions[limit] * total).sum(axis=1) / problem.tau[limit]
        return total / demanded[:, None], limit


def information(block: Block, weights: Array, sites: Sites = None) -> Array:
    """P₀ + Σ wᵢ BᵢᵀBᵢ of one block; `weights` are of the given sites (all by default)."""
    rows = block.rows if sites is None else block.rows[sites]
    used = np.flatnonzero(weights)
    total = block.prior.copy()
    step = max(1, CHUNK_NUMBERS // max(1, rows.shape[1] * block.q))
    for start in range(0, len(used), step):
        index = used[start:start + step]
        part = rows[index]
        flat = part.reshape(-1, block.q)
        total += (flat * np.repeat(weights[index], part.shape[1])[:, None]).T @ flat
    return total


def separate(split: Split, matrices: list[Array], limits: NDArray[np.int64] | None = None) -> tuple[RowPool, Array]:
    """The rows that are tight at the given M_b (positive definite), z_k = M_b⁻¹c_k / v_l, and v_l; for all limits or some.

    Any z is valid, so an M with a ridge on it, or one that is not M(w) of any w, still gives rows that hold.
    """
    limits = np.arange(split.limits) if limits is None else limits
    number = np.full(split.limits, -1)
    number[limits] = np.arange(len(limits))
    variance = np.zeros(len(limits))
    pieces, rows, lifts = [], [], []
    for block, matrix in zip(split.blocks, matrices, strict=True):
        used = np.flatnonzero(number[block.owner] >= 0)
        columns, row = block.columns[:, used], number[block.owner[used]]
        solved = np.linalg.solve(matrix, columns)
        variance += np.bincount(row, weights=(columns * solved).sum(axis=0), minlength=len(limits))
        pieces.append(solved)
        rows.append(row)
        lifts.append(block.lift[used])
    scaled = tuple(z / variance[row] for z, row in zip(pieces, rows, strict=True))
    return RowPool(split, limits, scaled, tuple(rows), tuple(lifts)), variance

"""Orthonormal basis and independent blocks: the problem as the optimiser works on it.

In a basis with P₀ + Σ BᵢᵀBᵢ = I over all candidates, directions that no reading couples split into blocks b, and
M(w) is block-diagonal: cᵀ M⁻¹ c = Σ_b c_bᵀ M_b⁻¹ c_b. The x and y responses of a polynomial model are two such blocks
(even with a rotation, which this basis takes apart), and often two equal ones; equal blocks are kept once and the
limits of both stand on it. Limits are scaled to 1, and a limit that another one implies for every M is dropped.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse.csgraph import connected_components

from sampler.optimise.problem import SiteProblem

Array = NDArray[np.float64]

RANK_TOLERANCE = 1e-11
"""An eigenvalue of the scaled information of all candidates below this share of the largest is no information."""
ZERO_TOLERANCE = 1e-9
"""A response below this share of the largest is rounding, not coupling."""
CHUNK_ROWS = 200_000


@dataclass(frozen=True, slots=True)
class Block:
    """One independent part, in its orthonormal basis of q directions.

    `rows` (n, m, q): whitened readings. `prior` (q, q). `columns` (q, K): the parts of the limits that lie in this
    block, scaled by 1/τ; column k belongs to limit `owner[k]` and is turned back into the problem's own terms by
    `lifts[lift[k]]` (p, q). `multiplicity`: how many equal blocks this one stands for.
    """

    rows: Array
    prior: Array
    columns: Array
    owner: NDArray[np.int64]
    lift: NDArray[np.int64]
    lifts: tuple[Array, ...]

    @property
    def multiplicity(self) -> int:
        return len(self.lifts)

    @property
    def n(self) -> int:
        return self.rows.shape[0]

    @property
    def q(self) -> int:
        return self.rows.shape[2]


@dataclass(frozen=True, slots=True)
class Split:
    """The blocks, and what became of the problem's limits.

    Limit l of the split (0 … limits − 1) is the problem's limit `limit_index[l]`; it holds when
    Σ over blocks and columns k with owner[k] = l of columns[:, k]ᵀ M_b⁻¹ columns[:, k] ≤ 1.
    `impossible`: the problem's limits on directions of which the candidates say nothing at all.
    `log_det_offset`: log det M of the problem = Σ_b multiplicity_b · log det M_b + this, when no direction is empty.
    """

    blocks: tuple[Block, ...]
    limits: int
    limit_index: NDArray[np.int64]
    impossible: NDArray[np.int64]
    log_det_offset: float

    def variances(self, columns_variance: list[Array]) -> Array:
        """Variance ratio var/τ² of each limit, (limits,), from the variances of each block's columns."""
        total = np.zeros(self.limits)
        for block, variance in zip(self.blocks, columns_variance, strict=True):
            total += np.bincount(block.owner, weights=variance, minlength=self.limits)
        return total

    def ratios(self, chosen: NDArray[np.int64]) -> Array:
        """var/τ² of each limit with the chosen sites, (limits,); infinite where they do not determine it."""
        per_block = []
        for block in self.blocks:
            information = block.prior + np.tensordot(block.rows[chosen], block.rows[chosen], axes=([0, 1], [0, 1]))
            per_block.append(column_variances(information, block.columns))
        return self.variances(per_block)


def column_variances(information: Array, columns: Array) -> Array:
    """cᵀ M⁻¹ c of each column, (K,); infinite where M says nothing about the column.

    Directions count as unknown below RANK_TOLERANCE of the largest eigenvalue; a column with a part in them above the
    square root of it is undetermined.
    """
    if not columns.shape[1]:
        return np.zeros(0)
    values, vectors = np.linalg.eigh(information)
    known = values > max(values[-1], 0.0) * RANK_TOLERANCE
    inside = vectors.T @ columns
    variance = (inside[known] ** 2 / values[known, None]).sum(axis=0)
    outside = (inside[~known] ** 2).sum(axis=0)
    variance[outside > RANK_TOLERANCE * (columns**2).sum(axis=0)] = np.inf
    return variance


def _gram(blocks: Array, row_weight: Array | None = None) -> Array:
    """Σᵢ wᵢₐ bᵢₐbᵢₐᵀ over all readings, in chunks, (p, p)."""
    n, _, p = blocks.shape
    total = np.zeros((p, p))
    for start in range(0, n, CHUNK_ROWS):
        part = blocks[start:start + CHUNK_ROWS].reshape(-1, p)
        weighted = part if row_weight is None else part * row_weight[start:start + CHUNK_ROWS].reshape(-1, 1)
        total += weighted.T @ part
    return total


def _parts(blocks: Array, prior: Array, basis: Array) -> tuple[Array, NDArray[np.int64], Array]:
    """A basis adapted to the independent parts, (p, r), the part of each of its directions, (r,), and the largest response
    of each kind of reading to each direction, (m, r).

    Readings of different parts are orthogonal in the orthonormal metric, so the eigenvectors of a generic weighted sum
    of bbᵀ lie in single parts; directions are of one part when some reading, or the prior, sees both.
    """
    n, m, _ = blocks.shape
    weight = np.random.default_rng(20).uniform(0.5, 1.5, (n, m)) * (1.0 + np.arange(m))
    generic = basis.T @ (_gram(blocks, weight) + np.pi * prior) @ basis
    _, turn = np.linalg.eigh(generic)
    basis = basis @ turn
    seen = np.abs(basis.T @ prior @ basis) > ZERO_TOLERANCE
    peak = np.zeros((m, basis.shape[1]))
    for axis in range(m):
        for start in range(0, n, CHUNK_ROWS):
            response = np.abs(blocks[start:start + CHUNK_ROWS, axis] @ basis)
            peak[axis] = np.maximum(peak[axis], response.max(axis=0, initial=0.0))
            # Relative to the reading itself, so that a noisy mark's couplings count like any other's.
            sees = (response > ZERO_TOLERANCE * response.max(axis=1, keepdims=True, initial=0.0)).astype(np.float32)
            seen |= (sees.T @ sees) > 0
    return basis, connected_components(seen, directed=False)[1].astype(np.int64), peak


def _as_equal(first: Block, rows: Array, prior: Array) -> Array | None:
    """T (q, q) with rows = first.rows @ T and the same prior in that basis, or None when the blocks differ."""
    if rows.shape != first.rows.shape:
        return None
    q = first.q
    gram = _gram(first.rows)
    cross = np.zeros((q, q))
    for start in range(0, first.n, CHUNK_ROWS):
        cross += first.rows[start:start + CHUNK_ROWS].reshape(-1, q).T @ rows[start:start + CHUNK_ROWS].reshape(-1, q)
    turn = np.asarray(np.linalg.lstsq(gram, cross, rcond=None)[0], np.float64)
    if np.linalg.cond(turn) > 1e6:
        return None
    scale = np.abs(rows).max(initial=0.0)
    for start in range(0, first.n, CHUNK_ROWS):
        off = first.rows[start:start + CHUNK_ROWS] @ turn - rows[start:start + CHUNK_ROWS]
        if np.abs(off).max() > ZERO_TOLERANCE * scale:
            return None
    back = np.linalg.inv(turn)
    return turn if np.allclose(back.T @ prior @ back, first.prior, atol=ZERO_TOLERANCE) else None


def split(problem: SiteProblem) -> Split:
    """The problem's blocks; forbidden sites count here too, since they may be read when nothing forbids them later."""
    blocks, prior = problem.blocks, problem.prior_precision
    information = _gram(blocks) + prior
    scale = np.sqrt(np.maximum(np.diag(information), np.finfo(float).tiny))
    values, vectors = np.linalg.eigh(information / np.outer(scale, scale))
    known = values > RANK_TOLERANCE * max(values[-1], 0.0)
    basis, part, peak = _parts(blocks, prior, vectors[:, known] / np.sqrt(values[known]) / scale[:, None])

    unknown = vectors[:, ~known].T @ (problem.directions / scale).T
    length = np.linalg.norm(problem.directions / scale, axis=1)
    impossible = np.linalg.norm(unknown, axis=0) > np.sqrt(RANK_TOLERANCE) * length
    scaled = problem.directions / problem.tau[:, None]

    found: list[Block] = []
    pieces: list[list[tuple[Array, NDArray[np.int64], int]]] = []  # per block: columns, limits, lift
    for label in range(part.max(initial=-1) + 1):
        lift = basis[:, part == label]
        felt = peak[:, part == label].max(axis=1, initial=0.0)
        axes = np.flatnonzero(felt > ZERO_TOLERANCE * peak.max(axis=1, initial=0.0))  # beyond rounding
        rows = np.ascontiguousarray(np.stack([blocks[:, a] @ lift for a in axes], axis=1)) if len(axes) else \
            np.zeros((problem.n, 0, lift.shape[1]))
        block_prior = lift.T @ prior @ lift
        home = len(found)
        for position, block in enumerate(found):
            turn = _as_equal(block, rows, block_prior)
            if turn is not None:
                home, lift = position, lift @ np.linalg.inv(turn)
                found[position] = Block(block.rows, block.prior, block.columns, block.owner, block.lift,
                                        (*block.lifts, lift))
                break
        else:
            nothing = np.zeros(0, np.int64)
            found.append(Block(rows, block_prior, np.zeros((lift.shape[1], 0)), nothing, nothing, (lift,)))
            pieces.append([])
        columns = lift.T @ scaled.T
        size = np.linalg.norm(columns, axis=0)
        touched = np.flatnonzero(size > ZERO_TOLERANCE * np.linalg.norm(basis.T @ scaled.T, axis=0))
        touched = touched[~impossible[touched]]
        pieces[home].append((columns[:, touched], touched, len(found[home].lifts) - 1))

    keep = _needed(pieces, len(problem.tau), impossible)
    number = np.full(len(problem.tau), -1)
    number[keep] = np.arange(len(keep))
    done = []
    for block, piece in zip(found, pieces, strict=True):
        columns = np.concatenate([item[0] for item in piece], axis=1)
        owner = np.concatenate([item[1] for item in piece])
        lifted = np.concatenate([np.full(len(item[1]), item[2]) for item in piece])
        kept = number[owner] >= 0
        done.append(Block(block.rows, block.prior, np.ascontiguousarray(columns[:, kept]), number[owner[kept]],
                          lifted[kept].astype(np.int64), block.lifts))
    offset = -2.0 * np.linalg.slogdet(np.concatenate([lift for block in done for lift in block.lifts], axis=1))[1] \
        if known.all() else np.nan
    return Split(tuple(done), len(keep), keep, np.flatnonzero(impossible), float(offset))


def _needed(pieces: list[list[tuple[Array, NDArray[np.int64], int]]], limits: int,
            impossible: NDArray[np.bool_]) -> NDArray[np.int64]:
    """The limits to keep: of those with a single column, parallel within a block, only the one that demands most."""
    parts = np.zeros(limits, int)
    for piece in pieces:
        for _, owner, _ in piece:
            parts[owner] += 1
    keep = ~impossible & (parts > 0)
    for piece in pieces:
        columns = np.concatenate([item[0] for item in piece], axis=1)
        owner = np.concatenate([item[1] for item in piece])
        single = np.flatnonzero(parts[owner] == 1)
        if not len(single):
            continue
        size = np.linalg.norm(columns[:, single], axis=0)
        unit = columns[:, single] / size
        lead = np.abs(unit) > 0.5 / np.sqrt(len(unit))
        sign = np.sign(unit[lead.argmax(axis=0), np.arange(len(single))])
        _, group = np.unique(np.round(unit * sign, 8), axis=1, return_inverse=True)
        order = np.lexsort((owner[single], -size, group.ravel()))
        first = np.ones(len(order), bool)
        first[1:] = np.diff(group.ravel()[order]) > 0
        keep[owner[single[order[~first]]]] = False
    return np.flatnonzero(keep)

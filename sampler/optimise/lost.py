"""Limits that hold after the loss of any r chosen sites: the exact ratios, and what a lost set does to covering rows.

With M = P₀ + Σ BᵢᵀBᵢ over the chosen sites, and the rows of a lost set I stacked to B_I, g = B_I M⁻¹c and H = B_I M⁻¹B_Iᵀ:

    cᵀ(M − B_IᵀB_I)⁻¹c = cᵀM⁻¹c + gᵀ(I − H)⁻¹g                                            (Woodbury)

for all sets and limits at once. Losing more is never better, so that exactly r are lost. A limit that holds after every
loss demands of each z, with rhs = 1 − zᵀP₀z and aᵢ = ‖Bᵢz‖², and of each I of r sites,

    Σ_{i ∉ I} wᵢaᵢ ≥ rhs,

and where a set T is known to hold at least s ≤ r chosen sites, that the s of T with the largest aᵢ may be lost. Since
Σ a − (the largest s) ≤ Σ max(a, θ) − sθ for every θ ≥ 0,

    Σ_{i ∉ T} wᵢaᵢ + Σ_{i ∈ T} wᵢ max(aᵢ, θ) ≥ rhs + sθ.
"""

from __future__ import annotations

from itertools import combinations

import numpy as np

from sampler.optimise.blocks import RANK_TOLERANCE, Array, Split
from sampler.optimise.pool import Indices

LEAST_LEFT = 1e-6
"""Where an eigenvalue of I − H is below this the rounding of M⁻¹ would show: these few sets are worked out from their sums."""
CHUNK_NUMBERS = 4_000_000
ALL_PAIRS_OF = 200
"""Of more chosen sites not all pairs are tried, only those that a bound does not rule out."""
LARGE_TRACE = 0.2


def ratios_after_loss(split: Split, chosen: Indices, lost: int) -> Array:
    """The worst var/τ² of each limit after the loss of any `lost` (0, 1 or 2) of the chosen sites, (limits,); infinite where
    what is left does not determine it."""
    if lost == 0:
        return split.ratios(chosen)
    if len(chosen) <= lost:
        return split.ratios(chosen[:0])
    before = split.ratios(chosen)
    if not np.isfinite(before).all():
        worst = np.full(split.limits, -np.inf)
        for gone in sets_of(len(chosen), lost):
            worst = np.maximum(worst, split.ratios(np.delete(chosen, gone)))
        return worst
    loss = Losses(split, [block.rows[chosen] for block in split.blocks])
    few = lost == 1 or len(chosen) <= ALL_PAIRS_OF
    sets = sets_of(len(chosen), lost) if few else loss.dangerous(before)
    worst, unsure = loss.worst(before, sets)
    for gone in unsure:
        worst = np.maximum(worst, split.ratios(np.delete(chosen, gone)))
    return worst


def sets_of(n: int, r: int) -> Indices:
    """All r-subsets of n positions, (sets, r)."""
    return np.array(list(combinations(range(n), r)), np.int64).reshape(-1, r)


class Losses:
    """What each site tells at M = P₀ + Σ BᵢᵀBᵢ: B M^(−1/2) and B M⁻¹C of each block. `rows[b]` (n, m, q) are the sites',
    scaled by √w where weights are meant."""

    def __init__(self, split: Split, rows: list[Array]) -> None:
        self.split, self.n = split, len(rows[0])
        self.told, self.seen = [], []
        for block, part in zip(split.blocks, rows, strict=True):
            flat = part.reshape(-1, block.q)
            information = block.prior + flat.T @ flat
            values, vectors = np.linalg.eigh(information)
            known = values > values[-1] * RANK_TOLERANCE  # directions that no limit asks for may be unknown
            root = vectors[:, known] / np.sqrt(values[known])
            self.seen.append(part @ root)
            self.told.append(self.seen[-1] @ (root.T @ block.columns))

    def worst(self, before: Array, sets: Indices) -> tuple[Array, Indices]:
        """The worst ratio of each limit over the lost sets (sets, r), (limits,), but for the sets that leave next to nothing
        of some direction, which are returned."""
        worst, doubtful = np.full(len(before), -np.inf), [sets[:0]]
        width = max(1, max((seen.shape[1] * columns.shape[2] for seen, columns in zip(self.seen, self.told, strict=True)),
                           default=1)) * sets.shape[1] + len(before)
        step = max(1, CHUNK_NUMBERS // width)
        for start in range(0, len(sets), step):
            part = sets[start:start + step]
            ratios, unsure = self.ratios(before, part)
            doubtful.append(part[unsure])
            worst = np.maximum(worst, ratios[~unsure].max(axis=0, initial=-np.inf))
        return worst, np.concatenate(doubtful)

    def ratios(self, before: Array, sets: Indices) -> tuple[Array, np.ndarray]:
        """Ratios after each loss, (sets, limits), and which sets leave next to nothing of some direction, (sets,)."""
        total = np.repeat(before[None], len(sets), axis=0)
        unsure = np.zeros(len(sets), bool)
        for block, seen, told in zip(self.split.blocks, self.seen, self.told, strict=True):
            m, q = seen.shape[1:]
            if not m or not told.shape[2]:
                continue
            stacked = seen[sets].reshape(len(sets), -1, q)
            values, vectors = np.linalg.eigh(np.eye(stacked.shape[1]) - stacked @ stacked.transpose(0, 2, 1))
            unsure |= values[:, 0] < LEAST_LEFT
            part = vectors.transpose(0, 2, 1) @ told[sets].reshape(len(sets), -1, told.shape[2])
            more = (part**2 / np.maximum(values, LEAST_LEFT)[:, :, None]).sum(axis=1)
            np.add.at(total.T, block.owner, more.T)
        return total, unsure

    def dangerous(self, before: Array) -> Indices:
        """A few pairs of which one is the worst for each limit.

        v after the loss of i and k ≤ v + (dᵢ + d_k) / (1 − tr Hᵢ − tr H_k) with d = ‖BM⁻¹c‖². The few sites with a large H are
        paired with all; of the others, one takes part only if its bound with the best partner reaches what some pair is
        known to do.
        """
        n = self.n
        trace = np.zeros(n)
        told = np.zeros((n, len(before)))
        for block, seen, each in zip(self.split.blocks, self.seen, self.told, strict=True):
            trace += (seen**2).sum(axis=(1, 2))
            np.add.at(told.T, block.owner, (each**2).sum(axis=1).T)
        two = np.sort(np.argpartition(told, -2, axis=0)[-2:].T, axis=1)
        large = np.flatnonzero(trace > LARGE_TRACE)
        pairs = np.stack(np.meshgrid(large, np.arange(n)), axis=-1).reshape(-1, 2)
        sets = np.concatenate([two, pairs[pairs[:, 0] != pairs[:, 1]]])
        known = self.worst(before, np.unique(two, axis=0))[0] - before
        bound = (told + told.max(axis=0)) / (1.0 - min(2.0 * LARGE_TRACE, 2.0 * trace.max()))
        able = np.flatnonzero((bound >= known * (1.0 - 1e-9)).any(axis=1) & (trace <= LARGE_TRACE))
        return np.concatenate([sets, able[sets_of(len(able), 2)]])

"""Covering rows that hold after a loss, at weights: which lost set, or which lost part of a cluster, breaks a limit worst."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sampler.optimise.blocks import Array, Split
from sampler.optimise.gram import Loss, Row, cover
from sampler.optimise.lost import Losses, sets_of
from sampler.optimise.pool import Indices, Mask

PAIRED = 12
"""Pairs of lost sites are formed of so many, those whose single loss is worst."""
SAME_LIMIT = 2
"""At most so many rows of one limit, and of one lost set, at a time."""


@dataclass(frozen=True, slots=True)
class Weighed:
    """Sites (k,) of a tree with weights w (k,), and their `rows[b]` (k, m, q) in each block."""

    split: Split
    sites: Indices
    w: Array
    rows: list[Array]
    ridge: float

    def information(self, w: Array) -> list[Array]:
        """M_b with a small ridge: any z is valid."""
        found = []
        for block, rows in zip(self.split.blocks, self.rows, strict=True):
            flat = rows.reshape(-1, block.q)
            total = block.prior + (flat * np.repeat(w, rows.shape[1])[:, None]).T @ flat
            found.append(total + (self.ridge * np.trace(total) / max(block.q, 1) + 1e-14) * np.eye(block.q))
        return found

    def row(self, limit: int, w: Array, loss: Loss | None = None) -> tuple[Row, list[Array], float]:
        """The row of a limit that is tight at weights w, its z in each block, and the variance ratio there."""
        solved, lifts, variance = [], [], 0.0
        for block, matrix in zip(self.split.blocks, self.information(w), strict=True):
            mine = np.flatnonzero(block.owner == limit)
            part = np.asarray(np.linalg.solve(matrix, block.columns[:, mine]), np.float64)
            variance += float((part * block.columns[:, mine]).sum())
            solved.append(part)
            lifts.append(block.lift[mine])
        z = [part / variance for part in solved]
        return cover(self.split, limit, z, lifts, loss), z, variance

    def coefficients(self, z: list[Array]) -> Array:
        """‖Bᵢz‖² of the sites, (k,)."""
        return np.asarray(sum(((rows @ part) ** 2).sum(axis=(1, 2)) for rows, part in zip(self.rows, z, strict=True)))


def lost_rows(at: Weighed, before: Array, lost: int, most: int) -> tuple[list[Row], float]:
    """Rows of the limits worst hit by the loss of `lost` sites, and the worst ratio after any; `before`: ratios at w."""
    if not len(at.sites):
        return [], np.inf
    losses = Losses(at.split, [rows * np.sqrt(at.w)[:, None, None] for rows in at.rows])
    sets = sets_of(len(at.sites), 1)
    ratios, _ = losses.ratios(before, sets)
    if lost > 1:
        worst = np.sort(np.argsort(-ratios.max(axis=1), kind="stable")[:PAIRED])
        sets = worst[sets_of(len(worst), min(lost, len(worst)))]
        ratios, _ = losses.ratios(before, sets)
    rows: list[Row] = []
    of_limit, of_set = np.zeros(ratios.shape[1], int), np.zeros(len(sets), int)
    for place in np.argsort(-ratios, axis=None, kind="stable")[:500]:
        which, limit = divmod(int(place), ratios.shape[1])
        if ratios[which, limit] <= 1.0 or len(rows) == most:
            break
        if of_limit[limit] < SAME_LIMIT and of_set[which] < SAME_LIMIT:
            of_limit[limit] += 1
            of_set[which] += 1
            left = at.w.copy()
            left[sets[which]] = 0.0
            rows.append(at.row(limit, left, Loss(at.sites[sets[which]]))[0])
    return rows, float(ratios.max())


def within_rows(at: Weighed, before: Array, known: list[tuple[int, Mask]], most: int) -> list[Row]:
    """Rows for the loss of one site of each set (split, mask over all sites) known to hold one, where they are broken."""
    found: list[tuple[float, Row]] = []
    for split, mask in known:
        inside = np.flatnonzero(mask[at.sites])
        weight = at.w[inside]
        if weight.sum() < 1.0:
            continue
        left = at.w.copy()
        left[inside] -= weight / weight.sum()
        ratios = at.split.variances([np.einsum("qk,qk->k", block.columns, np.linalg.solve(matrix, block.columns))
                                     for block, matrix in zip(at.split.blocks, at.information(left), strict=True)])
        for limit in np.argsort(-ratios, kind="stable")[:2]:
            for _ in range(2):
                row, z, _ = at.row(int(limit), left)
                coefficients = at.coefficients(z)
                theta, left = _least_useful(at.w, inside, coefficients[inside])
            covered = float(at.w @ coefficients + weight @ np.maximum(theta - coefficients[inside], 0.0)) + row.prior - theta
            if covered < 1.0 - 1e-6:
                found.append((covered, cover(at.split, int(limit), list(row.z), list(row.lift),
                                             Loss(at.sites[:0], ((split, theta),)))))
    found.sort(key=lambda item: item[0])
    return [row for _, row in found[:most]]


def _least_useful(w: Array, inside: Indices, coefficients: Array) -> tuple[float, Array]:
    """θ, the coefficient below which one site's weight lies in the set, and w without that weight."""
    order = np.argsort(coefficients, kind="stable")
    before = np.cumsum(w[inside][order]) - w[inside][order]
    taken = np.clip(1.0 - before, 0.0, w[inside][order])
    left = w.copy()
    left[inside[order]] -= taken
    return float(coefficients[order][np.flatnonzero(taken > 0)[-1]]), left

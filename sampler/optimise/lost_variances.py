"""Variances of the limits after any loss while sites come and go: as `variances.py`, for every lost set at once.

The watched ratios are those of each (lost set, limit); the lost sets are positions among the chosen sites. When a chosen site
is swapped, the sets that hold it stand for the loss of the newcomer, whoever that is, so a newcomer does not change them.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from sampler.optimise.blocks import Array, Split
from sampler.optimise.pool import Indices, Mask, Pool
from sampler.optimise.variances import LEAST_PIVOT, Variances, whiten

MOST_SETS = 60
"""Of more lost sets those with the worst ratios are watched."""


@dataclass(frozen=True, slots=True)
class Lost:
    """M⁻¹ after each loss: `sets` (S, r) sites of the pool, `inverses[b]` (S, q, q), and `settled` (S,): lost sets that a
    newcomer does not change, since it is itself lost."""

    sets: Indices
    inverses: list[Array]
    settled: Mask


class LostVariances(Variances):
    """The ratios after every loss, (S · W,), in the order (lost set, watched limit)."""

    def __init__(self, split: Split, source: Pool, limits: Indices) -> None:
        super().__init__(split, source, limits)
        self.lost = source.lost

    def inverses(self, sites: Indices, ridge: float) -> Lost:  # type: ignore[override]
        sets = np.array(list(combinations(sites, min(self.lost, len(sites)))), np.int64)
        held = super().inverses(sites, ridge)
        inverses = []
        for rows, inverse, block in zip(self.pool.rows, held, self.split.blocks, strict=True):
            gone = rows[sets].reshape(len(sets), -1, block.q)
            moved = gone @ inverse
            part = whiten(moved @ gone.transpose(0, 2, 1), -1.0, moved)
            inverses.append(inverse + part.transpose(0, 2, 1) @ part)
        lost = Lost(sets, inverses, np.zeros(len(sets), bool))
        if len(sets) <= max(MOST_SETS, len(sites)):
            return lost
        worst = self.of(lost).reshape(len(sets), -1).max(axis=1)
        kept = np.sort(np.argsort(-worst, kind="stable")[:max(MOST_SETS, len(sites))])
        return Lost(sets[kept], [inverse[kept] for inverse in inverses], lost.settled[kept])

    def of(self, inverses: Lost) -> Array:  # type: ignore[override]
        total = np.zeros((len(inverses.sets), len(self.limits)))
        for inverse, columns, owner in zip(inverses.inverses, self.columns, self.owner, strict=True):
            np.add.at(total.T, owner, ((inverse @ columns) * columns).sum(axis=1).T)
        return total.ravel()

    def changes(self, inverses: Lost, sites: Indices | None, sign: float,  # type: ignore[override]
                active: Mask | None = None) -> Array:
        number, width = len(inverses.sets), len(self.limits)
        wanted = np.ones((number, width), bool) if active is None else active.reshape(number, width)
        place = np.cumsum(wanted.ravel()).reshape(number, width) - 1
        moving = wanted & ~inverses.settled[:, None]
        slots = np.flatnonzero(moving.any(axis=1))
        total = np.zeros((self.pool.n if sites is None else len(sites), int(wanted.sum())))
        for rows, inverse, columns, owner, sums in zip(self.pool.rows, inverses.inverses, self.columns, self.owner, self.sums,
                                                       strict=True):
            slot, column = np.nonzero(moving[slots][:, owner])
            at = place[slots[slot], owner[column]]
            part = _squares(rows if sites is None else rows[sites], inverse[slots], columns, slot, column, sign)
            if sums:
                np.add.at(total.T, at, part.T)
            elif len(at) == total.shape[1]:
                total += part
            else:
                total[:, at] += part
        if sign < 0 and sites is not None:
            for position, site in enumerate(sites):
                own = (inverses.sets == site).any(axis=1)
                total[position, place[own][wanted[own]]] = 0.0
        return total

    def without(self, inverses: Lost, site: int) -> Lost:  # type: ignore[override]
        own = (inverses.sets == site).any(axis=1)
        left = []
        for rows, inverse in zip(self.pool.rows, inverses.inverses, strict=True):
            moved = inverse @ rows[site].T
            part = whiten(rows[site] @ moved, -1.0, moved.transpose(0, 2, 1))
            part[own] = 0.0
            left.append(inverse + part.transpose(0, 2, 1) @ part)
        return replace(inverses, inverses=left, settled=inverses.settled | own)


def _squares(rows: Array, inverses: Array, columns: Array, slot: Indices, column: Indices, sign: float) -> Array:
    """‖S^(−1/2) B M⁻¹ c‖² of sites (n, m, q) for pairs (slot, column) of inverses (S, q, q) and columns (q, K), (n, pairs)."""
    n, m, q = rows.shape
    if not len(slot):
        return np.zeros((n, 0))
    told = np.einsum("sab,bk->ask", inverses, columns)[:, slot, column]
    readings = (rows.reshape(n * m, q) @ told).reshape(n, m, -1)
    moved = (rows.reshape(n * m, q) @ inverses.transpose(1, 0, 2).reshape(q, -1)).reshape(n, m, len(inverses), q)
    if m == 1:
        denominator = np.einsum("nsq,nq->ns", moved[:, 0], rows[:, 0])
        denominator *= sign
        denominator += 1.0
        part = readings[:, 0]
        part *= part
        part /= np.maximum(denominator, LEAST_PIVOT)[:, slot]
        return part
    part = np.zeros((n, len(slot)))
    for s in range(len(inverses)):
        mine = slot == s
        part[:, mine] = (whiten(moved[:, :, s] @ rows.transpose(0, 2, 1), sign, readings[:, :, mine]) ** 2).sum(axis=1)
    return part

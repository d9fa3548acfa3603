"""Patterns: which sites of one cell are chosen, as one 0/1 choice; the bound that does not split a cell's sites into fractions.

A pattern A of cell k has S_A, l_A and q_A (see `arrow.py`). For any vector z on the panel's terms a limit of cell k demands

    l_A + 2 q_Aᵀz − zᵀ(P₀ + Σ over all cells of S_A) z ≤ 1,

since qᵀS⁻¹q = max over z of 2qᵀz − zᵀSz. Hence for rows (z_j, limit j) and y ≥ 0, with Z = Σ y_j z_jz_jᵀ, any set that meets the
limits and rules costs at least

    Σ_j y_j (const_j − 1) − tr(Z P₀) + rules + Σ_k min over A of [ cost_A + Σ_{j of k} y_j (l_A + 2q_Aᵀz_j) − tr(Z S_A) ],

const_j = 2c_jᵀz_j for a limit on the panel's terms alone and 0 else. A pattern that misses a limit of its cell even with all
sites of the other cells takes no part. What follows the cost falls as A grows, so of patterns of more than s sites nothing
is below the cheapest s + 1 sites with the value of the whole cell: large cells need no full enumeration.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from math import comb

import numpy as np

from sampler.optimise.arrow import RIDGE, Arrow, Cell
from sampler.optimise.blocks import Array
from sampler.optimise.pool import Indices, Mask

EXCLUDED = 1.0 + 1e-7
"""A pattern takes no part when it misses a limit by more than this: the checker's rounding must not bring it back."""
CHUNK = 20_000
MOST_WORK = 3_000_000
"""Patterns of one cell tried at most when none that will do has been found."""


@dataclass(frozen=True, slots=True)
class Rows:
    """R rows: `z` (R, p₀), the `cell` of each (−1: on the panel's terms alone) and the position `limit` among its limits."""

    z: Array
    cell: Indices
    limit: Indices

    def join(self, other: Rows) -> Rows:
        return Rows(np.concatenate([self.z, other.z]), np.append(self.cell, other.cell), np.append(self.limit, other.limit))


NO_ROWS = Rows(np.zeros((0, 0)), np.zeros(0, np.int64), np.zeros(0, np.int64))


@dataclass(frozen=True, slots=True)
class Eliminated:
    """Patterns P of a cell with its own terms eliminated: `schur` (P, p₀, p₀), `inverse` (P, t, t) = M_k⁻¹, and
    `carry` (P, p₀, t) = E_k M_k⁻¹."""

    schur: Array
    inverse: Array
    carry: Array

    def l_and_q(self, columns: Array, limits: Indices | None = None) -> tuple[Array, Array]:
        """l (P, L) and q (P, L, p₀) of the cell's limits, all by default."""
        p0 = self.schur.shape[1]
        part = columns if limits is None else columns[:, limits]
        c_p, c_k = part[:p0], part[p0:]
        l_all = ((self.inverse @ c_k) * c_k).sum(axis=1)
        return l_all, c_p.T - (self.carry @ c_k).swapaxes(1, 2)

    def take(self, index: Indices | Mask) -> Eliminated:
        return Eliminated(self.schur[index], self.inverse[index], self.carry[index])


def eliminated(cell: Cell, inside: Array, p0: int) -> Eliminated:
    """Patterns as rows of 0 and 1 over the cell's sites, (P, s)."""
    size = cell.grams.shape[1]
    total = (inside @ cell.grams.reshape(len(cell.sites), -1)).reshape(-1, size, size) + cell.prior
    inverse = np.asarray(np.linalg.inv(total[:, p0:, p0:] + RIDGE * np.eye(size - p0)), np.float64)
    coupling = total[:, :p0, p0:]
    carry = coupling @ inverse
    return Eliminated(total[:, :p0, :p0] - carry @ coupling.swapaxes(1, 2), inverse, carry)


@dataclass(slots=True)
class Patterns:
    """The patterns of one cell up to `most` sites beside the required ones: `inside` (P, s), `cost` (P,), and `form`.

    `rest`: site costs, sorted, from which those of larger patterns are bounded; `whole`: the cell with every allowed site.
    """

    cell: Cell
    inside: Array
    cost: Array
    form: Eliminated
    whole: Eliminated
    fixed: Mask
    free: Indices
    most: int
    excluding: Indices  # the limits by which the patterns that take no part were excluded

    @property
    def complete(self) -> bool:
        return self.most >= len(self.free)


def enumerated(cell: Cell, p0: int, cost: Array, required: Mask, forbidden: Mask, work: int,
               schur_of_others: Array) -> Patterns:
    """The patterns of the required sites and others that may still meet the cell's limits: of growing size while there are no
    more than `work` to try, and in any case until some will do.

    `cost`, `required`, `forbidden` are of the cell's sites. `schur_of_others`: prior and every other cell measured whole.
    """
    free = np.flatnonzero(~required & ~forbidden)
    most, tried, least = len(free), 0, None
    everything = eliminated(cell, (~forbidden).astype(float)[None], p0)
    kept, excluding = [np.zeros((0, len(cell.sites)))], np.zeros(0, np.int64)
    for size in range(len(free) + 1):
        tried += comb(len(free), size)
        if tried > (work if least is not None else MOST_WORK):
            most = size - 1
            break
        sets = free[np.array(list(combinations(range(len(free)), size)), np.int64).reshape(comb(len(free), size), size)]
        for start in range(0, len(sets), CHUNK):
            part = sets[start:start + CHUNK]
            inside = np.repeat(required.astype(float)[None], len(part), axis=0)
            np.put_along_axis(inside, part, 1.0, axis=1)
            able, by = _able(cell, eliminated(cell, inside, p0), schur_of_others)
            excluding = np.union1d(excluding, by)
            kept.append(inside[able])
            least = size if least is None and able.any() else least
    inside = np.concatenate(kept)
    return Patterns(cell, inside, inside @ cost, eliminated(cell, inside, p0), everything, required, free, most,
                    excluding)


def _able(cell: Cell, form: Eliminated, schur_of_others: Array) -> tuple[Mask, Indices]:
    """Which patterns meet the cell's limits when all others are measured, (P,), and the limits that the others miss most."""
    able, by = np.ones(len(form.schur), bool), np.zeros(0, np.int64)
    if not len(cell.limits):
        return able, by
    first = np.arange(0, len(cell.limits), max(1, len(cell.limits) // 4))
    for limits in (first, np.arange(len(cell.limits))):  # most fail at the first few limits
        index = np.flatnonzero(able)
        part = form.take(index)
        variance = _variances(part, cell.columns, limits, part.schur + schur_of_others)
        able[index] = (variance <= EXCLUDED).all(axis=1)
        by = np.union1d(by, limits[np.argmax(variance[~able[index]], axis=1)])
    return able, by


def _variances(form: Eliminated, columns: Array, limits: Indices, schur: Array) -> Array:
    l_all, q = form.l_and_q(columns, limits)
    return l_all + (q.swapaxes(1, 2) * np.linalg.solve(schur, q.swapaxes(1, 2))).sum(axis=1)


def values(form: Eliminated, columns: Array, limits: Indices, z: Array, y: Array, quadratic: Array) -> Array:
    """Σ_j y_j (l_A + 2q_Aᵀz_j) − tr(Z S_A) of each pattern, (P,); rows of this cell: `limits` (J,), `z` (J, p₀), `y` (J,)."""
    total = -np.einsum("pab,ab->p", form.schur, quadratic)
    if len(y):
        own = covered(form, columns, limits, z)
        total += own @ y
    return total


def covered(form: Eliminated, columns: Array, limits: Indices, z: Array) -> Array:
    """l_A + 2q_Aᵀz_j, (P, J)."""
    p0 = form.schur.shape[1]
    c_p, c_k = columns[:p0, limits], columns[p0:, limits]
    ll = ((form.inverse @ c_k) * c_k).sum(axis=1)
    return ll + 2.0 * ((z.T * c_p).sum(axis=0) - ((z @ form.carry) * c_k.T).sum(axis=2))


def least(patterns: Patterns, price: Array, rows_value: Array, whole_value: float) -> float:
    """The least of cost + value over all patterns: those enumerated, and a bound on those of more sites.

    `price` (s,): cost of each site, less what the rules pay for it; `rows_value` (P,) of the enumerated.
    """
    found = float((patterns.inside @ price + rows_value).min(initial=np.inf))
    if patterns.complete:
        return found
    rest = np.sort(price[patterns.free])
    sites = float(price[patterns.fixed].sum() + rest[:patterns.most + 1].sum()
                  + np.minimum(rest[patterns.most + 1:], 0.0).sum())
    return min(found, sites + whole_value)


def bound(shape: Arrow, patterns: list[Patterns], rows: Rows, y: Array, price: Array) -> tuple[float, list[float]]:
    """Σ_k min over A less Σ y − tr(ZP₀): the bound but for what the rules add; and the minimum of each cell."""
    quadratic = (rows.z.T * y) @ rows.z if len(y) else np.zeros((shape.p, shape.p))
    total = -float(y.sum()) - float((quadratic * shape.prior).sum())
    alone = rows.cell == -1
    total += float(y[alone] @ (2.0 * (rows.z[alone] * shape.columns[:, rows.limit[alone]].T).sum(axis=1)))
    minima = []
    for number, each in enumerate(patterns):
        mine = np.flatnonzero((rows.cell == number) & (y > 0))
        limits, z = rows.limit[mine], rows.z[mine]
        of_rows = values(each.form, each.cell.columns, limits, z, y[mine], quadratic)
        whole = values(each.whole, each.cell.columns, limits, z, y[mine], quadratic)
        minima.append(least(each, price[each.cell.sites], of_rows, float(whole[0])))
    return total + sum(minima), minima

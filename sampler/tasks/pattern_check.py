"""Checks a proof by patterns: pooled per-cell terms, every set of sites of a cell gone through with arithmetic of its own.

Sites touch the panel's terms and those of one cell. For vectors z_j on the panel's terms, y ≥ 0 and rule multipliers ν, any
set that meets limits and rules costs at least

    Σ_j y_j (const_j − 1) − Σ_j y_j z_jᵀP₀z_j + Σ_R ν_R·(least count if ν_R > 0, else most)
        + Σ_cells min over A of [ Σ_{i ∈ A} (cost_i − Σ_{R∋i} ν_R) + Σ_{j of the cell} y_j g_j(A) − Σ_{other j} y_j z_jᵀS_A z_j ]

with g_j(A) = max over u of 2c_jᵀ(z_j, u) − (z_j, u)ᵀM_A(z_j, u) and zᵀS_A z = min over u of (z, u)ᵀM_A(z, u). Any u gives a valid
side of either, so that the solves need not be exact: only the evaluated forms are rounded, and they are rounded down. A set
A that misses a named limit even with all sites of the other cells is left out. What follows the cost falls as A grows.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import combinations, islice
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from sampler.errors import CertificateError

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

ROUNDING = 1e-11
"""Share of the sizes of all summed parts that covers the rounding of sums of a few hundred products."""
RIDGE = 1e-10
CHUNK = 10_000
MOST_SETS = 20_000_000


@dataclass(frozen=True, slots=True)
class _Cell:
    """Sites and terms of a cell; `grams` (s, t, t) on the panel's terms and then its own, `prior` (t, t) without the panel's."""

    sites: NDArray[np.int64]
    grams: Array
    prior: Array
    c: Array  # (rows, t) of the certificate's rows that touch it
    z: Array
    y: Array


def pattern_bound(blocks: Array, prior: Array, cost: Array, required: Mask, forbidden: Mask,
                  rules: tuple[tuple[Mask, float, float], ...], key: NDArray[Any], directions: Array,
                  certificate: dict[str, Any]) -> tuple[float, int]:
    """The bound on the cost that the certificate proves, and how many sets were gone through."""
    n, _, p = blocks.shape
    panel = np.zeros(p, bool)
    panel[np.asarray(certificate["panel"], np.int64)] = True
    z = np.asarray(certificate["rows"]["z"], float).reshape(-1, p)
    y = np.asarray(certificate["y"], float)
    if not (np.isfinite(z).all() and np.isfinite(y).all() and (y >= 0).all()) or len(y) != len(z):
        raise CertificateError("certificate: y or rows.z has a value that is not finite, or negative, or is missing")
    scale = 1.0 / np.sqrt(np.maximum(np.einsum("imp,imp->p", blocks, blocks) + np.diag(prior), 1e-300))
    c, z = directions * scale, (z / scale)[:, panel]
    part = _parts(blocks, prior, panel)
    of_row = _cells_of_rows(c, panel, part[n:])
    scaled_prior = prior * np.outer(scale, scale)
    quadratic = (z.T * y) @ z
    price, total = cost.astype(float).copy(), -float(y.sum())
    total -= float((quadratic * scaled_prior[np.ix_(panel, panel)]).sum()) + \
        ROUNDING * float((np.abs(quadratic) * np.abs(scaled_prior[np.ix_(panel, panel)])).sum())
    for index, nu in zip(np.asarray(certificate["rules"]["index"], np.int64),
                         np.asarray(certificate["rules"]["value"], float), strict=True):
        mask, least, most = rules[index]
        bound = least if nu > 0 else most
        if not np.isfinite(bound * nu):
            raise CertificateError(f"certificate: leans on a side of rule {index} that has no count")
        price[mask] -= nu
        total += nu * bound - ROUNDING * abs(nu * bound)
    alone = of_row < 0
    told = c[alone][:, panel] * z[alone]
    total += float(2.0 * y[alone] @ told.sum(axis=1) - ROUNDING * y[alone] @ np.abs(told).sum(axis=1))

    cells = [_cell(blocks * scale, scaled_prior, panel, part, label, of_row, c, z, y) for label in np.unique(part[~_panel_terms(
        panel, n)])]
    most = dict(zip(certificate["cells"]["key"], np.asarray(certificate["cells"]["most"], np.int64).tolist(), strict=True))
    whole = [_schur(cell, (~forbidden[cell.sites]).astype(float)[None], z.shape[1]) for cell in cells]
    together = scaled_prior[np.ix_(panel, panel)] + sum(each[0] for each in whole)
    seen = 0
    for cell, own in zip(cells, whole, strict=True):
        size = most.get(np.sort(key[cell.sites])[0].item(), len(cell.sites)) if len(cell.sites) else 0
        value, tried = _least(cell, quadratic, price, required, forbidden, int(size), together - own[0])
        total, seen = total + value, seen + tried
    return total, seen


def _panel_terms(panel: Mask, n: int) -> Mask:
    return np.concatenate([np.zeros(n, bool), panel])


def _parts(blocks: Array, prior: Array, panel: Mask) -> NDArray[np.int64]:
    """The cell of each site and then of each term, (n + p,), by what touches what outside the panel's terms."""
    n, _, p = blocks.shape
    touched = (blocks != 0).any(axis=1) & ~panel
    site, term = np.nonzero(touched)
    first, second = np.nonzero((prior != 0) & ~panel[:, None] & ~panel)
    graph = coo_array((np.ones(len(site) + len(first)), (np.append(site, n + first), np.append(n + term, n + second))),
                      shape=(n + p, n + p))
    return connected_components(graph, directed=False)[1].astype(np.int64)


def _cells_of_rows(c: Array, panel: Mask, part: NDArray[np.int64]) -> NDArray[np.int64]:
    found = np.full(len(c), -1)
    for row, direction in enumerate(c):
        cells = np.unique(part[(direction != 0) & ~panel])
        if len(cells) > 1:
            raise CertificateError(f"certificate: row {row} touches the terms of more than one cell")
        found[row] = cells[0] if len(cells) else -1
    return found


def _cell(blocks: Array, prior: Array, panel: Mask, part: NDArray[np.int64], label: int, of_row: NDArray[np.int64], c: Array,
          z: Array, y: Array) -> _Cell:
    n = len(blocks)
    sites = np.flatnonzero(part[:n] == label)
    at = np.concatenate([np.flatnonzero(panel), np.flatnonzero((part[n:] == label) & ~panel)])
    rows = blocks[sites][:, :, at]
    own = prior[np.ix_(at, at)].copy()
    own[:panel.sum(), :panel.sum()] = 0.0
    mine = np.flatnonzero(of_row == label)
    return _Cell(sites, np.einsum("iap,iaq->ipq", rows, rows), own, c[mine][:, at], z[mine], y[mine])


def _information(cell: _Cell, inside: Array) -> Array:
    t = cell.grams.shape[1]
    return np.asarray((inside @ cell.grams.reshape(len(cell.sites), -1)).reshape(-1, t, t) + cell.prior)


def _schur(cell: _Cell, inside: Array, p0: int) -> Array:
    """(I, −X) M_A (I, −X)ᵀ ≽ S_A for X near E M_k⁻¹, (P, p₀, p₀), rounded up."""
    total = _information(cell, inside)
    left = np.concatenate([np.broadcast_to(np.eye(p0), (len(total), p0, p0)), -_carry(total, p0)], axis=2)
    found = left @ total @ left.transpose(0, 2, 1)
    size = (np.abs(left) @ np.abs(total) @ np.abs(left).transpose(0, 2, 1)).sum(axis=2)
    found[:, np.arange(p0), np.arange(p0)] += ROUNDING * size  # diagonal dominance covers the rounding
    return np.asarray(found)


def _inverse(total: Array, p0: int) -> Array:
    inner = total[:, p0:, p0:]
    return np.asarray(np.linalg.inv(inner + RIDGE * np.eye(inner.shape[1])))


def _carry(total: Array, p0: int) -> Array:
    return np.asarray(total[:, :p0, p0:] @ _inverse(total, p0))


def _sets(free: NDArray[np.int64], most: int, required: Mask) -> Iterator[Array]:
    """Sets of up to `most` free sites with the required ones, as rows of 0 and 1, in chunks."""
    for size in range(min(most, len(free)) + 1):
        every = combinations(free.tolist(), size)
        while len(chunk := list(islice(every, CHUNK))):
            inside = np.repeat(required.astype(float)[None], len(chunk), axis=0)
            np.put_along_axis(inside, np.array(chunk, np.int64).reshape(len(chunk), size), 1.0, axis=1)
            yield inside


def _least(cell: _Cell, quadratic: Array, price: Array, required: Mask, forbidden: Mask, most: int,
           others: Array) -> tuple[float, int]:
    """The least of price and value over the sets of a cell that the named limits do not rule out, rounded down."""
    fixed, open_ = required[cell.sites], ~required[cell.sites] & ~forbidden[cell.sites]
    free, each = np.flatnonzero(open_), price[cell.sites]
    of_others = quadratic - (cell.z.T * cell.y) @ cell.z
    least, tried = np.inf, 0
    for inside in _sets(free, most, fixed):
        tried += len(inside)
        if tried > MOST_SETS:
            raise CertificateError("certificate: a cell has more sets than can be gone through")
        total = _information(cell, inside)
        able = ~_ruled_out(cell, inside, total, others)
        if able.any():
            found = inside[able] @ each + _value(cell, inside[able], total[able], of_others)
            least = min(least, float(found.min()))
    if most < len(free):
        whole = (~forbidden[cell.sites]).astype(float)[None]
        rest = np.sort(each[free])
        sites = float(each[fixed].sum() + rest[:most + 1].sum() + np.minimum(rest[most + 1:], 0.0).sum())
        least = min(least, sites + float(_value(cell, whole, _information(cell, whole), of_others)[0]))
    return least - ROUNDING * float(np.abs(each).sum()), tried


def _value(cell: _Cell, inside: Array, total: Array, of_others: Array) -> Array:
    """Σ_{j of the cell} y_j g_j(A) − Σ_{other j} y_j z_jᵀS_A z_j, rounded down, (P,)."""
    p0 = len(of_others)
    values, vectors = np.linalg.eigh(of_others)  # any split of it into squares does, if its rounding is covered
    values = np.maximum(values, 0.0) + ROUNDING * np.abs(of_others).sum()
    schur = _schur(cell, inside, p0)
    found = -np.einsum("pab,ac,c,bc->p", schur, vectors, values, vectors, optimize=True) * (1 + ROUNDING)
    if not len(cell.y):
        return np.asarray(found)
    u = (cell.c[:, p0:] - cell.z @ total[:, :p0, p0:]) @ _inverse(total, p0)
    v = np.concatenate([np.broadcast_to(cell.z, (len(total), *cell.z.shape)), u], axis=2)
    told, size = 2.0 * (v * cell.c).sum(axis=2), 2.0 * np.abs(v * cell.c).sum(axis=2)
    told -= ((v @ total) * v).sum(axis=2)
    size += ((np.abs(v) @ np.abs(total)) * np.abs(v)).sum(axis=2)
    return np.asarray(found + (told - ROUNDING * size) @ cell.y)


def _ruled_out(cell: _Cell, inside: Array, total: Array, others: Array) -> Mask:
    """Sets that miss a named limit of their cell when the sites of all other cells are measured, (P,)."""
    p0 = len(others)
    out = np.zeros(len(inside), bool)
    if not len(cell.y):
        return out
    directions = np.unique(cell.c, axis=0)
    inverse, coupling = _inverse(total, p0), total[:, :p0, p0:]
    q = directions[:, :p0] - directions[:, p0:] @ (coupling @ inverse).transpose(0, 2, 1)
    zeta = np.linalg.solve(_schur(cell, inside, p0) + others, q.transpose(0, 2, 1)).transpose(0, 2, 1)
    u = (directions[:, p0:] - zeta @ coupling) @ inverse
    v = np.concatenate([zeta, u], axis=2)
    told, size = 2.0 * (v * directions).sum(axis=2), 2.0 * np.abs(v * directions).sum(axis=2)
    for left, matrix in ((v, total), (zeta, others)):
        told = told - ((left @ matrix) * left).sum(axis=2)
        size = size + ((np.abs(left) @ np.abs(matrix)) * np.abs(left)).sum(axis=2)
    return np.asarray((told - ROUNDING * size > 1.0).any(axis=1))

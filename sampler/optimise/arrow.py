"""Pooled per-cell terms: every site tells of the panel's terms and of one cell's, so M is an arrow.

    M = [[M_p, E_1 … E_K], [E_kᵀ, M_k]]        S = M_p − Σ_k E_k M_k⁻¹ E_kᵀ     (Schur complement on the panel's terms)

For a limit c with parts c_p and, in one cell k, c_k:

    cᵀM⁻¹c = l + qᵀS⁻¹q,        l = c_kᵀM_k⁻¹c_k,        q = c_p − E_k M_k⁻¹c_k,

so that only matrices of one cell, and one of the panel's terms, are ever solved with.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array, csr_array
from scipy.sparse.csgraph import connected_components

from sampler.optimise.blocks import Array
from sampler.optimise.pool import Indices, Mask
from sampler.optimise.problem import SiteProblem

LEAST_SAVING = 8.0
"""The arrow is worth its book-keeping when a solve costs so many times less than with all terms at once."""
RIDGE = 1e-10
"""Share of what all the cell's sites tell that is added to each cell term: a cell with too few sites then has huge
variances instead of none. It only ever adds knowledge, so that bounds stay bounds."""
JUDGED_RIDGE = 1e-14
"""The same when a set is judged: no more than rounding."""


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell: its `sites` and `terms`. `grams` (s, t, t): BᵢᵀBᵢ on the panel's terms and then the cell's; `prior` (t, t),
    zero on the panel's terms alone. `limits`: which of the problem's limits touch its terms; `columns` (t, L): those limits
    on the same terms, scaled by 1/τ. A site that touches no cell's terms is a cell of its own, without terms."""

    sites: Indices
    terms: Indices
    grams: Array
    prior: Array
    limits: Indices
    columns: Array


@dataclass(frozen=True, slots=True)
class Arrow:
    """The panel's `terms` (p₀,), their `prior` (p₀, p₀), the `cells`, and the limits on the panel's terms alone: `limits` and
    `columns` (p₀, L). All terms are scaled by `scale` (p,), so that all candidates together tell about 1 of each."""

    terms: Indices
    prior: Array
    cells: tuple[Cell, ...]
    limits: Indices
    columns: Array
    scale: Array
    n: int

    @property
    def p(self) -> int:
        return len(self.terms)


def arrow(problem: SiteProblem) -> Arrow | None:
    """The arrow that saves most, or None when there is none worth it or a limit touches more than one cell."""
    touched = _touched(problem)
    coupled = np.abs(problem.prior_precision) > 0
    cover = np.diff(touched.tocsc().indptr)
    whole, best, found = float(problem.p) ** 3, np.inf, None
    for least in np.unique(cover)[::-1]:
        panel = cover >= least
        number, part = _parts(touched, coupled, panel)
        if number < 2 or panel.all():
            continue
        sizes = np.bincount(part[problem.n:][~panel], minlength=number)
        work = float(panel.sum()) ** 3 + float((sizes.astype(float) ** 3).sum())
        if work < best:
            best, found = work, panel
    if found is None or best * LEAST_SAVING > whole:
        return None
    return _built(problem, found, _parts(touched, coupled, found)[1])


def _touched(problem: SiteProblem) -> csr_array:
    """Which terms each site tells of, (n, p)."""
    site, term = np.nonzero((problem.blocks != 0.0).any(axis=1))
    return csr_array((np.ones(len(site)), (site, term)), shape=(problem.n, problem.p))


def _parts(touched: csr_array, coupled: Mask, panel: Mask) -> tuple[int, Indices]:
    """Connected parts of sites and terms once the panel's terms are taken out: their number, and of each site and then term."""
    n, p = touched.shape
    free = np.flatnonzero(~panel)
    inside = touched[:, free].tocoo()
    first, second = np.nonzero(coupled[np.ix_(free, free)])
    row = np.concatenate([inside.row, n + free[first]])
    column = np.concatenate([n + free[inside.col], n + free[second]])
    graph = coo_array((np.ones(len(row)), (row, column)), shape=(n + p, n + p))
    number, part = connected_components(graph, directed=False)
    return number, part.astype(np.int64)


def _built(problem: SiteProblem, panel: Mask, part: Indices) -> Arrow | None:
    n = problem.n
    information = np.einsum("imp,imp->p", problem.blocks, problem.blocks) + np.diag(problem.prior_precision)
    scale = 1.0 / np.sqrt(np.maximum(information, np.finfo(float).tiny))
    scaled = problem.directions / problem.tau[:, None] * scale
    prior = problem.prior_precision * np.outer(scale, scale)
    terms = np.flatnonzero(panel)
    of_term = np.where(panel, -1, part[n:])
    touches = np.abs(scaled) > 0
    owner = np.full(len(scaled), -1)
    for limit in range(len(scaled)):
        parts = np.unique(of_term[touches[limit] & ~panel])
        if len(parts) > 1:
            return None
        owner[limit] = parts[0] if len(parts) else -1
    cells = []
    for label in np.unique(part[:n]):
        sites = np.flatnonzero(part[:n] == label)
        own = np.flatnonzero(of_term == label)
        at = np.concatenate([terms, own])
        rows = problem.blocks[np.ix_(sites, np.arange(problem.blocks.shape[1]), at)] * scale[at]
        both = prior[np.ix_(at, at)].copy()
        both[:len(terms), :len(terms)] = 0.0
        mine = np.flatnonzero(owner == label)
        cells.append(Cell(sites, own, np.einsum("iap,iaq->ipq", rows, rows), both, mine, scaled[np.ix_(mine, at)].T))
    seen = np.unique(part[:n])
    unseen = (of_term >= 0) & ~np.isin(of_term, seen)  # known by their prior alone: no site is in their cell
    for label in np.unique(of_term[unseen]):
        own = np.flatnonzero(of_term == label)
        at = np.concatenate([terms, own])
        both = prior[np.ix_(at, at)].copy()
        both[:len(terms), :len(terms)] = 0.0
        mine = np.flatnonzero(owner == label)
        cells.append(Cell(np.zeros(0, np.int64), own, np.zeros((0, len(at), len(at))), both, mine,
                          scaled[np.ix_(mine, at)].T))
    alone = np.flatnonzero(owner == -1)
    return Arrow(terms, prior[np.ix_(terms, terms)], tuple(cells), alone, scaled[np.ix_(alone, terms)].T, scale, n)


@dataclass(frozen=True, slots=True)
class Reduced:
    """A cell with some of its sites, eliminated: `schur` (…, p₀, p₀) what it adds to S; l (…, L) and q (…, L, p₀) of its
    limits."""

    schur: Array
    l: Array  # noqa: E741 (the letter of the formula)
    q: Array


def reduced(cell: Cell, information: Array, p0: int, ridge: float) -> Reduced:
    """A cell eliminated; `information` (…, t, t) = Σ BᵢᵀBᵢ of its sites, without the prior."""
    total = information + cell.prior
    size = total.shape[-1] - p0
    top = total[..., :p0, :p0]
    c_p, c_k = cell.columns[:p0], cell.columns[p0:]
    if not size:
        lead = total.shape[:-2]
        return Reduced(top, np.zeros((*lead, len(cell.limits))), np.broadcast_to(c_p.T, (*lead, *c_p.T.shape)))
    inner = total[..., p0:, p0:] + ridge * np.eye(size)
    coupling = total[..., p0:, :p0]
    solved = np.linalg.solve(inner, np.concatenate([coupling, np.broadcast_to(c_k, (*total.shape[:-2], *c_k.shape))], axis=-1))
    schur = top - coupling.swapaxes(-1, -2) @ solved[..., :p0]
    own = solved[..., p0:]
    return Reduced(0.5 * (schur + schur.swapaxes(-1, -2)), (c_k * own).sum(axis=-2),
                   c_p.T - own.swapaxes(-1, -2) @ coupling)


def variances(l: Array, q: Array, schur: Array) -> Array:  # noqa: E741
    """l + qᵀS⁻¹q of limits (…, L) at S (…, p₀, p₀)."""
    return l + (q * np.linalg.solve(schur, q.swapaxes(-1, -2)).swapaxes(-1, -2)).sum(axis=-1)


def arrow_ratios(shape: Arrow, chosen: Indices) -> Array:
    """var/τ² of every limit of the problem with the chosen sites, (L,), by way of S; huge where they leave a term unknown."""
    inside = np.zeros(shape.n, bool)
    inside[chosen] = True
    parts = [reduced(cell, cell.grams[inside[cell.sites]].sum(axis=0), shape.p, JUDGED_RIDGE) for cell in shape.cells]
    schur = shape.prior + sum(part.schur for part in parts) + JUDGED_RIDGE * np.eye(shape.p)
    found = np.zeros(sum(len(cell.limits) for cell in shape.cells) + len(shape.limits))
    for cell, part in zip(shape.cells, parts, strict=True):
        found[cell.limits] = variances(part.l, part.q, schur)
    found[shape.limits] = variances(np.zeros(len(shape.limits)), shape.columns.T, schur)
    return found


def arrow_log_det(shape: Arrow, chosen: Indices) -> float:
    """log det of the information on all terms: Σ log det M_k + log det S."""
    inside = np.zeros(shape.n, bool)
    inside[chosen] = True
    schur, total = shape.prior.copy(), -2.0 * float(np.log(shape.scale).sum())
    for cell in shape.cells:
        information = cell.grams[inside[cell.sites]].sum(axis=0) + cell.prior
        total += float(np.linalg.slogdet(information[shape.p:, shape.p:])[1])
        schur += reduced(cell, information - cell.prior, shape.p, JUDGED_RIDGE).schur
    return total + float(np.linalg.slogdet(schur)[1])

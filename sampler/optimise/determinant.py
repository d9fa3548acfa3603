"""log det of the information on the terms of interest, and how it changes when sites are swapped.

With s the terms of interest and r the others, the information on θ_s alone is the Schur complement M_ss − M_sr M_rr⁻¹ M_rs, so

    log det = log det M − log det M_rr = Σ_b multiplicity_b · log det M_b + offset − log det M_rr.

Each term is the log det of a matrix Σ BᵢᵀBᵢ + prior. When site i takes the place of site j, with H = BᵢM⁻¹Bᵢᵀ,
X = BᵢM⁻¹Bⱼᵀ and h = BⱼM⁻¹Bⱼᵀ, the determinant is multiplied by det(I + H) · det(I − h + Xᵀ(I + H)⁻¹X)  (Fedorov 1972 for
one response).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from sampler.optimise.blocks import RANK_TOLERANCE, Array, Split
from sampler.optimise.pool import Indices
from sampler.optimise.problem import SiteProblem
from sampler.optimise.variances import LEAST_PIVOT, information, inverted, leverages, whiten

CHUNK_NUMBERS = 4_000_000


@dataclass(frozen=True, slots=True)
class Determinant:
    """`weight` · log det(prior + Σ BᵢᵀBᵢ) over sites whose `rows` (n, m, q) are given."""

    weight: float
    rows: Array
    prior: Array

    def inverse(self, sites: Indices, ridge: float) -> Array:
        return inverted(information(self.rows[sites], self.prior, ridge))

    def swaps(self, inverse: Array, chosen: Indices, sites: slice | Indices) -> Array:
        """Change of the term when each of the `sites` takes the place of each of the `chosen`, (n, k)."""
        rows, held = self.rows[sites], self.rows[chosen]
        (n, m, q), k = rows.shape, len(chosen)
        if m == 0:
            return np.zeros((n, k))
        cross = (rows.reshape(n * m, q) @ (inverse @ held.reshape(k * m, q).T)).reshape(n, m, k * m)
        gained, lost = leverages(rows, inverse), leverages(held, inverse)
        if m == 1:
            factor = (1.0 + gained[:, 0]) * (1.0 - lost[:, 0, 0]) + cross[:, 0] ** 2
            return self.weight * np.log(np.maximum(factor, LEAST_PIVOT))
        left = whiten(gained, 1.0, cross).reshape(n, m, k, m)
        inner = np.eye(m) - lost + np.einsum("ncka,nckb->nkab", left, left)
        change = np.linalg.slogdet(np.eye(m) + gained)[1][:, None] + np.log(np.maximum(np.linalg.det(inner), LEAST_PIVOT))
        return self.weight * change

    def slope(self, inverse: Array, sites: slice | Indices) -> Array:
        """d/dw of the term for the weight of each site: weight · tr(Bᵢ M⁻¹ Bᵢᵀ), (n,)."""
        rows = self.rows[sites]
        flat = rows.reshape(-1, rows.shape[2])
        return self.weight * np.einsum("ij,ij->i", flat @ inverse, flat).reshape(rows.shape[:2]).sum(axis=1)


def determinants(split: Split, problem: SiteProblem, index: Indices | None = None) -> list[Determinant]:
    """The terms of log det for the sites named (all by default); the blocks come first, in their order."""
    terms = [Determinant(float(block.multiplicity), block.rows if index is None else block.rows[index], block.prior)
             for block in split.blocks]
    if not problem.interest.all():
        rows = problem.blocks[:, :, ~problem.interest] if index is None else problem.blocks[index][:, :, ~problem.interest]
        scale = _nuisance_scale(problem)
        prior = problem.prior_precision[np.ix_(~problem.interest, ~problem.interest)]
        terms.append(Determinant(-1.0, rows / scale, prior / np.outer(scale, scale)))
    return terms


def _nuisance_scale(problem: SiteProblem) -> Array:
    """Lengths that bring the information of all candidates on the terms that are not of interest to a unit diagonal."""
    rows = problem.blocks[:, :, ~problem.interest]
    total = np.einsum("imr,imr->r", rows, rows) + np.diag(problem.prior_precision)[~problem.interest]
    return np.sqrt(np.maximum(total, np.finfo(float).tiny))


def offset(split: Split, problem: SiteProblem) -> float:
    """What the terms lack of the problem's own log det; NaN when the candidates leave a direction unknown."""
    if problem.interest.all():
        return split.log_det_offset
    return split.log_det_offset - 2.0 * float(np.log(_nuisance_scale(problem)).sum())


def value(terms: list[Determinant], chosen: Indices) -> float:
    """Σ weight · log det at the chosen sites, without any ridge; −∞ where they leave a direction unknown."""
    total = 0.0
    for term in terms:
        values = np.linalg.eigvalsh(information(term.rows[chosen], term.prior, 0.0))
        if values[0] <= RANK_TOLERANCE * values[-1]:
            return -np.inf
        total += term.weight * float(np.log(values).sum())
    return total


def swap_gains(terms: list[Determinant], inverses: list[Array], chosen: Indices, sites: Indices | None = None) -> Array:
    """Change of log det when each site (all by default) takes the place of each of the chosen, (n, k)."""
    n = len(terms[0].rows) if sites is None else len(sites)
    total = np.zeros((n, len(chosen)))
    step = max(1, CHUNK_NUMBERS // max(1, len(chosen)))
    for start in range(0, n, step):
        part = slice(start, start + step)
        for term, inverse in zip(terms, inverses, strict=True):
            total[part] += term.swaps(inverse, chosen, part if sites is None else sites[part])
    return total


def best_swaps(terms: list[Determinant], inverses: list[Array], chosen: Indices) -> Array:
    """The greatest change of log det that each site brings in the place of any of the chosen, (n,)."""
    n = len(terms[0].rows)
    step = max(1, CHUNK_NUMBERS // max(1, len(chosen)))
    return np.concatenate([swap_gains(terms, inverses, chosen, np.arange(start, min(n, start + step))).max(axis=1)
                           for start in range(0, n, step)])

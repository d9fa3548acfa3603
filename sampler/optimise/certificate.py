"""Proofs as plain dicts in the problem's own terms, for anyone to recompute without a solver.

Every proof is weak duality (see `tree.py`): rows z_k, vectors (p,) that demand Σᵢ wᵢ‖Bᵢz_k‖² ≥ (c·z_k/τ)² − z_kᵀP₀z_k of
every set that meets limit k, and multipliers. Nothing in a certificate depends on the order of the candidates.

    kind      "tree": no set of cost ≤ `excludes`; "bound": no set of cost < `lower_bound`; "counting": rank alone
    rows      limit (R,) index of the problem's limit, z (R, p) scaled to c·z/τ = 1
    halves    half-spaces {i : feature ≤ threshold}: axis (S,), vector (S, p), threshold (S,); the feature is
              Bᵢ[axis]·vector, or ‖Bᵢ·vector‖² where axis is −1, or membership in `keys` where axis is −2
    steps     preorder: kind (T,) 0 split, 1 fix, 2 leaf; split (T,), at_most (T,): first child ≤, second child ≥ +1;
              budget (T,) μ₀; y, counts and rules as sparse rows: start (T+1,), index, value
    cliques   half-spaces of which any set holds at most one site, because of the spacing
    losses    when sites may be lost: for some rows (`row`) the lost sites (`keys`), and half-spaces known to hold a chosen
              site (`half`) with θ (`theta`): the row is without its lost sites, and without the best of each such half-space
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr

from sampler.optimise.blocks import Split
from sampler.optimise.branching import HalfSpace
from sampler.optimise.gram import Row
from sampler.optimise.problem import SiteProblem
from sampler.optimise.steps import Multipliers, Step

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

FORMAT = 1
STEP_KINDS = ("split", "fix", "leaf")
FULL_RANK = 1e-6
"""Singular values of the limits in a counting argument must exceed this share of the largest."""


def lifted(split: Split, row: Row) -> Array:
    """A row's z in the problem's own terms, (p,): the blocks' parts add up, since no reading sees two of them."""
    total = np.zeros(split.blocks[0].lifts[0].shape[0])
    for block, z, lift in zip(split.blocks, row.z, row.lift, strict=True):
        for k, index in enumerate(lift):
            total += block.lifts[index] @ z[:, k]
    return total


def _sparse(parts: list[tuple[Indices, Array]]) -> dict[str, Any]:
    start = np.concatenate([[0], np.cumsum([len(index) for index, _ in parts])])
    return {"start": start.astype(np.int64),
            "index": np.concatenate([np.zeros(0, np.int64), *(index for index, _ in parts)]),
            "value": np.concatenate([np.zeros(0), *(value for _, value in parts)])}


def _pairs(pairs: tuple[tuple[int, float], ...]) -> tuple[Indices, Array]:
    return np.array([index for index, _ in pairs], np.int64), np.array([value for _, value in pairs], float)


def tree_certificate(split: Split, problem: SiteProblem, count: float, pool: list[Row], halves: list[HalfSpace],
                     steps: list[Step], order: Indices, cliques: list[int]) -> dict[str, Any]:
    """The proof that no set of cost ≤ count meets limits and rules."""
    nothing = Multipliers(np.zeros(0, np.int64), np.zeros(0), 0.0, (), ())
    used = np.unique(np.concatenate([np.zeros(0, np.int64), *(step.multipliers.rows for step in steps
                                                              if step.multipliers is not None)]))
    place = np.zeros(len(pool), np.int64)
    place[used] = np.arange(len(used))
    all_multipliers = [step.multipliers or nothing for step in steps]
    losses = [(int(place[row]), pool[row].loss) for row in used]
    splits = np.unique([step.split for step in steps if step.split >= 0]
                       + [split for part in all_multipliers for split, _ in part.counts]
                       + [split for _, loss in losses if loss is not None for split, _ in loss.within]).astype(np.int64)
    number = np.full(len(halves) + 1, -1)
    number[splits] = np.arange(len(splits))
    halves = [halves[split] for split in splits]
    return {
        "format": FORMAT, "kind": "tree", "cliques": [int(number[split]) for split in cliques if number[split] >= 0],
        "losses": [{"row": row, "keys": problem.key[order[loss.sites]].tolist(),
                    "half": [int(number[split]) for split, _ in loss.within], "theta": [theta for _, theta in loss.within]}
                   for row, loss in losses if loss is not None],
        "excludes": float(count), "candidates": problem.n,
        "rows": {"limit": split.limit_index[[pool[row].limit for row in used]] if len(used) else np.zeros(0, np.int64),
                 "z": np.array([lifted(split, pool[row]) for row in used]).reshape(-1, problem.p)},
        "halves": {"axis": np.array([half.axis for half in halves], np.int64),
                   "vector": np.array([half.vector for half in halves]).reshape(-1, problem.p),
                   "threshold": np.array([half.threshold for half in halves], float),
                   "keys": [list(half.keys) for half in halves]},
        "steps": {"kind": np.array([STEP_KINDS.index(step.kind) for step in steps], np.int64),
                  "split": number[np.array([step.split for step in steps], np.int64)],
                  "at_most": np.array([step.at_most for step in steps], np.int64),
                  "budget": np.array([multipliers.budget for multipliers in all_multipliers], float),
                  "y": _sparse([(place[multipliers.rows], multipliers.y) for multipliers in all_multipliers]),
                  "counts": _sparse([_pairs(tuple((int(number[split]), mu) for split, mu in multipliers.counts))
                                     for multipliers in all_multipliers]),
                  "rules": _sparse([_pairs(multipliers.rules) for multipliers in all_multipliers])},
    }


def bound_certificate(problem: SiteProblem, lower_bound: float, limit: Indices, z: Array, y: Array,
                      rules: tuple[tuple[int, float], ...] = ()) -> dict[str, Any]:
    """The linear bound: Σ y_k (1 − z_kᵀP₀z_k) − Σ_R μ_R bound_R − Σᵢ max(0 or 1 · (Pᵢ − costᵢ)) ≥ lower_bound.

    `limit` (R,) and `z` (R, p) in the problem's own terms, `y` (R,) ≥ 0; `rules` (rule, μ) with μ > 0 for an upper
    count, μ < 0 for a lower one; rule number len(rules) is `max_sites`.
    """
    kept = y > 0
    sparse = {"start": np.array([0, int(kept.sum())]), "index": np.arange(int(kept.sum())), "value": y[kept]}
    index, value = _pairs(rules)
    none = np.zeros(0, np.int64)
    return {
        "format": FORMAT, "kind": "bound", "lower_bound": float(lower_bound), "candidates": problem.n,
        "rows": {"limit": limit[kept], "z": z[kept]},
        "halves": {"axis": none, "vector": np.zeros((0, problem.p)), "threshold": np.zeros(0), "keys": []},
        "steps": {"kind": np.array([2]), "split": np.array([-1]), "at_most": np.array([0]), "budget": np.array([1.0]),
                  "y": sparse, "counts": _sparse([(none, np.zeros(0))]), "rules": _sparse([(index, value)])},
    }


def counting_certificate(split: Split, problem: SiteProblem, count: float) -> dict[str, Any] | None:
    """Whether rank alone shows that cost ≤ count is too little; None when it does not.

    For a basis L (p, q) with P₀L = 0 where each site's BᵢL has at most m rows that are not zero, fewer than q/m sites
    leave some z = Lu with Bᵢz = 0 for all of them; limits whose c·L have rank q then cannot all hold. The zeros must be
    exact, so L is brought to small whole numbers.
    """
    most_sites = np.floor(count / problem.cost.min() + 1e-9)
    if problem.max_sites is not None:
        most_sites = min(most_sites, problem.max_sites)
    candidates = [block.lifts[0] for block in split.blocks if not block.prior.any()]
    if not problem.prior_precision.any():
        candidates.append(np.eye(problem.p))
    for basis in candidates:
        whole = _whole_numbers(basis)
        if whole is None or (problem.prior_precision @ whole).any():
            continue
        each = int((problem.blocks @ whole != 0.0).any(axis=2).sum(axis=1).max())
        seen = (problem.directions / np.linalg.norm(problem.directions, axis=1, keepdims=True)) @ whole
        _, triangle, pivots = qr(seen.T, mode="economic", pivoting=True)
        diagonal = np.abs(np.diag(triangle))
        if len(diagonal) < whole.shape[1] or diagonal[-1] <= FULL_RANK * diagonal[0]:
            continue
        if most_sites * each < whole.shape[1]:
            return {"format": FORMAT, "kind": "counting", "excludes": float(count), "candidates": problem.n,
                    "basis": whole, "rows": {"limit": pivots[:whole.shape[1]].astype(np.int64)}}
    return None


def _whole_numbers(basis: Array) -> Array | None:
    """A basis of the same span in small whole numbers, by reduced echelon form; None when there is none."""
    q = basis.shape[1]
    scale = np.abs(basis).max(axis=1, keepdims=True)
    scale[scale == 0] = 1.0
    _, _, pivots = qr((basis / scale).T, pivoting=True)
    reduced = basis @ np.linalg.inv(basis[pivots[:q]])
    whole = np.rint(reduced)
    return whole if np.abs(whole - reduced).max(initial=0.0) < 1e-6 and np.abs(whole).max(initial=0.0) <= 8 else None

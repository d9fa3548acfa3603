"""The question as arrays: the cheapest 0/1 w with cᵀ M(w)⁻¹ c ≤ τ² for every limit, M(w) = P₀ + Σ wᵢ BᵢᵀBᵢ."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class CountRules:
    """Linear rules on the choice: lower[r] ≤ Σ_{i in members[r]} w_i ≤ upper[r]. Members are index arrays."""

    members: tuple[NDArray[np.int64], ...] = ()
    lower: Array = field(default_factory=lambda: np.zeros(0))
    upper: Array = field(default_factory=lambda: np.zeros(0))
    label: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class SiteProblem:
    """Arrays only; units have been whitened away.

    `blocks` (n, m, p) whitened: B_i = R_i^(-1/2) F_i. `prior_precision` (p, p). `directions` (L, p) and `tau` (L,),
    limits on the standard uncertainty of each direction. `cost` (n,) positive, ones by default. `required`,
    `forbidden` (n,) bool. `key` (n,) strings that name the sites: ties are broken by key, so the order of the
    candidates never changes the answer. `interest` (p,) bool: terms whose information log det counts (default: all).
    `lost`: every limit must hold after the loss of any so many (0, 1, 2) chosen sites. `xy` (n, 2) and `spacing`: sites
    closer than `spacing` may not both be chosen; 0 for no such rule. A site that reads with probability q has its block
    scaled by √q: the information that is expected of it.
    """

    blocks: Array
    directions: Array
    tau: Array
    prior_precision: Array
    cost: Array
    required: NDArray[np.bool_]
    forbidden: NDArray[np.bool_]
    key: NDArray[Any]
    interest: NDArray[np.bool_]
    rules: CountRules = field(default_factory=CountRules)
    max_sites: int | None = None
    lost: int = 0
    xy: Array | None = None
    spacing: float = 0.0

    @property
    def n(self) -> int:
        return self.blocks.shape[0]

    @property
    def p(self) -> int:
        return self.blocks.shape[2]


def site_problem(blocks: Array, directions: Array, tau: Array, *, prior_precision: Array | None = None,
                 cost: Array | None = None, required: NDArray[np.bool_] | None = None,
                 forbidden: NDArray[np.bool_] | None = None, key: NDArray[Any] | None = None,
                 interest: NDArray[np.bool_] | None = None, rules: CountRules | None = None,
                 max_sites: int | None = None, lost: int = 0, xy: Array | None = None,
                 spacing: float = 0.0) -> SiteProblem:
    """A `SiteProblem` with the defaults filled in; shapes as there. Without keys, sites are named by their position."""
    n, _, p = blocks.shape
    return SiteProblem(
        blocks=blocks, directions=np.asarray(directions, float).reshape(-1, p), tau=np.asarray(tau, float),
        prior_precision=np.zeros((p, p)) if prior_precision is None else prior_precision,
        cost=np.ones(n) if cost is None else np.asarray(cost, float),
        required=np.zeros(n, bool) if required is None else required,
        forbidden=np.zeros(n, bool) if forbidden is None else forbidden,
        key=np.arange(n) if key is None else key,
        interest=np.ones(p, bool) if interest is None else interest,
        rules=CountRules() if rules is None else rules, max_sites=max_sites, lost=lost, xy=xy, spacing=spacing)


@dataclass(frozen=True, slots=True)
class SearchResult:
    """What the search found and what it proved.

    `chosen` sorted indices, or None when no set was found. `status`: "proven" (fewest proven), "interval" (bound
    below the count, or time ended), "cannot" (even all candidates fail: `worst_ratio` with all of them > 1),
    "rules" (the rules admit no set). `lower_bound` is a valid bound on the cost of any set that meets limits and rules;
    `certificate`: its proof, as certificate.py lays it out. `log_det` of the information on the terms of interest;
    `log_det_bound` an upper bound over all sets of the same count that meet the limits (infinite if time did not allow one).
    """

    chosen: NDArray[np.int64] | None
    status: str
    lower_bound: float
    certificate: dict[str, Any]
    log_det: float
    log_det_bound: float
    history: tuple[tuple[float, float, float], ...]  # (seconds, bound, best cost)
    seconds: float
    interrupted: bool = False
    worst_ratio: float = np.nan  # u/τ of the worst limit with every allowed site measured, when "cannot"

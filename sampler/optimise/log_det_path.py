"""The weights of greatest log det under limits, rules and a budget, on some of the candidates: a primal–dual path.

    minimise  −log det M(w) + κ s      0 ≤ w ≤ 1,   cost·w ≤ budget,   c_lᵀM(w)⁻¹c_l ≤ 1 + s,   A w ≤ level + s,   s ≥ 0.

All of it is convex in (w, s). The elastic s makes every start strictly feasible; κ is large enough when s ends at 0. The
method is the primal–dual interior point of Boyd & Vandenberghe, Convex Optimization (2004), 11.7. With
X_ij = BᵢM⁻¹Bⱼᵀ and t_il = BᵢM⁻¹c_l,

    ∂ log det/∂wᵢ = tr X_ii,   ∂²/∂wᵢ∂wⱼ = −‖X_ij‖²,      ∂v_l/∂wᵢ = −‖t_il‖²,   ∂²v_l/∂wᵢ∂wⱼ = 2 t_ilᵀ X_ij t_jl.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.linalg import LinAlgError, cho_factor, cho_solve

from sampler.optimise.blocks import Array, Block
from sampler.optimise.determinant import Determinant
from sampler.optimise.pool import Indices
from sampler.optimise.variances import inverted, weighted_information

STEPS = 80
CENTRING = 10.0
TO_BOUNDARY = 0.99
SHRINK, LEAST_SHARE = 0.5, 1e-6
DAMPING = 1e-13
"""Share of the mean diagonal added to the Newton matrix, so that rounding cannot make it indefinite."""


@dataclass(frozen=True, slots=True)
class Concave:
    """The program on n columns. `terms`: log det, rows (n, m, q) each, priors with the required sites in them; the first
    ones are the blocks. `limits` (L,) watched limits of the split; `rules` (R, n) and `level` (R,)."""

    terms: list[Determinant]
    blocks: tuple[Block, ...]
    limits: Indices
    cost: Array
    budget: float
    rules: Array
    level: Array

    @property
    def elastic(self) -> bool:
        return len(self.limits) + len(self.level) > 0


@dataclass(slots=True)
class Peak:
    """Weights (n,) with multipliers of the limits (L,) and rules (R,); `excess`: the s that is left, `gap` of the path."""

    weights: Array
    limit_duals: Array
    rule_duals: Array
    excess: float
    gap: float


class _At:
    """Everything at one point w."""

    def __init__(self, program: Concave, weights: Array) -> None:
        self.log_det = 0.0
        self.inverses = []
        self.gradient = np.zeros(len(weights))
        for term in program.terms:
            matrix = weighted_information(term.rows, term.prior, weights)
            sign, size = np.linalg.slogdet(matrix)
            self.log_det += term.weight * size if sign > 0 else -np.inf
            self.inverses.append(inverted(matrix))
            self.gradient -= term.slope(self.inverses[-1], slice(None))
        number = np.full(max((block.owner.max(initial=-1) for block in program.blocks), default=-1) + 1, -1)
        number[program.limits] = np.arange(len(program.limits))
        self.variance = np.zeros(len(program.limits))
        self.jacobian = np.zeros((len(program.limits), len(weights)))  # −∂v/∂w
        self.readings, self.owners = [], []
        for block, term, inverse in zip(program.blocks, program.terms, self.inverses, strict=False):
            used = np.flatnonzero(number[block.owner] >= 0)
            columns, owner = block.columns[:, used], number[block.owner[used]]
            solved = inverse @ columns
            self.variance += np.bincount(owner, weights=(columns * solved).sum(axis=0), minlength=len(self.variance))
            reading = term.rows @ solved
            np.add.at(self.jacobian, owner, (reading**2).sum(axis=1).T)
            self.readings.append(reading)
            self.owners.append(owner)

    def hessian(self, program: Concave, limit_duals: Array) -> Array:
        """Of −log det + Σ λ v."""
        n = len(self.gradient)
        total = np.zeros((n, n))
        for number, (term, inverse) in enumerate(zip(program.terms, self.inverses, strict=True)):
            m, q = term.rows.shape[1:]
            flat = term.rows.reshape(n * m, q)
            cross = (flat @ inverse) @ flat.T
            squared = term.weight * cross
            if number < len(self.readings):
                reading = self.readings[number].reshape(n * m, self.readings[number].shape[-1])
                squared += 2.0 * ((reading * limit_duals[self.owners[number]]) @ reading.T)
            squared *= cross
            total += squared if m == 1 else squared.reshape(n, m, n, m).sum(axis=(1, 3))
        return total


def climb_path(program: Concave, weights: Array, tolerance: float, penalty: float, over: Callable[[], bool]) -> Peak:
    """The weights of greatest log det to within `tolerance`, from strictly inner `weights` (cost below the budget)."""
    n, elastic = len(weights), program.elastic
    at = _At(program, weights)
    s = 2.0 * max(0.0, *(at.variance - 1.0), *(program.rules @ weights - program.level), 0.05) if elastic else 0.0
    limits, rules = len(program.limits), len(program.level)

    def constraints(w: Array, s: float, at: _At) -> Array:
        parts = [-w, w - 1.0, np.array([program.cost @ w - program.budget])]
        if elastic:
            parts += [at.variance - 1.0 - s, program.rules @ w - program.level - s, np.array([-s])]
        return np.concatenate(parts)

    def transposed(y: Array, at: _At) -> Array:
        """Jᵀy over (w, s)."""
        gradient = -y[:n] + y[n:2 * n] + y[2 * n] * program.cost
        if not elastic:
            return gradient
        of_limits, of_rules = y[2 * n + 1:2 * n + 1 + limits], y[2 * n + 1 + limits:-1]
        gradient += program.rules.T @ of_rules - of_limits @ at.jacobian
        return np.append(gradient, -of_limits.sum() - of_rules.sum() - y[-1])

    def forward(step: Array, at: _At) -> Array:
        """J step."""
        dw = step[:n]
        parts = [-dw, dw, np.array([program.cost @ dw])]
        if elastic:
            parts += [-(at.jacobian @ dw) - step[n], program.rules @ dw - step[n], np.array([-step[n]])]
        return np.concatenate(parts)

    def slope(at: _At) -> Array:
        return np.append(at.gradient, penalty) if elastic else at.gradient

    g = constraints(weights, s, at)
    y = 1.0 / -g
    if elastic:  # so that the multipliers of the elastic demands add up to their price from the first
        y *= max(1.0, penalty / y[2 * n + 1:].sum())
    gap = float(-g @ y)
    for _ in range(STEPS):
        dual_residual = slope(at) + transposed(y, at)
        gap = float(-g @ y)
        if (gap < tolerance and np.abs(dual_residual).max() < tolerance) or over():
            break
        t = gap / (CENTRING * len(g))
        ratio = y / -g
        newton = np.zeros((n + elastic, n + elastic))
        newton[:n, :n] = at.hessian(program, y[2 * n + 1:2 * n + 1 + limits])
        newton[np.arange(n), np.arange(n)] += ratio[:n] + ratio[n:2 * n]
        newton[:n, :n] += ratio[2 * n] * np.outer(program.cost, program.cost)
        if elastic:
            of_limits, of_rules = ratio[2 * n + 1:2 * n + 1 + limits], ratio[2 * n + 1 + limits:-1]
            newton[:n, :n] += (at.jacobian.T * of_limits) @ at.jacobian + (program.rules.T * of_rules) @ program.rules
            newton[:n, n] = newton[n, :n] = at.jacobian.T @ of_limits - program.rules.T @ of_rules
            newton[n, n] = of_limits.sum() + of_rules.sum() + ratio[-1]
        scale = np.sqrt(np.diag(newton))
        newton /= np.outer(scale, scale)
        newton[np.diag_indices_from(newton)] += DAMPING
        right = -(slope(at) + transposed(t / -g, at))
        try:
            step = cho_solve(cho_factor(newton), right / scale) / scale
        except LinAlgError:
            break
        moved = forward(step, at)
        dy = ratio * moved + t / -g - y
        falling = dy < 0
        share = min(1.0, TO_BOUNDARY * float((-y[falling] / dy[falling]).min(initial=np.inf)))
        linear = moved > 0
        linear[2 * n + 1:2 * n + 1 + limits] = False  # the limits are not linear: they are tried
        share = min(share, TO_BOUNDARY * float((-g[linear] / moved[linear]).min(initial=np.inf)))
        size = np.sqrt((dual_residual**2).sum() + ((-g * y - t) ** 2).sum())
        while share > LEAST_SHARE:
            new_weights, new_s, new_y = weights + share * step[:n], s + share * step[n] if elastic else 0.0, y + share * dy
            new = _At(program, new_weights)
            new_g = constraints(new_weights, new_s, new)
            if np.isfinite(new.log_det) and np.all(new_g < 0):
                residual = np.sqrt(((slope(new) + transposed(new_y, new)) ** 2).sum() + ((-new_g * new_y - t) ** 2).sum())
                if residual <= (1.0 - 0.01 * share) * size:
                    break
            share *= SHRINK
        else:
            break
        weights, s, y, at, g = new_weights, new_s, new_y, new, new_g
    duals = y[2 * n + 1:]
    return Peak(weights, duals[:limits], duals[limits:limits + rules], s, gap)

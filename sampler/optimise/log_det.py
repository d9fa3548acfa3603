"""log det of a choice, and how large it can be at all over sets of one cost that meet the limits.

log det is concave, so at any positive definite M₀ its tangent bounds it for every w:

    log det M(w)  ≤  log det M₀ + tr(M₀⁻¹ M(w)) − q          with coefficients tr(Bᵢ M₀⁻¹ Bᵢᵀ), the leverages.

A limit holds only where each of its covering rows does, Σ wᵢ‖Bᵢz‖² ≥ rhs. For any multipliers λ ≥ 0 of covering rows and ν of
rules (ν ≥ 0 of the upper, ≤ 0 of the lower side), no set of the budget that meets limits and rules exceeds

    log det M₀ + tr(M₀⁻¹P₀) − q − Σ λ rhs + Σ ν·(rule's bound) + max { P·w : Σ cost·w ≤ budget, w within its bounds },
    Pᵢ = tr(Bᵢ M₀⁻¹ Bᵢᵀ) + Σ λ‖Bᵢz‖² − Σ_{rules of i} ν.

The maximum is a fractional knapsack. M₀, λ, ν come from an interior path on some of the candidates (`log_det_path.py`), are
used as they are whatever became of it, and price all candidates; those that pay join, and the path is followed again.
With terms that are not of interest, log det M − log det M_rr is concave in M as well and has the difference as its tangent.
"""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np

from sampler.optimise.blocks import Array, Split
from sampler.optimise.determinant import Determinant, determinants, offset, value
from sampler.optimise.log_det_path import Concave, climb_path
from sampler.optimise.pool import Indices, key_rank
from sampler.optimise.problem import SiteProblem
from sampler.optimise.rows import separate
from sampler.optimise.variances import information, inverted, weighted_information

GAP = 1e-5
FIRST_GAP, TIGHTENING = 1e-2, 10.0
"""The path is followed until its gap is below this: at first loosely, on candidates that others will replace."""
EVEN = 0.2
IDLE = 0.05
PENALTY, MOST_PENALTY = 100.0, 1e7
"""First price of missing the limits by 1, per direction; grows tenfold while some excess is left."""
EXCESS = 1e-6
RIDGE = 1e-6
FIRST_STEPS, FIRST_SITES = 12, 20_000
MORE_COLUMNS = 100
WATCHED = 64
ROUNDS = 30


@dataclass(frozen=True, slots=True)
class LogDetBound:
    """No set of the budget that meets limits and rules has a log det above `value`. `weights` (n,) come close to it.
    `prices` P (n,); a set that holds a site of gain g = price − cost · (price of the budget) < 0 has at most value + g;
    one that lacks a site of g > 0, at most value − g. `gains` (n,) are these g."""

    value: float
    weights: Array
    gains: Array


def log_det(split: Split, problem: SiteProblem, chosen: Indices) -> float:
    """log det of the information on the terms of interest, −∞ when the set leaves any direction unknown."""
    if not np.isfinite(split.log_det_offset):
        return -np.inf
    return value(determinants(split, problem, chosen), np.arange(len(chosen))) + offset(split, problem)


def log_det_bound(split: Split, problem: SiteProblem, budget: float, *, limited: bool = True,
                  deadline: float = np.inf) -> LogDetBound:
    """Upper bound on log det over all sets that cost at most `budget` (that many sites when costs are one) and meet the
    limits (unless not `limited`) and rules. Infinite when the candidates leave a direction unknown.
    """
    if not np.isfinite(split.log_det_offset):
        return LogDetBound(np.inf, np.zeros(problem.n), np.zeros(problem.n))
    return _Bounder(split, problem, float(budget), limited, deadline).run()


class _Bounder:
    def __init__(self, split: Split, problem: SiteProblem, budget: float, limited: bool, deadline: float) -> None:
        self.split, self.problem, self.budget, self.deadline = split, problem, budget, deadline
        self.required = np.flatnonzero(problem.required)
        self.free = ~problem.required & ~problem.forbidden
        self.rank = key_rank(problem)
        self.ridge = RIDGE * max(1.0, self.budget / problem.cost.mean()) / problem.n
        self.terms = determinants(split, problem)
        self.limits = np.arange(split.limits if limited else 0)
        self.watch = self.limits
        self.members, self.level, self.sign = [], [], []
        rules = [*zip(problem.rules.members, np.ceil(problem.rules.lower), np.floor(problem.rules.upper), strict=True)]
        if problem.max_sites is not None and problem.max_sites < problem.n:
            rules.append((np.arange(problem.n), 0.0, float(problem.max_sites)))
        for members, low, high in rules:
            for sign, level in ((-1.0, -low), (1.0, high)):
                if level < (0 if sign < 0 else len(members)):
                    self.members.append(members)
                    self.sign.append(sign)
                    self.level.append(level)
        self.best = LogDetBound(np.inf, np.zeros(problem.n), np.zeros(problem.n))

    def over(self) -> bool:
        return time.monotonic() >= self.deadline

    def run(self) -> LogDetBound:
        weights = self._first_weights()
        self._bound(weights, np.zeros(len(self.watch)), np.zeros(len(self.level)))
        if len(self.limits) > WATCHED:
            ratio = self._ratios(weights)
            self.watch = np.union1d(np.argsort(-ratio, kind="stable")[:WATCHED // 2],
                                    np.arange(0, len(ratio), len(ratio) // (WATCHED // 2)))
        penalty = PENALTY * sum(block.q for block in self.split.blocks)
        columns = np.flatnonzero((weights > 0) & self.free)
        tolerance = FIRST_GAP
        for _ in range(ROUNDS):
            if self.over() or not len(columns):
                break
            program = self._program(columns)
            if program.budget <= 0.0:
                break
            known = np.isin(np.arange(self.problem.n), columns) | self.problem.required
            peak = climb_path(program, self._inner(weights[columns], program), tolerance, penalty, self.over)
            weights = self.problem.required.astype(float)
            weights[columns] = peak.weights
            price = self._bound(weights, peak.limit_duals, peak.rule_duals)
            # What pays is judged by what the budget is worth to all sites and, when nothing does, to the columns alone.
            for priced in (price, np.where(known, price, 0.0)):
                gains = price - self._knapsack(priced)[2] * self.problem.cost
                paying = np.setdiff1d(np.flatnonzero((gains > tolerance / self.budget) & self.free), columns)
                if len(paying):
                    break
            ratio = self._ratios(weights)
            missed = np.setdiff1d(np.flatnonzero(ratio > 1.0 + EXCESS), self.watch)
            lax = peak.excess > EXCESS * 100
            if not len(paying) and not len(missed) and (not lax or penalty >= MOST_PENALTY) and tolerance <= GAP:
                break
            if tolerance == FIRST_GAP:  # only once, so that columns cannot come and go for ever
                columns = columns[(gains[columns] > -IDLE) | (peak.weights > IDLE)]
            tolerance = max(GAP, tolerance / TIGHTENING)
            if lax and not len(paying) and penalty < MOST_PENALTY:
                penalty *= 10.0
            order = np.lexsort((self.rank[paying], -gains[paying]))
            columns = np.union1d(columns, paying[order[:MORE_COLUMNS]])
            self.watch = np.union1d(self.watch, missed[np.argsort(-ratio[missed], kind="stable")[:WATCHED]])
        return self.best

    def _inner(self, weights: Array, program: Concave) -> Array:
        """Strictly inner weights of the columns: towards even ones, and within the budget."""
        even = min(0.5, program.budget / max(float(program.cost.sum()), float(np.finfo(float).tiny)))
        inner = (1.0 - EVEN) * weights + EVEN * even
        return np.minimum(inner, 0.99) * min(1.0, 0.99 * program.budget / float(program.cost @ inner))

    def _matrices(self, weights: Array) -> list[Array]:
        """P₀ + Σ wᵢBᵢᵀBᵢ of each term, with a ridge: any M₀ gives a valid tangent."""
        used = np.flatnonzero(weights)
        return [weighted_information(term.rows[used], term.prior, weights[used]) + self.ridge * np.eye(term.rows.shape[2])
                for term in self.terms]

    def _ratios(self, weights: Array) -> Array:
        if not len(self.limits):
            return np.zeros(0)
        return separate(self.split, self._matrices(weights)[:len(self.split.blocks)])[1]

    def _first_weights(self) -> Array:
        """What a few steps of Frank and Wolfe (1956) on log det alone take, of sites spread over the order of the keys."""
        sites = np.flatnonzero(self.free)
        sites = sites[np.argsort(self.rank[sites], kind="stable")][::-(-len(sites) // FIRST_SITES) or 1]
        weights, taken = self.problem.required.astype(float), np.zeros(self.problem.n)
        weights[sites] = min(1.0, self.budget / max(float(self.problem.cost[sites].sum()), float(np.finfo(float).tiny)))
        for step in range(1, FIRST_STEPS + 1):
            slope = np.zeros(self.problem.n)
            for term, matrix in zip(self.terms, self._matrices(weights), strict=True):
                slope[sites] += term.slope(inverted(matrix), sites)
            best = self._knapsack(slope)[0]
            weights += 2.0 / (step + 2.0) * (best - weights)
            taken += best
        return taken / FIRST_STEPS

    def _knapsack(self, price: Array) -> tuple[Array, float, float]:
        """The w within bounds and budget that maximises price · w, that maximum, and the price of the budget."""
        problem = self.problem
        weights = problem.required.astype(float)
        left = self.budget - float(problem.cost @ weights)
        use = np.flatnonzero((price > 0) & self.free)
        each = price[use] / problem.cost[use]
        enough = int(max(left, 0.0) / problem.cost.min()) + 2
        if len(use) > enough:
            best = each >= np.partition(each, -enough)[-enough]
            use, each = use[best], each[best]
        order = use[np.lexsort((self.rank[use], -each))]
        cost = problem.cost[order]
        before = np.cumsum(cost) - cost
        weights[order] = np.clip((left - before) / cost, 0.0, 1.0)
        short = np.flatnonzero(weights[order] < 1.0)
        rate = float(price[order[short[0]]] / cost[short[0]]) if len(short) else 0.0
        return weights, float(price @ weights), rate

    def _bound(self, weights: Array, limit_duals: Array, rule_duals: Array) -> Array:
        """The bound at these weights and multipliers, over all candidates; keeps it if it is better. The prices (n,)."""
        problem = self.problem
        matrices = self._matrices(weights)
        price, total = np.zeros(problem.n), 0.0
        for term, matrix in zip(self.terms, matrices, strict=True):
            values, vectors = np.linalg.eigh(matrix)
            inverse = (vectors / values) @ vectors.T
            total += term.weight * float(np.log(values).sum() + (inverse * term.prior).sum() - len(values))
            price += term.slope(inverse, slice(None))
        if len(limit_duals):
            rows, variance = separate(self.split, matrices[:len(self.split.blocks)], self.watch)
            duals = limit_duals * variance**2  # ∂v/∂w = −v² a at the row's own point
            price += rows.prices(duals)
            total -= float(duals @ rows.right_hand_side)
        for members, sign, level, dual in zip(self.members, self.sign, self.level, rule_duals, strict=True):
            price[members] -= sign * dual
            total += dual * level
        _, most, rate = self._knapsack(price)
        if total + most + offset(self.split, problem) < self.best.value:
            self.best = LogDetBound(total + most + offset(self.split, problem), weights,
                                    price - rate * problem.cost)
        return price

    def _program(self, columns: Indices) -> Concave:
        problem = self.problem
        terms = [Determinant(term.weight, term.rows[columns], information(term.rows[self.required], term.prior, self.ridge))
                 for term in self.terms]
        rules = np.zeros((len(self.level), len(columns)))
        level = np.array(self.level, float)
        for row, (members, sign) in enumerate(zip(self.members, self.sign, strict=True)):
            mask = np.zeros(problem.n, bool)
            mask[members] = True
            rules[row] = sign * mask[columns]
            level[row] -= sign * np.count_nonzero(mask[self.required])
        return Concave(terms, self.split.blocks, self.watch, problem.cost[columns],
                       self.budget - float(problem.cost[self.required].sum()), rules, level)

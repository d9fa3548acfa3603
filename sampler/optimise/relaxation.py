"""The continuous relaxation: weights 0 ≤ wᵢ ≤ 1 instead of measured or not, and the bound that it proves.

The bound is weak duality over covering rows, so it holds whatever rows z_k, duals y_k ≥ 0 and rule duals are put in:

    cost of any set that meets limits and rules  ≥  Σ_k y_k (1 − z_kᵀP₀z_k) + Σ_r (ν_r⁺ lower_r − ν_r⁻ upper_r)
        + Σ over required sites of (costᵢ − priceᵢ) + Σ over free sites of min(0, costᵢ − priceᵢ),
    priceᵢ = Σ_k y_k ‖Bᵢ z_k‖² + Σ over rules r with i of (ν_r⁺ − ν_r⁻).

It is computed here over all candidates; interior.py only proposes z and y. With many candidates the program holds some of
them (column generation): those that the duals overpay enter, those far from paid leave. With many limits it holds the worst.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.blocks import Array, Split, column_variances
from sampler.optimise.interior import Point, Restricted, best_scale, solve
from sampler.optimise.problem import SiteProblem
from sampler.optimise.rows import RowPool, information, separate

FEASIBLE = 1.0 + 1e-9
"""A variance ratio up to this meets its limit: rounding of double precision."""
TOLERANCE = 1e-6
"""Relative gap at which the relaxation is solved; the bound is safe at any gap."""
GENERATED_TOLERANCE = 1e-5
"""The same when sites are generated: the last few of a million candidates gain nothing that rounding up would show."""
ALL_SITES_WORK = 6e7
"""All sites are in the program from the start while a step on them costs fewer multiplications than this."""
FIRST_SITES, LEAST_SITES = 2500, 600
ENTERING_BEST, ENTERING_ANY = 400, 600
LEAVES_ABOVE = 0.3
"""A site leaves the program when its reduced cost exceeds this share of its cost."""
FIRST_LIMITS = 2500
ENTERING_LIMITS = 500
START_RATIO = 0.7
"""The start has all weights equal, with the worst variance ratio at this (or half-way to the best possible)."""
NEGLIGIBLE = 1e-7
"""A row whose dual is below this share of the largest is left out of the proof."""
LARGEST_START = 0.99
MOST_ROUNDS = 60
MOST_LIFTS = 30
RULE_GIVE = 1e-7
"""Rules are widened by this while solving, so that one that fixes a count has an inside; the bound does not use it."""


@dataclass(frozen=True, slots=True)
class Relaxation:
    """What the relaxation proved.

    `bound`: on the cost of any set that meets limits and rules (infinite: none does). `weights` (n,): near the optimum, and
    meeting the limits. `value` = cost @ weights; `gap` = value − bound. `rows`, `duals` (R,), `rule_duals` (rules,),
    positive for the lower count and negative for the upper (the last rule is max_sites when the problem has it), and
    `reduced_costs` (n,) = cost − price are the proof.
    `worst_ratio`: u/τ of the worst limit with every site that is allowed; infinite when undetermined.
    """

    bound: float
    weights: Array
    value: float
    rows: RowPool
    duals: Array
    rule_duals: Array
    reduced_costs: Array
    worst_ratio: float
    interrupted: bool

    @property
    def gap(self) -> float:
        return self.value - self.bound


@dataclass(frozen=True, slots=True)
class _Sides:
    """Rules as one-sided rows: sign · Σ_{members} w ≥ level, over all sites, level still counting the required ones."""

    members: tuple[NDArray[np.int64], ...]
    sign: Array
    level: Array
    rule: NDArray[np.int64]

    def over(self, sites: NDArray[np.int64], n: int) -> Array:
        """(S, sites) coefficients."""
        found = np.zeros((len(self.members), len(sites)))
        for side, members in enumerate(self.members):
            mask = np.zeros(n, bool)
            mask[members] = True
            found[side] = self.sign[side] * mask[sites]
        return found

    def prices(self, duals: Array, n: int) -> Array:
        """Σ of sign · dual over the rules of each site, (n,)."""
        total = np.zeros(n)
        for members, value in zip(self.members, self.sign * duals, strict=True):
            total[members] += value
        return total


def _sides(problem: SiteProblem) -> _Sides:
    """Every rule side that could bind."""
    members, sign, level, rule = [], [], [], []
    rules = [*zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True)]
    if problem.max_sites is not None:
        rules.append((np.arange(problem.n), 0.0, float(problem.max_sites)))
    for number, (inside, low, high) in enumerate(rules):
        fixed = int(problem.required[inside].sum())
        for direction, bound in ((1.0, low), (-1.0, -high)):
            if bound > (fixed if direction > 0 else -int((~problem.forbidden[inside]).sum())):
                members.append(inside)
                sign.append(direction)
                level.append(bound)
                rule.append(number)
    return _Sides(tuple(members), np.array(sign), np.array(level), np.array(rule, np.int64))


@dataclass(slots=True)
class _Bounder:
    """The safe bound of any rows and duals, over all candidates; keeps the best."""

    split: Split
    problem: SiteProblem
    sides: _Sides
    free: NDArray[np.int64]
    best: Relaxation

    def update(self, point: Point) -> Array:
        """Bounds with the point's duals at their best scale, keeps it if better; returns the reduced costs (n,)."""
        problem, rows = self.problem, point.rows
        kept = np.flatnonzero(point.duals > NEGLIGIBLE * point.duals.max(initial=0.0))
        rows, y = replace(rows.take(kept), split=self.split), point.duals[kept]  # whose prior has no required sites in it
        price = rows.prices(y) + self.sides.prices(point.rule_duals, problem.n)
        required = problem.required
        income = float(y @ rows.right_hand_side + point.rule_duals @ self.sides.level - price[required].sum())
        scale, bound = best_scale(income, problem.cost[self.free], price[self.free])
        bound += float(problem.cost[required].sum())
        if bound > self.best.bound:
            rules = np.bincount(self.sides.rule, weights=scale * self.sides.sign * point.rule_duals,
                                minlength=len(self.best.rule_duals))
            self.best = replace(self.best, bound=bound, rows=rows, duals=scale * y, rule_duals=np.asarray(rules, np.float64),
                                reduced_costs=problem.cost - scale * price)
        return problem.cost - price


def relax(split: Split, problem: SiteProblem, *, seconds: float, progress: Callable[[float, float], None] | None = None,
          stop: Callable[[], bool] | None = None) -> Relaxation:
    """The relaxation solved to TOLERANCE, or as far as time allows; the bound is valid either way."""
    until = time.monotonic() + seconds

    def ended() -> bool:
        return time.monotonic() >= until or (stop is not None and stop())

    n, required = problem.n, problem.required
    free = np.flatnonzero(~required & ~problem.forbidden)
    sides = _sides(problem)
    nothing, _ = separate(split, [np.eye(block.q) for block in split.blocks], np.zeros(0, np.int64))
    fixed = replace(split, blocks=tuple(replace(block, prior=information(block, required.astype(float)))
                                         for block in split.blocks))
    allowed = [information(block, (~problem.forbidden).astype(float)) for block in split.blocks]
    worst = np.inf if len(split.impossible) else float(np.sqrt(_ratios(split, allowed).max(initial=0.0)))
    best = Relaxation(float(problem.cost[required].sum()), (~problem.forbidden).astype(float),
                      float(problem.cost[~problem.forbidden].sum()), nothing, np.zeros(0),
                      np.zeros(len(problem.rules.lower) + (problem.max_sites is not None)),
                      problem.cost.copy(), worst, False)
    if worst**2 > FEASIBLE:
        return replace(best, bound=np.inf)
    if not len(sides.sign) and _ratios(split, [block.prior for block in fixed.blocks]).max(initial=0.0) <= FEASIBLE:
        return replace(best, weights=required.astype(float), value=best.bound)  # the required sites alone will do

    bounder = _Bounder(split, problem, sides, free, best)
    sites = _first_sites(fixed, free, worst**2)
    ratios = _ratios(split, allowed)
    limits = np.sort(np.argsort(-ratios, kind="stable")[:FIRST_LIMITS])
    tolerance = TOLERANCE if len(sites) == len(free) else GENERATED_TOLERANCE
    rng = np.random.default_rng(0)
    for _ in range(MOST_ROUNDS):
        program = Restricted(fixed, sites, limits, problem.cost[sites], sides.over(sites, n),
                             sides.level - sides.over(np.flatnonzero(required), n).sum(axis=1) - RULE_GIVE)
        point = solve(program, _start(program), tolerance=TOLERANCE, stop=ended)
        reduced = bounder.update(point)
        weights = required.astype(float)
        weights[sites] = point.weights
        ratios = _ratios(split, [information(block, weights) for block in split.blocks])
        bounder.best = _nearer(split, problem, bounder.best, weights, float(ratios.max(initial=0.0)))
        if progress is not None:
            progress(bounder.best.bound, np.inf)
        missing = np.setdiff1d(np.flatnonzero(ratios > 1.0 + tolerance), limits)
        if bounder.best.gap <= tolerance * bounder.best.value and not len(missing):
            return bounder.best
        if ended():
            return replace(bounder.best, interrupted=True)
        limits = np.sort(np.append(limits, missing[np.argsort(-ratios[missing], kind="stable")[:ENTERING_LIMITS]]))
        entering = _entering(free, sites, reduced / problem.cost, rng)
        if not len(entering) and not len(missing):  # rounding is all that is left of the gap
            break
        stay = (reduced[sites] < LEAVES_ABOVE * problem.cost[sites]) | (point.weights > 1e-6)
        sites = np.sort(np.append(sites[stay] if len(sites) < len(free) else sites, entering))
    return bounder.best


def _ratios(split: Split, matrices: list[Array]) -> Array:
    """var/τ² of each limit at the M_b of each block, (limits,)."""
    return split.variances([column_variances(matrix, block.columns)
                            for block, matrix in zip(split.blocks, matrices, strict=True)])


def _first_sites(fixed: Split, free: NDArray[np.int64], goal: float) -> NDArray[np.int64]:
    """Sites to start with: all of few, else a random sample with the extremes of every direction that can meet the limits.

    `goal`: the worst variance ratio with every allowed site; the sample must come half-way from the limit to it.
    """
    width = sum(block.q * (block.q + 1) // 2 for block in fixed.blocks)
    number = int(min(max(ALL_SITES_WORK / width**2, LEAST_SITES), FIRST_SITES))
    if len(free) <= number or len(free) * width**2 <= ALL_SITES_WORK:
        return free
    rng = np.random.default_rng(0)
    extreme = [free[end(block.rows[free, axis], axis=0)] for block in fixed.blocks
               for axis in range(block.rows.shape[1]) for end in (np.argmax, np.argmin)]
    while number < len(free):
        sites = np.unique(np.concatenate([rng.choice(free, number, replace=False), *extreme]))
        matrices = [information(block, np.ones(len(sites)), sites) for block in fixed.blocks]
        if _ratios(fixed, matrices).max(initial=0.0) <= 0.5 * (1.0 + goal):
            return np.asarray(sites, np.int64)
        number *= 2
    return free


def _start(program: Restricted) -> Array:
    """Equal weights at which the worst ratio is START_RATIO, or half-way from the limit to the best possible."""
    split, sites = program.split, program.sites
    grams = [information(block, np.ones(len(sites)), sites) - block.prior for block in split.blocks]

    def worst(weight: float) -> float:
        return float(_ratios(split, [block.prior + weight * gram for block, gram in zip(split.blocks, grams, strict=True)]
                             )[program.limits].max(initial=0.0))

    goal = max(START_RATIO, 0.5 * (1.0 + worst(1.0)))
    low, high = -16.0, 0.0  # log2 of the weight
    for _ in range(12):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if worst(2.0**middle) <= goal else (middle, high)
    return np.full(len(sites), min(2.0**high, LARGEST_START))


def _nearer(split: Split, problem: SiteProblem, best: Relaxation, weights: Array, worst: float) -> Relaxation:
    """The relaxation with these weights, if they are cheaper than those it has once they are lifted to meet the limits: by
    their worst ratio, or where that meets w ≤ 1, towards every allowed site."""
    share = 0.5**MOST_LIFTS
    for lift in range(2 * MOST_LIFTS):
        if worst <= FEASIBLE:
            value = float(problem.cost @ weights)
            return replace(best, weights=weights, value=value) if value < best.value else best
        if lift < MOST_LIFTS // 2:
            weights = np.where(problem.required, 1.0, np.minimum(1.0, worst * weights))
        else:
            weights, share = weights + share * (~problem.forbidden - weights), 2.0 * share
        worst = float(_ratios(split, [information(block, weights) for block in split.blocks]).max(initial=0.0))
    return best


def _entering(free: NDArray[np.int64], sites: NDArray[np.int64], reduced: Array,
              rng: np.random.Generator) -> NDArray[np.int64]:
    """Sites that the duals overpay, relative to their cost: the most overpaid, and any others."""
    if len(sites) == len(free):
        return np.zeros(0, np.int64)
    outside = free[reduced[free] < -TOLERANCE]
    outside = np.setdiff1d(outside, sites, assume_unique=True)
    outside = outside[np.argsort(reduced[outside], kind="stable")]
    rest = outside[ENTERING_BEST:]
    return np.append(outside[:ENTERING_BEST], rng.choice(rest, min(len(rest), ENTERING_ANY), replace=False))

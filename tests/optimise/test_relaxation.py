"""The relaxation: against the semidefinite form, against its own optimality conditions, and at any moment a valid bound."""

from __future__ import annotations

import time
from dataclasses import replace

import cvxpy as cp
import numpy as np
import pytest
from random_problems import (
    both_axes,
    cheapest_by_enumeration,
    grid_problem,
    polynomial,
    random_problem,
    square_grid,
    variance_ratios,
)

from sampler.optimise.blocks import split
from sampler.optimise.problem import CountRules, site_problem
from sampler.optimise.relaxation import relax


def relaxed(problem, **options):
    return relax(split(problem), problem, **{"seconds": 60.0, **options})


def semidefinite(problem):
    """The same relaxation as [[M(w), I], [I, V]] ⪰ 0, cᵀVc ≤ τ²; infinite when infeasible."""
    w, covariance = cp.Variable(problem.n), cp.Variable((problem.p, problem.p), symmetric=True)
    identity = np.eye(problem.p)
    information = problem.prior_precision + sum(w[i] * (block.T @ block) for i, block in enumerate(problem.blocks))
    demands = [w >= problem.required.astype(float), w <= (~problem.forbidden).astype(float),
               cp.bmat([[information, identity], [identity, covariance]]) >> 0]
    demands += [c @ covariance @ c <= tau**2 for c, tau in zip(problem.directions, problem.tau, strict=True)]
    for members, low, high in zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True):
        demands += [cp.sum(w[members]) >= low, cp.sum(w[members]) <= high]
    if problem.max_sites is not None:
        demands += [cp.sum(w) <= problem.max_sites]
    program = cp.Problem(cp.Minimize(problem.cost @ w), demands)
    program.solve(solver=cp.CLARABEL)
    return program.value


def recomputed(problem, result):
    """The bound in the problem's own terms, by the formula at the head of relaxation.py and nothing else."""
    z, limit = result.rows.in_own_terms(problem)
    assert (problem.directions[limit] * z).sum(axis=1) == pytest.approx(problem.tau[limit], rel=1e-12)
    assert np.all(result.duals >= 0)
    price = np.einsum("k,imk->i", result.duals, (problem.blocks @ z.T) ** 2)
    bound = result.duals @ (1.0 - np.einsum("kp,pq,kq->k", z, problem.prior_precision, z))
    rules = list(zip(problem.rules.members, problem.rules.lower, problem.rules.upper, strict=True))
    rules += [] if problem.max_sites is None else [(np.arange(problem.n), 0.0, float(problem.max_sites))]
    for dual, (members, low, high) in zip(result.rule_duals, rules, strict=True):
        price[members] += dual
        bound += dual * (low if dual > 0 else high)
    reduced = problem.cost - price
    free = ~problem.required & ~problem.forbidden
    return bound + reduced[problem.required].sum() + np.minimum(0.0, reduced[free]).sum()


FEASIBLE = [seed for seed in range(60) if np.isfinite(relaxed(random_problem(seed)).bound)]


@pytest.mark.parametrize("seed", FEASIBLE[:24])
def test_agrees_with_the_semidefinite_form(seed):
    problem = random_problem(seed)
    expected = semidefinite(problem)
    result = relaxed(problem)
    if np.isinf(expected):
        assert result.bound > problem.cost.sum()
    else:
        assert result.bound == pytest.approx(expected, rel=1e-4, abs=1e-4)


@pytest.mark.parametrize("fewer", [0, 1])
def test_agrees_with_max_sites_that_binds(fewer):
    """With costs, fewer sites can be dearer; too few cannot do at all."""
    rng = np.random.default_rng(3)
    xy = rng.uniform(-1, 1, (12, 2))
    blocks = both_axes(polynomial(*xy.T, 1)) * rng.uniform(0.5, 2, (12, 1, 1))
    cost = np.ceil(3 * np.abs(blocks[:, 0, 0]) ** 2)
    problem = site_problem(blocks, np.eye(6), np.full(6, 0.7), cost=cost, max_sites=None)
    free = relaxed(problem)
    tight = replace(problem, max_sites=int(free.weights.sum()) - fewer)
    expected = semidefinite(tight)
    assert relaxed(tight).bound == pytest.approx(expected, rel=1e-4) if np.isfinite(expected) else \
        relaxed(tight).bound > cost.sum()
    assert relaxed(tight).bound > 1.01 * free.bound
    assert recomputed(tight, relaxed(tight)) == pytest.approx(relaxed(tight).bound, rel=1e-9)


@pytest.mark.parametrize("seed", FEASIBLE)
def test_bound_is_recomputed_from_the_certificate_in_own_terms(seed):
    problem = random_problem(seed)
    result = relaxed(problem)
    assert recomputed(problem, result) == pytest.approx(result.bound, rel=1e-8, abs=1e-9)


@pytest.mark.parametrize("seed", FEASIBLE[:30])
def test_never_beats_the_true_optimum(seed):
    problem = random_problem(seed)
    cost, _ = cheapest_by_enumeration(problem)
    assert relaxed(problem).bound <= cost + 1e-6


def test_optimality_conditions():
    """Feasibility, duality and complementarity; a site without weight is not overpaid, one in between is paid exactly."""
    problem = grid_problem(18, 2, 23)
    result = relaxed(problem)
    blocks = problem.blocks * np.sqrt(result.weights)[:, None, None]
    assert variance_ratios(replace(problem, blocks=blocks), range(problem.n)).max() <= 1.0 + 1e-8
    assert 0 <= result.weights.min() <= result.weights.max() <= 1
    assert result.gap == pytest.approx(0.0, abs=1e-4)
    between = (result.weights > 1e-3) & (result.weights < 1 - 1e-3)
    assert between.sum() >= 9
    assert result.reduced_costs[between] == pytest.approx(0.0, abs=1e-3)
    assert np.all(result.reduced_costs[result.weights < 1e-3] > -1e-4)
    assert np.all(result.reduced_costs[result.weights > 1 - 1e-3] < 1e-3)
    covered = result.rows.coefficients() @ result.weights
    assert covered == pytest.approx(result.rows.right_hand_side, abs=1e-3)  # rows with a dual are tight


def test_sites_are_generated(monkeypatch):
    """With a program that starts with a few of the sites the bound is the same, and proven over all of them."""
    problem = grid_problem(30, 2, 20)
    whole = relaxed(problem)
    monkeypatch.setattr("sampler.optimise.relaxation.ALL_SITES_WORK", 0.0)
    monkeypatch.setattr("sampler.optimise.relaxation.FIRST_SITES", 40)
    told = []
    result = relaxed(problem, progress=lambda bound, best: told.append(bound))
    assert len(told) > 1
    assert told == sorted(told)
    assert result.bound == pytest.approx(whole.bound, rel=2e-5)
    assert recomputed(problem, result) == pytest.approx(result.bound, rel=1e-9)


def test_limits_are_generated(monkeypatch):
    problem = grid_problem(12, 2, 12, points=15)
    whole = relaxed(problem)
    monkeypatch.setattr("sampler.optimise.relaxation.FIRST_LIMITS", 3)
    monkeypatch.setattr("sampler.optimise.relaxation.ENTERING_LIMITS", 4)
    result = relaxed(problem)
    assert result.bound == pytest.approx(whole.bound, rel=1e-5)
    assert result.value == pytest.approx(whole.value, rel=1e-4)


@pytest.mark.parametrize("region", [0, 15])
def test_a_stopped_relaxation_is_a_valid_bound(region):
    problem = grid_problem(18, 2, 20, points=region)
    full = relaxed(problem)
    for calls in range(12):
        left = [calls]

        def stop(left=left):
            left[0] -= 1
            return left[0] < 0

        result = relaxed(problem, stop=stop)
        assert result.interrupted or result.bound == pytest.approx(full.bound, rel=1e-5)
        assert calls > 5 or result.interrupted
        assert 0.0 <= result.bound <= full.bound * (1 + 1e-9)
        assert recomputed(problem, result) == pytest.approx(result.bound, rel=1e-9, abs=1e-9)
        blocks = problem.blocks * np.sqrt(result.weights)[:, None, None]
        assert variance_ratios(replace(problem, blocks=blocks), range(problem.n)).max() <= 1.0 + 1e-8


def test_time_limit_is_kept():
    problem = grid_problem(60, 3, 25, points=41)
    began = time.monotonic()
    result = relaxed(problem, seconds=0.0)
    assert result.interrupted
    assert time.monotonic() - began < 5.0  # hangs are what this catches


def test_limits_out_of_reach_say_by_how_much():
    blocks = square_grid(4, 1)
    tau = np.full(6, 1.0 / np.sqrt(16) / 1.25)  # the two translations reach 1/4 with all 16 sites
    result = relaxed(site_problem(blocks, np.eye(6), tau))
    assert np.isinf(result.bound)
    assert result.worst_ratio == pytest.approx(max(1.25, 1.25 * np.sqrt(16 / (blocks[:, 0, 1] ** 2).sum())))
    blind = site_problem(blocks[:, :, [0, 3]], np.eye(2), np.ones(2))
    assert np.isfinite(relaxed(blind).bound)
    assert np.isinf(relaxed(site_problem(0 * blocks, np.eye(6), tau)).worst_ratio)


def test_what_the_prior_meets_costs_nothing():
    problem = site_problem(square_grid(3, 1), np.eye(6), np.ones(6), prior_precision=2 * np.eye(6))
    assert relaxed(problem).bound == 0.0
    required = replace(problem, required=np.arange(9) == 4)
    assert relaxed(required).bound == 1.0
    assert relaxed(required).weights.tolist() == [0, 0, 0, 0, 1, 0, 0, 0, 0]
    asked = replace(problem, rules=CountRules((np.arange(4),), np.array([2.0]), np.array([4.0]), ("corner",)))
    assert relaxed(asked).bound == pytest.approx(2.0, abs=1e-5)


def test_rules_that_leave_too_little():
    """Upper counts that keep every set short of the limits: the bound passes the cost of everything."""
    problem = grid_problem(5, 1, 12)
    few = replace(problem, rules=CountRules((np.arange(25),), np.zeros(1), np.full(1, 5.0), ("all",)))
    assert relaxed(problem).bound > 6
    assert relaxed(few).bound > 25


@pytest.mark.parametrize("scale", [1e-6, 1e5])
def test_units_change_nothing(scale):
    problem = grid_problem(9, 2, 14)
    unit = np.geomspace(1, scale, problem.p)
    other = site_problem(problem.blocks * unit, problem.directions, problem.tau / unit)
    assert relaxed(other).bound == pytest.approx(relaxed(problem).bound, rel=1e-5)

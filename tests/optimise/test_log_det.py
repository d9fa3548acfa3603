"""D-optimal sets and bounds on log det: published designs, enumeration, and an independent conic program."""

from __future__ import annotations

import time
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from random_problems import (
    allowed,
    both_axes,
    cheapest_by_enumeration,
    grid_problem,
    polynomial,
    random_problem,
    variance_ratios,
)

from sampler.optimise.blocks import split
from sampler.optimise.conic import log_det_bound_conic
from sampler.optimise.determinant import best_swaps, determinants, offset, swap_gains, value
from sampler.optimise.informative import d_optimal, most_informative
from sampler.optimise.log_det import log_det, log_det_bound
from sampler.optimise.log_det_tree import branched_log_det_bound
from sampler.optimise.problem import CountRules, site_problem

P1_BEST, P1_BOUND = 13.310424001, 13.347115
P2_BEST, P2_BOUND = 17.494150599, 17.582365
"""Best values seen elsewhere and bounds of the relaxation for 20 of a 51 × 51 grid and for 30 of 10,000 random points."""


def unlimited(rows, **options):
    """Sites with one response each, or with blocks (n, m, p), and no limits."""
    blocks = rows[:, None, :] if rows.ndim == 2 else rows
    return site_problem(blocks, np.zeros((0, blocks.shape[2])), np.zeros(0), **options)


def square(k, order=2):
    side = np.linspace(-1.0, 1.0, k)
    x, y = (a.ravel() for a in np.meshgrid(side, side))
    return polynomial(x, y, order), np.stack([x, y], axis=1)


def textbook(problem, chosen):
    """log det of the information on the terms of interest, from the covariance; −∞ where it does not exist."""
    blocks = problem.blocks[list(chosen)]
    information = problem.prior_precision + np.einsum("imp,imq->pq", blocks, blocks)
    values = np.linalg.eigvalsh(information)
    if values[0] <= 1e-9 * values[-1]:
        return -np.inf
    return -np.linalg.slogdet(np.linalg.inv(information)[np.ix_(problem.interest, problem.interest)])[1]


def best_by_enumeration(problem, budget, limited=True):
    best = (-np.inf, ())
    for size in range(problem.n + 1):
        for chosen in combinations(range(problem.n), size):
            if problem.cost[list(chosen)].sum() <= budget and allowed(problem, chosen) \
                    and (not limited or variance_ratios(problem, chosen).max() <= 1 + 1e-9):
                best = max(best, (textbook(problem, chosen), chosen))
    return best


def with_interest(seed):
    """A random problem whose log det counts some of the terms."""
    problem = random_problem(seed)
    return replace(problem, interest=np.arange(problem.p) % 2 == seed % 2)


# ---- values and their changes


@pytest.mark.parametrize("interest", [None, 0, 1])
@pytest.mark.parametrize("m", [1, 2, 3])
def test_log_det_and_swaps_are_those_of_the_textbook(m, interest):
    rng = np.random.default_rng(m)
    problem = unlimited(rng.normal(size=(12, m, 5)) * [1, 10, 0.1, 1, 3], prior_precision=np.diag([0.0, 0, 3, 0, 0]),
                        interest=None if interest is None else np.arange(5) % 3 != interest)
    parts = split(problem)
    chosen = np.array([0, 2, 3, 5, 7, 8])
    assert log_det(parts, problem, chosen) == pytest.approx(textbook(problem, chosen), abs=1e-9)
    terms = determinants(parts, problem)
    inverses = [term.inverse(chosen, 0.0) for term in terms]
    gains = swap_gains(terms, inverses, chosen)
    for site in (1, 11):
        for position in (0, 4):
            after = chosen.copy()
            after[position] = site
            assert gains[site, position] == pytest.approx(textbook(problem, after) - textbook(problem, chosen), abs=1e-9)
    assert best_swaps(terms, inverses, chosen) == pytest.approx(gains.max(axis=1))
    slope = sum(term.slope(inverse, slice(None)) for term, inverse in zip(terms, inverses, strict=True))
    small = replace(problem, blocks=np.concatenate([problem.blocks[chosen], 1e-4 * problem.blocks[9:10]]))
    assert (textbook(small, range(7)) - textbook(problem, chosen)) / 1e-8 == pytest.approx(slope[9], rel=1e-4, abs=1e-6)


def test_two_equal_blocks_count_twice():
    problem = unlimited(both_axes(square(4)[0]))
    assert [block.multiplicity for block in split(problem).blocks] == [2]
    chosen = np.array([0, 1, 3, 5, 6, 8, 11, 15])
    assert log_det(split(problem), problem, chosen) == pytest.approx(textbook(problem, chosen), abs=1e-9)


def test_too_few_sites_tell_nothing():
    problem = unlimited(square(3)[0])
    assert log_det(split(problem), problem, np.arange(5)) == -np.inf
    blind = unlimited(np.repeat(square(3)[0][:, :1], 2, axis=1))  # two terms that act alike
    assert log_det(split(blind), blind, np.arange(9)) == -np.inf
    assert log_det_bound(split(blind), blind, 4).value == np.inf


# ---- published designs


@pytest.mark.parametrize(("count", "determinant"), [(6, 256), (7, 960), (8, 2304), (9, 5184), (10, 9360), (11, 16896),
                                                    (12, 30320), (13, 54400), (14, 83200)])
def test_quadratic_on_three_by_three_points(count, determinant):
    """Exhaustive search over the 3 × 3 grid with repeated points; a point that may be used three times is three sites."""
    rows = np.repeat(square(3)[0], 3, axis=0)
    problem = unlimited(rows)
    chosen = d_optimal(split(problem), problem, count, rng=np.random.default_rng(0))
    assert len(set(chosen.tolist())) == count
    assert np.exp(log_det(split(problem), problem, chosen)) == pytest.approx(determinant, rel=1e-9)


def test_six_points_of_box_and_draper():
    """G. E. P. Box and N. R. Draper, Technometrics 13 (1971) 731: the best six points for a quadratic on the square."""
    delta = (4 - np.sqrt(13)) / 3
    published = np.array([[-1, -1], [1, -1], [-1, 1], [-delta, -delta], [1, 3 * delta], [3 * delta, 1]])
    rows, _ = square(101)
    fine = unlimited(rows)
    chosen = d_optimal(split(fine), fine, 6, rng=np.random.default_rng(0))
    reached = np.exp(log_det(split(fine), fine, chosen))
    assert 267.73722 * (1 - 1e-3) < reached <= 267.737220
    with_them = unlimited(np.concatenate([rows, polynomial(*published.T, 2)]))
    chosen = d_optimal(split(with_them), with_them, 6, rng=np.random.default_rng(0))
    assert np.exp(log_det(split(with_them), with_them, chosen)) == pytest.approx(267.73722, abs=1e-5)


@pytest.mark.parametrize(("order", "determinant"), [(1, 1.0), (2, 0.14814814814814814), (3, 0.00512),
                                                    (4, 4.2972182387562126e-05), (5, 8.873497113894112e-08)])
def test_polynomials_on_a_line(order, determinant):
    """P. G. Guest, Ann. Math. Stat. 29 (1958) 294, P. G. Hoel, ibid. 1134: equal weights at the zeros of (1 − x²) P′(x)."""
    x = np.linspace(-1.0, 1.0, 2001)
    problem = unlimited(x[:, None] ** np.arange(order + 1))
    bound = log_det_bound(split(problem), problem, 1.0)
    assert np.exp(bound.value) == pytest.approx(determinant, rel=2e-4)
    inner = np.polynomial.legendre.Legendre.basis(order).deriv().roots()
    for zero in [-1.0, *inner, 1.0]:
        assert bound.weights[np.abs(x - zero) < 0.02].sum() == pytest.approx(1 / (order + 1), abs=2e-3)


def test_quadratic_on_the_square():
    """J. Kiefer (1961); A. C. Atkinson and A. N. Donev, Optimum Experimental Designs (1992)."""
    rows, xy = square(21)
    problem = unlimited(rows)
    parts = split(problem)
    bound = log_det_bound(parts, problem, 1.0)
    assert np.exp(bound.value) == pytest.approx(0.0114269987, rel=2e-5)
    place = np.abs(xy).round(6).sum(axis=1)
    on_grid = np.isin(np.abs(xy).round(6), [0.0, 1.0]).all(axis=1)
    for many, weight in ((2.0, 0.145790892), (1.0, 0.080160853), (0.0, 0.096193023)):
        assert bound.weights[on_grid & (place == many)] == pytest.approx(weight, abs=2e-3)


def test_equivalence_theorem():
    """J. Kiefer and J. Wolfowitz, Canad. J. Math. 12 (1960) 363: at the optimum the largest prediction variance is p; and
    D-efficiency ≥ exp(1 − 1 / G-efficiency) for any design (Atkinson & Donev 1992)."""
    rows, _ = square(21)
    problem = unlimited(rows)
    bound = log_det_bound(split(problem), problem, 1.0)

    def variance(weights):
        return np.einsum("ij,jk,ik->i", rows, np.linalg.inv(rows.T @ (weights[:, None] * rows)), rows)

    assert variance(bound.weights).max() == pytest.approx(6.0, abs=1e-3)
    for count in (7, 9, 14):
        chosen = d_optimal(split(problem), problem, count, rng=np.random.default_rng(1))
        weights = np.bincount(chosen, minlength=len(rows)) / count
        d_efficiency = np.exp((log_det(split(problem), problem, chosen) - 6 * np.log(count) - bound.value) / 6)
        g_efficiency = 6.0 / variance(weights).max()
        assert np.exp(1 - 1 / g_efficiency) - 1e-6 <= d_efficiency <= 1.0


@pytest.mark.parametrize(("terms", "expected"), [("helmert", 4.0), ("projective", 1.0)])
def test_similarity_and_projective_models(terms, expected):
    """Both models on the square: the four corners, weight 1/4, |M| recomputed (two opposite corners do for the first)."""
    _, xy = square(11)
    x, y, one, zero = *xy.T, np.ones(len(xy)), np.zeros(len(xy))
    blocks = {"helmert": [[one, zero, x, -y], [zero, one, y, x]],
              "projective": [[one, x, y, zero, zero, zero, x * x, x * y], [zero, zero, zero, one, x, y, x * y, y * y]]}[terms]
    problem = unlimited(np.stack([np.stack(axis, axis=1) for axis in blocks], axis=1))
    bound = log_det_bound(split(problem), problem, 1.0)
    corner = (np.abs(xy) == 1).all(axis=1)
    assert bound.weights[corner].sum() == pytest.approx(1.0, abs=1e-3)
    if terms == "projective":
        assert bound.weights[corner] == pytest.approx(0.25, abs=1e-3)
    assert np.exp(bound.value) == pytest.approx(expected, rel=1e-3)


def test_twenty_of_the_grid():
    problem = unlimited(square(51)[0])
    parts = split(problem)
    for seed in range(3):
        chosen = d_optimal(parts, problem, 20, rng=np.random.default_rng(seed))
        assert log_det(parts, problem, chosen) == pytest.approx(P1_BEST, abs=1e-8)
    assert log_det_bound(parts, problem, 20).value == pytest.approx(P1_BOUND, abs=1e-5)


def test_thirty_of_ten_thousand():
    xy = np.random.default_rng(0).uniform(-1, 1, (10000, 2))
    problem = unlimited(polynomial(*xy.T, 3))
    parts = split(problem)
    chosen = d_optimal(parts, problem, 30, rng=np.random.default_rng(1))
    assert log_det(parts, problem, chosen) == pytest.approx(P2_BEST, abs=1e-8)
    bound = log_det_bound(parts, problem, 30)
    assert bound.value == pytest.approx(P2_BOUND, abs=1e-4)
    branched = branched_log_det_bound(parts, problem, 30, attained=P2_BEST, gap=0.075)
    assert P2_BEST <= branched.value <= P2_BEST + 0.075
    assert branched.nodes < 40


# ---- bounds


def fitting(seed, fits, mixed):
    """The first problem of seed, seed + 1000, … that fits; each `mixed`-th with terms of no interest."""
    made = (with_interest(number) if seed % mixed == 1 else random_problem(number) for number in range(seed, 50_000, 1000))
    return next(problem for problem in made if fits(problem))


def can_be_met(problem):
    return np.isfinite(cheapest_by_enumeration(problem)[0])


@pytest.mark.parametrize("seed", range(24))
def test_bound_agrees_with_the_conic_program(seed):
    problem = fitting(seed, lambda made: can_be_met(made) and np.isfinite(split(made).log_det_offset), 3)
    cost, _ = cheapest_by_enumeration(problem)
    parts = split(problem)
    bound = log_det_bound(parts, problem, cost + 1).value
    assert bound == pytest.approx(log_det_bound_conic(problem, cost + 1), abs=4e-4)
    assert bound >= best_by_enumeration(problem, cost + 1)[0] - 1e-9
    free = log_det_bound(parts, problem, cost + 1, limited=False).value
    assert free == pytest.approx(log_det_bound_conic(problem, cost + 1, limited=False), abs=4e-4)
    assert free >= bound - 1e-4


@pytest.mark.parametrize("seed", range(16))
def test_branching_closes_the_gap(seed):
    problem = fitting(seed, lambda made: can_be_met(made)
                      and np.isfinite(best_by_enumeration(made, cheapest_by_enumeration(made)[0])[0]), 3)
    cost, _ = cheapest_by_enumeration(problem)
    best, _ = best_by_enumeration(problem, cost)
    parts = split(problem)
    branched = branched_log_det_bound(parts, problem, cost, attained=best - 5.0)  # known to be less, so that it must find out
    assert best - 1e-9 <= branched.value <= best + 2e-4
    assert branched_log_det_bound(parts, problem, cost, attained=best, gap=0.05).value <= best + 0.05


def test_gains_exclude_sites():
    """A set with a site of gain g < 0 has at most the bound + g, one without a site of gain g > 0 at most the bound − g."""
    problem = random_problem(8)
    cost, _ = cheapest_by_enumeration(problem)
    parts = split(problem)
    bound = log_det_bound(parts, problem, cost + 1)
    for site in range(problem.n):
        only = np.arange(problem.n) == site
        if bound.gains[site] < 0 and not problem.forbidden[site]:
            best = best_by_enumeration(replace(problem, required=problem.required | only), cost + 1)[0]
            assert best <= bound.value + bound.gains[site] + 1e-9
        elif bound.gains[site] > 0 and not problem.required[site]:
            best = best_by_enumeration(replace(problem, forbidden=problem.forbidden | only), cost + 1)[0]
            assert best <= bound.value - bound.gains[site] + 1e-9


def test_a_bound_that_ran_out_of_time_is_still_a_bound():
    problem = random_problem(12)
    cost, _ = cheapest_by_enumeration(problem)
    parts = split(problem)
    late = log_det_bound(parts, problem, cost, deadline=time.monotonic() - 1)
    assert late.value >= log_det_bound(parts, problem, cost).value - 1e-9
    branched = branched_log_det_bound(parts, problem, cost, attained=-50.0, stop=lambda: True)
    assert branched.nodes == 1
    assert branched.value >= best_by_enumeration(problem, cost)[0]


def test_many_limits_are_watched_as_they_are_missed():
    rows, _ = square(6)
    side = np.linspace(0.3, 1.0, 13)
    x, y = (a.ravel() for a in np.meshgrid(side, side))
    problem = site_problem(rows[:, None, :], polynomial(x, y, 2), np.full(169, 0.67))
    parts = split(problem)
    assert parts.limits > 64
    bound = log_det_bound(parts, problem, 10.0)
    scaled = problem.directions / problem.tau[:, None]
    information = np.einsum("i,imp,imq->pq", bound.weights, problem.blocks, problem.blocks)
    assert np.einsum("lp,pq,lq->l", scaled, np.linalg.inv(information), scaled).max() <= 1.0 + 1e-4
    assert bound.value < log_det_bound(parts, problem, 10.0, limited=False).value - 1e-3


# ---- exchange


@pytest.mark.parametrize("seed", range(24))
def test_most_informative_agrees_with_enumeration(seed):
    problem = fitting(seed, can_be_met, 4)
    cost, chosen = cheapest_by_enumeration(problem)
    best, _ = best_by_enumeration(problem, cost)
    parts = split(problem)
    found = most_informative(parts, problem, np.array(chosen, np.int64), rng=np.random.default_rng(0), starts=25)
    assert allowed(problem, found)
    assert problem.cost[found].sum() <= cost
    assert variance_ratios(problem, found).max() <= 1 + 1e-8
    assert textbook(problem, found) == pytest.approx(best, abs=1e-8) or not np.isfinite(best)


@pytest.mark.parametrize("seed", range(12))
def test_d_optimal_keeps_rules_and_budget(seed):
    problem = next(made for made in map(random_problem, range(seed, 50_000, 1000)) if can_be_met(made))
    budget = max(cheapest_by_enumeration(problem)[0], 5.0)
    best, _ = best_by_enumeration(problem, budget, limited=False)
    found = d_optimal(split(problem), problem, budget, rng=np.random.default_rng(0), starts=25)
    assert allowed(problem, found)
    assert problem.cost[found].sum() <= budget
    assert textbook(problem, found) == pytest.approx(best, abs=1e-8)


def test_rules_that_admit_no_set():
    problem = unlimited(square(3)[0], rules=CountRules((np.arange(4),), np.array([3.0]), np.array([4.0]), ("r",)))
    assert d_optimal(split(problem), problem, 2, rng=np.random.default_rng(0), starts=3) is None


def test_never_worse_than_given_and_the_same_for_the_same_seed():
    problem = grid_problem(9, 2, 18.0)
    parts = split(problem)
    given = np.arange(0, 81, 2)
    assert parts.ratios(given).max() <= 1.0
    late = most_informative(parts, problem, given, rng=np.random.default_rng(0), deadline=time.monotonic() - 1)
    assert late.tolist() == given.tolist()
    found = [most_informative(parts, problem, given, rng=np.random.default_rng(0), starts=2) for _ in range(2)]
    assert found[0].tolist() == found[1].tolist()
    assert len(found[0]) == len(given)
    assert log_det(parts, problem, found[0]) > log_det(parts, problem, given)
    assert parts.ratios(found[0]).max() <= 1.0 + 1e-9


def test_order_of_the_candidates_does_not_matter(rng):
    rows = polynomial(*rng.uniform(-1, 1, (300, 2)).T, 2)
    problem = replace(unlimited(rows), key=np.array([f"M{i:03d}" for i in range(300)]))
    order = rng.permutation(300)
    shuffled = replace(problem, blocks=problem.blocks[order], key=problem.key[order])
    found = [d_optimal(split(each), each, 9, rng=np.random.default_rng(4)) for each in (problem, shuffled)]
    assert sorted(problem.key[found[0]]) == sorted(shuffled.key[found[1]])


def test_value_without_offset_is_that_of_the_blocks():
    problem = unlimited(square(4)[0])
    parts = split(problem)
    chosen = np.arange(0, 16, 2)
    assert value(determinants(parts, problem), chosen) + offset(parts, problem) == pytest.approx(textbook(problem, chosen))


def test_a_start_without_a_choice_goes_on_from_the_best_set(monkeypatch):
    """The best set may hold sites that the pool at hand, made before it was found, does not."""
    from sampler.optimise import informative

    begin, calls = informative.Climb.start, []

    def sometimes(climb, uniform):
        calls.append(uniform)
        return None if len(calls) % 2 == 0 else begin(climb, uniform)

    monkeypatch.setattr(informative.Climb, "start", sometimes)
    monkeypatch.setattr(informative, "SAME_POOL", 1000)
    monkeypatch.setattr(informative, "LEAST_POOL", 12)
    monkeypatch.setattr(informative, "MOST_POOL", 24)
    monkeypatch.setattr(informative, "POOL_PER_SITE", 1)
    x, y = np.meshgrid(np.linspace(-1, 1, 40), np.linspace(-1, 1, 40))
    x, y = x.ravel(), y.ravel()
    blocks = np.stack([np.ones(1600), x, y, x * x, x * y, y * y], axis=1)[:, None]
    problem = site_problem(blocks, np.eye(6), np.full(6, 5.0))
    parts = split(problem)
    for seed in range(6):
        first = np.sort(np.random.default_rng(seed).permutation(1600)[:14])
        found = informative.most_informative(parts, problem, first, rng=np.random.default_rng(seed), starts=12)
        assert len(found) == 14
        assert log_det(parts, problem, found) >= log_det(parts, problem, first)
    assert len(calls) > 12

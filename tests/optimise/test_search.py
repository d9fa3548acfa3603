"""The whole search: against enumeration, and the laws that any search must keep."""

from __future__ import annotations

import json
import time
from dataclasses import replace

import numpy as np
import pytest
from random_problems import (
    allowed,
    cheapest_by_enumeration,
    grid_problem,
    proof_evidence,
    random_problem,
    square_grid,
    variance_ratios,
)

from sampler.optimise.blocks import split
from sampler.optimise.counting import counting_bound, rules_admit
from sampler.optimise.problem import CountRules, site_problem
from sampler.optimise.search import heaviest, meets, rounded_up, search
from sampler.tasks.proof_check import check_proof


@pytest.fixture(autouse=True)
def brief_polish(monkeypatch):
    """log det has its own tests."""
    monkeypatch.setattr("sampler.optimise.search.LEAST_POLISH", 0.02)


def cost_of(problem, result):
    return problem.cost[result.chosen].sum()


@pytest.mark.parametrize("seed", range(70))
def test_agrees_with_enumeration(seed):
    problem = random_problem(seed)
    cost, _ = cheapest_by_enumeration(problem)
    result = search(problem, seconds=20, seed=1)
    assert result.lower_bound <= cost + 1e-6
    if np.isinf(cost):
        assert result.status == ("cannot" if result.worst_ratio > 1 else "rules")
        assert result.chosen is None
        return
    assert result.status == "proven"
    assert not result.interrupted
    assert cost_of(problem, result) == cost
    assert variance_ratios(problem, result.chosen).max() <= 1 + 1e-8
    assert allowed(problem, result.chosen)
    proven = check_proof(proof_evidence(problem), result.certificate).lower_bound
    assert result.lower_bound - 1e-6 <= proven <= cost + 1e-6
    assert np.ceil(proven - 1e-6) == cost


def test_first_row_of_the_design():
    """324 candidates, 12 terms limited: the bound rounded up is found."""
    problem = grid_problem(18, 2, 23.9)
    result = search(problem, seconds=30, seed=1)
    assert result.status == "proven"
    assert len(result.chosen) == np.ceil(result.lower_bound)
    assert check_proof(proof_evidence(problem), result.certificate).lower_bound == pytest.approx(result.lower_bound)


def test_near_saturation_is_proven():
    """6 terms an axis on the 3 × 3 grid, limits that one set of 6 sites just meets or just misses."""
    blocks = square_grid(3, 2)
    problem = site_problem(blocks, np.eye(12), np.ones(12))
    ratios = variance_ratios(problem, [0, 1, 2, 3, 5, 7])
    for factor, count in ((1 + 1e-4, 6), (1 - 1e-4, 7)):
        tight = replace(problem, tau=np.sqrt(ratios * factor))
        assert cheapest_by_enumeration(tight)[0] >= count
        result = search(tight, seconds=30, seed=2)
        assert cost_of(tight, result) == cheapest_by_enumeration(tight)[0]
        assert result.status == "proven"


@pytest.mark.parametrize("make", [lambda: random_problem(2), lambda: random_problem(57), lambda: grid_problem(7, 1, 9.3),
                                  lambda: grid_problem(6, 2, 11, points=7)])
def test_permuting_candidates_permutes_the_answer(make, rng):
    problem = make()
    order = rng.permutation(problem.n)
    place = np.argsort(order)
    rules = replace(problem.rules, members=tuple(place[members] for members in problem.rules.members))
    other = replace(problem, blocks=problem.blocks[order], cost=problem.cost[order], key=problem.key[order],
                    required=problem.required[order], forbidden=problem.forbidden[order], rules=rules)
    first, second = search(problem, seconds=20, seed=3), search(other, seconds=20, seed=3)
    assert np.array_equal(np.sort(order[second.chosen]), first.chosen)
    assert second.lower_bound == first.lower_bound
    assert second.status == first.status


def test_the_same_seed_gives_the_same_answer():
    problem = grid_problem(9, 2, 15.5)
    first, second = (search(problem, seconds=20, seed=5) for _ in range(2))
    assert np.array_equal(first.chosen, second.chosen)


@pytest.mark.parametrize("seed", [1, 5, 9, 14, 26])
def test_a_useless_candidate_changes_nothing(seed):
    problem = random_problem(seed)
    blind = replace(problem, blocks=np.concatenate([problem.blocks, 0 * problem.blocks[:1]]),
                    cost=np.append(problem.cost, 1.0), required=np.append(problem.required, False),
                    forbidden=np.append(problem.forbidden, False), key=np.append(problem.key, "M99"))
    first, second = search(problem, seconds=20, seed=1), search(blind, seconds=20, seed=1)
    assert cost_of(problem, first) == cost_of(blind, second)
    assert second.status == first.status == "proven"
    assert problem.n not in second.chosen


@pytest.mark.parametrize("scale", [1e-5, 1e6])
def test_units_change_nothing(scale):
    problem = grid_problem(7, 1, 9.3)
    unit = np.geomspace(1, scale, problem.p)
    other = site_problem(problem.blocks * unit, problem.directions, problem.tau / unit)
    first, second = search(problem, seconds=20, seed=1), search(other, seconds=20, seed=1)
    assert len(first.chosen) == len(second.chosen)
    assert second.lower_bound == pytest.approx(first.lower_bound, rel=1e-5)
    assert second.status == first.status == "proven"


def test_what_cannot_be_met_says_by_how_much():
    problem = grid_problem(4, 1, 20)
    result = search(problem, seconds=5, seed=1)
    assert (result.status, result.chosen) == ("cannot", None)
    assert result.worst_ratio == pytest.approx(np.sqrt(20 / 16))


def test_rules_that_contradict():
    problem = grid_problem(5, 1, 6)
    twice = CountRules((np.arange(10), np.arange(5, 20)), np.array([9.0, 0.0]), np.array([10.0, 3.0]), ("a", "b"))
    assert not rules_admit(replace(problem, rules=twice))
    assert search(replace(problem, rules=twice), seconds=5, seed=1).status == "rules"
    loose = replace(twice, upper=np.array([10.0, 4.0]))
    assert rules_admit(replace(problem, rules=loose))
    assert not rules_admit(replace(problem, rules=loose, max_sites=8))
    assert rules_admit(replace(problem, rules=loose, max_sites=9))
    corner = np.arange(25) == 0
    assert not rules_admit(replace(problem, required=corner, forbidden=corner))
    assert not rules_admit(replace(problem, required=np.ones(25, bool), rules=twice))


@pytest.mark.parametrize("most", [3, 5])
def test_too_few_sites_allowed(most):
    """Proven by a bound above max_sites, whether or not the relaxation alone sees it."""
    result = search(replace(grid_problem(5, 1, 6), max_sites=most), seconds=10, seed=1)
    assert (result.status, result.chosen) == ("rules", None)
    assert result.lower_bound > most


def test_counting_bound():
    assert counting_bound(split(grid_problem(5, 2, 4)), grid_problem(5, 2, 4)) == 6.0
    problem = grid_problem(5, 2, 4)
    both = replace(problem, blocks=np.ones((25, 1, 1)) * problem.blocks, cost=np.where(np.arange(25) < 20, 3.0, 2.0))
    assert counting_bound(split(both), both) == 5 * 2 + 3
    few = replace(problem, directions=problem.directions[:2], tau=problem.tau[:2])
    assert counting_bound(split(few), few) == 2.0
    known = replace(problem, prior_precision=np.diag([0.0, 1, 1, 1, 1, 1] * 2))
    assert counting_bound(split(known), known) == 1.0
    one = replace(problem, required=np.arange(25) == 20, cost=np.where(np.arange(25) == 20, 7.0, 1.0))
    assert counting_bound(split(one), one) == 7 + 5
    assert counting_bound(split(problem), replace(problem, forbidden=np.arange(25) > 4)) == np.inf


@pytest.mark.parametrize("calls", [0, 1, 2, 5, 20, 60, 200])
def test_stopping_at_any_moment_leaves_it_whole(calls):
    problem = grid_problem(12, 2, 9, points=9)
    left = [calls]

    def stop():
        left[0] -= 1
        return left[0] < 0

    result = search(problem, seconds=30, seed=1, stop=stop)
    assert result.status == ("interval" if result.lower_bound <= cost_of(problem, result) - 1 else "proven")
    assert result.interrupted == (result.status == "interval")
    assert variance_ratios(problem, result.chosen).max() <= 1 + 1e-8
    if result.certificate:
        assert check_proof(proof_evidence(problem), result.certificate).lower_bound >= result.lower_bound - 1e-6
    bounds, bests = zip(*((bound, best) for _, bound, best in result.history), strict=True)
    assert list(bounds) == sorted(bounds)
    assert list(bests) == sorted(bests, reverse=True)


def test_more_time_is_never_worse():
    problem = grid_problem(12, 2, 9, points=9)
    bound, best = 0.0, np.inf
    for calls in (1, 30, 100, 1000):
        left = [calls]

        def stop(left=left):
            left[0] -= 1
            return left[0] < 0

        result = search(problem, seconds=30, seed=1, stop=stop)
        assert result.lower_bound >= bound
        assert len(result.chosen) <= best
        bound, best = result.lower_bound, len(result.chosen)


def test_a_warm_start_keeps_what_was_found():
    problem = grid_problem(12, 2, 9, points=9)
    first = search(problem, seconds=20, seed=1)
    again = search(problem, seconds=0.0, seed=1, warm=first)
    assert len(again.chosen) == len(first.chosen)
    harder = replace(problem, tau=0.9 * problem.tau)  # the old set no longer meets the limits
    assert variance_ratios(harder, search(harder, seconds=0.0, seed=1, warm=first).chosen).max() <= 1 + 1e-8


def test_seconds_are_kept():
    problem = grid_problem(30, 3, 17, points=21)
    began = time.monotonic()
    result = search(problem, seconds=1.0, seed=1)
    assert time.monotonic() - began < 10.0  # hangs are what this catches; the bench measures the 5 %
    assert result.lower_bound > 0
    assert variance_ratios(problem, result.chosen).max() <= 1 + 1e-8


@pytest.mark.parametrize("seed", [5, 10, 13])
def test_costs_that_are_not_whole_numbers(seed, rng):
    problem = random_problem(seed)
    problem = replace(problem, cost=rng.uniform(0.5, 2, problem.n))
    cost, _ = cheapest_by_enumeration(problem)
    result = search(problem, seconds=10, seed=1)
    assert cost_of(problem, result) == pytest.approx(cost)
    assert cost * (1 - 1e-3) - 1e-9 <= result.lower_bound <= cost + 1e-9
    assert result.status == ("proven" if result.lower_bound > cost * (1 - 1e-7) else "interval")
    assert not result.interrupted


def test_bounds_round_up_to_a_cost_that_a_set_can_have():
    assert rounded_up(4.1, 2.0) == 6.0
    assert rounded_up(4.0 + 1e-9, 2.0) == 4.0
    assert rounded_up(4.1, None) == 4.1


@pytest.mark.parametrize("seed", [1, 3, 16, 26, 40])
def test_the_heaviest_sites_are_as_few_as_will_do(seed, rng):
    problem = random_problem(seed)
    weights = rng.permutation(problem.n) * np.where(problem.forbidden, 0.0, 1.0)
    found = heaviest(split(problem), problem, weights)
    assert variance_ratios(problem, found).max() <= 1 + 1e-8
    assert np.all(np.isin(np.flatnonzero(problem.required), found))
    light = min((site for site in found if not problem.required[site]), key=lambda site: weights[site])
    assert variance_ratios(problem, found[found != light]).max() > 1


def test_exchange_among_a_sample_of_the_sites(monkeypatch):
    """As with a million candidates: exchange sees some of them, bound and proof all."""
    problem = grid_problem(18, 2, 23.9)
    whole = search(problem, seconds=20, seed=1)
    monkeypatch.setattr("sampler.optimise.search.MOST_NEAR", 60)
    result = search(problem, seconds=20, seed=1)
    assert result.lower_bound == whole.lower_bound
    assert len(result.chosen) <= len(whole.chosen) + 1
    assert variance_ratios(problem, result.chosen).max() <= 1 + 1e-8


def test_meets_sees_every_rule():
    problem = grid_problem(5, 1, 4)
    parts, chosen = split(problem), np.array([0, 4, 20, 24])
    assert meets(parts, problem, chosen)
    assert not meets(parts, problem, chosen[:3])
    for change in ({"required": np.arange(25) == 1}, {"forbidden": np.arange(25) == 4}, {"max_sites": 3},
                   {"rules": CountRules((np.arange(5),), np.array([3.0]), np.array([5.0]))},
                   {"rules": CountRules((np.arange(5),), np.array([0.0]), np.array([1.0]))}, {"lost": 1},
                   {"xy": problem.blocks[:, 0, 1:3], "spacing": 2.1}):
        assert not meets(parts, replace(problem, **change), chosen)


def test_certificate_is_plain():
    certificate = search(random_problem(4), seconds=5, seed=1).certificate
    json.dumps(certificate, default=lambda value: value.tolist())

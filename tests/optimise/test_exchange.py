"""Exchange for few sites: its formulas against the textbook, its answers against enumeration."""

from __future__ import annotations

import time
from dataclasses import replace

import numpy as np
import pytest
from random_problems import (
    allowed,
    cheapest_by_enumeration,
    grid_problem,
    polynomial,
    random_problem,
    variance_ratios,
)

from sampler.optimise.blocks import split
from sampler.optimise.exchange import EXPONENTS, Clock, Exchange, fewest, find, prune
from sampler.optimise.pool import Choice, cost_step, first_best, key_rank, pool
from sampler.optimise.problem import CountRules, site_problem
from sampler.optimise.relaxation import relax
from sampler.optimise.variances import Variances, information, inverted, powers, without


def generous(n=14, m=2, q=5, limits=7, seed=0, **options):
    """One coupled block with limits that any dozen of sites meet."""
    rng = np.random.default_rng(seed)
    return site_problem(rng.normal(size=(n, m, q)), rng.normal(size=(limits, q)), np.full(limits, 2.0), **options)


def exchange_of(problem, budget, watch=None):
    parts = split(problem)
    source = pool(parts, problem)
    return Exchange(parts, source, budget, np.ones(source.n), np.random.default_rng(1), Clock())


@pytest.mark.parametrize("m", [1, 2, 3])
def test_adding_then_dropping_restores(rng, m):
    rows = rng.normal(size=(9, m, 5))
    inverse = inverted(information(rows[:8], np.eye(5), 0.0))
    added = inverted(information(rows, np.eye(5), 0.0))
    assert without(added, rows[8]) == pytest.approx(inverse, rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("m", [1, 2, 3])
@pytest.mark.parametrize("coupled", [True, False])
def test_changes_are_those_of_a_new_set(rng, m, coupled):
    """Variances after adding or dropping any one site, against a set worked out anew; adding never raises one."""
    problem = generous(m=m) if coupled else grid_problem(4, 1, 8.0, points=3)
    parts = split(problem)
    source = pool(parts, problem)
    limits = Variances(parts, source, np.arange(parts.limits))
    chosen = np.array([0, 3, 5, 6, 9, 11, 12])
    held = limits.inverses(chosen, 0.0)
    before = limits.of(held)
    assert before == pytest.approx(parts.ratios(chosen), rel=1e-9)
    added = limits.changes(held, None, 1.0)
    assert np.all(added >= 0.0)
    for site in (1, 13):
        assert before - added[site] == pytest.approx(parts.ratios(np.append(chosen, site)), rel=1e-8)
    dropped = limits.changes(held, chosen, -1.0)
    for position in range(len(chosen)):
        assert before + dropped[position] == pytest.approx(parts.ratios(np.delete(chosen, position)), rel=1e-7)
    left = limits.without(held, 5)
    swapped = limits.of(left) - limits.changes(left, None, 1.0)[13]
    assert swapped == pytest.approx(parts.ratios(np.array([0, 3, 13, 6, 9, 11, 12])), rel=1e-7)


def test_a_part_of_the_limits_is_that_part_of_the_changes():
    problem = generous(m=1)
    parts = split(problem)
    limits = Variances(parts, pool(parts, problem), np.arange(parts.limits))
    held = limits.inverses(np.arange(8), 0.0)
    active = np.arange(parts.limits) % 2 == 0
    assert limits.changes(held, None, 1.0, active) == pytest.approx(limits.changes(held, None, 1.0)[:, active])


def test_limits_of_several_columns():
    """A rotation that both axes see: its limit lies in both of two equal blocks, that is in one block twice."""
    xy = np.random.default_rng(3).uniform(-1, 1, (20, 2))
    blocks = np.zeros((20, 2, 6))
    blocks[:, 0, :3] = polynomial(*xy.T, 1)
    blocks[:, 1, 3:] = polynomial(*xy.T, 1)
    problem = site_problem(blocks, [[0, 0, -1, 0, 1, 0], [0, 1, 0, 0, 0, 1]], [0.5, 0.5])
    parts = split(problem)
    assert [len(block.owner) for block in parts.blocks] == [4]
    limits = Variances(parts, pool(parts, problem), np.arange(2))
    chosen = np.array([0, 4, 5, 13, 17])
    held = limits.inverses(chosen, 0.0)
    after = limits.of(held) - limits.changes(held, None, 1.0)[8]
    assert after == pytest.approx(variance_ratios(problem, [*chosen, 8]), rel=1e-9)


@pytest.mark.parametrize("exponent", EXPONENTS)
def test_powers(exponent):
    values = np.array([0.0, 0.5, 0.99, 1.01])
    assert powers(values.copy(), exponent) == pytest.approx(values**exponent)


@pytest.mark.parametrize("seed", range(6))
def test_what_rules_allow(seed):
    """Adding, dropping and swapping as the masks say keeps cost and rules; whatever they refuse would break them."""
    rng = np.random.default_rng(seed)
    n = 12
    rules = CountRules((np.arange(6), np.arange(4, 12), np.array([0, 11])), np.array([1.5, 0.0, 0.0]),
                       np.array([4.0, 3.5, 1.0]), ("a", "b", "c"))
    problem = generous(n, rules=rules, cost=rng.integers(1, 4, n).astype(float), required=np.arange(n) == 1,
                       forbidden=np.arange(n) == 7, max_sites=6)
    source = pool(split(problem), problem)
    budget = 9.0
    seen = 0
    for _ in range(200):
        sites = rng.choice(n, rng.integers(2, 7), replace=False)
        if not allowed(problem, sites) or problem.cost[sites].sum() > budget:
            continue
        seen += 1
        choice = Choice(source, source.places(np.sort(sites)))
        chosen = source.index[choice.sites]

        def kept(after):
            return allowed(problem, after) and problem.cost[after].sum() <= budget

        swaps, adds, drops = choice.swappable(budget), choice.addable(budget), choice.droppable()
        for place, site in enumerate(source.index):
            inside = site in chosen
            assert adds[place] == (not inside and kept(np.append(chosen, site)))
            for position in range(len(chosen)):
                after = chosen.copy()
                after[position] = site
                assert swaps[place, position] == (not inside and kept(after))
        for position in range(len(chosen)):
            assert drops[position] == allowed(problem, np.delete(chosen, position))
    assert seen > 5


def test_what_a_rule_still_misses_comes_first():
    problem = generous(8, rules=CountRules((np.array([2, 5]), np.array([5, 6])), np.array([1.0, 1.0]), np.array([2.0, 2.0])))
    choice = Choice(pool(split(problem), problem), np.array([0]))
    assert choice.missing
    assert np.flatnonzero(choice.addable(4.0)).tolist() == [5]
    choice.add(5)
    assert not choice.missing
    choice.drop(1)
    assert choice.missing
    choice.add(5)
    choice.swap(0, 1)
    assert choice.sites.tolist() == [1, 5]
    assert choice.counts.tolist() == [1, 1]


def test_places_of_sites_outside_the_pool_are_refused():
    problem = generous(8, forbidden=np.arange(8) == 3)
    with pytest.raises(ValueError, match="not in the pool"):
        pool(split(problem), problem).places(np.array([2, 3]))


def test_ties_go_to_the_first():
    assert first_best(np.array([2.0, 1.0 + 1e-12, 1.0]), 1.0) == 1
    assert first_best(np.array([2.0, np.inf, np.inf]), np.inf) == 1


def test_cost_step():
    assert cost_step(np.array([4.0, 6.0])) == 2.0
    assert cost_step(np.array([4.0, 6.5])) is None


@pytest.mark.parametrize("seed", range(40))
def test_fewest_agrees_with_enumeration(seed):
    problem = random_problem(seed)
    cost, _ = cheapest_by_enumeration(problem)
    told = []
    found = fewest(split(problem), problem, lower=0.0, rng=np.random.default_rng(0), on_found=told.append, starts=3)
    assert (np.inf if found is None else problem.cost[found].sum()) == cost
    if found is not None:
        assert allowed(problem, found)
        assert variance_ratios(problem, found).max() <= 1 + 1e-8
        costs = [problem.cost[chosen].sum() for chosen in told]
        assert costs == sorted(set(costs), reverse=True)
        assert told[-1].tolist() == found.tolist()


def test_costs_that_are_no_whole_numbers():
    problem = replace(random_problem(3), cost=1.0 + np.random.default_rng(1).uniform(size=random_problem(3).n))
    cost, best = cheapest_by_enumeration(problem)
    found = fewest(split(problem), problem, lower=0.0, rng=np.random.default_rng(0), starts=3)
    assert problem.cost[found].sum() == pytest.approx(cost)
    assert found.tolist() == list(best)


def test_first_row_of_the_design():
    """324 candidates, 12 terms limited, bound 23.09: 24 sites are found."""
    problem = grid_problem(18, 2, 31.0)
    parts = split(problem)
    relaxed = relax(parts, problem, seconds=10)
    least = np.ceil(relaxed.bound)
    found = fewest(parts, problem, weights=relaxed.weights, reduced_costs=relaxed.reduced_costs, lower=least,
                   rng=np.random.default_rng(0))
    assert len(found) == least
    assert variance_ratios(problem, found).max() <= 1 + 1e-9


def test_a_saturated_set_is_found_from_singular_starts():
    """As many readings as terms: a set that drops one site knows nothing of some direction."""
    xy = np.random.default_rng(5).uniform(-1, 1, (40, 2))
    rows = polynomial(*xy.T, 2)[:, None, :]
    problem = site_problem(rows, np.eye(6), np.full(6, 5.0))
    found = find(split(problem), problem, 6, rng=np.random.default_rng(0))
    assert len(found) == 6
    assert variance_ratios(problem, found).max() <= 1.0


def test_region_limits_hold_everywhere():
    """More limits than are watched at first: what comes out meets all of them."""
    problem = grid_problem(9, 2, 40.0, points=21)
    parts = split(problem)
    assert parts.limits > 128
    found = fewest(parts, problem, rng=np.random.default_rng(0), lower=9.0, starts=1)
    assert variance_ratios(problem, found).max() <= 1 + 1e-9
    search = exchange_of(problem, 12.0)
    assert len(search.watch) < parts.limits
    search.watch = search.watch[:5]
    search.limits = Variances(parts, search.pool, search.watch)
    search.ratios(Choice(search.pool, np.arange(12)))
    assert len(search.watch) == 6
    search.watch_all()
    assert len(search.watch) == parts.limits


def test_of_many_candidates_some_are_tried():
    problem = grid_problem(54, 1, 16.0)
    parts = split(problem)
    found = fewest(parts, problem, rng=np.random.default_rng(0), lower=3.0, starts=1)
    assert variance_ratios(problem, found).max() <= 1 + 1e-9
    assert len(found) == 16  # as few as tell a translation as well as 16 sites do


def test_order_of_the_candidates_does_not_matter(rng):
    problem = replace(grid_problem(7, 2, 20.0), key=np.array([f"M{i:03d}" for i in range(49)]))
    order = rng.permutation(49)
    shuffled = replace(problem, blocks=problem.blocks[order], key=problem.key[order])
    assert key_rank(shuffled).tolist() == order.tolist()
    answers = [fewest(split(each), each, rng=np.random.default_rng(4), lower=9.0, starts=2) for each in (problem, shuffled)]
    assert sorted(problem.key[answers[0]]) == sorted(shuffled.key[answers[1]])


def test_impossible_limits_and_stopped_searches_find_nothing():
    problem = generous()
    parts = split(problem)
    assert find(parts, problem, 14, rng=np.random.default_rng(0), deadline=time.monotonic() - 1) is None
    assert fewest(parts, problem, rng=np.random.default_rng(0), stop=lambda: True) is None
    hopeless = replace(problem, tau=np.full(7, 1e-3))
    assert fewest(split(hopeless), hopeless, rng=np.random.default_rng(0), lower=13.0, starts=2) is None
    blind = replace(problem, blocks=problem.blocks * (np.arange(5) < 4))
    assert find(split(blind), blind, 14, rng=np.random.default_rng(0)) is None


def test_prune_drops_the_dearest_that_can_go():
    problem = generous(cost=np.arange(1.0, 15.0))
    parts = split(problem)
    left = prune(parts, problem, np.arange(14))
    assert parts.ratios(left).max() <= 1.0
    for position in range(len(left)):
        assert parts.ratios(np.delete(left, position)).max() > 1.0
    assert 13 not in left

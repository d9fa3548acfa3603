"""Limits that hold after any loss: the exact ratios and their changes under swaps, against enumeration."""

from __future__ import annotations

import copy
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from enumeration import cheapest, ruled_evidence, small_problem
from random_problems import grid_problem, random_problem, variance_ratios

from sampler.errors import CertificateError
from sampler.optimise import lost as lost_module
from sampler.optimise.blocks import split
from sampler.optimise.lost import ratios_after_loss
from sampler.optimise.lost_variances import LostVariances
from sampler.optimise.pool import pool
from sampler.optimise.problem import site_problem
from sampler.optimise.search import search
from sampler.optimise.tree import decide
from sampler.tasks.proof_check import check_proof


def ratios_by_enumeration(problem, chosen, lost):
    if len(chosen) <= lost:
        return variance_ratios(problem, [])
    return np.max([variance_ratios(problem, np.delete(chosen, list(gone)))
                   for gone in combinations(range(len(chosen)), lost)], axis=0)


@pytest.mark.parametrize("lost", [0, 1, 2])
@pytest.mark.parametrize("seed", range(100))
def test_ratios_after_loss(seed, lost):
    problem = random_problem(seed)
    parts, rng = split(problem), np.random.default_rng(seed)
    chosen = np.sort(rng.permutation(problem.n)[:rng.integers(1, problem.n + 1)])
    expected = ratios_by_enumeration(problem, chosen, lost)[parts.limit_index]
    found = ratios_after_loss(parts, chosen, lost)
    sure = np.isfinite(expected) & (expected < 1e8)
    assert found[sure] == pytest.approx(expected[sure], rel=1e-6)
    assert (found[~sure] > 1e7).all()


@pytest.mark.parametrize("seed", range(20))
def test_pairs_that_a_bound_rules_out_do_not_matter(seed, monkeypatch):
    """Many chosen sites: only dangerous pairs are tried."""
    rng = np.random.default_rng(seed)
    problem = grid_problem(7, 2, 12, points=3) if seed % 2 else grid_problem(7, 1, 9)
    chosen = np.sort(rng.permutation(49)[:rng.integers(12, 40)])
    parts = split(problem)
    every = ratios_after_loss(parts, chosen, 2)
    monkeypatch.setattr(lost_module, "ALL_PAIRS_OF", 2)
    assert ratios_after_loss(parts, chosen, 2) == pytest.approx(every, rel=1e-9)
    tried = lost_module.Losses(parts, [block.rows[chosen] for block in parts.blocks]).dangerous(parts.ratios(chosen))
    assert np.isin(np.unique(tried), np.arange(len(chosen))).all()


def test_losing_more_is_never_better():
    problem = grid_problem(6, 2, 12)
    parts, chosen = split(problem), np.arange(36)
    ratios = [ratios_after_loss(parts, chosen, lost) for lost in range(3)]
    assert (ratios[0] < ratios[1]).all() and (ratios[1] < ratios[2]).all()


@pytest.mark.parametrize("lost", [1, 2])
@pytest.mark.parametrize("seed", range(50))
def test_changes_of_the_ratios_after_loss(seed, lost):
    """Adding, dropping and swapping sites, for every lost set, as if worked out anew."""
    rng = np.random.default_rng(seed)
    made = iter([grid_problem(4, 1, 9)] if seed % 2 else map(random_problem, range(seed, 50_000, 1000)))
    problem = next(problem for problem in made if pool(split(problem), problem, None).n >= 8 and split(problem).limits)
    parts = split(problem)
    source = pool(parts, problem, None)
    sites = rng.permutation(source.n)[:6]
    sites = np.concatenate([np.flatnonzero(source.required), sites[~source.required[sites]]])
    limits = np.arange(parts.limits)
    source = replace(source, lost=lost)
    ridge, held = 1e-3, LostVariances(parts, source, limits)
    state = held.inverses(sites, ridge)

    def ratios(inside, gone=()):
        left = [site for site in inside if site not in gone]
        return super(LostVariances, held).of(super(LostVariances, held).inverses(np.array(left, int), ridge))

    sets = [tuple(gone) for gone in state.sets]
    before = held.of(state).reshape(len(sets), -1)
    for gone, found in zip(sets, before, strict=True):
        assert found == pytest.approx(ratios(sites, gone), rel=1e-6)
    added = np.setdiff1d(np.arange(source.n), sites)
    after = before.ravel() - held.changes(state, None, 1.0)
    dropped = before.ravel() + held.changes(state, sites, -1.0)
    for s, gone in enumerate(sets):
        for site in added:
            assert after[site].reshape(before.shape)[s] == pytest.approx(ratios([*sites, site], gone), rel=1e-6)
        position = int(rng.integers(len(sites)))
        rest = np.delete(sites, position)
        assert dropped[position].reshape(before.shape)[s] == pytest.approx(ratios(rest, gone), rel=1e-6)
        out = held.without(state, int(sites[position]))
        active = rng.random(before.size) < 0.5
        swapped = dropped[position, active] - held.changes(out, None, 1.0, active)
        expected = np.full(before.shape, np.nan)
        site = int(added[0])
        for t, other in enumerate(sets):
            held_by = [site if one == sites[position] else one for one in other]
            expected[t] = ratios([*rest, site], held_by)
        assert swapped[site] == pytest.approx(expected.ravel()[active], rel=1e-6)


@pytest.mark.parametrize("lost", [1, 2])
@pytest.mark.parametrize("seed", range(16))
def test_search_and_proof_against_enumeration(seed, lost, monkeypatch):
    monkeypatch.setattr("sampler.optimise.search.LEAST_POLISH", 0.01)
    monkeypatch.setattr("sampler.optimise.search.LEAST_BOUND", 0.01)
    problem = small_problem(seed, lost=lost)
    cost, _ = cheapest(problem)
    result = search(problem, seconds=20, seed=1)
    assert result.lower_bound <= cost + 1e-6
    if np.isinf(cost):
        assert result.chosen is None
        assert result.status in ("cannot", "rules")
        return
    assert result.status == "proven"
    assert problem.cost[result.chosen].sum() == cost
    proven = check_proof(ruled_evidence(problem), result.certificate).lower_bound
    assert np.ceil(proven - 1e-6) == cost


@pytest.mark.parametrize("lost", [1, 2])
@pytest.mark.parametrize("seed", range(30))
def test_every_count_is_decided_as_by_enumeration(seed, lost):
    problem = small_problem(seed, lost=lost)
    cost, _ = cheapest(problem)
    parts = split(problem)
    if len(parts.impossible) or np.isinf(cost):
        return
    for count in range(int(cost) - 2, int(cost) + 1):
        decision = decide(parts, problem, count, seconds=20)
        assert decision.status == ("possible" if count >= cost else "impossible")
        if decision.chosen is not None:
            assert ratios_by_enumeration(problem, decision.chosen, lost).max() <= 1 + 1e-8
        else:
            assert check_proof(ruled_evidence(problem), decision.certificate).lower_bound > count


def test_clusters_that_hold_a_site_prove_more():
    """Dense candidates: 8 on a line of 41, two of which may not be told from their neighbours."""
    side = np.linspace(-1, 1, 41)
    blocks = np.stack([np.ones(41), side, side**2], axis=1)[:, None, :]
    problem = site_problem(blocks, np.eye(3), np.array([0.75, 0.52, 0.95]), lost=1)
    counts = {}
    for count in range(3, 12):
        decision = decide(split(problem), problem, count, seconds=20)
        counts[count] = decision.status
        if decision.status == "possible":
            assert ratios_by_enumeration(problem, decision.chosen, 1).max() <= 1 + 1e-8
            break
        assert check_proof(ruled_evidence(problem), decision.certificate).lower_bound == count + 1
    assert "open" not in counts.values()


def altered(certificate, change):
    other = copy.deepcopy(certificate)
    change(other)
    return other


def test_the_checker_refuses_what_losses_do_not_allow():
    problem = replace(grid_problem(5, 1, 8), lost=1)
    count = 3.0
    while decide(split(problem), problem, count + 1, seconds=20).status == "impossible":
        count += 1
    certificate = decide(split(problem), problem, count, seconds=20).certificate
    evidence = ruled_evidence(problem)
    assert check_proof(evidence, certificate).lower_bound == count + 1
    lost_row = next(loss for loss in certificate["losses"] if loss["keys"])
    with pytest.raises(CertificateError, match="loses more than 0"):
        check_proof(replace(evidence, lost=0), certificate)
    with pytest.raises(CertificateError, match="loses more than 1"):
        check_proof(evidence, altered(certificate, lambda it: it["losses"][it["losses"].index(lost_row)]["keys"].append(3)))
    with pytest.raises(CertificateError, match="not there, overlap or gain"):
        check_proof(evidence, altered(certificate, lambda it: it["losses"][0].update(keys=[], half=[99], theta=[0.1])))
    with pytest.raises(CertificateError, match="named twice"):
        check_proof(evidence, altered(certificate, lambda it: it["losses"].append(it["losses"][0])))

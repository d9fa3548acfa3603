"""Pooled per-cell terms: the arrow against dense algebra, bound, sets and proof against enumeration."""

from __future__ import annotations

import copy
from dataclasses import replace

import numpy as np
import pytest
from enumeration import cheapest
from random_problems import proof_evidence, variance_ratios

from sampler.errors import CertificateError
from sampler.optimise import arrow as arrow_module
from sampler.optimise.arrow import arrow, arrow_log_det, arrow_ratios
from sampler.optimise.pooled import pooled
from sampler.optimise.pooled_search import search_pooled
from sampler.optimise.problem import CountRules, site_problem
from sampler.optimise.search import search
from sampler.tasks.proof_check import check_proof


def cells_problem(seed, cells=3, sites=3):
    """Cells on a line, a straight line over all of them, and an offset (and a slope) of each; a few sites in no cell."""
    rng = np.random.default_rng(seed)
    own = 1 + seed % 2
    at = np.concatenate([k + np.sort(rng.uniform(0, 1, sites)) for k in range(cells)])
    cell = np.repeat(np.arange(cells), sites)
    if seed % 3 == 0:
        cell[rng.integers(len(cell))] = -1

    def rows(place, cell):
        wide = np.zeros((len(place), 2 + own * cells))
        wide[:, :2] = np.stack([np.ones(len(place)), place - cells / 2], axis=1)
        for term in range(own):
            inside = np.flatnonzero(cell >= 0)
            wide[inside, 2 + own * cell[inside] + term] = (2 * (place[inside] - cell[inside]) - 1) ** term
        return wide

    p = 2 + own * cells
    known = np.concatenate([np.zeros(2), rng.uniform(0.5, 4, own * cells)])
    prior = np.diag(known)
    if seed % 4 == 1:
        prior[2, 3] = prior[3, 2] = 0.3  # two cells, or two terms of one, known together
    where = np.concatenate([k + np.array([0.0, 1.0]) for k in range(cells)])
    directions = np.concatenate([rows(where, np.repeat(np.arange(cells), 2)), np.eye(p)[:2]])
    blocks = rows(at, cell)[:, None, :] * rng.uniform(0.8, 1.2, len(at))[:, None, None] * 2
    everything = np.einsum("imp,imq->pq", blocks, blocks) + prior
    tau = np.sqrt(np.einsum("lp,pq,lq->l", directions, np.linalg.inv(everything), directions)) * rng.uniform(1.0, 1.7)
    required, forbidden = rng.random(len(at)) < 0.1, rng.random(len(at)) < 0.1
    rules = None
    if seed % 5 == 0:
        rules = CountRules((np.arange(4), np.arange(3, len(at))), np.array([1.0, 0.0]), np.array([3.0, 4.0]), ("a", "b"))
    return site_problem(blocks, directions, tau, prior_precision=prior, required=required, forbidden=forbidden & ~required,
                        rules=rules, cost=rng.integers(1, 3, len(at)).astype(float) if seed % 7 == 0 else None,
                        max_sites=7 if seed % 11 == 0 else None,
                        key=np.array([f"M{i:02d}" for i in rng.permutation(len(at))]))


@pytest.fixture(autouse=True)
def small_arrows(monkeypatch):
    monkeypatch.setattr(arrow_module, "LEAST_SAVING", 0.0)


@pytest.mark.parametrize("seed", range(100))
def test_ratios_and_log_det_by_the_arrow(seed):
    problem, rng = cells_problem(seed), np.random.default_rng(seed)
    shape = arrow(problem)
    for _ in range(5):
        chosen = np.flatnonzero(rng.random(problem.n) < 0.6)
        expected = variance_ratios(problem, chosen)
        found = arrow_ratios(shape, chosen)
        sure = np.isfinite(expected)
        assert found[sure] == pytest.approx(expected[sure], rel=1e-6)
        assert (found[~sure] > 1e6).all()
        if sure.all():
            information = problem.prior_precision + np.einsum("imp,imq->pq", problem.blocks[chosen], problem.blocks[chosen])
            assert arrow_log_det(shape, chosen) == pytest.approx(np.linalg.slogdet(information)[1], abs=1e-6)


@pytest.mark.parametrize("whole", [True, False])
@pytest.mark.parametrize("seed", range(100))
def test_search_and_proof_against_enumeration(seed, whole, monkeypatch):
    if not whole:  # larger patterns are bounded, not enumerated
        monkeypatch.setattr("sampler.optimise.pooled.MOST_PATTERNS", 1)
    problem = cells_problem(seed)
    cost, _ = cheapest(problem)
    told = []
    found = search_pooled(problem, arrow(problem), seconds=0.1, rng=np.random.default_rng(0),
                          tell=lambda bound, chosen: told.append(bound))
    assert found.bound <= cost + 1e-9
    if found.worst_ratio > 1 + 1e-9:
        assert np.isinf(cost)
        return
    if np.isfinite(found.bound):
        proven = check_proof(proof_evidence(problem), found.certificate)
        assert found.bound - 1e-5 <= proven.lower_bound <= cost + 1e-9
    if found.chosen is not None:
        assert variance_ratios(problem, found.chosen).max() <= 1 + 1e-6
        assert problem.cost[found.chosen].sum() >= cost


def test_most_are_found_and_proven():
    """Of the small questions above; patterns still mix in the linear program, so not all can be."""
    found = optimal = proven = 0
    for seed in range(60):
        problem = cells_problem(seed)
        cost, _ = cheapest(problem)
        if np.isinf(cost):
            continue
        result = search_pooled(problem, arrow(problem), seconds=0.5, rng=np.random.default_rng(0), tell=lambda *_: None)
        found += 1
        optimal += result.chosen is not None and problem.cost[result.chosen].sum() == cost
        proven += np.ceil(result.bound - 1e-4) == cost
    assert found > 30
    assert optimal >= 0.95 * found
    assert proven >= 0.5 * found


def test_the_search_takes_the_arrow(monkeypatch):
    monkeypatch.setattr("sampler.optimise.search.POOLED_TERMS", 2)
    problem = replace(cells_problem(2), required=np.zeros(9, bool), forbidden=np.zeros(9, bool))
    result = search(problem, seconds=1.0, seed=1)
    assert result.certificate["kind"] == "patterns"
    order = np.random.default_rng(1).permutation(problem.n)
    other = replace(problem, blocks=problem.blocks[order], cost=problem.cost[order], key=problem.key[order])
    again = search(other, seconds=1.0, seed=1)
    assert np.array_equal(np.sort(order[again.chosen]), result.chosen)
    tight = search(replace(problem, tau=0.9 * np.sqrt(variance_ratios(problem, range(9))) * problem.tau), seconds=1.0, seed=1)
    assert (tight.status, tight.chosen) == ("cannot", None)
    assert tight.worst_ratio > 1
    few = search(replace(problem, max_sites=int(result.lower_bound) - 1), seconds=1.0, seed=1)
    assert (few.status, few.chosen) == ("rules", None)


def test_no_arrow():
    problem = cells_problem(2)
    across = replace(problem, directions=problem.directions + np.eye(problem.p)[2] + np.eye(problem.p)[-1])
    assert arrow(across) is None
    dense = replace(problem, blocks=problem.blocks + 0.1)
    assert arrow(dense) is None


def test_what_the_checker_refuses():
    problem = cells_problem(2)
    shape = arrow(problem)
    found = search_pooled(problem, shape, seconds=0.3, rng=np.random.default_rng(0), tell=lambda *_: None)
    evidence = proof_evidence(problem)
    assert len(pooled(problem, shape).patterns) == 3

    def altered(change):
        other = copy.deepcopy(found.certificate)
        change(other)
        return other

    with pytest.raises(CertificateError, match="the patterns give the bound"):
        check_proof(evidence, altered(lambda it: it.update(lower_bound=it["lower_bound"] + 1)))
    with pytest.raises(CertificateError, match="not finite, or negative"):
        check_proof(evidence, altered(lambda it: it.update(y=it["y"] - 1)))
    with pytest.raises(CertificateError, match="damaged"):
        check_proof(evidence, altered(lambda it: it.update(rules={"index": [5], "value": [1.0]})))
    ruled = replace(problem, max_sites=9)
    with pytest.raises(CertificateError, match="leans on a side of rule 0"):
        check_proof(replace(proof_evidence(ruled), rules=((np.ones(9, bool), 0.0, np.inf),)),
                    altered(lambda it: it.update(rules={"index": [0], "value": [-1.0]})))
    looser = replace(problem, tau=problem.tau * 1.5)
    with pytest.raises(CertificateError, match="the patterns give the bound"):
        check_proof(proof_evidence(looser), found.certificate)

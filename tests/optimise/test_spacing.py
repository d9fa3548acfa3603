"""Spacing: conflicts, cliques and choices that keep apart."""

from __future__ import annotations

import copy
from dataclasses import replace

import numpy as np
import pytest
from enumeration import cheapest, ruled_evidence, small_problem
from random_problems import grid_problem
from scipy.spatial.distance import pdist, squareform

from sampler.errors import CertificateError
from sampler.optimise.blocks import split
from sampler.optimise.relaxation import relax
from sampler.optimise.search import search
from sampler.optimise.spacing import Discs, conflicts, spaced
from sampler.optimise.tree import decide
from sampler.tasks.proof_check import check_proof


@pytest.mark.parametrize("seed", range(100))
def test_conflicts_and_discs_against_all_pairs(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 40))
    xy = rng.uniform(0, 10, (n, 2)) if seed % 2 else rng.integers(0, 6, (n, 2)).astype(float)
    spacing = float(rng.choice([0.7, 1.0, 2.0, 3.7]))
    near = squareform(pdist(xy)) < spacing * (1 - 1e-12) if n > 1 else np.zeros((1, 1), bool)
    np.fill_diagonal(near, False)
    assert np.array_equal(conflicts(xy, spacing).toarray() > 0, near)
    chosen = rng.permutation(n)[:rng.integers(1, n + 1)]
    assert spaced(xy[chosen], spacing) == (not near[np.ix_(chosen, chosen)].any())

    weights = rng.uniform(0, 1, n) * (rng.random(n) < 0.7)
    cliques = Discs(xy, spacing).overfull(np.arange(n), weights, 10)
    for members in cliques:
        inside = near[np.ix_(members, members)]
        assert inside.sum() == len(members) * (len(members) - 1)
        assert weights[members].sum() > 1
    if not cliques:  # then no pair is overfull either
        first, second = np.nonzero(np.triu(squareform(pdist(xy)) < spacing * (1 - 1e-8)) & near) if n > 1 else ([], [])
        assert all(weights[i] + weights[j] <= 1 + 1e-5 for i, j in zip(first, second, strict=True))


def test_the_fullest_disc_is_found():
    """Against a fine raster of centres."""
    rng = np.random.default_rng(3)
    xy, weights = rng.uniform(0, 10, (60, 2)), rng.uniform(0, 0.6, 60)
    best = Discs(xy, 3.0).overfull(np.arange(60), weights, 1)[0]
    centres = np.stack(np.meshgrid(np.linspace(0, 10, 201), np.linspace(0, 10, 201)), axis=-1).reshape(-1, 2)
    load = (np.linalg.norm(centres[:, None] - xy, axis=2) < 1.5 * (1 - 1e-9)) @ weights
    assert weights[best].sum() >= load.max() - 1e-9


def test_two_at_just_the_spacing_do_not_conflict():
    xy = np.array([[0.1, 0.0], [0.4, 0.0], [0.7, 0.0]])  # 0.4 − 0.1 and 0.7 − 0.4 are not 0.3 in floats
    assert spaced(xy, 0.3) and not spaced(xy, 0.3001)
    assert Discs(xy, 0.3).overfull(np.arange(3), np.ones(3), 5) == []
    assert len(Discs(xy, 0.3001).overfull(np.arange(3), np.ones(3), 5)) == 2


def test_nothing_has_weight():
    xy = np.zeros((3, 2))
    assert Discs(xy, 1.0).overfull(np.arange(3), np.zeros(3), 5) == []
    assert conflicts(xy[:0], 1.0).shape == (0, 0)


@pytest.mark.parametrize("seed", range(40))
def test_search_and_proof_against_enumeration(seed, monkeypatch):
    monkeypatch.setattr("sampler.optimise.search.LEAST_POLISH", 0.01)
    monkeypatch.setattr("sampler.optimise.search.LEAST_BOUND", 0.01)
    problem = small_problem(seed, spacing=float(np.random.default_rng(seed).uniform(0.1, 0.6)), lost=int(seed % 5 == 4))
    cost, _ = cheapest(problem)
    result = search(problem, seconds=20, seed=1)
    assert result.lower_bound <= cost + 1e-6
    if np.isinf(cost):
        assert result.chosen is None
        return
    assert result.status == "proven"
    assert problem.cost[result.chosen].sum() == cost
    assert spaced(problem.xy[result.chosen], problem.spacing)
    proven = check_proof(ruled_evidence(problem), result.certificate).lower_bound
    assert np.ceil(proven - 1e-6) == cost


def dense(side, spacing):
    grid = np.linspace(-1, 1, side)
    xy = np.stack([part.ravel() for part in np.meshgrid(grid, grid)], axis=1)
    return replace(grid_problem(side, 2, 31.0), xy=xy, spacing=spacing)


def test_discs_prove_what_no_spacing_does_not():
    problem = dense(27, 0.25)
    plain = replace(problem, xy=None, spacing=0.0)
    count = float(np.floor(relax(split(plain), plain, seconds=20).bound)) + 1
    decision = decide(split(problem), problem, count, seconds=20)
    assert decision.status == "impossible"
    assert decision.certificate["cliques"]
    assert decide(split(plain), plain, count, seconds=20).status == "possible" or count < 23


def test_the_checker_refuses_cliques_that_are_not():
    problem = dense(27, 0.25)
    count = float(np.floor(relax(split(problem), problem, seconds=20).bound)) + 1
    certificate = decide(split(problem), problem, count, seconds=20).certificate
    evidence = ruled_evidence(problem)
    assert check_proof(evidence, certificate).lower_bound == count + 1
    with pytest.raises(CertificateError, match="not closer than the spacing"):
        check_proof(replace(evidence, spacing=0.1), certificate)
    with pytest.raises(CertificateError, match="needs a spacing"):
        check_proof(replace(evidence, xy=None), certificate)
    other = copy.deepcopy(certificate)
    other["cliques"] = []
    with pytest.raises(CertificateError, match="leans on a count that has no bound"):
        check_proof(evidence, other)

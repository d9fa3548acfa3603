"""Limits that hold after any loss: the exact ratios and their changes under swaps, against enumeration."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from random_problems import grid_problem, random_problem, variance_ratios

from sampler.optimise import lost as lost_module
from sampler.optimise.blocks import split
from sampler.optimise.lost import ratios_after_loss
from sampler.optimise.lost_variances import LostVariances
from sampler.optimise.pool import pool


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
    tried = lost_module._Losses(parts, chosen).dangerous(parts.ratios(chosen))
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
    problem = grid_problem(4, 1, 9) if seed % 2 else random_problem(seed)
    parts = split(problem)
    source = pool(parts, problem, None)
    if source.n < 8 or not parts.limits:
        pytest.skip("too few sites")
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

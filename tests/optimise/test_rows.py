"""Covering rows say exactly what the limits say, and never more."""

from __future__ import annotations

import numpy as np
import pytest
from random_problems import random_problem, variance_ratios

from sampler.optimise.blocks import split
from sampler.optimise.rows import information, separate

SEEDS = range(40)


def rows_at(problem, weights, ridge=1e-3):
    parts = split(problem)
    matrices = [information(block, weights) + ridge * np.eye(block.q) for block in parts.blocks]
    return parts, *separate(parts, matrices)


@pytest.mark.parametrize("seed", SEEDS)
def test_a_row_is_tight_where_it_was_separated_and_valid_elsewhere(seed, rng):
    problem = random_problem(seed)
    weights = rng.uniform(0.1, 1, problem.n)
    parts, rows, variance = rows_at(problem, weights, ridge=0.0)
    covered = rows.coefficients() @ weights + 1.0 - rows.right_hand_side
    assert covered == pytest.approx(1.0 / variance, rel=1e-7)
    for size in (problem.n - 1, problem.n // 2):
        chosen = np.sort(rng.permutation(problem.n)[:size])
        ratios = variance_ratios(problem, chosen)[parts.limit_index]
        covered = rows.coefficients(chosen).sum(axis=1) + 1.0 - rows.right_hand_side
        assert np.all(covered * ratios >= 1.0 - 1e-7)  # 1/v is the least over all z


@pytest.mark.parametrize("seed", SEEDS)
def test_rows_in_own_terms_are_the_same_rows(seed, rng):
    problem = random_problem(seed)
    parts, rows, _ = rows_at(problem, rng.uniform(0, 1, problem.n))
    z, limit = rows.in_own_terms(problem)
    assert (problem.directions[limit] * z).sum(axis=1) / problem.tau[limit] == pytest.approx(1.0, rel=1e-12)
    own = ((problem.blocks @ z.T) ** 2).sum(axis=1).T
    assert rows.coefficients() == pytest.approx(own, rel=1e-6, abs=1e-9 * own.max())
    assert rows.right_hand_side == pytest.approx(
        1.0 - np.einsum("kp,pq,kq->k", z, problem.prior_precision, z), rel=1e-6, abs=1e-9)
    assert rows.limit.tolist() == list(range(parts.limits))


def test_prices_are_weighted_coefficients(rng):
    problem = random_problem(1)
    _, rows, _ = rows_at(problem, rng.uniform(0, 1, problem.n))
    duals, some = rng.uniform(0, 1, len(rows)), np.array([4, 1])
    assert rows.prices(duals) == pytest.approx(duals @ rows.coefficients(), rel=1e-10)
    assert rows.prices(duals, some) == pytest.approx(rows.prices(duals)[some], rel=1e-12)
    assert rows.take(np.array([2, 0])).coefficients(some) == pytest.approx(rows.coefficients()[[2, 0]][:, some])


def test_coefficients_in_chunks_are_the_same(rng, monkeypatch):
    problem = random_problem(2)
    weights = rng.uniform(0.2, 1, problem.n)
    parts, rows, _ = rows_at(problem, weights)
    whole, price, inside = rows.coefficients(), rows.prices(np.ones(len(rows))), information(parts.blocks[0], weights)
    monkeypatch.setattr("sampler.optimise.rows.CHUNK_NUMBERS", 30)
    assert np.array_equal(rows.coefficients(), whole)
    assert rows.prices(np.ones(len(rows))) == pytest.approx(price, rel=1e-13)
    assert information(parts.blocks[0], weights) == pytest.approx(inside, rel=1e-13)

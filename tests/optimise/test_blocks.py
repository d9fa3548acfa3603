"""The split into blocks changes nothing about the question."""

from __future__ import annotations

import numpy as np
import pytest

from sampler.optimise.blocks import split
from sampler.optimise.problem import site_problem


def affine_rows(xy, sigma=(1.0, 1.0)):
    """tx, ty, sx, sy, rotation, orthogonality."""
    one, zero = np.ones(len(xy)), np.zeros(len(xy))
    x, y = xy.T
    return np.stack([np.stack([one, zero, x, zero, -y, -y], axis=1) / sigma[0],
                     np.stack([zero, one, zero, y, x, zero], axis=1) / sigma[1]], axis=1)


def direct(problem, chosen):
    information = problem.prior_precision + np.einsum("imp,imq->pq", problem.blocks[chosen], problem.blocks[chosen])
    return np.einsum("lp,pq,lq->l", problem.directions, np.linalg.inv(information), problem.directions) / problem.tau**2


@pytest.mark.parametrize("sigma", [(1.0, 1.0), (0.5, 2.0)])
def test_affine_splits_into_one_block_twice(rng, sigma):
    problem = site_problem(affine_rows(rng.uniform(-1, 1, (30, 2)), sigma), np.eye(6), rng.uniform(0.5, 1, 6))
    parts = split(problem)
    assert [(block.q, block.multiplicity) for block in parts.blocks] == [(3, 2)]
    chosen = np.array([0, 3, 7, 9, 20])
    assert parts.ratios(chosen) == pytest.approx(direct(problem, chosen)[parts.limit_index], rel=1e-9)
    assert max(parts.ratios(chosen)) == pytest.approx(max(direct(problem, chosen)), rel=1e-9)


def test_uneven_noise_keeps_two_blocks(rng):
    rows = affine_rows(rng.uniform(-1, 1, (30, 2))) / rng.uniform(1, 2, (30, 2, 1))
    problem = site_problem(rows, np.eye(6), np.ones(6))
    parts = split(problem)
    assert sorted((block.q, block.multiplicity) for block in parts.blocks) == [(3, 1), (3, 1)]
    chosen = np.arange(8)
    assert parts.ratios(chosen) == pytest.approx(direct(problem, chosen)[parts.limit_index], rel=1e-9)


def test_noise_common_to_all_sites_still_splits(rng):
    """Correlated noise, the same at every site, of equal function spaces: another basis takes it apart."""
    rows = affine_rows(rng.uniform(-1, 1, (30, 2)))
    mixed = np.einsum("ab,ibp->iap", np.array([[1.0, 0.3], [0.0, 1.0]]), rows)
    problem = site_problem(mixed, np.eye(6), np.ones(6))
    parts = split(problem)
    assert [(block.q, block.multiplicity) for block in parts.blocks] == [(3, 2)]
    chosen = np.arange(9)
    assert parts.ratios(chosen) == pytest.approx(direct(problem, chosen)[parts.limit_index], rel=1e-9)


def test_coupled_noise_and_prior_do_not_split(rng):
    rows = affine_rows(rng.uniform(-1, 1, (30, 2)))
    mixed = np.einsum("iab,ibp->iap", np.array([[1.0, 0.0], [0.0, 1.0]]) + 0.2 * rng.uniform(size=(30, 2, 2)), rows)
    prior = np.zeros((6, 6))
    prior[:2, :2] = [[2.0, 0.5], [0.5, 1.0]]
    for problem in (site_problem(mixed, np.eye(6), np.ones(6)),
                    site_problem(rows, np.eye(6), np.ones(6), prior_precision=prior)):
        parts = split(problem)
        assert [block.q for block in parts.blocks] == [6]
        chosen = np.arange(9)
        assert parts.ratios(chosen) == pytest.approx(direct(problem, chosen)[parts.limit_index], rel=1e-9)


def test_log_det_offset(rng):
    problem = site_problem(affine_rows(rng.uniform(-1, 1, (30, 2))), np.eye(6), np.ones(6))
    parts = split(problem)
    chosen = np.arange(7)
    whole = np.linalg.slogdet(np.einsum("imp,imq->pq", problem.blocks[chosen], problem.blocks[chosen]))[1]
    by_block = sum(block.multiplicity * np.linalg.slogdet(
        np.einsum("imp,imq->pq", block.rows[chosen], block.rows[chosen]))[1] for block in parts.blocks)
    assert by_block + parts.log_det_offset == pytest.approx(whole, abs=1e-9)


def test_lift_gives_the_same_readings(rng):
    problem = site_problem(affine_rows(rng.uniform(-1, 1, (30, 2))), np.eye(6), np.ones(6))
    for block in split(problem).blocks:
        z = rng.normal(size=block.q)
        for lift in block.lifts:
            readings = problem.blocks @ (lift @ z)
            assert (readings**2).sum(axis=1) == pytest.approx(((block.rows @ z) ** 2).sum(axis=1), abs=1e-12)


def test_unidentified_direction_is_named(rng):
    rows = affine_rows(rng.uniform(-1, 1, (30, 2)))
    rows = np.concatenate([rows, rows[:, :, 4:5] * 2], axis=2)  # a seventh term that acts like rotation
    parts = split(site_problem(rows, np.eye(7), np.ones(7)))
    assert parts.impossible.tolist() == [4, 6]
    assert set(parts.limit_index) | {0, 1} == {0, 1, 2, 3, 5}


def test_dominated_limits_are_dropped(rng):
    rows = affine_rows(rng.uniform(-1, 1, (30, 2)))
    parts = split(site_problem(rows, np.repeat(np.eye(6), 2, axis=0), np.tile([1.0, 0.5], 6)))
    assert [index for index in parts.limit_index if index % 2 == 0] == [10]  # orthogonality lies in both blocks


def test_per_cell_terms_alone_are_blocks_of_their_own(rng):
    cell = np.repeat(np.arange(4), 6)
    rows = np.zeros((24, 1, 8))
    rows[np.arange(24), 0, 2 * cell] = 1.0
    rows[np.arange(24), 0, 2 * cell + 1] = rng.uniform(-1, 1, 24)
    parts = split(site_problem(rows, np.eye(8), np.ones(8)))
    assert sorted(block.q for block in parts.blocks) == [2, 2, 2, 2]

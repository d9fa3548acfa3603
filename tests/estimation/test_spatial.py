"""Correlation in space: exact small cases, and fields of known range found again."""

from __future__ import annotations

from itertools import permutations

import numpy as np
import pytest
from invented_plans import lattice
from scipy.spatial.distance import cdist

from sampler.estimation.spatial import (
    FAMILIES,
    Field,
    fit_variogram,
    moran,
    morans_i,
    neighbour_weights,
    thinned,
    variogram,
)


def drawn(rng, panels, reach, sill, nugget, family="smooth", per_side=14, order=1):
    """A field on invented panels, a polynomial fitted to it."""
    xy = lattice(per_side, per_side, 480.0, 480.0)
    root = np.linalg.cholesky(FAMILIES[family](cdist(xy, xy), reach) + 1e-9 * np.eye(len(xy)))
    y = sill * rng.normal(size=(panels, len(xy))) @ root.T + nugget * rng.normal(size=(panels, len(xy)))
    u, v = xy.T / 255
    rows = np.column_stack([u**i * v**j for i in range(order + 1) for j in range(order + 1 - i)])
    return Field.fitted(xy, rows, y)


def test_morans_i_by_its_definition(rng):
    xy, z = rng.uniform(size=(9, 2)), rng.normal(size=(2, 9))
    weights = neighbour_weights(xy, 3)
    dense = weights.toarray()
    assert (dense.sum(axis=1) == pytest.approx(1.0)) and (np.diag(dense) == 0).all()
    for i, row in enumerate(dense):
        assert set(np.flatnonzero(row)) == set(np.argsort(np.where(np.arange(9) == i, np.inf, cdist(xy, xy)[i]))[:3])
    off = z - z.mean(axis=1, keepdims=True)
    for g in range(2):
        double = sum(dense[i, j] * off[g, i] * off[g, j] for i in range(9) for j in range(9))
        assert morans_i(z, weights)[g] == pytest.approx(9 / dense.sum() * double / (off[g] ** 2).sum())


def test_permutation_chance_against_every_permutation(rng):
    """Six marks: all 720 orders enumerated."""
    xy, values = np.array([[0, 0], [1, 0], [2, 0], [0, 1], [1, 1.1], [2, 1.2]], float), np.array([1.0, 1.4, 3.1, 0.2, 2.0, 2.5])
    field = Field(xy, np.zeros((6, 0)), values[None])
    weights = neighbour_weights(xy)
    observed = morans_i(values[None], weights)[0]
    every = morans_i(np.array(list(permutations(values))), weights)
    found = moran([field], rng, permutations=20_000)
    assert found.i == pytest.approx(observed) and every.mean() == pytest.approx(found.expected) == pytest.approx(-1 / 5)
    assert found.p_value == pytest.approx((every >= observed - 1e-12).mean(), abs=0.01)


def test_morans_p_is_small_with_correlation_and_uniform_without(rng):
    assert moran([drawn(rng, 2, 60.0, 0.5, 0.25)], rng, 199).p_value == pytest.approx(1 / 200)
    p = [moran([Field(lattice(6, 6, 1, 1), np.zeros((36, 0)), rng.normal(size=(1, 36)))], rng, 99).p_value for _ in range(200)]
    assert np.mean(np.array(p) <= 0.05) == pytest.approx(0.05, abs=0.05) and np.mean(p) == pytest.approx(0.5, abs=0.07)


def test_marks_at_one_place_still_have_other_neighbours():
    weights = neighbour_weights(np.zeros((12, 2)), 3).toarray()
    assert (np.diag(weights) == 0).all() and weights.sum(axis=1) == pytest.approx(1.0)


def test_variogram_by_pairs(rng):
    """Half the mean squared difference of pairs within panels, by brute force; pairs between panels never enter."""
    a, b = rng.uniform(0, 100, (7, 2)), rng.uniform(0, 100, (5, 2))
    ra, rb = rng.normal(size=(3, 7)), rng.normal(size=(1, 5)) + 50.0
    found = variogram([Field(a, np.zeros((7, 0)), ra), Field(b, np.zeros((5, 0)), rb)])
    halves, distances = [], []
    for xy, r in ((a, ra), (b, rb)):
        for i in range(len(xy)):
            for j in range(i):
                halves += ((r[:, i] - r[:, j]) ** 2 / 2).tolist()
                distances += [np.linalg.norm(xy[i] - xy[j])] * len(r)
    reach = found.distance_mm.max()
    assert found.pairs.sum() <= len(halves) and found.pairs.sum() > 0.4 * len(halves)
    inside = np.array(distances) <= reach * 1.2
    assert (found.gamma_um2 * found.pairs).sum() <= np.array(halves).sum()
    kept = sorted(zip(distances, halves, strict=True))[:found.pairs.sum()]
    assert (found.gamma_um2 * found.pairs).sum() == pytest.approx(sum(half for _, half in kept)) and inside.any()
    assert (found.distance_mm * found.pairs).sum() == pytest.approx(sum(d for d, _ in kept))


@pytest.mark.parametrize(("family", "reach", "order"), [("smooth", 60.0, 1), ("smooth", 60.0, 3), ("smooth", 150.0, 2),
                                                         ("rough", 60.0, 1)])
def test_known_fields_are_found_again(rng, family, reach, order):
    """The mean over pilots is right although the fit has taken part of the field away (naively, order 3 halves a range of 60)."""
    found = []
    for _ in range(12):
        fits = fit_variogram([drawn(rng, 6, reach, 0.5, 0.2, family, order=order)], rng, simulations=2)
        found.append(next(fit for fit in fits if fit.family == family))
    assert np.exp(np.mean([np.log(fit.range_mm) for fit in found])) == pytest.approx(reach, rel=0.2)
    assert np.sqrt(np.median([fit.sill_um2 for fit in found])) == pytest.approx(0.5, rel=0.12)
    assert np.sqrt(np.mean([fit.nugget_um2 for fit in found])) == pytest.approx(0.2, rel=0.25 if family == "rough" else 0.1)


def test_intervals_hold_the_truth(rng):
    inside = np.zeros(3)
    for _ in range(30):
        fits = fit_variogram([drawn(rng, 4, 60.0, 0.5, 0.2, per_side=11)], rng, simulations=60)
        fit = next(fit for fit in fits if fit.family == "smooth")
        for k, (span, true) in enumerate([(fit.nugget_interval, 0.04), (fit.sill_interval, 0.25), (fit.range_interval, 60.0)]):
            inside[k] += span[0] <= true <= span[1]
    assert (inside >= 24).all()  # 30 at 95 %: fewer than 24 has a chance below 1 in 300; simulated intervals run a little narrow


def test_the_better_family_comes_first(rng):
    first = [fit_variogram([drawn(rng, 12, 60.0, 0.5, 0.1, family)], rng, simulations=2)[0].family
             for family in ("smooth", "smooth", "rough", "rough")]
    assert first == ["smooth", "smooth", "rough", "rough"]


def test_white_noise_has_no_sill_and_expected_curve_is_the_observed_one(rng):
    field = Field.fitted(lattice(12, 12, 480, 480), np.ones((144, 1)), rng.normal(size=(40, 144)))
    fit = next(fit for fit in fit_variogram([field], rng, 5) if fit.family == "smooth")
    assert fit.nugget_um2 == pytest.approx(1.0, rel=0.05)
    assert fit.curve_um2 == pytest.approx(variogram([field]).gamma_um2, rel=0.1)


def test_a_slow_bend_is_called_unbounded(rng):
    field = drawn(rng, 3, 3000.0, 40.0, 0.01, order=0)
    assert not next(fit for fit in fit_variogram([field], rng, 2) if fit.family == "rough").bounded


def test_thinning_keeps_short_distances(rng):
    xy = lattice(80, 80, 500.0, 500.0)
    rows = thinned(xy, rng)
    assert len(rows) <= 720 and len(np.unique(rows)) == len(rows)
    distance = cdist(xy[rows], xy[rows]) + 1e9 * np.eye(len(rows))
    assert np.median(distance.min(axis=1)) < 8.0 and np.ptp(xy[rows], axis=0).min() > 480
    assert (thinned(xy[:50], rng) == np.arange(50)).all()


def test_worth_of_correlated_residuals(rng):
    """The variance of the mean square tells how many independent residuals it is worth."""
    squares = []
    for _ in range(400):
        field = drawn(rng, 1, 60.0, 0.5, 0.2, per_side=9)
        squares.append((field.residual**2).mean())
    fit = next(fit for fit in fit_variogram([drawn(rng, 60, 60.0, 0.5, 0.2, per_side=9)], rng, 2) if fit.family == "smooth")
    worth = 2 * np.mean(squares) ** 2 / np.var(squares)
    assert field.worth(fit) == pytest.approx(worth, rel=0.25) and worth < 40

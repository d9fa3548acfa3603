"""Robust fits against a general library, and flags against chance."""

from __future__ import annotations

import numpy as np
import pytest

from sampler.estimation.least_squares import Factored
from sampler.estimation.robust import BISQUARE, HUBER, m_estimate, outliers, weighted


def stackloss():
    import statsmodels.api as sm

    data = sm.datasets.stackloss.load_pandas()
    return sm.add_constant(data.exog.to_numpy()), data.endog.to_numpy()


def terms(rows, coefficients):
    return np.linalg.lstsq(rows, Factored.of(rows).q @ coefficients, rcond=None)[0]


@pytest.mark.parametrize("bisquare", [False, True])
def test_stackloss(bisquare):
    """Stackloss: published −41.027, 0.8294, 0.9261, −0.1278 (Huber), −42.285, 0.9275, 0.6507, −0.1123 (bisquare)."""
    import statsmodels.api as sm

    rows, y = stackloss()
    q = Factored.of(rows).q
    norm = sm.robust.norms.TukeyBiweight(BISQUARE) if bisquare else sm.robust.norms.HuberT(HUBER)
    reference = sm.RLM(y, rows, M=norm).fit(tol=1e-13, maxiter=500)
    start = m_estimate(q, y[None]).coefficients if bisquare else None
    found = m_estimate(q, y[None], bisquare, start=start)
    assert terms(rows, found.coefficients[0]) == pytest.approx(reference.params, rel=1e-6)
    assert found.scale[0, 0] == pytest.approx(reference.scale, rel=1e-6)
    assert found.weight[0] == pytest.approx(reference.weights, abs=1e-6)
    published = [-42.285, 0.9275, 0.6507, -0.1123] if bisquare else [-41.027, 0.8294, 0.9261, -0.1278]
    assert terms(rows, found.coefficients[0]) == pytest.approx(published, abs=6e-4)


def test_panels_at_once_equal_one_by_one(rng):
    q = Factored.of(rng.normal(size=(40, 5))).q
    y = rng.standard_t(2, size=(9, 40))
    axis = np.tile([0, 1], 20)
    together = m_estimate(q, y, True, axis)
    for i in range(9):
        alone = m_estimate(q, y[i:i + 1], True, axis)
        assert together.coefficients[i] == pytest.approx(alone.coefficients[0], abs=1e-8)
        assert together.scale[i] == pytest.approx(alone.scale[0], abs=1e-8)


def test_weighted_is_least_squares(rng):
    q, y, weight = Factored.of(rng.normal(size=(12, 3))).q, rng.normal(size=(2, 12)), rng.uniform(0, 1, (2, 12))
    for i in range(2):
        root = np.sqrt(weight[i])
        assert weighted(q, y, weight)[i] == pytest.approx(np.linalg.lstsq(q * root[:, None], y[i] * root, rcond=None)[0])


def test_planted_outliers_are_flagged_and_clean_panels_left_alone(rng):
    x, y = np.meshgrid(np.linspace(-1, 1, 8), np.linspace(-1, 1, 8))
    rows = np.column_stack([np.ones(64), x.ravel(), y.ravel()])
    full = np.zeros((128, 6))
    full[::2, :3], full[1::2, 3:] = rows, rows
    q, axis = Factored.of(full).q, np.tile([0, 1], 64)
    sigma = np.array([0.3, 1.5])[axis]  # an axis noisier than the other must not hide or make outliers
    data = rng.normal(size=(600, 128)) * sigma
    data[300:, 6] += 3.0  # ten sigmas on a dx
    data[300:, 51] -= 12.0  # eight sigmas on a dy
    data[300:, 127] += 15.0
    found = outliers(q, data, axis)
    assert found.flagged[300:][:, [6, 51, 127]].mean() > 0.97
    false = np.delete(found.flagged, [6, 51, 127], axis=1)
    assert false.any(axis=1).mean() < 0.03
    assert found.sigma.mean(axis=0) == pytest.approx([0.3, 1.5], rel=0.03)
    assert np.sign(found.studentised[300:, 51]).max() == -1


def test_studentised_is_the_residual_against_the_fit_without_the_reading(rng):
    """By brute force: leave the reading out, predict it, divide by the standard deviation of the prediction."""
    rows, y = rng.normal(size=(20, 3)), rng.normal(size=20)
    y[4] += 40.0
    found = outliers(Factored.of(rows).q, y[None])
    assert found.flagged[0].nonzero()[0].tolist() == [4]
    good = np.delete(np.arange(20), 4)
    for i in (4, 7):
        rest = good[good != i]
        fit = Factored.of(rows[rest]).solve(y[rest][None])
        s2 = fit.chi_square[0] / fit.design.degrees_of_freedom
        deviation = np.sqrt(s2 * (1 + rows[i] @ fit.design.covariance() @ rows[i]))
        assert found.studentised[0, i] == pytest.approx((y[i] - rows[i] @ fit.theta[0]) / deviation, rel=1e-9)


def test_hopeless_and_exact_panels(rng):
    rows = rng.normal(size=(12, 3))
    exact = rows @ np.array([1.0, -2.0, 3.0])
    broken = exact.copy()
    broken[5] += 1e-3
    found = outliers(Factored.of(rows).q, np.stack([exact, broken]))
    assert not found.flagged[0].any() and found.flagged[1].nonzero()[0].tolist() == [5]
    few = outliers(Factored.of(rows[:5]).q, exact[None, :5])
    assert not few.flagged.any() and np.isnan(few.sigma).all()
    halves = np.where(np.arange(12) < 7, 100.0, -100.0) + rng.normal(size=12)  # no minority: nothing is an outlier
    assert outliers(Factored.of(np.ones((12, 1))).q, halves[None]).flagged.mean() <= 0.5

"""Variance components against certified values, and intervals against their promised coverage."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from nist_strd_certified import ANOVA

from sampler.estimation.variance import (
    MeanSquare,
    difference_interval,
    one_way,
    positive,
    q_profile,
    variance_interval,
    variation,
)

DATA = Path(__file__).parent / "nist_strd"
# SmLs04 and SmLs07 carry an offset of 10⁶ and 10¹²: the data itself, rounded to double precision, is a ten-thousandth and a
# hundredth of a percent of its spread off; nothing computed from it can be closer.
DIGITS = {"AtmWtAg": 7, "SiRstv": 12, "SmLs01": 13, "SmLs04": 8, "SmLs07": 2}


@pytest.mark.parametrize("name", ANOVA)
def test_certified_analysis_of_variance(name):
    with (DATA / f"ANOVA_{name}.csv").open() as file:
        rows = list(csv.DictReader(file))
    found = one_way(np.array([float(row["y"]) for row in rows]), np.array([int(row["treatment"]) for row in rows]))
    between, within = ANOVA[name]
    got = [found.between.sum_of_squares, found.between.value, found.f, found.within.sum_of_squares, found.within.value]
    assert got == pytest.approx([*between[1:], *within[1:]], rel=10.0 ** -DIGITS[name])
    assert (found.between.degrees_of_freedom, found.within.degrees_of_freedom) == (between[0], within[0])


def test_gum_h5():
    """JCGM 100:2008, H.5: F(ν_a, ν_b) = 2.25 … 2.26, s(V) within 85 µV, s_B = 43 µV."""
    means = np.array([172, 116, 13, 144, 106, 31, 60, 125, 163, 41.0])  # µV above 10 V
    sd = np.array([60, 77, 111, 101, 67, 93, 80, 73, 88, 86.0])
    pattern = np.array([-1.5, -0.5, 0.0, 0.5, 1.5])
    pattern = pattern / pattern.std(ddof=1)
    y = (means[:, None] + sd[:, None] * pattern).ravel()
    found = one_way(y, np.repeat(np.arange(10), 5))
    assert np.sqrt(found.within.value) == pytest.approx(85, abs=0.5) and found.f == pytest.approx(2.26, abs=0.01)
    assert np.sqrt(found.variance_between) == pytest.approx(43, abs=1) and 0.025 < found.p_value < 0.05
    assert found.size == pytest.approx(5.0)


def test_unequal_groups_by_their_expected_mean_squares(rng):
    group = np.repeat(np.arange(6), [2, 3, 9, 4, 7, 5])
    truth = []
    for _ in range(3000):
        found = one_way(rng.normal(size=6)[group] * 2.0 + rng.normal(size=30), group)
        truth.append((found.variance_between, found.within.value))
    assert np.mean(truth, axis=0) == pytest.approx([4.0, 1.0], rel=0.06)


def test_chi_square_interval():
    """Chi-square table: 20 degrees of freedom, 9.591 and 34.170."""
    assert variance_interval(20.0, 20) == pytest.approx([20 / 34.1696, 20 / 9.59078], rel=1e-5)
    assert MeanSquare(0.0, 0).interval() == (0.0, np.inf)


@pytest.mark.parametrize("ratio", [0.0, 0.3, 3.0])
def test_interval_between_covers(rng, ratio):
    inside = 0
    for _ in range(1500):
        y = rng.normal(size=8)[np.repeat(np.arange(8), 4)] * np.sqrt(ratio) + rng.normal(size=32)
        low, high = one_way(y, np.repeat(np.arange(8), 4)).interval_between()
        inside += low <= ratio <= high
    assert inside / 1500 > 0.93
    assert ratio == 0 or inside / 1500 < 0.975


def test_difference_without_freedom_says_nothing():
    assert difference_interval(MeanSquare(30.0, 10), MeanSquare(5.0, 0)) == (-np.inf, np.inf)


def simulated(rng, runs, lots=6, each=5):
    """Panels of `runs` pilots: terms with unequal, correlated estimation error; truth of the panel and lot deviations."""
    sd_panel, sd_lot = np.array([1.0, 0.3, 2.0]), np.array([0.8, 0.2, 1.0])
    lot = np.repeat(np.arange(lots), each)
    size = rng.uniform(0.2, 0.9, len(lot))
    root = np.array([[0.4, 0, 0], [0.1, 0.2, 0], [0.0, -0.1, 0.5]])
    covariance = size[:, None, None] * (root @ root.T)
    shape = (runs, len(lot), 3)
    theta = (rng.normal(size=(runs, lots, 3)) * sd_lot)[:, lot] + rng.normal(size=shape) * sd_panel
    theta += np.sqrt(size)[:, None] * (rng.normal(size=shape) @ root.T)
    return theta, covariance, lot, sd_panel, sd_lot


def test_variance_components_lie_in_their_intervals(rng):
    """95 % intervals hold the true values in 93 to 97 % of 500 simulated pilots, over all terms."""
    theta, covariance, lot, sd_panel, sd_lot = simulated(rng, 500)
    found = [variation(one, covariance, lot) for one in theta]
    panel = np.mean([(v.panel_interval[:, 0] <= sd_panel) & (sd_panel <= v.panel_interval[:, 1]) for v in found])
    between = np.mean([(v.lot_interval[:, 0] <= sd_lot) & (sd_lot <= v.lot_interval[:, 1]) for v in found])
    assert 0.93 <= panel <= 0.97 and 0.93 <= between <= 0.97
    assert np.mean([v.panel for v in found], axis=0) == pytest.approx(np.diag(sd_panel**2), abs=0.12)
    assert np.mean([v.lot for v in found], axis=0) == pytest.approx(np.diag(sd_lot**2), abs=0.25)


def test_mean_and_its_uncertainty(rng):
    theta, covariance, lot, *_ = simulated(rng, 800)
    found = [variation(one, covariance, lot) for one in theta]
    z = np.array([v.mean / np.sqrt(np.diag(v.mean_covariance)) for v in found])
    assert (np.abs(z) < 2.571).mean() == pytest.approx(0.95, abs=0.02)  # Student's t with 5 degrees of freedom


def test_estimation_error_alone_is_no_variation(rng):
    covariance = np.tile(np.diag([1.0, 4.0]), (12, 1, 1))
    found = [variation(rng.normal(size=(12, 2)) * [1, 2], covariance, np.zeros(12, int)) for _ in range(400)]
    assert np.mean([(v.panel_interval[:, 0] == 0).mean() for v in found]) == pytest.approx(0.975, abs=0.02)
    assert found[0].lots == 1 and (found[0].lot == 0).all() and np.isnan(found[0].lot_interval).all()


def test_q_profile_with_equal_variances_is_the_chi_square_interval(rng):
    theta, group = rng.normal(size=(9, 1)) * 3, np.zeros(9, int)
    found = q_profile(theta, np.full((9, 1), 0.5), group)[0]
    expected = variance_interval(((theta - theta.mean()) ** 2).sum(), 8) - 0.5
    assert found == pytest.approx(np.maximum(expected, 0), rel=1e-6)


def test_one_panel_a_lot_shows_no_panel_variation(rng):
    found = variation(rng.normal(size=(3, 2)), np.tile(np.eye(2), (3, 1, 1)), np.arange(3))
    assert np.isnan(found.panel).all() and found.lots == 3
    alone = variation(rng.normal(size=(1, 2)), np.eye(2)[None], np.zeros(1, int))
    assert np.isnan(alone.panel).all() and (alone.mean_covariance == np.eye(2)).all()


def test_positive_is_a_projection_and_ignores_units(rng):
    a = rng.normal(size=(4, 4))
    matrix = a + a.T + 2 * np.eye(4)
    unit = np.array([1e-6, 1.0, 1e5, 10.0])
    once = positive(matrix)
    assert np.linalg.eigvalsh(once).min() > -1e-12
    scaled = positive(matrix * np.outer(unit, unit))
    assert scaled / np.outer(unit, unit) == pytest.approx(once, abs=1e-12)
    good = a @ a.T
    assert positive(good) == pytest.approx(good, rel=1e-12)
    assert (positive(np.diag([-1.0, 2.0])) == np.diag([0.0, 2.0])).all()

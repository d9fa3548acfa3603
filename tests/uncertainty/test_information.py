"""Uncertainties against published values, closed forms, a general library, and laws."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sampler.model.basis import Model, ModelTerm, Places, design_blocks
from sampler.model.terms import FAMILIES
from sampler.uncertainty.information import Knowledge, information, whiten

# JCGM 100:2008 (GUM) H.3: thermometer corrections b at readings t, reference temperature 20 °C.
GUM_T = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511])
GUM_B = np.array([-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160])
# NIST StRD, Longley: certified standard errors (intercept, x1 … x6) and residual standard deviation.
LONGLEY_SE = [890420.383607373, 84.9149257747669, 0.0334910077722432, 0.488399681651699, 0.214274163161675,
              0.226073200069370, 455.478499142212]
LONGLEY_SD = 304.854073561965
# NIST StRD, Norris: certified standard errors and residual standard deviation.
NORRIS_X = [0.2, 337.4, 118.2, 884.6, 10.1, 226.5, 666.3, 996.3, 448.6, 777.0, 558.2, 0.4, 0.6, 775.5, 666.9, 338.0, 447.5,
            11.6, 556.0, 228.1, 995.8, 887.6, 120.2, 0.3, 0.3, 556.8, 339.1, 887.2, 999.0, 779.0, 11.1, 118.3, 229.2, 669.1,
            448.9, 0.5]
NORRIS_SE, NORRIS_SD = [0.232818234301152, 0.429796848199937e-3], 0.884796396144373


def affine():
    return Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))


def panel(xy):
    return Places(np.asarray(xy, float), (255.0, 257.5), {}, {}, {})


def square(m, edge=10.0):
    x, y = np.linspace(-255 + edge, 255 - edge, m), np.linspace(-257.5 + edge, 257.5 - edge, m)
    return np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)


def straight_line(x, sigma):
    blocks = np.stack([np.ones(len(x)), np.asarray(x)], axis=1)[:, None, :]
    return Knowledge.of(information(whiten(blocks, np.full((len(x), 1), sigma))))


def test_gum_h3_straight_line():
    """JCGM 100:2008 H.3: u(y1) = 0.0029, u(y2) = 0.00067, r = −0.930, u of the correction at 30 °C 0.0041."""
    slope, intercept = np.polyfit(GUM_T - 20, GUM_B, 1)
    s = np.sqrt(np.sum((GUM_B - intercept - slope * (GUM_T - 20)) ** 2) / 9)
    assert round(s, 4) == 0.0035
    known = straight_line(GUM_T - 20, s)
    u = np.sqrt(known.variance(np.array([[1.0, 0], [0, 1], [1, 10]])))
    assert [round(u[0], 4), round(u[1], 5), round(u[2], 4)] == [0.0029, 0.00067, 0.0041]
    covariance = known.covariance()
    assert round(covariance[0, 1] / (u[0] * u[1]), 3) == -0.930


def test_nist_norris_standard_errors():
    known = straight_line(NORRIS_X, NORRIS_SD)
    assert np.sqrt(known.variance(np.eye(2))) == pytest.approx(NORRIS_SE, rel=1e-10)


def test_nist_longley_standard_errors():
    """Nearly collinear: seven digits of the information's own ten are left, and the rank is still seen."""
    from statsmodels.datasets import longley

    x = longley.load_pandas().exog.to_numpy(float)
    blocks = np.column_stack([np.ones(len(x)), x])[:, None, :]
    known = Knowledge.of(information(whiten(blocks, np.full((len(x), 1), LONGLEY_SD))))
    assert known.determined
    assert np.sqrt(known.variance(np.eye(7))) == pytest.approx(LONGLEY_SE, rel=1e-6)


@pytest.mark.parametrize("m", [2, 3, 5, 7])
def test_closed_forms_of_a_grid_of_sites(m):
    """m×m sites on 510×515 mm, 10 mm from the edge, σ = 1 µm: closed forms of a lattice (least squares algebra)."""
    xy = square(m)
    known = Knowledge.of(information(design_blocks(affine(), panel(xy))))
    u = dict(zip(FAMILIES["affine"], np.sqrt(known.variance(np.eye(6))), strict=True))
    sum_x2, sum_y2 = (xy**2).sum(axis=0)
    per_mm = 1e3  # 1 µm of displacement over 1 mm is 1000 ppm
    assert u["translation_x"] == pytest.approx(1 / m, rel=1e-12)
    assert u["translation_y"] == pytest.approx(1 / m, rel=1e-12)
    assert u["scale_x"] == pytest.approx(per_mm / np.sqrt(sum_x2), rel=1e-12)
    assert u["scale_y"] == pytest.approx(per_mm / np.sqrt(sum_y2), rel=1e-12)
    assert u["rotation"] == pytest.approx(per_mm / np.sqrt(sum_x2), rel=1e-12)
    assert u["orthogonality"] == pytest.approx(per_mm * np.sqrt(1 / sum_x2 + 1 / sum_y2), rel=1e-12)
    covariance = known.covariance()
    correlation = covariance[4, 5] / np.sqrt(covariance[4, 4] * covariance[5, 5])
    assert correlation == pytest.approx(-0.7106869995555597, rel=1e-9)


def test_against_weighted_least_squares_of_statsmodels(rng):
    import statsmodels.api as sm

    xy = rng.uniform(-200, 200, (25, 2))
    sigma = rng.uniform(0.2, 1.5, (25, 2))
    blocks = design_blocks(Model(tuple(ModelTerm(name) for name in FAMILIES["order3"])), panel(xy))
    result = sm.WLS(rng.normal(size=50), blocks.reshape(50, -1), weights=1 / sigma.ravel() ** 2).fit()
    mine = Knowledge.of(information(whiten(blocks, sigma)))
    assert mine.covariance() == pytest.approx(result.normalized_cov_params, rel=1e-7, abs=1e-12)
    # blocks were whitened in place, so log det compares with the weighted normal matrix
    assert mine.log_det() == pytest.approx(-np.linalg.slogdet(result.normalized_cov_params)[1], rel=1e-9)


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10_000))
def test_adding_a_site_never_raises_a_variance(seed):
    rng = np.random.default_rng(seed)
    blocks = rng.normal(size=(9, 2, 5))
    directions = rng.normal(size=(6, 5))
    before = Knowledge.of(information(blocks[:8])).variance(directions)
    after = Knowledge.of(information(blocks)).variance(directions)
    assert np.all(after <= before * (1 + 1e-9))


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10_000), st.floats(1e-6, 1e6))
def test_units_change_nothing_physical(seed, factor):
    """mm → m, ppm → parts: rescaled columns give rescaled uncertainties, and the same rank."""
    rng = np.random.default_rng(seed)
    blocks, scale = rng.normal(size=(8, 2, 4)), np.array([1.0, factor, 1.0, factor**2])
    first = Knowledge.of(information(blocks)).variance(np.eye(4))
    second = Knowledge.of(information(blocks * scale)).variance(np.eye(4))
    assert second * scale**2 == pytest.approx(first, rel=1e-6)


def test_undetermined_directions_are_infinite():
    xy = np.array([[x, 0.0] for x in (-100, 0, 50, 100)])
    known = Knowledge.of(information(design_blocks(affine(), panel(xy))))
    variance = known.variance(np.eye(6))
    assert np.isinf(variance[[3, 5]]).all() and np.isfinite(variance[[0, 1, 2, 4]]).all()
    assert known.log_det() == -np.inf and not known.determined


def test_prior_information_adds():
    prior = np.diag([4.0, 0.0])
    blocks = np.array([[[0.0, 2.0]]])
    known = Knowledge.of(information(blocks, prior))
    assert known.variance(np.eye(2)) == pytest.approx([0.25, 0.25])

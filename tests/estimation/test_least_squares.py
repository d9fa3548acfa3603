"""Least squares against certified and published values, and against its own laws."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from nist_strd_certified import LINEAR
from scipy import stats

from sampler.estimation.least_squares import Factored, chance_above, in_words

DATA = Path(__file__).parent / "nist_strd"
# Least correct digits of any term and of any standard uncertainty. Filip is a polynomial of degree 10 whose powers, rounded to
# double precision, no longer hold more than 7; Wampler4 and 5 carry noise of 10³ and 10⁵ times the terms.
DIGITS = {"Filip": (7, 7), "Longley": (12, 12), "Norris": (13, 13), "Pontius": (12, 12), "NoInt1": (14, 13),
          "Wampler1": (9, None), "Wampler2": (12, None), "Wampler3": (9, 9), "Wampler4": (9, 9), "Wampler5": (8, 9)}
# Ghilani, Adjustment Computations, ch. 18: examples 18.1, 18.2 and 18.3.
CONFORMAL_XY = np.array([[121.622, -128.066], [141.228, 187.718], [175.802, 135.728]])
CONFORMAL_EN = np.array([[1049422.40, 51089.20], [1049413.95, 49659.30], [1049244.95, 49884.95]])
AFFINE_XY = np.array([[0.764, 5.960], [5.062, 10.541], [9.663, 6.243], [5.350, 1.654]])
AFFINE_EN = np.array([[-113.000, 0.003], [0.001, 112.993], [112.998, 0.003], [0.001, -112.999]])
AFFINE_SD = np.array([0.104, 0.112, 0.096, 0.120, 0.112, 0.088, 0.096, 0.104])
PROJECTIVE_XY = np.array([[90.0, 90.0], [50.0, 40.0], [-30.0, 20.0], [50.0, -40.0], [110.0, -80.0], [-100.0, 80.0]])
PROJECTIVE_XY_OUT = np.array([[1420.407, 895.362], [895.887, 351.398], [-944.926, 641.434], [968.084, -1384.138],
                              [1993.262, -2367.511], [-3382.284, 3487.762]])


def digits(got, true):
    got, true = np.asarray(got), np.asarray(true)
    return -np.log10(np.maximum(np.abs(got - true) / np.abs(true), 1e-16)).min()


def strd(name):
    with (DATA / f"{name}.csv").open() as file:
        rows = [{key: float(value) for key, value in row.items()} for row in csv.DictReader(file)]
    y = np.array([row.pop("y") for row in rows])
    x = np.array([list(row.values()) for row in rows])
    count = len(LINEAR[name][0])
    if x.shape[1] == count:
        return x, y
    return (x ** np.arange(count) if x.shape[1] == 1 else np.column_stack([np.ones(len(y)), x])), y


def fitted(rows, y):
    fit = Factored.of(rows).solve(y[None])
    dof = fit.design.degrees_of_freedom
    return fit, np.sqrt(np.diag(fit.design.covariance()) * fit.chi_square[0] / dof)


@pytest.mark.parametrize("name", LINEAR)
def test_certified_regressions(name):
    terms, uncertainties, squares = LINEAR[name]
    fit, u = fitted(*strd(name))
    for_terms, for_u = DIGITS[name]
    assert digits(fit.theta[0], terms) >= for_terms
    if for_u is None:
        assert fit.chi_square[0] < 1e-10 * (strd(name)[1] ** 2).sum()
    else:
        assert digits(u, uncertainties) >= for_u
        assert digits(fit.chi_square[0], squares) >= for_u


def test_gum_h3():
    """JCGM 100:2008, H.3: −0.1712(29), 0.00218(67), r = −0.930, −0.1494(41) at 30 °C."""
    t = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511])
    b = np.array([-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160])
    fit, u = fitted(np.column_stack([np.ones(11), t - 20]), b)
    assert fit.theta[0] == pytest.approx([-0.1712, 0.00218], abs=5e-5) and u == pytest.approx([0.0029, 0.00067], rel=0.01)
    covariance = fit.design.covariance()
    assert covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1]) == pytest.approx(-0.930, abs=5e-4)
    at = np.array([1.0, 10.0])
    assert at @ fit.theta[0] == pytest.approx(-0.1494, abs=5e-5)
    assert np.sqrt(at @ covariance @ at * fit.chi_square[0] / 9) == pytest.approx(0.0041, abs=5e-5)
    assert fit.design.degrees_of_freedom == 9


def conformal_rows(xy):
    x, y = xy.T
    one, zero = np.ones_like(x), np.zeros_like(x)
    return np.stack([np.column_stack([x, -y, one, zero]), np.column_stack([y, x, zero, one])], axis=1).reshape(-1, 4)


def test_conformal_transformation():
    fit, u = fitted(conformal_rows(CONFORMAL_XY), CONFORMAL_EN.ravel())
    assert fit.theta[0] == pytest.approx([-4.51249, -0.25371, 1050003.715, 50542.131], abs=5e-4)
    assert u == pytest.approx([0.00058, 0.00058, 0.123, 0.123], rel=0.01)
    assert np.sqrt(fit.chi_square[0] / 2) == pytest.approx(0.140, abs=5e-4)
    moved = conformal_rows(np.array([[174.148, -120.262], [972.788, 120.994]])) @ fit.theta[0]
    assert moved == pytest.approx([1049187.361, 51040.629, 1045644.713, 49749.336], abs=1e-3)


def affine_rows(xy):
    block = np.column_stack([xy, np.ones(len(xy))])
    rows = np.zeros((len(xy), 2, 6))
    rows[:, 0, :3] = rows[:, 1, 3:] = block
    return rows.reshape(-1, 6)


def test_weighted_affine_transformation():
    fit, u = fitted(affine_rows(AFFINE_XY) / AFFINE_SD[:, None], AFFINE_EN.ravel() / AFFINE_SD)
    assert fit.theta[0] == pytest.approx([25.37152, 0.82220, -137.183, -0.80994, 25.40166, -150.723], abs=5e-4)
    assert u == pytest.approx([0.02532, 0.02256, 0.2031, 0.02335, 0.02622, 0.2163], rel=1e-3)
    assert -fit.residual[0] * AFFINE_SD == pytest.approx([0.101, 0.049, -0.086, -0.057, 0.117, 0.030, -0.086, -0.043], abs=5e-4)


def test_projective_transformation_by_gauss_newton():
    """The general code carries a nonlinear model by linearising it: 18.3."""
    x, y = PROJECTIVE_XY.T
    theta = np.r_[Factored.of(affine_rows(PROJECTIVE_XY)).solve(PROJECTIVE_XY_OUT.ravel()[None]).theta[0], 0.0, 0.0]
    for _ in range(50):
        below = theta[6] * x + theta[7] * y + 1
        above = affine_rows(PROJECTIVE_XY) @ theta[:6]
        predicted = above / np.repeat(below, 2)
        jacobian = np.column_stack([affine_rows(PROJECTIVE_XY) / np.repeat(below, 2)[:, None],
                                    -predicted * np.repeat(x / below, 2), -predicted * np.repeat(y / below, 2)])
        fit, u = fitted(jacobian, PROJECTIVE_XY_OUT.ravel() - predicted)
        theta = theta + fit.theta[0]
    assert theta == pytest.approx([25.00274, 0.80064, -134.715, -8.00771, 24.99811, -149.815, 0.00400, 0.00200], abs=5e-4)
    assert np.abs(fit.theta[0]).max() < 1e-6
    assert u == pytest.approx([0.015383, 0.018958, 0.37695, 0.0095388, 0.013498, 0.39789, 1.1176e-5, 1.4157e-5], rel=1e-4)


def test_diagnostics_are_those_of_a_general_library(rng):
    import statsmodels.api as sm

    data = sm.datasets.stackloss.load_pandas()
    rows = sm.add_constant(data.exog.to_numpy())
    fit, u = fitted(rows, data.endog.to_numpy())
    reference = sm.OLS(data.endog.to_numpy(), rows).fit()
    influence = reference.get_influence()
    internal, external = fit.studentised()
    assert fit.theta[0] == pytest.approx(reference.params, rel=1e-10) and u == pytest.approx(reference.bse, rel=1e-10)
    assert fit.design.leverage == pytest.approx(influence.hat_matrix_diag, rel=1e-9)
    assert internal[0] == pytest.approx(influence.resid_studentized_internal, rel=1e-8)
    assert external[0] == pytest.approx(influence.resid_studentized_external, rel=1e-8)
    assert fit.cook()[0] == pytest.approx(influence.cooks_distance[0], rel=1e-8)
    # The last row of stackloss, published: external −3.33, Cook 0.692.
    assert external[0, -1] == pytest.approx(-3.330, abs=5e-4) and fit.cook()[0, -1] == pytest.approx(0.692, abs=5e-4)


def test_many_panels_at_once_equal_one_by_one(rng):
    rows, y = rng.normal(size=(30, 5)), rng.normal(size=(7, 30))
    sd = np.array([np.inf, 0.5, np.inf, 2.0, np.inf])
    mean = np.array([0.0, 1.0, 0.0, -3.0, 0.0])
    together = Factored.of(rows, sd).solve(y, mean)
    normal = rows.T @ rows + np.diag(1 / sd**2)
    for i in range(7):
        theta = np.linalg.solve(normal, rows.T @ y[i] + mean / sd**2)
        assert together.theta[i] == pytest.approx(theta, rel=1e-10)
        squares = ((y[i] - rows @ theta) ** 2).sum() + (((mean - theta) / sd)[[1, 3]] ** 2).sum()
        assert together.chi_square[i] == pytest.approx(squares, rel=1e-10)
    assert together.design.covariance() == pytest.approx(np.linalg.inv(normal), rel=1e-9)
    assert together.design.degrees_of_freedom == 30 + 2 - 5
    assert y @ together.design.estimator().T == pytest.approx(Factored.of(rows, sd).solve(y).theta, abs=1e-10)


def test_chi_square_of_the_residuals_is_uniform_in_p(rng):
    """With noise, prior and model as assumed, p is uniform (Kolmogorov–Smirnov)."""
    rows, sd = rng.normal(size=(20, 6)), np.array([0.7, np.inf, np.inf, 1.5, np.inf, 0.2])
    theta = rng.normal(size=(4000, 6)) * np.where(np.isfinite(sd), sd, 1.0)
    fit = Factored.of(rows, sd).solve(theta @ rows.T + rng.normal(size=(4000, 20)))
    assert stats.kstest(fit.p_above, "uniform").pvalue > 0.01
    assert fit.p_below == pytest.approx(1 - fit.p_above, abs=1e-12)
    z = (fit.theta - theta) / np.sqrt(np.diag(fit.design.covariance()))
    assert np.abs((np.abs(z) < 1.959964).mean(axis=0) - 0.95).max() < 0.015
    assert fit.standardised().std(axis=0) == pytest.approx(np.ones(20), abs=0.05)


def test_units_do_not_matter(rng):
    rows, y = rng.normal(size=(20, 4)), rng.normal(size=(2, 20))
    unit = np.array([1e-9, 1.0, 1e7, 1e3])
    plain, scaled = Factored.of(rows).solve(y), Factored.of(rows * unit).solve(y)
    assert scaled.theta * unit == pytest.approx(plain.theta, rel=1e-9)
    assert scaled.cook() == pytest.approx(plain.cook(), rel=1e-8)


def test_terms_that_cannot_be_told_apart_are_named(rng):
    rows = rng.normal(size=(12, 5))
    rows[:, 3] = 2 * rows[:, 1]
    rows[:, 4] = 0.0
    found = Factored.of(rows)
    assert found.rank == 3 and sorted(found.inseparable()) == [[1, 3], [4]]
    assert in_words(sorted(found.inseparable()), ("a", "b", "c", "d", "e")) == \
        "`b` and `d` cannot be told apart by the marks read; `e` acts on none of the marks read"
    assert Factored.of(rows[:, :3]).inseparable() == []


def test_saturated_and_certain_readings(rng):
    rows = np.eye(3)
    fit = Factored.of(rows).solve(rng.normal(size=(1, 3)))
    assert fit.p_above[0] == 1.0 and np.isnan(fit.cook()).all()
    lone = np.zeros((6, 2))
    lone[0, 0], lone[1:, 1] = 1.0, 1.0
    fit = Factored.of(lone).solve(rng.normal(size=(1, 6)))
    internal, external = fit.studentised()
    assert np.isnan(internal[0, 0]) and np.isfinite(internal[0, 1:]).all() and np.isfinite(external[0, 1:]).all()


@pytest.mark.parametrize(("dof", "upper", "value"), [(1, 0.05, 3.841), (10, 0.05, 18.307), (100, 0.05, 124.342),
                                                     (10, 0.025, 20.483), (50, 0.95, 34.764)])
def test_chi_square_table(dof, upper, value):
    assert chance_above(value, dof) == pytest.approx(upper, abs=2e-5)

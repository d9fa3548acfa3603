"""Production panels with known truth: corrections, uncertainty, limits, outliers and verdicts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_plans import core_layout, lattice, study_of
from scipy import stats

from sampler.errors import InputError
from sampler.estimation.readings import Readings
from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.tasks.fit import fit
from sampler.tasks.question import limits_achieved, question
from sampler.tasks.study import Measure, Potential, RegionLimit, TermLimit, TermPrior
from sampler.uncertainty.information import Knowledge, information
from sampler.uncertainty.noise import Noise

LIMITS = (TermLimit(("scale_x", "rotation"), 2.2), RegionLimit("panel", 1.6))


def production(rng, study, panels=30, count=40, extra=None, noise=1.0, theta=None, theta_sd=2.0, common=None):
    """Readings of `count` marks on every panel, `extra` (panels, count, 2) added, and the truth behind them."""
    marks = study.layout.marks
    rows = np.random.default_rng(1).choice(len(marks), count, replace=False)
    sites = marks.take(rows)
    blocks = design_blocks(study.model, places(study.layout, sites.xy_mm))
    if theta is None:
        theta = rng.normal(size=(panels, len(study.model))) * theta_sd
    y = np.einsum("nap,gp->gna", blocks, theta) + noise * rng.normal(size=(panels, count, 2)) * study.noise.sigma_um(sites)
    if extra is not None:
        y = y + extra(sites)
    return y, sites, theta


def read(study, y, sites):
    panels, count = y.shape[:2]
    return Readings.of(study.layout, np.repeat([f"P{i:03d}" for i in range(panels)], count), y.reshape(-1, 2),
                       id=np.tile(sites.id, panels))


def test_terms_lie_where_their_uncertainty_says(rng):
    study = study_of(core_layout(), limits=LIMITS)
    y, sites, theta = production(rng, study, panels=400)
    found = fit(study, read(study, y, sites), sites)
    z = (found.theta - theta) / found.u
    assert (np.abs(z) < 2).mean() == pytest.approx(0.9545, abs=0.012)
    assert stats.kstest(found.p_above, "uniform").pvalue > 0.005
    assert (found.corrections == -found.theta).all() and (found.k_u == 3 * found.u).all()
    at = rng.uniform(-240, 240, (5, 2))
    predicted, k_u = found.predicted_um(7, at)
    rows = design_blocks(study.model, places(study.layout, at))
    assert predicted == pytest.approx(rows @ found.theta[7])
    assert k_u == pytest.approx(3 * np.sqrt(np.einsum("nap,pq,naq->na", rows, found.covariance[7], rows)))
    assert found.holds and len(found.outliers) < 12 and found.skipped == () and found.warnings == ()
    assert found.missing.max() == 0 and (found.read == 40).all()
    unflagged = ~np.isnan(found.standardised)
    assert found.standardised[unflagged].std() == pytest.approx(1.0, abs=0.01)
    assert np.nansum(found.leverage[:40]) == pytest.approx(len(study.model)) or np.isnan(found.leverage[:40]).any()
    assert np.nanmax(found.cook) < 1 and np.nanmin(found.cook) >= 0


def test_limits_are_those_of_the_audit(rng):
    """With all planned marks read, each limit is what an audit of them predicts; with marks lost it is worse, then missed."""
    limits = (TermLimit(("scale_x", "rotation"), 9.0), RegionLimit("panel", 9.0), RegionLimit("cells:exposure", 9.0))
    study = study_of(core_layout(), limits=limits)
    y, sites, _ = production(rng, study, panels=3, count=24)
    y[1, :6] = np.nan
    y[2, :14] = np.nan
    found = fit(study, read(study, y, sites), sites)
    asked = question(study)
    rows = np.flatnonzero(np.isin(asked.candidates.sites.id, sites.id))
    audited = limits_achieved(asked, Knowledge.of(information(asked.whitened[rows])))
    assert found.limit_label == tuple(limit.label for limit in audited)
    assert found.predicted[0] == pytest.approx([limit.predicted for limit in audited], rel=2e-3)
    assert (found.predicted[1] > found.predicted[0]).all() and (found.predicted[2] > found.predicted[1]).all()
    panel = found.limit_label.index("position over the panel")
    between = float(found.predicted[1:, panel].mean())  # the last panel misses it, the others meet it
    tight = replace(study, limits=(limits[0], RegionLimit("panel", between), limits[2]))
    assert fit(tight, read(study, y, sites), sites).meets_limits.tolist() == [True, True, False]
    assert found.lost.tolist() == [0, 6, 14] and found.read.tolist() == [24, 18, 10]


def test_noise_that_no_longer_holds_is_called(rng):
    study = study_of(core_layout(), limits=LIMITS)
    y, sites, _ = production(rng, study, panels=30)
    louder, _, _ = production(rng, study, panels=5, noise=1.6)
    found = fit(study, read(study, np.concatenate([y, louder]), sites))
    last = found.verdicts[0]
    assert not last.holds and not found.holds and last.p_value < 1e-4
    assert last.text.startswith("residual 1.") and "on the last 5 panels" in last.text
    assert last.text.endswith("characterise again")
    assert found.verdicts[-1].holds  # louder noise says nothing against the model
    quiet, _, _ = production(rng, study, panels=30, noise=0.6)
    verdict = fit(study, read(study, quiet, sites)).verdicts[0]
    assert verdict.holds and "less than assumed" in verdict.text


def test_model_that_no_longer_holds_is_called(rng):
    study = study_of(core_layout(), limits=LIMITS)
    y, sites, _ = production(rng, study, panels=12, extra=lambda sites: 0.8 * (sites.xy_mm / 255.0) ** 2)
    verdict = fit(study, read(study, y, sites)).verdicts[-1]
    assert not verdict.holds and "order2 terms, which the model lacks, show on the last 5 panels" in verdict.text
    full = study_of(core_layout(), ("order3",), LIMITS)
    y, sites, _ = production(rng, full, panels=12)
    assert not any("lacks" in verdict.text for verdict in fit(full, read(full, y, sites)).verdicts)
    small = study_of(core_layout(), ("similarity",), (TermLimit(("magnification",), 5.0),))
    y, sites, _ = production(rng, small, panels=4, extra=lambda sites: sites.xy_mm * [0.02, -0.02])
    assert "affine terms" in fit(small, read(small, y, sites)).verdicts[-1].text


def test_false_alarms_are_rare_even_when_local_distortion_repeats(rng):
    study = replace(study_of(core_layout(), limits=LIMITS), noise=Noise((0.05, 0.05), (0.4, 0.4)))
    alarms = 0
    for _ in range(150):
        y, sites, _ = production(rng, study, panels=12, count=30, noise=0.0)
        y += 0.4 * rng.normal(size=(30, 2)) + 0.05 * rng.normal(size=(12, 30, 2))
        alarms += not fit(study, read(study, y, sites)).holds
    assert alarms <= 5


def test_planted_outlier_is_taken_out(rng):
    study = study_of(core_layout(), limits=LIMITS)
    y, sites, theta = production(rng, study, panels=6)
    y[2, 11, 1] += 6.0
    found = fit(study, read(study, y, sites))
    assert ("P002", str(sites.id[11]), "dy") in [(flag.panel, flag.id, flag.axis) for flag in found.outliers]
    assert (np.abs(found.theta[2] - theta[2]) < 4 * found.u[2]).all()


def test_priors_field_and_potential_terms_take_part(rng):
    """Truth drawn from the assumptions: terms lie where u says, with priors about a mean, a local field and potential terms."""
    layout = core_layout(10)
    study = replace(study_of(layout, ("affine",), (TermLimit(("scale_x",), 9.0), RegionLimit("panel", 2.0, of="displacement"))),
                    noise=Noise((0.2, 0.2), (0.3, 0.3), 150.0), priors=(TermPrior(("scale_x", "scale_y"), 0.4, 20.0),),
                    potential=Potential(Model((ModelTerm("dx_xy"), ModelTerm("dy_xy"))), 0.2),
                    measure=Measure(side_um=(0.1, 0.1)))
    panels, n = 120, len(layout.marks)
    at = places(layout, layout.marks.xy_mm)
    theta = rng.normal(size=(panels, 6)) * 2.0
    theta[:, 2:4] = 20.0 + 0.4 * rng.normal(size=(panels, 2))
    d2 = ((at.xy_mm[:, None] - at.xy_mm[None]) ** 2).sum(axis=2)
    root = np.linalg.cholesky(np.exp(-d2 / (2 * 150.0**2)) + 1e-9 * np.eye(n))
    y = np.einsum("nap,gp->gna", design_blocks(study.model, at), theta)
    y += np.einsum("nap,gp->gna", design_blocks(study.potential.terms, at), 0.2 * rng.normal(size=(panels, 2)))
    y += 0.3 * np.einsum("nm,gma->gna", root, rng.normal(size=(panels, n, 2))) + 0.1 * rng.normal(size=(panels, 1, 2))
    y += 0.2 * rng.normal(size=y.shape)
    found = fit(study, read(study, y, layout.marks))
    z = (found.theta - theta) / found.u
    assert z.std(axis=0) == pytest.approx(np.ones(6), abs=0.2)
    assert (found.u[:, 2] < 0.4).all() and stats.kstest(found.p_above, "uniform").pvalue > 0.005
    y[3, 17, 0] += 5.0
    spoiled = fit(study, read(study, y, layout.marks))
    assert ("P003", str(layout.marks.id[17]), "dx") in [(flag.panel, flag.id, flag.axis) for flag in spoiled.outliers]


def test_repeats_average_the_reading_only(rng):
    study = replace(study_of(core_layout(), limits=LIMITS), noise=Noise((0.3, 0.3), (0.4, 0.4)))
    y, sites, _ = production(rng, study, panels=1)
    once = fit(study, read(study, y, sites))
    thrice = fit(study, Readings.of(study.layout, ["P"] * 120, np.tile(y[0], (3, 1)), id=np.tile(sites.id, 3)))
    assert thrice.u == pytest.approx(once.u * np.sqrt((0.09 / 3 + 0.16) / (0.09 + 0.16)), rel=1e-9)


def test_bad_panels_are_skipped_and_named(rng):
    study = study_of(core_layout(), limits=LIMITS)
    y, sites, _ = production(rng, study, panels=4)
    y[1, 3:] = np.nan
    y[2] = np.nan
    found = fit(study, read(study, y, sites), study.layout.marks.take(np.arange(50)))
    assert found.panel == ("P000", "P003") and [name for name, _ in found.skipped] == ["P001", "P002"]
    assert found.skipped[0][1].startswith("3 marks read, too few for the model") and found.skipped[1][1] == "nothing was read"
    assert found.missing[0] == 50 - np.isin(sites.id, study.layout.marks.id[:50]).sum()
    with pytest.raises(InputError, match=r"P000.*too few"):
        fit(study, read(study, y[:1, :3], sites.take(np.arange(3))))


def test_few_panels_and_no_spare_readings(rng):
    study = study_of(core_layout(), limits=LIMITS)
    corners = study.layout.marks.take(np.array([0, 17, 306, 323]))
    blocks = design_blocks(study.model, places(study.layout, corners.xy_mm))
    found = fit(study, read(study, (blocks @ np.ones(8))[None], corners))
    assert found.theta[0] == pytest.approx(np.ones(8)) and "cannot be checked" in found.verdicts[0].text
    assert "cannot tell" in found.verdicts[-1].text and found.degrees_of_freedom[0] == 0 and found.p_above[0] == 1.0
    assert np.isnan(found.charts["scale_x"].sigma)
    xy = lattice(2, 2, 100.0, 100.0)
    assert found.predicted_um(0, xy)[0].shape == (4, 2)


def test_order_of_panels_is_kept_and_charts_follow_it(rng):
    study = study_of(core_layout(), limits=LIMITS)
    theta = np.zeros((30, 8))
    theta[20:, 2] = 40.0  # the scale jumps
    y, sites, _ = production(rng, study, panels=30, theta=theta)
    chart = fit(study, read(study, y, sites)).charts["scale_x"]
    assert chart.outside.any() and not fit(study, read(study, y, sites)).charts["rotation"].outside.all()

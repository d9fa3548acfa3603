"""The ladder: the model behind invented panels is found, and every figure of it by brute force."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_pilots import Pilot
from scipy import stats

from sampler.estimation.model_choice import EACH, LADDER, SHARED, choose_model, model_of, panel_terms
from sampler.model.basis import design_blocks, places

GUESS = (0.3, 0.3)


def chosen(pilot, rng):
    readings, _ = pilot.readings(rng)
    found = choose_model(pilot.layout, readings, readings.averaged(), GUESS)
    return found.family, found.shared, found.each


@pytest.mark.parametrize("family", LADDER)
@pytest.mark.parametrize(("shared", "each"), [(0.0, 0.0), (3.0, 0.0), (0.0, 0.4)])
def test_the_model_behind_the_panels_is_found(rng, family, shared, each):
    pilot = Pilot(family, shared=shared, each=each, lost=0.01, per_side=18)
    assert chosen(pilot, rng) == (family, ("exposure",) if shared else (), ("exposure",) if each else ())


@pytest.mark.parametrize("range_mm", [30.0, 60.0, 100.0])
def test_smooth_local_distortion_is_no_reason_for_cells(rng, range_mm):
    """A field smooth over a cell is mimicked by terms of any cells and predicts left-out quarters better, but makes no steps."""
    pilot = Pilot(local_um=(0.4, 0.4), range_mm=range_mm, per_side=18, panels=12)
    family, shared, each = chosen(pilot, rng)
    assert (shared, each) == ((), ()) and (family == "trapezoid" or range_mm > 50)  # a long range does bend like a high order


def test_weak_steps_are_seen_through_a_field(rng):
    assert chosen(Pilot(local_um=(0.4, 0.4), range_mm=60.0, per_side=18, each=0.3), rng)[2] == ("exposure",)


def brute(pilot, readings, family, shared, each, fold_of):
    """Root mean square error of least squares with each fold left out; residual squares and terms of the whole fit."""
    layout = pilot.layout
    model = model_of(family, layout, ("exposure",) if shared else (), ("exposure",) if each else ())
    blocks = design_blocks(model, places(layout, readings.sites.xy_mm))
    total, count, rss, rank = 0.0, 0, 0.0, 0
    for pattern in readings.averaged().patterns():
        rows = blocks[pattern.site]
        whole = rows.reshape(-1, len(model))
        for y in pattern.dxy_um:
            theta, _, r, _ = np.linalg.lstsq(whole, y.ravel(), rcond=1e-10)
            rss, rank = rss + ((y.ravel() - whole @ theta) ** 2).sum(), rank + r
            for fold in np.unique(fold_of[fold_of >= 0]):
                out = fold_of[pattern.site] == fold
                theta = np.linalg.lstsq(rows[~out].reshape(-1, len(model)), y[~out].ravel(), rcond=1e-10)[0]
                error = y[out].ravel() - rows[out].reshape(-1, len(model)) @ theta
                total, count = total + (error**2).sum(), count + error.size
    return np.sqrt(total / count), rss, rank / readings.panels


@pytest.mark.parametrize(("family", "shared", "each"), [
    ("similarity", False, False), ("order2", True, False), ("trapezoid", False, True), ("affine", True, True)])
def test_figures_by_brute_force(rng, family, shared, each):
    pilot = Pilot(panels=2, each=0.2, per_side=16)
    readings, _ = pilot.readings(rng)
    tried = choose_model(pilot.layout, readings, readings.averaged(), GUESS).ladders["exposure"]
    rung = next(rung for rung in tried if (rung.family, rung.shared, rung.each) == (family, shared, each))
    at = places(pilot.layout, readings.sites.xy_mm)
    cell, local = at.cell["exposure"], at.local_mm["exposure"]
    outside = np.where(cell < 0, cell.max() + 1, cell)
    quarter = np.where(cell < 0, -1, (local[:, 0] > 0) + 2 * (local[:, 1] > 0))
    cells_um, rss, rank = brute(pilot, readings, family, shared, each, outside)
    quarters_um, _, _ = brute(pilot, readings, family, shared, each, quarter)
    assert rung.terms == rank and rung.quarters_um == pytest.approx(quarters_um, rel=1e-6)
    assert np.isnan(rung.cells_um) if each else rung.cells_um == pytest.approx(cells_um, rel=1e-6)
    n = 2 * len(readings)
    residual = np.sqrt((np.array(rung.residual_um) ** 2).mean())
    assert residual == pytest.approx(np.sqrt(rss / (n - 2 * rank)), rel=1e-6)


def test_f_test_and_aicc_by_their_definitions(rng):
    pilot = Pilot(panels=2)
    readings, _ = pilot.readings(rng)
    found = choose_model(pilot.layout, readings, readings.averaged(), GUESS)
    n, aicc = 2 * len(readings), []
    for below, rung in zip(found.plain, found.plain[1:], strict=False):
        rss = [(np.array(r.residual_um) ** 2).mean() * (n - 2 * r.terms) for r in (below, rung)]
        more, dof = 2 * (rung.terms - below.terms), n - 2 * rung.terms
        f = (rss[0] - rss[1]) / more / (rss[1] / dof)
        assert rung.f == pytest.approx(f, rel=1e-6) and rung.f_p == pytest.approx(stats.f.sf(f, more, dof), rel=1e-4, abs=1e-300)
    for rung in found.plain:
        k = 2 * rung.terms + 1
        mean_square = (np.array(rung.residual_um) ** 2).mean() * (n - 2 * rung.terms) / n
        aicc.append(n * np.log(mean_square) + 2 * k + 2 * k * (k + 1) / (n - k - 1))
    assert np.diff([rung.aicc for rung in found.plain]) == pytest.approx(np.diff(aicc), rel=1e-6)
    assert min(rung.aicc for rungs in found.ladders.values() for rung in rungs) == 0.0


def test_panel_without_grid_is_left_out_in_blocks(rng):
    pilot = Pilot("order2")
    readings, _ = pilot.readings(rng)
    layout = replace(pilot.layout, grids=())
    found = choose_model(layout, readings, readings.averaged(), GUESS)
    assert found.family == "order2" and list(found.ladders) == [""] and found.blocks == "4 × 4 blocks of the panel"
    assert all(np.isnan(rung.quarters_um) for rung in found.plain) and "blocks of the panel" in found.reason[0]


def test_rungs_hold_each_other_and_terms_are_not_doubled():
    layout = Pilot().layout
    below: set[str] = set()
    for family in LADDER:
        names = set(panel_terms(family)) - {"magnification"}
        assert below <= names
        below = names
    both = model_of("affine", layout, ("exposure",), ("exposure",))
    assert len(set(both.names)) == len(both) == 6 + len(set(SHARED) - set(EACH)) + 16 * len(EACH)
    assert not {f"exposure.{name}" for name in EACH} & set(both.names)


def test_words_name_the_smaller_and_the_best(rng):
    readings, _ = Pilot("affine", panels=3).readings(rng)
    found = choose_model(Pilot().layout, readings, readings.averaged(), GUESS)
    assert found.family == "affine" and "similarity is worse" in found.reason[0]

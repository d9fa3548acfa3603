"""Pilots with known truth, measured fields that nobody here wrote, and bad pilots."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest
from invented_pilots import TYPICAL, Pilot
from invented_plans import core_layout, lattice

from sampler.errors import InputError
from sampler.estimation.noise_parts import axis_noise, repeats_share
from sampler.estimation.readings import Readings
from sampler.files.process import process_toml
from sampler.files.readings import read_readings
from sampler.model.basis import Model, design_blocks, places
from sampler.panel.layout import Layout, Sites
from sampler.tasks.characterise import characterise
from sampler.uncertainty.noise import Noise


def test_truth_of_an_invented_pilot_comes_back(rng):
    pilot = Pilot(panels=24, lots=4, repeats=2, local_um=(0.5, 0.4), range_mm=60.0, lost=0.01, lot_terms=1.5)
    readings, theta = pilot.readings(rng)
    found = characterise(pilot.layout, readings)
    assert (found.choice.family, found.choice.shared, found.choice.each) == ("trapezoid", (), ())
    assert found.noise.mark_um == pytest.approx((0.25, 0.25), rel=0.08)
    assert found.noise.local_um == pytest.approx((0.5, 0.4), rel=0.15)
    assert found.noise.local_range_mm == pytest.approx(60, rel=0.15)
    assert found.axes[0].correlated and found.axes[0].fits[0].family == "smooth"
    z = (found.theta - theta) / found.u
    assert z.std() == pytest.approx(1.0, abs=0.25)  # the uncertainty covers the correlated field, which white noise would not
    sd = np.array([TYPICAL[unit] for unit in found.terms.units])
    span = found.variation.panel_interval
    assert ((span[:, 0] <= sd) & (sd <= span[:, 1])).sum() >= 7
    assert ((found.variation.lot_interval[:, 0] <= 1.5 * sd) & (1.5 * sd <= found.variation.lot_interval[:, 1])).sum() >= 6
    assert found.panel[:2] == ("P00", "P01") and len(found.outliers) <= 2 and found.warnings == ()
    assert found.rates[0].rate == pytest.approx(0.99, abs=0.005)


def test_reading_and_local_sigma_lie_in_their_intervals(rng):
    """500 simulated pilots: reading and local variance inside their 95 % intervals in 93 to 97 %."""
    layout = core_layout(6)
    model, sites = Model(()), layout.marks
    blocks = design_blocks(model, places(layout, sites.xy_mm))
    inside = np.zeros(2)
    for _ in range(500):
        # Eleven marks, one fewer than a variogram wants, so that this stays about the two variances.
        y = np.repeat(rng.normal(size=(5, 11, 1, 2)) * 0.4, 3, axis=2) + rng.normal(size=(5, 11, 3, 2)) * 0.3
        readings = Readings.of(layout, np.repeat(list("abcde"), 33), y.reshape(-1, 2), id=np.tile(np.repeat(sites.id[:11], 3), 5))
        means = readings.averaged()
        found = axis_noise(readings, means, blocks, means.dxy_um, np.array([55.0, 55.0]), 0, rng)
        inside[0] += found.reading_interval[0] <= 0.3 <= found.reading_interval[1]
        inside[1] += found.local_interval[0] <= 0.4 <= found.local_interval[1]
    assert found.moran is None and (inside >= 0.93 * 500).all() and (inside <= 0.97 * 500).all()


def test_what_repeats_on_every_panel_is_no_variation(rng):
    """Local distortion common to all panels shifts all terms alike; only its own part is taken out of how panels vary."""
    pilot = Pilot("affine", panels=30, repeats=2, local_um=(1.5, 1.5), common=0.95, terms=0.1875, per_side=8, mark_um=0.1)
    variances, shares = [], []
    for _ in range(6):
        readings, _ = pilot.readings(rng)
        found = characterise(pilot.layout, readings)
        at = [found.terms.names.index(name) for name in ("translation_x", "translation_y")]
        variances.append(np.diag(found.variation.panel)[at])
        shares.append(found.axes[0].repeats_share)
    assert np.mean(shares) == pytest.approx(0.95, abs=0.02)
    # 0.15² µm²; with the whole local part, 1.5²/64, taken out nothing would be left.
    assert np.mean(variances) == pytest.approx(0.15**2, rel=0.3)


def test_cells_with_terms_of_their_own_become_priors(rng):
    pilot = Pilot("affine", panels=8, each=0.5, per_side=18, repeats=2)
    readings, _ = pilot.readings(rng)
    found = characterise(pilot.layout, readings)
    assert found.choice.each == ("exposure",)
    assert found.each_sd["exposure.translation_x"] == pytest.approx(0.5, rel=0.2)
    assert found.each_sd["exposure.magnification"] < 1.5 and found.priors["exposure.translation_x"][0] == 0.0
    toml = tomllib.loads(process_toml(found))
    assert toml["model"]["exposure"]["each"] == ["translation_x", "translation_y", "magnification", "rotation"]
    assert len(found.model) == 6 + 64 and len(found.terms) == 6


def test_outliers_are_named(rng):
    pilot = Pilot(panels=3, lost=0.01)
    readings, _ = pilot.readings(rng)
    dxy = readings.dxy_um.copy()
    dxy[[10, 250]] += [[4.0, 0.0], [0.0, -5.0]]
    spoiled = Readings(readings.sites, readings.site, readings.panel, dxy, readings.repeat, readings.panel_names, readings.lot,
                       readings.lot_names, readings.repeat_names)
    found = characterise(pilot.layout, spoiled)
    named = {(flag.panel, flag.id, flag.axis): flag.studentised for flag in found.outliers}
    ids = readings.sites.id[readings.site]
    assert named[("P00", ids[10], "dx")] > 8 and named[("P01", ids[250], "dy")] < -8 and len(named) <= 4
    assert found.choice.family == "trapezoid" and np.isnan(found.residual_um[spoiled.averaged().dxy_um[:, 1] < -50]).all()


GRIDS = [("dist_lookup.fits.gz", "WCSDVARR"), ("ie6d07ujq_wcs.fits", "D2IMARR")]


@pytest.mark.parametrize(("name", "extension"), GRIDS)
def test_measured_distortion_grids(name, extension):
    """Two measured detector distortions of the astropy package, stretched to panel size: purely local, smooth over a few
    nodes. No order removes anything, neighbours are alike, and the recommendation says so."""
    import astropy.wcs
    from astropy.io import fits

    with fits.open(Path(astropy.wcs.__file__).parent / "tests" / "data" / name) as file:
        dx, dy = (np.asarray(file[extension, k].data, float)[::2, ::2] for k in (1, 2))
    rows, columns = dx.shape
    width, height = 16.0 * columns, 16.0 * rows
    xy = lattice(columns, rows, width - 16.0, height - 16.0)
    layout = Layout("detector", width, height, lattice(2, 2, width, height)[[0, 1, 3, 2]], 0.0, (), (),
                    Sites.at(np.array([f"n{i}" for i in range(len(xy))]), xy))
    readings = Readings.of(layout, ["detector"] * len(xy), 20.0 * np.column_stack([dx.ravel(), dy.ravel()]), xy_mm=xy)
    found = characterise(layout, readings)
    assert found.choice.family == "similarity"
    plain = found.choice.plain
    for rung in plain:
        assert rung.residual_um == pytest.approx(plain[0].residual_um, rel=0.03)
    assert plain[-1].cells_um > plain[0].cells_um
    for axis in found.axes:
        assert axis.moran.p_value == 0.001 and axis.moran.i > 0.3 and axis.correlated
        assert axis.smooth.bounded and 10 < axis.smooth.range_mm < 60
        assert axis.smooth.nugget_um2 < 0.5 * axis.smooth.sill_um2
    assert found.variation is None and "one panel only" in found.notes[-1]
    toml = tomllib.loads(process_toml(found))
    assert toml["noise"]["local_range_mm"] == pytest.approx(found.noise.local_range_mm, rel=1e-5)
    assert "prior" not in toml and "variation" not in toml


def test_process_file_holds_what_was_found(rng):
    pilot = Pilot(panels=8, lots=2, repeats=2, shared=3.0, lost=0.02, lot_terms=1.0)
    readings, _ = pilot.readings(rng)
    found = characterise(pilot.layout, readings)
    toml = tomllib.loads(process_toml(found))
    assert toml["model"]["panel"] == ["affine", "trapezoid"]
    assert toml["model"]["exposure"] == {"shared": ["scale_x", "scale_y", "rotation", "orthogonality"]}
    assert toml["noise"]["mark_um"] == pytest.approx(found.noise.mark_um, rel=1e-5)
    priors = {prior["terms"][0]: (prior["mean"], prior["sd"]) for prior in toml["prior"]}
    assert priors.keys() == found.priors.keys() and "exposure.scale_x" in priors
    for name, pair in priors.items():
        assert pair == pytest.approx(found.priors[name], rel=1e-5)
    assert np.array(toml["variation"]["panel_covariance"]) == pytest.approx(found.variation.panel, rel=1e-4, abs=1e-12)
    assert np.array(toml["variation"]["lot_covariance"]) == pytest.approx(found.variation.lot, rel=1e-4, abs=1e-12)
    assert toml["variation"]["terms"] == list(found.terms.names) and toml["variation"]["lots"] == 2
    assert toml["read_rate"][0]["rate"] == pytest.approx(0.98, abs=0.01)


def test_without_repeats_the_split_is_said_to_be_assumed(rng):
    readings, _ = Pilot(panels=3, local_um=(0.4, 0.4)).readings(rng)
    layout = Pilot().layout
    alone = characterise(layout, readings)
    assert alone.noise.local_um == (0.0, 0.0) and alone.noise.mark_um[0] == pytest.approx(np.hypot(0.25, 0.4), rel=0.1)
    assert "cannot be told apart" in alone.notes[0]
    told = characterise(layout, readings, Noise((0.25, 0.25)))
    assert told.noise.mark_um == (0.25, 0.25) and told.noise.local_um[1] == pytest.approx(0.4, rel=0.1)
    assert "study's 0.25 µm" in told.notes[0]


def test_bad_pilots(rng):
    pilot = Pilot(panels=3)
    readings, _ = pilot.readings(rng)
    keep = np.r_[0:196, 196:199, 392:588]  # the second panel has three marks
    cut = Readings.of(pilot.layout, np.array(readings.panel_names)[readings.panel[keep]], readings.dxy_um[keep],
                      id=readings.sites.id[readings.site[keep]])
    found = characterise(pilot.layout, cut)
    assert found.panel == ("P00", "P02") and found.skipped[0][0] == "P01" and "too few for any model" in found.skipped[0][1]
    assert any("one lot only" in note for note in found.notes)
    with pytest.raises(InputError, match="too few"):
        characterise(pilot.layout, Readings.of(pilot.layout, ["P"] * 2, np.ones((2, 2)), id=pilot.layout.marks.id[:2]))
    single = characterise(pilot.layout, Readings.of(
        pilot.layout, [f"P{i}" for i in readings.panel], readings.dxy_um, id=readings.sites.id[readings.site],
        lot=[f"L{i}" for i in readings.panel]))
    assert any("one panel in every lot" in note for note in single.notes) and single.priors == {}
    row = np.flatnonzero(np.abs(pilot.layout.marks.xy_mm[:, 1] + 244.5) < 1)  # marks on one line determine no affine panel
    line = np.r_[0:196, 196 + row, 392:588]
    found = characterise(pilot.layout, Readings.of(pilot.layout, readings.panel[line].astype(str), readings.dxy_um[line],
                                                   id=readings.sites.id[readings.site[line]]))
    assert found.skipped[0][0] == "1" and "cannot be told apart" in found.skipped[0][1]


def test_same_answer_every_time_and_in_any_order(rng):
    pilot = Pilot(panels=3, repeats=2, local_um=(0.4, 0.4), range_mm=60.0, per_side=10)
    readings, _ = pilot.readings(rng)
    first, again = characterise(pilot.layout, readings), characterise(pilot.layout, readings)
    assert process_toml(first) == process_toml(again)
    order = np.concatenate([rng.permutation(np.flatnonzero(readings.panel == p)) for p in range(3)])
    shuffled = Readings.of(pilot.layout, readings.panel[order].astype(str), readings.dxy_um[order],
                           id=readings.sites.id[readings.site[order]])
    other = characterise(pilot.layout, shuffled)
    assert other.theta == pytest.approx(first.theta, abs=1e-9) and other.noise.mark_um == pytest.approx(first.noise.mark_um)


def test_progress_is_told(rng):
    said = []
    readings, _ = Pilot(panels=1, per_side=8).readings(rng)
    characterise(core_layout(8), readings, progress=said.append)
    assert len(said) == 4


def test_share_that_repeats_counts_no_reading_noise(rng):
    """Local 0.4 µm, half of its variance common, read twice with 0.6 µm: the share is one half, not what noise makes of it."""
    layout = core_layout(12)
    found = []
    for _ in range(10):
        local = 0.4 * np.sqrt(0.5) * (rng.normal(size=(1, 144, 2)) + rng.normal(size=(10, 144, 2)))
        y = local[:, None] + 0.6 * rng.normal(size=(10, 2, 144, 2))
        readings = Readings.of(layout, np.repeat(np.arange(10), 288), y.reshape(-1, 2), id=np.tile(layout.marks.id, 20))
        means = readings.averaged()
        found.append(repeats_share(means, means.dxy_um[:, 0], 0, 0.36))
    assert np.mean(found) == pytest.approx(0.5, abs=0.06)


def test_share_without_common_marks_is_not_known(rng):
    readings = Readings.of(core_layout(5), ["a", "b"], rng.normal(size=(2, 2)), id=core_layout(5).marks.id[:2])
    means = readings.averaged()
    assert np.isnan(repeats_share(means, means.dxy_um[:, 0], 0, 0.0))


def test_readings_file(tmp_path, rng):
    layout = core_layout(5)
    path = tmp_path / "pilot.csv"
    path.write_text("panel;id;dx_um;dy_um;lot\nA;E-0;0,5;-1,25;x\nA;E-1;;nan;x\nB;E-0;1;2;y\n", encoding="utf-8")
    readings = read_readings(path, layout)
    assert readings.panel_names == ("A", "B") and readings.lot_names == ("x", "y")
    assert readings.dxy_um[0].tolist() == [0.5, -1.25] and readings.lost.tolist() == [False, True, False]
    x, y = layout.marks.xy_mm[7]
    path.write_text(f"panel,x_mm,y_mm,dx_um,dy_um\nA,{x},{y},1,2\n", encoding="utf-8")
    assert read_readings(path, layout).sites.id.tolist() == ["E-7"]
    path.write_text("panel,x_mm,dx_um,dy_um\nA,1,1,2\n", encoding="utf-8")
    with pytest.raises(InputError, match="only one of x_mm and y_mm"):
        read_readings(path, layout)
    path.write_text("panel,id,dx_um\nA,E-1,1\n", encoding="utf-8")
    with pytest.raises(InputError, match="dy_um is missing"):
        read_readings(path, layout)

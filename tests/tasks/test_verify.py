"""The witness: right plans hold, wrong claims and fields that a model lacks fail, also on measured fields."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from invented_plans import core_layout, study_of

from sampler.errors import InputError
from sampler.estimation.readings import Readings
from sampler.model.basis import Model, ModelTerm
from sampler.panel.layout import Sites
from sampler.tasks.characterise import characterise
from sampler.tasks.question import knowledge_of, limits_achieved, question
from sampler.tasks.study import Measure, Potential, RegionLimit, TermLimit, TermPrior
from sampler.tasks.units import one_by_one
from sampler.tasks.verify import Claim, verify
from sampler.uncertainty.noise import Noise

LIMITS = (TermLimit(("scale_x", "rotation"), 9.0), RegionLimit("panel", 4.0))


def claims(study, rows):
    """Sites and what an audit says of them, as claims."""
    asked = question(study)
    knowledge = knowledge_of(asked, one_by_one(rows))
    u = study.coverage_factor * np.sqrt(knowledge.variance(np.eye(asked.assumed.size)[:len(study.model)]))
    said = [Claim(name, unit, float(k_u)) for name, unit, k_u in zip(study.model.names, study.model.units, u, strict=True)]
    said += [Claim(item.label, item.unit, item.predicted, item.maximum, item.where_mm, ("dx", "dy").index(item.axis))
             for item in limits_achieved(asked, knowledge) if item.where_mm is not None]
    assert len(asked.candidates.sites) == len(study.layout.marks)
    return study.layout.marks.take(rows), tuple(said)


CASES = {
    "white noise": {},
    "a local field": {"noise": Noise((0.2, 0.2), (0.4, 0.3), 150.0)},
    "displacement": {"noise": Noise((0.2, 0.2), (0.4, 0.3), 120.0), "limits": (RegionLimit("panel", 4.0, of="displacement"),)},
    "priors and potential terms": {"priors": (TermPrior(("scale_x", "scale_y"), 0.6, 20.0),),
                                   "potential": Potential(Model((ModelTerm("dx_x2"),)), 0.3)},
    "errors of a side": {"measure": Measure(side_um=(0.2, 0.1), stop_um=(0.1, 0.1))},
}


@pytest.mark.parametrize("case", CASES)
def test_right_claims_hold(case):
    study = replace(study_of(core_layout(10), limits=LIMITS), **CASES[case])
    found = verify(study, *claims(study, np.arange(0, 100, 7)), panels=1500)
    assert found.held and found.summary.startswith("the plan held"), found.summary
    assert all(0.93 <= item.coverage <= 0.97 for item in found.checked)
    assert 0.05 < found.detectable < 0.12


def test_wrong_claims_fail():
    study = study_of(core_layout(10), limits=LIMITS)
    sites, said = claims(study, np.arange(0, 100, 7))
    for factor in (0.85, 1.2):
        wrong = (replace(said[2], k_u=said[2].k_u * factor), *said[:2], *said[3:])
        found = verify(study, sites, wrong, panels=2000)
        assert not found.held and [item.claim.label for item in found.checked if not item.held] == ["scale_x"]
        assert "scale_x" in found.summary
    elsewhere = replace(said[-1], where_mm=(0.0, 0.0), k_u=said[-1].k_u / 2)
    found = verify(study, sites, (*said[:-1], elsewhere))
    assert not found.held and "claimed at most" in found.worse[0]
    with pytest.raises(InputError, match="do not determine"):
        verify(study, sites.take(np.arange(3)), said)


def test_lost_marks_cost_what_they_cost(rng):
    study = replace(study_of(core_layout(10), limits=LIMITS), measure=Measure(read_rate=(("", 0.9),)))
    sites, said = claims(study, np.arange(0, 100, 7))
    found = verify(study, sites, said, panels=1000)
    assert found.held and found.losses.lost_any == pytest.approx(1 - 0.9 ** len(sites), abs=0.05)
    assert found.losses.coverage == pytest.approx(0.9545, abs=0.02) and found.losses.missed == 0.0
    tight = replace(study, limits=(RegionLimit("panel", said[-1].k_u * 1.02),))
    assert verify(tight, sites, said, panels=500).losses.missed > 0.3


def test_bias_of_terms_that_the_model_lacks():
    """A plan in one quarter of the panel is biased by more than one all over it; the bias grows with the amplitude."""
    study = study_of(core_layout(10), ("affine",), LIMITS[:1])
    spread = verify(study, *claims(study, np.array([0, 9, 45, 54, 90, 99])), panels=100, lacks_um=0.5)
    corner = verify(study, *claims(study, np.array([0, 1, 2, 10, 11, 22])), panels=100, lacks_um=0.5)
    assert spread.lacking == "trapezoid" and len(spread.biases) == 6
    assert corner.biases[2].bias > 2 * spread.biases[2].bias
    twice = verify(study, *claims(study, np.array([0, 9, 45, 54, 90, 99])), panels=100, lacks_um=1.0)
    assert [bias.bias for bias in twice.biases] == pytest.approx([2 * bias.bias for bias in spread.biases])


GRIDS = [("dist_lookup.fits.gz", "WCSDVARR"), ("ie6d07ujq_wcs.fits", "D2IMARR")]


@pytest.mark.parametrize(("name", "extension"), GRIDS)
def test_measured_distortion_grids_from_pilot_to_plan(name, extension, rng):
    """The astropy package's two measured distortions as pilot: with what characterise says of them a set of sites holds on
    the pilot and on simulated panels; taken as noise of the single mark, or left out, it fails."""
    import astropy.wcs
    from astropy.io import fits

    with fits.open(Path(astropy.wcs.__file__).parent / "tests" / "data" / name) as file:
        found = [np.asarray(hdu.data, float) for hdu in file if hdu.name == extension][:2]
    step = max(1, min(found[0].shape) // 16)
    dxy = np.stack([part[::step, ::step] for part in found], axis=-1)
    dxy = dxy[:24, :24]
    rows, columns = dxy.shape[:2]
    scale = 0.5 / dxy.std(axis=(0, 1)).max()
    x, y = np.meshgrid(np.linspace(-240, 240, columns), np.linspace(-240, 240, rows))
    marks = Sites.at(np.array([f"G{i}" for i in range(x.size)]), np.stack([x.ravel(), y.ravel()], axis=1))
    layout = replace(core_layout(), marks=marks)
    truth = (dxy * scale).reshape(-1, 2)
    panels = 4
    read = np.tile(truth, (panels, 1)) + 0.05 * rng.normal(size=(panels * len(truth), 2))
    pilot = Readings.of(layout, np.repeat([f"P{i}" for i in range(panels)], len(truth)), read, id=np.tile(marks.id, panels))
    process = characterise(layout, pilot)
    study = replace(study_of(layout, limits=()), model=process.model, noise=process.noise, limits=(RegionLimit("panel", 50.0),))
    sites, said = claims(study, np.arange(0, len(truth), 9))
    right = verify(study, sites, said, panels=600, pilot=pilot)
    assert all(item.held for item in right.checked), right.summary
    covered = np.mean([item.coverage for item in right.checked])
    assert 0.93 <= covered <= 0.97
    quiet = replace(study, noise=Noise((0.05, 0.05)))
    wrong = verify(quiet, *claims(quiet, np.arange(0, len(truth), 9)), panels=600, pilot=pilot)
    assert not wrong.held and all(item.held for item in wrong.checked) and "pilot" not in wrong.summary.split(":")[0]
    assert max(item.ratio for item in wrong.pilot) > 2

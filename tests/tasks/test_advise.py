"""Advice where something beside the corrected terms is assumed: what is advised is enough, and floors are called so."""

from __future__ import annotations

from dataclasses import replace

from invented_plans import core_layout

from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.tasks.plan import plan
from sampler.tasks.study import Measure, Study, TermLimit
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))


def smooth(limit):
    return Study("invented", core_layout(6), AFFINE, Noise((0.3, 0.4), (0.2, 0.2), 200.0), (TermLimit(("scale_x",), limit),))


def test_the_reading_noise_that_is_advised_is_enough():
    tight = next(limit for limit in (1.8, 1.5, 1.2, 1.0) if plan(smooth(limit)).status == "cannot")
    advised = next(line for line in plan(smooth(tight)).advice if "mark_um to" in line)
    marks = tuple(float(value) for value in advised.split("[")[1].split("]")[0].split(","))
    assert plan(replace(smooth(tight), noise=replace(smooth(tight).noise, mark_um=marks))).status != "cannot"


def test_a_floor_that_readings_do_not_lower():
    study = replace(smooth(1.0), measure=Measure(side_um=(0.5, 0.5)), limits=(TermLimit(("translation_x",), 1.2),))
    result = plan(study)
    assert result.status == "cannot"
    assert result.audit.limits[0].predicted > 1.5, "three times the side's own error"
    assert any("shared errors set its floor, and no number of sites beats it" in line for line in result.advice)
    assert not any("× as many marks" in line for line in result.advice)

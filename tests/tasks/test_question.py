"""A study as numbers: limit rows, readings, priors, local field, and what is said when terms cannot be told apart."""

from __future__ import annotations

from dataclasses import fields, replace
from typing import get_args, get_type_hints

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import InputError
from sampler.model.basis import Model, ModelTerm, places
from sampler.model.terms import FAMILIES
from sampler.tasks.question import achieved as audit_of
from sampler.tasks.question import assumed_of, limits_achieved, question
from sampler.tasks.question import knowledge_of as knowledge_of_visits
from sampler.tasks.study import Potential, RegionLimit, SearchOptions, Study, TermLimit, TermPrior
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))
TERMS = TermLimit(("scale_x", "rotation"), 2.0)
PANEL = RegionLimit("panel", 1.5)


def achieved(asked, rows):
    return audit_of(asked, asked.units.visits(rows))


def knowledge_of(asked, rows):
    return knowledge_of_visits(asked, asked.units.visits(rows))


def study(*limits, per_side=9, **changes):
    plain = Study("invented", core_layout(per_side), AFFINE, Noise((0.3, 0.4), (0.4, 0.3)), limits or (TERMS, PANEL))
    return replace(plain, **changes)


def test_every_kind_of_limit_has_rows_and_an_audit_line():
    """A new kind of limit in Study must be given an example here, rows, and a line in the audit."""
    examples = {TermLimit: TERMS, RegionLimit: PANEL}
    annotation = get_type_hints(Study)["limits"]
    kinds = set(get_args(get_args(annotation)[0]))
    assert kinds == set(examples)
    for limit in examples.values():
        asked = question(study(limit))
        assert len(asked.limits) >= 1
        assert limits_achieved(asked, knowledge_of(asked, np.arange(asked.n)))


def test_rows_of_a_term_limit():
    asked = question(study(TERMS))
    assert asked.limits.label == ("scale_x", "rotation")
    assert asked.limits.unit == ("ppm", "µrad")
    assert asked.limits.tau == pytest.approx([2 / 3, 2 / 3])
    assert asked.limits.directions.tolist() == np.eye(6)[[2, 4]].tolist()


def test_rows_of_a_region_predict_its_position():
    asked = question(study(PANEL))
    u = 3 * np.sqrt(knowledge_of(asked, np.arange(20)).variance(asked.limits.directions))
    (audited,) = limits_achieved(asked, knowledge_of(asked, np.arange(20)))
    assert u.max() <= audited.predicted * (1 + 1e-12)
    assert u.max() >= audited.predicted * 0.99
    assert np.isfinite(asked.limits.where_mm).all()
    assert set(asked.limits.axis) == {0, 1}


def test_readings_are_whitened_by_both_parts_of_the_noise():
    asked = question(study())
    assert asked.whitened[:, 0, 0] == pytest.approx(1 / 0.5)
    assert asked.whitened[:, 1, 1] == pytest.approx(1 / 0.5)


def test_alike_terms_are_named():
    two = Model((*AFFINE.terms, ModelTerm("magnification")))
    with pytest.raises(InputError, match="`magnification`"):
        question(study(model=two))


def test_no_candidates_say_why():
    with pytest.raises(InputError, match=r"no mark may be measured .*edge exclusion"):
        question(study(layout=replace(core_layout(8), edge_exclusion_mm=250.0)))


def test_a_prior_takes_part():
    free, told = question(study()), question(study(priors=(TermPrior(("rotation",), 0.1),)))
    rows = np.array([0, 8, 72, 80])
    before = {term.name: term.k_u for term in achieved(free, rows).terms}
    after = {term.name: term.k_u for term in achieved(told, rows).terms}
    assert after["rotation"] < before["rotation"]
    assert after["rotation"] <= 3 * 0.1
    assert after["scale_x"] == pytest.approx(before["scale_x"])


def test_potential_terms_cost_certainty_and_report_a_bias():
    potential = Potential(Model((ModelTerm("dx_x3"), ModelTerm("dy_y3"))), 0.2)
    plain, guarded = question(study()), question(study(potential=potential))
    rows = np.array([0, 4, 8, 40, 72, 76, 80])
    before, after = achieved(plain, rows), achieved(guarded, rows)
    assert after.terms[2].k_u > before.terms[2].k_u  # scale_x now shares readings with dx_x3
    # By hand: dx = s x + c u³ fitted by s alone at the chosen x; the alias is Σ x u³ / Σ x² (a line through zero,
    # since the chosen x are symmetric).
    x = plain.candidates.sites.xy_mm[rows, 0]
    alias = np.sum(x * (x / 255.0) ** 3) / np.sum(x**2) * 1e3
    assert after.terms[2].bias == pytest.approx(0.2 * abs(alias))
    assert before.terms[2].bias == 0.0


def test_the_local_field_sets_a_floor():
    """Correlated distortion does not average out: with all marks measured the scale is worse than white noise says."""
    white = study(per_side=18)
    smooth = replace(white, noise=replace(white.noise, local_range_mm=120.0))
    everything = np.arange(324)
    floor_white = achieved(question(white), everything).terms[2].k_u
    floor_smooth = achieved(question(smooth), everything).terms[2].k_u
    assert floor_smooth > 2.5 * floor_white


def test_field_against_the_full_covariance():
    """Generalised least squares with the field's full covariance, by its textbook formula, gives the same uncertainty."""
    smooth = study(noise=Noise((0.3, 0.3), (0.4, 0.4), 150.0))
    asked = question(smooth)
    rows = np.arange(0, asked.n, 3)
    xy = asked.candidates.sites.xy_mm[rows]
    covariance = 0.3**2 * np.eye(len(xy)) + 0.4**2 * np.exp(-((xy[:, None] - xy) ** 2).sum(axis=2) / (2 * 150.0**2))
    design = np.stack([np.ones(len(xy)), xy[:, 0] * 1e-3, -xy[:, 1] * 1e-3], axis=1)
    u_scale = np.sqrt(np.linalg.inv(design.T @ np.linalg.solve(covariance, design))[1, 1])
    assert achieved(asked, rows).terms[2].k_u == pytest.approx(3 * u_scale, rel=0.02)


def test_displacement_counts_the_local_part():
    noise = Noise((0.3, 0.3), (0.4, 0.4), 100.0)
    correction, displacement = (question(study(replace(PANEL, of=of), noise=noise)) for of in ("correction", "displacement"))
    few = np.array([0, 8, 72, 80])
    near, far = (limits_achieved(asked, knowledge_of(asked, few))[0] for asked in (correction, displacement))
    assert far.predicted > near.predicted
    assert far.label == "displacement over the panel"
    assert far.predicted >= 3 * 0.4 * 0.9  # far from the four corners the local part is not known at all


def test_assumed_lists_what_it_holds():
    potential = Potential(Model((ModelTerm("dx_x3"),)), 0.2)
    assumed = assumed_of(study(potential=potential, noise=Noise((0.3, 0.3), (0.4, 0.4), 200.0)))
    assert assumed.size == 6 + 1 + 2 * assumed.field.rank
    assert np.diag(assumed.prior_precision)[:7] == pytest.approx([0] * 6 + [25.0])
    assert assumed.interest.sum() == 6


def test_values_are_frozen():
    assert all(field.name for field in fields(Study))
    with pytest.raises(AttributeError):
        study().title = "other"


def test_a_million_row_region_limit_is_thinned_and_still_met_everywhere(rng):
    """The rows held are few, the audit sees all 500,000 points (10⁶ rows), and memory stays far below a gigabyte."""
    import tracemalloc

    from sampler.panel.layout import Sites
    from sampler.tasks.plan import plan

    xy = rng.uniform(-247, 247, (500_000, 2))
    layout = replace(core_layout(9), marks=Sites.at(np.array([f"M{i}" for i in range(len(xy))]), xy), grids=())
    asked_of = study(RegionLimit("marks", 1.5), layout=layout, search=SearchOptions(seconds=8))
    tracemalloc.start()
    asked = question(asked_of)
    result = plan(asked_of, asked=asked)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert len(asked.rasters[0]) == 500_000
    assert len(asked.limits) < 25_000
    assert peak < 1e9
    assert result.audit.meets_limits
    assert 2.9 < result.lower_bound <= len(result.sites) <= 6
    u = 3 * np.sqrt(knowledge_of_visits(asked, asked.units.visits(np.flatnonzero(np.isin(asked.units.key, result.sites.id))))
                    .variance(asked.assumed.position(places(layout, xy), "correction").reshape(-1, 6)))
    assert u.max() <= 1.5 * (1 + 1e-9)

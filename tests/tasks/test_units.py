"""Stops as readings: correlated noise whitened exactly, shared marks read once, rules on stops."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import InputError
from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.tasks.question import achieved, everything, problem_of, question
from sampler.tasks.study import CellRule, Measure, RegionLimit, Rules, Study, TermLimit, ZoneRule
from sampler.tasks.units import correlated
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))


def study(per_side=9, **changes):
    plain = Study("invented", core_layout(per_side), AFFINE, Noise((0.3, 0.4), (0.1, 0.2)),
                  (TermLimit(("scale_x",), 2.0), RegionLimit("panel", 1.5)))
    return replace(plain, **changes)


def test_correlated_readings_by_the_full_covariance(rng):
    """RᵀR of the rows equals FᵀΣ⁻¹F with Σ = D² + s²·11ᵀ within each stop and axis."""
    stop = np.array([0, 0, 0, 1, 2, 2])
    blocks, sigma, shared = rng.normal(size=(6, 2, 4)), rng.uniform(0.2, 1, (6, 2)), np.array([0.5, 0.8])
    rows = correlated(blocks / sigma[:, :, None], shared / sigma, stop, 3)
    assert rows.shape == (3, 6, 4)
    for index in range(3):
        expected = np.zeros((4, 4))
        for axis in (0, 1):
            design = blocks[stop == index, axis]
            covariance = np.diag(sigma[stop == index, axis] ** 2) + shared[axis] ** 2
            expected += design.T @ np.linalg.solve(covariance, design)
        assert rows[index].T @ rows[index] == pytest.approx(expected)


def test_a_stop_of_one_mark_is_a_mark_with_more_noise():
    marks = question(study(measure=Measure(stop_um=(0.3, 0.4))))
    stops = question(study(measure=Measure(stop_um=(0.3, 0.4), field_of_view_mm=(1.0, 1.0))))
    assert len(stops.units) == len(marks.units) == 81
    rows = np.arange(0, 81, 7)
    place = {key: unit for unit, key in enumerate(stops.units.key)}
    same = np.array([place[key] for key in marks.units.key[rows]])
    terms = [achieved(asked, asked.units.visits(chosen)).terms for asked, chosen in ((marks, rows), (stops, same))]
    assert [term.k_u for term in terms[0]] == pytest.approx([term.k_u for term in terms[1]])


def test_a_mark_in_two_chosen_stops_is_read_once():
    asked = question(study(measure=Measure(field_of_view_mm=(70.0, 70.0))))
    visits = asked.units.visits(np.arange(12))
    assert len(np.unique(visits.marks)) == len(visits.marks)
    listed = np.concatenate([asked.units.stops.marks(unit) for unit in range(12)])
    assert set(visits.marks) == set(listed)
    assert len(listed) > len(visits.marks), "these stops do share marks"
    # The audit never knows more than the search believed.
    problem = problem_of(asked)
    believed = np.einsum("imp,imq->pq", problem.blocks[:12], problem.blocks[:12])
    audited = asked.units.readings(visits, asked.whitened)
    audited = np.einsum("imp,imq->pq", audited, audited)
    assert np.linalg.eigvalsh(believed - audited).min() > -1e-9


def test_everything_reads_every_mark():
    asked = question(study(measure=Measure(field_of_view_mm=(70.0, 70.0))))
    assert len(everything(asked).marks) == 81


def test_read_rate_lends_its_share_of_information():
    layout = core_layout(9)
    marks = replace(layout.marks, read_rate=np.full(81, 0.25))
    asked = question(study(layout=replace(layout, marks=marks)))
    full = question(study())
    assert problem_of(asked).blocks == pytest.approx(0.5 * problem_of(full).blocks)
    assert asked.whitened == pytest.approx(full.whitened)


def test_rate_of_a_kind_applies_where_a_mark_has_none():
    layout = core_layout(9)
    kind = np.array(["hole"] * 40 + ["cross"] * 41)
    rate = np.where(np.arange(81) < 5, 0.5, 1.0)
    marks = replace(layout.marks, kind=kind, read_rate=rate)
    asked = question(study(layout=replace(layout, marks=marks), measure=Measure(read_rate=(("hole", 0.9),))))
    assert asked.candidates.sites.read_rate.tolist() == [0.5] * 5 + [0.9] * 35 + [1.0] * 41


def two_sided():
    layout = core_layout(10)
    side = np.where(np.arange(100) % 2, "back", "front")
    return replace(layout, marks=replace(layout.marks, side=side))


def test_sides():
    both, front = (question(study(layout=two_sided(), measure=Measure(side=side))) for side in ("both", "front"))
    assert (len(both.units), len(front.units)) == (100, 50)
    assert front.candidates.counts() == {"not on the front side": 50}


def test_errors_shared_by_a_side_or_by_turning_over_have_priors():
    measure = Measure(side_um=(0.2, 0.3), flip_um=(1.0, 1.0))
    asked = question(study(layout=two_sided(), measure=measure))
    assert asked.assumed.shared.sides == (("front",), ("back",), ("back",))
    assert asked.assumed.size == 12
    plain = question(study(layout=two_sided()))
    terms = [achieved(a, everything(a)).terms[0].k_u for a in (plain, asked)]
    # translation_x cannot be better known than the front's own offset allows: 3 × 0.2 µm and a little more
    assert terms[0] < 0.2 < 0.55 < terms[1]
    one_side = question(study(layout=two_sided(), measure=replace(measure, side="front")))
    assert one_side.assumed.shared.sides == (("front",),)


def test_required_marks_with_stops_are_rules_on_stops():
    asked = question(study(measure=Measure(field_of_view_mm=(70.0, 70.0)), rules=Rules(required=("E-40",))))
    assert not asked.rules.required.any()
    (members,) = asked.rules.counts.members
    row = int(np.flatnonzero(asked.candidates.sites.id == "E-40")[0])
    assert all(row in asked.units.stops.marks(unit) for unit in members)


def test_rules_by_kind_cell_and_zone():
    layout = core_layout(9)
    kind = np.where(np.arange(81) == 3, "corner", "cross")
    zone = ZoneRule("left", np.array([[-255.0, -257], [0, -257], [0, 257], [-255, 257]]), 2, 20)
    rules = Rules(required_kinds=("corner",), per_cell=(CellRule("exposure", 1, 3),), per_zone=(zone,))
    asked = question(study(layout=replace(layout, marks=replace(layout.marks, kind=kind)), rules=rules))
    assert np.flatnonzero(asked.rules.required).tolist() == [3]
    assert len(asked.rules.counts.members) == 17
    assert asked.rules.counts.lower.tolist() == [1.0] * 16 + [2.0]
    assert asked.rules.counts.upper.tolist() == [3.0] * 16 + [20.0]
    assert (asked.candidates.sites.xy_mm[asked.rules.counts.members[-1], 0] <= 0).all()


def test_forbidden_marks_are_not_candidates():
    asked = question(study(rules=Rules(forbidden=("E-40",))))
    assert "E-40" not in asked.candidates.sites.id
    assert asked.candidates.counts() == {"forbidden by [rules]": 1}


@pytest.mark.parametrize(("rules", "said"), [
    (Rules(required=("E-0", "E-1"), max_sites=1), ["required \"E-0\"", "required \"E-1\"", "max_sites = 1"]),
    (Rules(per_cell=(CellRule("exposure", 1),), max_sites=15), ["per_cell exposure", "max_sites = 15"]),
    (Rules(required=("E-0", "E-1"), min_spacing_mm=100.0), ["min_spacing_mm = 100"]),
    (Rules(per_cell=(CellRule("exposure", 9),)), ["per_cell exposure, cell", "at least 9", "at all"]),
])
def test_contradictory_rules_are_named(rules, said):
    with pytest.raises(InputError) as error:
        question(study(rules=rules))
    assert all(word in str(error.value) for word in said)

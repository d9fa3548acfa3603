"""What a review looks at: the cost of each loss against dropping sites one by one, and the plan read back."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_plans import core_layout, pick, study_of

from sampler.errors import InputError
from sampler.panel.layout import Sites
from sampler.tasks.question import achieved, knowledge_of, question
from sampler.tasks.results import Plan
from sampler.tasks.review import Claims, TradeOffPoint, _alone, _visits, losses, recalled, review
from sampler.tasks.study import Measure, Potential, RegionLimit, Source, TermLimit
from sampler.uncertainty.information import information
from sampler.uncertainty.noise import Noise

HERE = Source("studies/a.toml", "a" * 64)
CLAIMS = Claims("interval", 9.2, 0.97, 1.5, HERE, HERE)
POLYGON = np.array([[-100.0, -100.0], [150.0, -80.0], [0.0, 160.0]])


def a_study(**changes):
    limits = (TermLimit(("scale_x", "rotation"), 3.0), RegionLimit("panel", 1.0),
              RegionLimit("polygon", 0.7, POLYGON), TermLimit(("dy_xy",), 0.8))
    study = study_of(core_layout(7), limits=limits)
    return replace(study, source=HERE, layout_source=HERE, **changes)


def chosen(asked, count):
    ids = pick(asked.study, asked.candidates.sites, count).id.tolist()
    return np.array([asked.candidates.sites.id.tolist().index(name) for name in ids])


@pytest.mark.parametrize("changes", [
    {}, {"noise": Noise((0.25, 0.25), (0.4, 0.5), 120.0),
         "limits": (RegionLimit("panel", 1.0, of="displacement"), TermLimit(("scale_x",), 2.0))},
    {"potential": Potential(study_of(core_layout(7), ("dx_x2", "dy_y2")).model, 0.3)},
], ids=["plain", "local field", "potential terms"])
def test_a_loss_costs_what_the_audit_without_the_site_says(changes):
    asked = question(a_study(**changes))
    rows = chosen(asked, 11)
    visits = _visits(rows, None)
    found = losses(asked, visits, achieved(asked, visits))
    for i in range(len(rows)):
        without = achieved(asked, _visits(np.delete(rows, i), None))
        # The audit refines a region's worst place between raster points, by far less than 0.1 %.
        assert found.ratio[i] == pytest.approx(without.worst.ratio, rel=1e-3)
        assert without.limits[found.limit[i]].ratio == pytest.approx(without.worst.ratio, rel=1e-3)


def test_no_loss_helps(rng):
    asked = question(a_study())
    visits = _visits(rng.choice(asked.n, 15, replace=False), None)
    audit = achieved(asked, visits)
    assert (losses(asked, visits, audit).ratio >= audit.worst.ratio).all()
    # The audit knows the worst place between raster points, which the losses do not look at.
    between = replace(audit, limits=tuple(replace(limit, predicted=10 * limit.predicted) for limit in audit.limits))
    assert (losses(asked, visits, between).ratio >= between.worst.ratio).all()


def test_the_only_reading_of_a_term_is_no_longer_determined_when_lost():
    # Eight terms, four corners: every reading is the only one of its kind.
    asked = question(a_study(limits=(TermLimit(("dx_xy",), 1.0), RegionLimit("panel", 2.0))))
    ids = asked.candidates.sites.id.tolist()
    visits = _visits(np.array([ids.index(name) for name in ("E-0", "E-6", "E-42", "E-48")]), None)
    assert np.isinf(losses(asked, visits, achieved(asked, visits)).ratio).all()


def test_a_site_that_tells_nothing_of_the_limited_term_is_missed_least():
    asked = question(a_study(limits=(TermLimit(("scale_x",), 9.0),)))
    ids = asked.candidates.sites.id.tolist()
    visits = _visits(np.array([ids.index(name) for name in ("E-0", "E-6", "E-42", "E-48", "E-24")]), None)
    found = losses(asked, visits, achieved(asked, visits))
    # The centre tells scale_x next to nothing that the corners do not.
    assert np.isfinite(found.ratio).all() and found.ratio[4] < found.ratio[:4].min()


def test_an_undetermined_limit_stays_so():
    asked = question(a_study())
    visits = _visits(np.array([0, 1]), None)
    assert np.isinf(losses(asked, visits, achieved(asked, visits)).ratio).all()


def test_without_limits_there_is_nothing_to_miss():
    asked = question(a_study())
    visits = _visits(np.arange(9), None)
    assert len(losses(asked, visits, replace(achieved(asked, visits), limits=())).ratio) == 0


def stops_study():
    return a_study(measure=Measure(field_of_view_mm=(170.0, 170.0), stop_um=(0.3, 0.2)))


def test_a_mark_of_a_stop_is_lost_with_its_share_of_the_common_error():
    asked = question(stops_study())
    visits = asked.units.visits(np.array([0, 5, len(asked.units) - 1]))
    everything = information(asked.units.readings(visits, asked.whitened))
    alone = _alone(asked, visits)
    for i in range(len(visits.marks)):
        left = replace(visits, marks=np.delete(visits.marks, i), stop=np.delete(visits.stop, i))
        np.testing.assert_allclose(everything - alone[i].T @ alone[i],
                                   information(asked.units.readings(left, asked.whitened)), rtol=1e-9,
                                   atol=1e-9 * everything.max())


def test_a_plan_in_stops_is_read_back_with_its_stops():
    asked = question(stops_study())
    visits = asked.units.visits(np.array([3, 0, len(asked.units) - 1]))
    stops = asked.units.xy_mm[visits.unit]
    claims = replace(CLAIMS, stop=tuple((visits.stop + 1).tolist()), stop_xy_mm=tuple(map(tuple, stops.tolist())))
    plan = recalled(asked.study, asked.candidates.sites.id[visits.marks].tolist(), claims)
    assert plan.units == 3
    assert [limit.predicted for limit in plan.audit.limits] == pytest.approx(
        [limit.predicted for limit in achieved(asked, visits).limits])
    page = review(plan)
    assert page.chosen.count == 3 and len(page.chosen.losses.ratio) == len(visits.marks)
    np.testing.assert_array_equal(page.chosen.path_mm, stops)
    assert page.chosen.route.read_s == pytest.approx(3 * asked.study.machine.read_s)


def test_the_longest_read_of_a_stop_is_what_it_takes():
    study = stops_study()
    marks = study.layout.marks
    slow = Sites(*(getattr(marks, name) if name != "seconds" else np.arange(len(marks)) / 10.0 for name in marks.__slots__))
    asked = question(replace(study, layout=replace(study.layout, marks=slow)))
    visits = asked.units.visits(np.array([0, len(asked.units) - 1]))
    claims = replace(CLAIMS, stop=tuple((visits.stop + 1).tolist()),
                     stop_xy_mm=tuple(map(tuple, asked.units.xy_mm[visits.unit].tolist())))
    page = review(recalled(asked.study, asked.candidates.sites.id[visits.marks].tolist(), claims), asked=asked)
    assert page.chosen.route.read_s == pytest.approx(asked.units.read_s[visits.unit].sum())


def test_the_plan_is_read_back_with_its_claims_and_the_audit_of_its_sites():
    asked = question(a_study())
    rows = chosen(asked, 12)
    ids = asked.candidates.sites.id[rows].tolist()
    plan = recalled(asked.study, ids, replace(CLAIMS, warnings=("the model is wide",), interrupted=True))
    assert plan.sites.id.tolist() == ids and plan.lower_bound == 9.2 and plan.interrupted
    assert plan.warnings == ("the model is wide",)
    expected = achieved(asked, _visits(rows, None))
    assert [limit.predicted for limit in plan.audit.limits] == [limit.predicted for limit in expected.limits]
    assert all(limit.floor <= limit.predicted for limit in plan.audit.limits)


def test_changed_inputs_are_told():
    study = replace(a_study(), source=Source("studies/a.toml", "b" * 64))
    plan = recalled(study, ["E-0", "E-6", "E-42", "E-48"], CLAIMS)
    assert len(plan.warnings) == 1 and plan.warnings[0].startswith("the study changed since")


def test_sites_that_are_no_candidates_are_refused():
    with pytest.raises(InputError, match=r"the plan has sites that are no candidates of the study: X-1, .* and more"):
        recalled(a_study(), ["E-0", *(f"X-{i}" for i in range(1, 13))], CLAIMS)
    plan = recalled(a_study(), ["E-0", "E-6", "E-42", "E-48"], CLAIMS)
    with pytest.raises(InputError, match="the trade-off's point of 2 sites"):
        review(plan, points=[TradeOffPoint(("E-0", "gone"))])


def test_other_choices_come_by_count_with_their_audit_and_bound():
    asked = question(a_study())
    ids = asked.candidates.sites.id
    plan = recalled(asked.study, ids[chosen(asked, 12)].tolist(), CLAIMS, asked)
    points = [TradeOffPoint(tuple(ids[chosen(asked, n)].tolist()), bound) for n, bound in ((16, 0.6), (8, np.nan))]
    page = review(plan, points=points, command="sampler plan a.toml", version="1", asked=asked)
    assert [choice.count for choice in page.others] == [8, 16]
    assert page.others[1].ratio_at_least == 0.6 and np.isnan(page.others[0].ratio_at_least)
    for choice in page.others:
        assert len(set(choice.audit.sites.id)) == choice.count == len(choice.losses.ratio)
        rows = np.flatnonzero(np.isin(ids, choice.audit.sites.id))
        assert choice.audit.worst.ratio == pytest.approx(achieved(asked, _visits(rows, None)).worst.ratio)
        assert choice.audit.limits[0].floor == pytest.approx(plan.audit.limits[0].floor)


def test_the_map_of_ratios_agrees_with_the_limits():
    asked = question(a_study(limits=(RegionLimit("polygon", 0.5, POLYGON), RegionLimit("marks", 0.1))))
    rows = chosen(asked, 12)
    page = review(recalled(asked.study, asked.candidates.sites.id[rows].tolist(), CLAIMS, asked), asked=asked)
    ratio = page.limit_ratio
    inside = ~np.isnan(ratio)
    assert 0 < inside.sum() < 0.3 * ratio.size
    polygon, _ = page.plan.audit.limits
    assert np.nanmax(ratio) == pytest.approx(polygon.ratio, rel=0.02) and np.nanmax(ratio) <= polygon.ratio * (1 + 1e-9)
    worse = page.plan.audit.position.k_u_um.max(axis=2)
    np.testing.assert_allclose(ratio[inside], worse[inside] / 0.5, rtol=1e-12)


def test_what_cannot_be_met_has_no_choice_but_a_map():
    plan = recalled(a_study(limits=(RegionLimit("panel", 0.01),)), [], replace(CLAIMS, status="cannot", advice=("loosen it",)))
    page = review(plan)
    assert isinstance(plan, Plan) and page.chosen is None and page.others == () and plan.advice == ("loosen it",)
    assert np.nanmin(page.limit_ratio) > 1 and len(plan.sites) == 49


def test_knowledge_may_be_given():
    asked = question(a_study())
    visits = _visits(np.arange(10), None)
    audit = achieved(asked, visits)
    np.testing.assert_array_equal(losses(asked, visits, audit).ratio,
                                  losses(asked, visits, audit, knowledge_of(asked, visits)).ratio)

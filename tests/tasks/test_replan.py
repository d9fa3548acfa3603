"""Re-planning against enumeration, and its laws."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import InputError
from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.panel.layout import KeepOut, Sites
from sampler.tasks.plan import plan
from sampler.tasks.question import knowledge_of, limits_achieved, question
from sampler.tasks.replan import replan
from sampler.tasks.study import Measure, RegionLimit, SearchOptions, Study, TermLimit
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))


def study(marks, limits, **changes):
    layout = core_layout(9, marks=marks, grids=(), **changes)
    return Study("invented", layout, AFFINE, Noise((0.3, 0.3)), limits, search=SearchOptions(seconds=20))


def small(rng, n=11):
    xy = rng.uniform(-240, 240, (n, 2))
    marks = replace(Sites.at(np.array([f"S{i:02d}" for i in range(n)]), xy), sigma_um=rng.uniform(0.2, 0.6, (n, 2)))
    first = study(marks, (TermLimit(("scale_x",), 1.0),))
    asked = question(first)
    u = 3 * np.sqrt(knowledge_of(asked, asked.units.visits(np.arange(6))).variance(np.eye(6)))
    return replace(first, limits=tuple(TermLimit((name,), float(value)) for name, value in zip(AFFINE.names, u, strict=True)))


def of(planned):
    return planned.sites.id.tolist(), planned.sites.xy_mm - planned.study.layout.origin_mm


def by_enumeration(asked, old):
    """(fewest sites, fewest new among those, fewest new of any set)."""
    fewest, among, any_new = None, None, None
    for count in range(1, asked.n + 1):
        for rows in combinations(range(asked.n), count):
            new = sum(str(asked.candidates.sites.id[row]) not in old for row in rows)
            if fewest is not None and count > fewest and any_new is not None and new >= any_new:
                continue
            if all(limit.ratio <= 1 + 1e-9 for limit in
                   limits_achieved(asked, knowledge_of(asked, asked.units.visits(np.array(rows))))):
                fewest = fewest or count
                among = new if count == fewest and (among is None or new < among) else among
                any_new = new if any_new is None else min(any_new, new)
    return fewest, among, any_new


@pytest.mark.parametrize("seed", range(6))
def test_both_questions_against_enumeration(seed):
    rng = np.random.default_rng(seed)
    first = small(rng)
    planned = plan(first)
    kept = np.flatnonzero(~np.isin(first.layout.marks.id, planned.sites.id[:2]))  # two of its sites are gone
    second = replace(first, layout=replace(first.layout, marks=first.layout.marks.take(kept)))
    asked = question(second)
    if not all(limit.ratio <= 1 for limit in limits_achieved(asked, knowledge_of(asked, asked.units.visits(np.arange(asked.n))))):
        second = replace(second, limits=tuple(replace(limit, maximum=6 * limit.maximum) for limit in second.limits))
        asked = question(second)
    fewest, among, any_new = by_enumeration(asked, set(planned.sites.id.tolist()))
    result = replan(second, *of(planned))
    assert (len(result.plan.sites), result.count("added")) == (fewest, among)
    assert result.plan.fewest_proven
    assert result.new_at_least <= among
    assert result.new_proven
    other = replan(second, *of(planned), fewest_new=True)
    assert other.count("added") == any_new
    assert other.new_proven
    assert other.plan.audit.meets_limits


PANEL = (RegionLimit("panel", 0.6),)
MARKS = core_layout(9).marks


@pytest.fixture(scope="module")
def planned():
    return plan(study(MARKS, PANEL))


def test_an_unchanged_layout_gives_the_unchanged_plan(planned):
    result = replan(study(MARKS, PANEL), *of(planned))
    assert sorted(result.plan.sites.id) == sorted(planned.sites.id)
    assert {change.what for change in result.changes} == {"kept"}
    assert result.plan.fewest_proven
    assert result.new_proven
    assert result.before.meets_limits


def test_reasons(planned):
    names = planned.sites.id.tolist()
    gone, moved, blocked, renamed = names[:4]
    marks = MARKS.take(np.flatnonzero(MARKS.id != gone))
    xy = marks.xy_mm.copy()
    xy[marks.id == moved] += 1.0 * -np.sign(xy[marks.id == moved])
    name = np.where(marks.id == renamed, "renamed", marks.id)
    at = MARKS.xy_mm[MARKS.id == blocked][0]
    keep_out = KeepOut("new clamp", circle_mm=(float(at[0]), float(at[1]), 5.0))
    changed = study(replace(marks, id=name, xy_mm=xy), PANEL, keep_outs=(keep_out,))
    result = replan(changed, *of(planned))
    said = {change.id: (change.what, change.reason) for change in result.changes}
    assert said[gone] == ("dropped", "gone from the layout")
    assert said[blocked] == ("dropped", 'now inside keep-out "new clamp"')
    assert said[moved] == ("moved", "by 1.41 mm") or said[moved] == ("dropped", "no longer needed")
    assert said["renamed"] == ("kept", "now named renamed") or said[renamed] == ("dropped", "no longer needed")
    assert result.plan.audit.meets_limits


def test_most_new_caps_or_says_that_it_cannot(planned):
    names = planned.sites.id.tolist()
    marks = MARKS.take(np.flatnonzero(~np.isin(MARKS.id, names[:5])))
    free = replan(study(marks, PANEL), *of(planned))
    assert free.count("added") > 0
    capped = replan(study(marks, PANEL), *of(planned), most_new=0)
    assert capped.plan.status == "cannot"
    assert "--most-new" in capped.plan.advice[0]
    same = replan(study(marks, PANEL), *of(planned), most_new=free.count("added"))
    assert same.count("added") <= free.count("added")


def test_stops_are_refused(planned):
    with pytest.raises(InputError, match="counts stops"):
        replan(replace(study(MARKS, PANEL), measure=Measure(field_of_view_mm=(10.0, 10.0))), *of(planned))

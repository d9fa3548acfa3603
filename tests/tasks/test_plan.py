"""The main job against enumeration, its laws, and every way it can end."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import InputError
from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.panel.layout import Sites
from sampler.tasks.plan import plan
from sampler.tasks.question import achieved, knowledge_of, limits_achieved, question
from sampler.tasks.study import RegionLimit, Rules, SearchOptions, Study, TermLimit, TermPrior
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))


def small_study(rng, n=9, limit=None, **changes):
    """A few marks at invented places, with a term limit near what six of them reach, or the given limits."""
    xy = rng.uniform(-240, 240, (n, 2))
    sigma = rng.uniform(0.2, 0.6, (n, 2))
    marks = replace(Sites.at(np.array([f"S{i}" for i in range(n)]), xy), sigma_um=sigma)
    layout = core_layout(9, marks=marks, grids=())
    base = Study("invented", layout, AFFINE, Noise((0.3, 0.3)), (TermLimit(("scale_x",), 1.0),),
                 search=SearchOptions(seconds=20))
    if limit is None:
        asked = question(base)
        sub = asked.units.visits(np.sort(rng.permutation(n)[:6]))
        u = np.sqrt(knowledge_of(asked, sub).variance(np.eye(6)))
        limit = tuple(TermLimit((name,), float(3 * value)) for name, value in zip(AFFINE.names, u, strict=True))
    return replace(base, limits=limit, **changes)


def fewest_by_enumeration(study):
    """The least count of any subset whose audit meets every limit, and the largest log det among those."""
    asked = question(study)
    for count in range(1, asked.n + 1):
        found = []
        for rows in combinations(range(asked.n), count):
            knowledge = knowledge_of(asked, asked.units.visits(np.array(rows)))
            if np.any(knowledge.variance(asked.limits.directions) > asked.limits.tau**2 * (1 + 1e-9)):
                continue
            if all(limit.ratio <= 1 + 1e-9 for limit in limits_achieved(asked, knowledge)):
                found.append(knowledge.log_det())
        if found:
            return count, max(found)
    raise AssertionError("no subset meets the limits")


@pytest.mark.parametrize("seed", range(12))
def test_term_limits_against_enumeration(seed):
    study = small_study(np.random.default_rng(seed))
    result = plan(study)
    count, log_det = fewest_by_enumeration(study)
    assert result.status == "proven"
    assert len(result.sites) == count
    assert result.lower_bound <= count + 1e-6
    assert result.audit.meets_limits
    assert result.audit.log_det <= log_det + 1e-9
    assert result.audit.log_det >= log_det - 1e-6, "on so few candidates the D-optimal choice is found"
    efficiency = np.exp((result.audit.log_det - log_det) / 6)
    assert result.d_efficiency_at_least <= efficiency + 1e-9


@pytest.mark.parametrize("seed", range(6))
def test_region_limits_against_enumeration(seed):
    rng = np.random.default_rng(100 + seed)
    study = small_study(rng, limit=(RegionLimit("polygon", 3.0, np.array([[-200.0, -150], [150, -200], [100, 180]])),))
    asked = question(study)
    (worst,) = limits_achieved(asked, knowledge_of(asked, asked.units.visits(np.arange(6))))
    study = replace(study, limits=(replace(study.limits[0], position_um=worst.predicted),))
    result = plan(study)
    assert len(result.sites) == fewest_by_enumeration(study)[0]
    assert result.status == "proven"


def test_the_order_of_the_marks_changes_nothing(rng):
    study = small_study(rng, n=14)
    shuffled = replace(study, layout=replace(study.layout, marks=study.layout.marks.take(rng.permutation(14))))
    first, second = plan(study), plan(shuffled)
    assert first.sites.id.tolist() == second.sites.id.tolist()
    assert first.lower_bound == pytest.approx(second.lower_bound)


def test_the_same_seed_gives_the_same_plan():
    study = Study("invented", core_layout(12), AFFINE, Noise((0.3, 0.3), (0.2, 0.2)), (RegionLimit("panel", 0.5),))
    first, second = plan(study), plan(study)
    assert first.sites.id.tolist() == second.sites.id.tolist()


def test_the_claims_are_those_of_the_audit():
    study = Study("invented", core_layout(12), AFFINE, Noise((0.3, 0.3)),
                  (RegionLimit("panel", 0.5), TermLimit(("rotation",), 3)))
    result = plan(study)
    asked = question(study)
    rows = np.array([int(np.flatnonzero(asked.candidates.sites.id == name)[0]) for name in result.sites.id])
    again = achieved(asked, asked.units.visits(rows))
    assert [limit.predicted for limit in again.limits] == [limit.predicted for limit in result.audit.limits]
    assert again.log_det == result.audit.log_det
    assert all(limit.floor <= limit.predicted for limit in result.audit.limits)


def test_cannot_be_met_says_by_how_much():
    study = Study("invented", core_layout(6), AFFINE, Noise((0.3, 0.3)), (RegionLimit("panel", 0.1), TermLimit(("rotation",), 9)))
    result = plan(study)
    assert result.status == "cannot"
    assert len(result.sites) == 36
    worst = result.audit.limits[0]
    assert worst.ratio > 1
    assert any("loosen position over the panel to" in line for line in result.advice)
    # What is advised is enough: with the loosened limit a plan exists, with the better reading too.
    loosened = float(result.advice[0].split(" to ")[1].split(" ")[0])
    assert plan(replace(study, limits=(RegionLimit("panel", loosened), study.limits[1]))).status != "cannot"
    reading = next(line for line in result.advice if "mark_um to" in line)
    marks = tuple(float(value) for value in reading.split("[")[1].split("]")[0].split(","))
    assert plan(replace(study, noise=Noise(marks))).status != "cannot"


def test_max_sites_below_the_fewest():
    study = Study("invented", core_layout(9), AFFINE, Noise((0.3, 0.3)), (RegionLimit("panel", 0.6),))
    fewest = len(plan(study).sites)
    result = plan(replace(study, rules=Rules(max_sites=fewest - 1)))
    assert result.status == "cannot"
    assert str(fewest - 1) in result.advice[0]


def test_required_and_forbidden_marks():
    study = Study("invented", core_layout(9), AFFINE, Noise((0.3, 0.3)), (RegionLimit("panel", 0.6),))
    free = plan(study)
    banned = str(free.sites.id[0])
    result = plan(replace(study, rules=Rules(required=("E-40",), forbidden=(banned,))))
    assert "E-40" in result.sites.id
    assert banned not in result.sites.id
    assert len(result.sites) >= len(free.sites)


def test_stopping_at_once_still_gives_a_plan_and_an_honest_bound():
    study = Study("invented", core_layout(18), Model(tuple(ModelTerm(name) for name in FAMILIES["order3"])), Noise((0.3, 0.3)),
                  (RegionLimit("panel", 1.0),), search=SearchOptions(seconds=30))
    result = plan(study, stop=lambda: True)
    assert result.interrupted
    assert result.status != "proven"
    assert result.audit.meets_limits
    assert result.lower_bound <= len(result.sites)


def test_progress_is_told():
    told = []
    study = Study("invented", core_layout(9), AFFINE, Noise((0.3, 0.3)), (RegionLimit("panel", 0.6),))
    plan(study, progress=lambda bound, best: told.append((bound, best)))
    assert told
    assert all(bound <= best for bound, best in told)


def test_visiting_order_is_a_route():
    study = Study("invented", core_layout(12), AFFINE, Noise((0.3, 0.3)), (RegionLimit("panel", 0.4),))
    result = plan(study)
    steps = np.abs(np.diff(result.sites.xy_mm, axis=0)).max(axis=1)
    shuffled = np.abs(np.diff(result.sites.xy_mm[np.argsort(result.sites.id)], axis=0)).max(axis=1)
    assert steps.sum() <= shuffled.sum()
    assert result.route.seconds > 0


def test_priors_that_meet_every_limit_leave_nothing_to_plan():
    study = Study("invented", core_layout(6), AFFINE, Noise((0.3, 0.3)), (RegionLimit("panel", 9.0),),
                  priors=(TermPrior(FAMILIES["affine"], 0.1),))
    with pytest.raises(InputError, match="the priors alone meet every limit"):
        plan(study)
    assert plan(replace(study, rules=Rules(required=("E-3",)))).sites.id.tolist() == ["E-3"]

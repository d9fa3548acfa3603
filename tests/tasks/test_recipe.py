"""Each rule of a recipe through `plan`, against all subsets of tiny instances, and its laws."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import combinations, permutations

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import InputError
from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.panel.layout import Grid, Sites
from sampler.route.machine import Machine
from sampler.route.visit import follow
from sampler.tasks.audit import audit
from sampler.tasks.plan import plan
from sampler.tasks.question import achieved, knowledge_of, limits_achieved, problem_of, question
from sampler.tasks.rules import inside_zone
from sampler.tasks.study import (
    CellRule,
    Measure,
    Potential,
    RegionLimit,
    Rules,
    SearchOptions,
    Study,
    TermLimit,
    TermPrior,
    ZoneRule,
)
from sampler.tasks.units import one_by_one
from sampler.tasks.visiting import _saved, held, quicker, routed
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))
HALVES = Grid("half", 2, 1, (255.0, 515.0), (255.0, 515.0))
MACHINE = Machine(speed_mm_s=(300.0, 200.0), read_s=0.4, flip_s=5.0, load_s=2.0, unload_s=1.0, start_mm=(0.0, 0.0))


def tiny(seed=0, n=9, share=6, region=False, slack=1.0, **changes):
    """A few marks at invented places of two kinds; limits at `slack` times what `share` of them reach."""
    rng = np.random.default_rng(seed)
    marks = replace(Sites.at(np.array([f"S{i}" for i in range(n)]), rng.uniform(-240, 240, (n, 2))),
                    sigma_um=rng.uniform(0.2, 0.5, (n, 2)), kind=np.where(np.arange(n) % 4 == 1, "hole", "cross"))
    study = Study("invented", core_layout(9, marks=marks, grids=(HALVES,)), AFFINE, Noise((0.3, 0.3)),
                  (RegionLimit("panel", 1.0),) if region else tuple(TermLimit((name,), 1.0) for name in AFFINE.names),
                  search=SearchOptions(seconds=20))
    plain = replace(study, **{name: value for name, value in changes.items() if name not in ("rules", "search", "machine")})
    asked = question(plain)
    some = np.sort(rng.permutation(len(asked.units))[:share])
    reached = limits_achieved(asked, knowledge_of(asked, asked.units.visits(some)))
    limits = tuple(replace(limit, **{"position_um" if region else "maximum": slack * found.predicted})
                   for limit, found in zip(study.limits, reached, strict=True))
    return replace(study, limits=limits, **changes)


def subsets(study, allowed, value=len):
    """The least value of any allowed set of units whose audit meets every limit; infinite when there is none."""
    asked = question(study)
    best = math.inf
    for count in range(1, len(asked.units) + 1):
        for units in combinations(range(len(asked.units)), count):
            chosen = np.array(units)
            if allowed(asked, chosen) and held(asked, asked.units.visits(chosen)):
                best = min(best, value(chosen))
        if value is len and best < math.inf:
            break
    return best


def fewest(study, allowed):
    return subsets(study, allowed)


def check(study, allowed):
    result = plan(study)
    expected = subsets(study, allowed)
    if expected == math.inf:
        assert result.status == "cannot"
        return result
    asked = question(study)
    rows = np.array([int(np.flatnonzero(asked.candidates.sites.id == name)[0]) for name in result.sites.id])
    assert result.units == expected
    assert result.status == "proven"
    assert asked.units.stops is not None or allowed(asked, rows)
    assert result.audit.meets_limits
    return result


@pytest.mark.parametrize("seed", range(3))
def test_per_cell(seed):
    study = tiny(seed, 12, slack=1.2)
    cell = HALVES.locate(study.layout.marks.xy_mm)
    least = int(min((cell == half).sum() for half in (0, 1)))
    assert least >= 3
    study = replace(study, rules=Rules(per_cell=(CellRule("half", 2, 3),)))
    check(study, lambda asked, chosen: all(2 <= (cell[chosen] == half).sum() <= 3 for half in (0, 1)))


@pytest.mark.parametrize("circle", [None, (0.0, 0.0, 150.0)])
def test_per_zone(circle):
    square = np.array([[-120.0, -120], [120, -120], [120, 120], [-120, 120]])
    zone = ZoneRule("middle", square, 1, 2, circle)
    study = tiny(1, rules=Rules(per_zone=(zone,)))
    inside = inside_zone(study.layout, zone, study.layout.marks.xy_mm)
    xy = study.layout.marks.xy_mm
    by_hand = np.hypot(*xy.T) <= 150 if circle else (np.abs(xy) <= 120).all(axis=1)
    assert inside.tolist() == by_hand.tolist()
    assert 0 < inside.sum() < 9
    check(study, lambda asked, chosen: 1 <= inside[chosen].sum() <= 2)


def test_kinds():
    study = tiny(2, rules=Rules(required_kinds=("hole",)))
    hole = study.layout.marks.kind == "hole"
    result = check(study, lambda asked, chosen: set(np.flatnonzero(hole)) <= set(chosen))
    assert set(study.layout.marks.id[hole]) <= set(result.sites.id)
    banned = plan(tiny(2, n=12, rules=Rules(forbidden_kinds=("hole",))))
    assert "hole" not in banned.candidates.sites.kind
    assert banned.candidates.counts() == {"forbidden by [rules]": 3}


@pytest.mark.parametrize("seed", range(4))
def test_spacing(seed):
    study = tiny(seed, n=11, rules=Rules(min_spacing_mm=120.0))

    def apart(asked, chosen):
        return all(np.hypot(*(asked.units.xy_mm[a] - asked.units.xy_mm[b])) >= 120 for a, b in combinations(chosen, 2))

    check(study, apart)


@pytest.mark.parametrize(("seed", "region"), [(0, False), (1, False), (5, True)])
def test_lost(seed, region):
    study = tiny(seed, 7 if region else 10, share=5, region=region, slack=1.4, rules=Rules(lost=1))
    result = plan(study)
    expected = fewest(study, lambda asked, chosen: True)
    plain = plan(replace(study, rules=Rules()))
    assert len(plain.sites) <= expected - 1
    assert len(result.sites) == expected
    assert result.lower_bound <= expected + 1e-6
    assert result.audit.meets_limits
    assert result.audit.lost == 1
    # By hand: each limit after each single loss.
    asked = question(study)
    rows = np.array([int(np.flatnonzero(asked.candidates.sites.id == name)[0]) for name in result.sites.id])
    after = [[limit.predicted for limit in limits_achieved(asked, knowledge_of(asked, asked.units.visits(np.delete(rows, i))))]
             for i in range(len(rows))]
    assert [limit.after_loss for limit in result.audit.limits] == pytest.approx(np.max(after, axis=0).tolist(), rel=1e-6)
    listed = audit(study, plain.sites.id.tolist(), search_fewest=False)
    assert not listed.audit.meets_limits
    assert all(limit.ratio <= 1 + 1e-9 for limit in listed.audit.limits)


def test_more_losses_never_need_fewer():
    counts = [len(plan(tiny(7, n=14, share=7, slack=1.3, rules=Rules(lost=lost))).sites) for lost in (0, 1, 2)]
    assert counts == sorted(set(counts))


def test_losses_that_cannot_be_borne_say_so():
    result = plan(tiny(0, share=9, rules=Rules(lost=1)))
    assert result.status == "cannot"
    assert "after the loss of any 1 of all candidates" in result.advice[0]


@pytest.mark.parametrize("seed", range(3))
def test_stops(seed):
    study = tiny(seed, share=5, measure=Measure(field_of_view_mm=(130.0, 130.0), stop_um=(0.1, 0.05)))
    asked = question(study)
    assert any(len(asked.units.stops.marks(stop)) > 1 for stop in range(len(asked.units)))
    result = check(study, lambda asked, chosen: True)
    assert result.stop.max() == result.units == len(result.stop_xy_mm)
    for site, stop in zip(result.sites.xy_mm, result.stop, strict=True):
        assert (np.abs(site - result.stop_xy_mm[stop - 1]) <= 65 + 1e-9).all()


def test_potential_terms_and_priors():
    potential = Potential(Model((ModelTerm("dx_x2"), ModelTerm("dy_xy"))), 0.3)
    check(tiny(3, potential=potential), lambda asked, chosen: True)
    priors = (TermPrior(("scale_x",), 1.5), TermPrior(("rotation",), 1.0))
    known = tiny(3, priors=priors, slack=1.1)
    free = plan(replace(known, priors=()))
    assert check(known, lambda asked, chosen: True).units <= (math.inf if free.status == "cannot" else free.units)


def test_contradictions_are_named_before_the_search():
    study = tiny(0, 12, rules=Rules(per_cell=(CellRule("half", 3),), max_sites=5))
    with pytest.raises(InputError, match=r"per_cell half.*max_sites = 5"):
        plan(study)
    with pytest.raises(InputError, match=r"exactly 3"):
        plan(tiny(0, rules=Rules(required=("S0", "S1", "S2", "S3")), search=SearchOptions(sites=3)))


# -- a given number ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("limited", [False, True])
def test_the_best_choice_of_a_given_number(limited):
    study = tiny(4, n=10, share=5, search=SearchOptions(seconds=20, sites=7))
    if not limited:
        study = replace(study, limits=())
    result = plan(study)
    asked = question(study)
    best = max(knowledge_of(asked, asked.units.visits(np.array(units))).log_det() for units in combinations(range(10), 7)
               if held(asked, asked.units.visits(np.array(units))))
    assert len(result.sites) == 7
    assert result.audit.log_det == pytest.approx(best, abs=1e-6)
    assert result.d_efficiency_at_least <= 1.0
    assert not result.fewest_proven
    assert result.answer == "7 sites, as asked"
    assert result.certificate == {}


def test_a_number_below_the_fewest():
    study = tiny(4, n=10, share=8)
    least = plan(study).units
    result = plan(replace(study, search=SearchOptions(seconds=5, sites=least - 1)))
    assert result.status == "cannot"
    assert f"[search] sites asks for {least - 1}" in result.advice[0]


# -- seconds ----------------------------------------------------------------------------------------------------------


def quickest(study, units):
    """Seconds of the best order of units, by all orders."""
    asked = question(study)
    size = study.layout.width_mm, study.layout.height_mm
    return min(follow(np.array(order), asked.units.xy_mm[units], study.machine, size, side=asked.units.side[units]).seconds
               for order in permutations(range(len(units))))


@pytest.mark.parametrize("seed", range(2))
def test_fewest_seconds_against_all_subsets_and_orders(seed):
    study = tiny(seed, n=7, share=4, machine=MACHINE, machine_stated=True, search=SearchOptions(seconds=10, objective="seconds"))
    result = plan(study)
    best = subsets(study, lambda asked, chosen: True, lambda chosen: quickest(study, chosen))
    assert result.seconds_at_least <= best + 1e-9
    assert result.route.seconds >= best - 1e-9
    assert result.route.seconds <= best * 1.1
    assert "s" in result.answer
    assert not result.fewest_proven


def test_quicker_routes_among_plans_of_equal_count():
    study = tiny(1, n=40, share=9, machine=MACHINE, machine_stated=True)
    informed = plan(study)
    timed = plan(replace(study, search=SearchOptions(seconds=20, prefer="time", information_loss=0.05)))
    assert timed.units == informed.units
    assert timed.route.seconds <= informed.route.seconds
    assert timed.audit.meets_limits
    assert math.exp((timed.audit.log_det - informed.audit.log_det) / 6) >= 0.95 - 1e-9
    exact = plan(replace(study, search=SearchOptions(seconds=20, prefer="time", information_loss=0.0)))
    assert exact.audit.log_det >= informed.audit.log_det - 1e-6


def test_swaps_save_what_they_promise_and_keep_limits():
    study = tiny(2, n=40, share=10, machine=MACHINE, machine_stated=True, rules=Rules(required=("S3",)))
    asked = question(study)
    found = plan(study)
    units = np.sort([int(np.flatnonzero(asked.candidates.sites.id == name)[0]) for name in found.sites.id])
    before = routed(asked, units)[1].seconds
    saved = _saved(asked, units)
    for site, position in np.argwhere(saved > 1.0)[:20]:
        swapped = units.copy()
        swapped[position] = site
        assert routed(asked, swapped)[1].seconds <= before - saved[site, position] + 1e-6
    quick = quicker(asked, units, 1.0, math.inf, None)
    assert len(quick) == len(units)
    assert routed(asked, quick)[1].seconds <= before
    assert held(asked, asked.units.visits(quick))
    assert 3 in quick


def test_max_seconds():
    study = tiny(1, n=30, share=8, machine=MACHINE, machine_stated=True)
    free = plan(study)
    loose = plan(replace(study, rules=Rules(max_seconds=free.route.seconds + 1)))
    assert loose.units == free.units
    assert loose.status == free.status
    tight = plan(replace(study, rules=Rules(max_seconds=free.route.seconds * 0.97), search=SearchOptions(seconds=6)))
    assert tight.status == "cannot" or tight.route.seconds <= free.route.seconds * 0.97 + 0.005
    never = plan(replace(study, rules=Rules(max_seconds=5.0), search=SearchOptions(seconds=6)))
    assert never.status == "cannot"
    assert "takes at least" in never.advice[0]
    assert "max_seconds allows 5" in never.advice[0]


def test_an_audit_lists_seconds_losses_and_chance():
    study = tiny(1, n=12, share=8, slack=1.5, machine=MACHINE, machine_stated=True, rules=Rules(lost=1),
                 measure=Measure(field_of_view_mm=(60.0, 60.0), stop_um=(0.1, 0.1), read_rate=(("cross", 0.9),)))
    asked = question(study)
    ids = asked.candidates.sites.id[[5, 0, 3, 8, 7, 1, 10, 11, 2]]
    result = audit(study, ids.tolist(), search_fewest=False)
    assert result.route.order.tolist() == list(range(9))
    assert result.quickest.seconds <= result.route.seconds
    assert (np.diff(result.at_s) > 0).all()
    assert 0 <= result.chance.least <= result.chance.most <= 1
    rows = np.array([int(np.flatnonzero(asked.candidates.sites.id == name)[0]) for name in ids])
    after = [[limit.predicted for limit in limits_achieved(asked, knowledge_of(asked, one_by_one(np.delete(rows, i))))]
             for i in range(9)]
    assert [limit.after_loss for limit in result.audit.limits] == pytest.approx(np.max(after, axis=0).tolist(), rel=1e-6)


# -- read rates, floors -----------------------------------------------------------------------------------------------


def test_read_rates_ask_for_more_sites_and_give_a_chance():
    study = tiny(5, n=14, share=8)
    rated = replace(study, measure=Measure(read_rate=(("cross", 0.8), ("hole", 0.6))))
    plain, result = plan(study), plan(rated)
    assert plain.chance is None
    assert result.status == "cannot" or (result.units > plain.units and 0 <= result.chance.least <= result.chance.most <= 1)
    problem = problem_of(question(rated))
    chosen = np.flatnonzero(np.isin(problem.key, result.sites.id))
    information = np.einsum("imp,imq->pq", problem.blocks[chosen], problem.blocks[chosen])
    expected = np.einsum("lp,pq,lq->l", problem.directions, np.linalg.inv(information), problem.directions)
    assert (expected <= problem.tau**2 * (1 + 1e-6)).all() or result.status == "cannot"


def test_floors_are_what_every_candidate_gives():
    study = tiny(0)
    result = plan(study)
    asked = question(study)
    everything = achieved(asked, asked.units.visits(np.arange(9)))
    assert [limit.floor for limit in result.audit.limits] == [limit.predicted for limit in everything.limits]

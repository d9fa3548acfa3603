"""Plans of every kind of recipe are certified from study and layout alone, and refused when they were altered."""

from __future__ import annotations

import copy
import json
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import CertificateError
from sampler.files.output import plan_json
from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.route.stops import candidate_stops
from sampler.tasks.certify import _Built, certify
from sampler.tasks.certify_stops import all_stops
from sampler.tasks.plan import plan
from sampler.tasks.question import problem_of, question
from sampler.tasks.study import (
    CellRule,
    Measure,
    Potential,
    RegionLimit,
    Rules,
    SearchOptions,
    Source,
    Study,
    TermLimit,
    TermPrior,
    ZoneRule,
)
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))
ALL = TermLimit(AFFINE.names, 3.0)
CIRCLE = ZoneRule("middle", np.array([[-90.0, -90], [90, -90], [90, 90], [-90, 90]]), 1, None, (0.0, 0.0, 120.0))


def marked(per_side=7, two_sides=False):
    layout = core_layout(per_side)
    n = len(layout.marks)
    marks = replace(layout.marks, kind=np.where(np.arange(n) % 5 == 2, "hole", "cross"))
    if two_sides:
        marks = replace(marks, side=np.where(np.arange(n) % 2, "back", "front"))
    return replace(layout, marks=marks)


def recipe(*limits, layout=None, **changes):
    plain = Study("invented", marked() if layout is None else layout, AFFINE, Noise((0.3, 0.4), (0.1, 0.1)), limits or (ALL,),
                  search=SearchOptions(seconds=20), source=Source("study.toml", "a" * 64),
                  layout_source=Source("layout.toml", "b" * 64))
    return replace(plain, **changes)


STOPS = Measure(field_of_view_mm=(85.0, 80.0), stop_um=(0.2, 0.1))
RECIPES = {
    "stops": recipe(measure=STOPS),
    "stops, rules": recipe(measure=STOPS, rules=Rules(required=("E-24",), per_zone=(CIRCLE,), max_sites=20)),
    "stops that may fail": recipe(TermLimit(AFFINE.names, 4.0), measure=replace(STOPS, read_rate=(("hole", 0.6),))),
    "sides": recipe(layout=marked(two_sides=True), measure=Measure(flip_um=(0.2, 0.2), side_um=(0.1, 0.1))),
    "read rates": recipe(measure=Measure(read_rate=(("cross", 0.9), ("hole", 0.7)))),
    "cells and zones": recipe(rules=Rules(per_cell=(CellRule("exposure", 0, 1),), per_zone=(CIRCLE,))),
    "kinds": recipe(rules=Rules(required_kinds=("hole",), forbidden=("E-0",)), layout=marked(6)),
    "potential and prior": recipe(TermLimit(("scale_x",), 2.0), RegionLimit("panel", 1.5),
                                  potential=Potential(Model((ModelTerm("dx_x3"),)), 0.2),
                                  priors=(TermPrior(("rotation",), 0.8),)),
    "lost": recipe(TermLimit(AFFINE.names, 3.5), rules=Rules(lost=1)),
    "spacing": recipe(rules=Rules(min_spacing_mm=90.0)),
}


@pytest.fixture(scope="module")
def made():
    return {}


def result(made, name):
    if name not in made:
        found = plan(RECIPES[name])
        assert found.status in ("proven", "interval"), found.advice
        made[name] = json.loads(plan_json(found)), found.certificate
    return copy.deepcopy(made[name])


@pytest.mark.parametrize("name", RECIPES)
def test_honest_plans_are_certified(made, name):
    written, certificate = result(made, name)
    certified = certify(RECIPES[name], written, certificate)
    count = written.get("n_stops", written["n_sites"])
    assert certified.n_sites == count
    assert certified.fewest_proven == written["fewest_proven"]
    noun = "stops" if "n_stops" in written else "sites"
    assert certified.sentence.startswith(f"{count} {noun} meet every limit")


@pytest.mark.parametrize("name", ["stops", "stops that may fail", "sides", "read rates"])
def test_rebuilt_readings_agree_with_the_planner(name):
    built, asked = _Built(RECIPES[name]), question(RECIPES[name])
    problem = problem_of(asked)
    order, other = np.argsort(built.key), np.argsort(problem.key)
    assert built.key[order].tolist() == problem.key[other].tolist()
    assert built.expected[order] == pytest.approx(problem.blocks[other], rel=1e-9, abs=1e-9)
    chosen = np.arange(0, len(other), 5)
    visits = asked.units.visits(other[chosen])
    mine, theirs = built.readings(order[chosen]), asked.units.readings(visits, asked.whitened)
    assert np.einsum("imp,imq->pq", mine, mine) == pytest.approx(np.einsum("imp,imq->pq", theirs, theirs), rel=1e-9)


@pytest.mark.parametrize("seed", range(4))
def test_stops_are_found_again(seed):
    rng = np.random.default_rng(seed)
    sites = core_layout(6).marks
    sites = replace(sites, xy_mm=np.round(rng.uniform(0, 60, (36, 2)), rng.integers(0, 3)),
                    side=np.where(rng.random(36) < 0.3, "back", "front"))
    field = (float(rng.integers(5, 25)), float(rng.integers(5, 25)))
    mine, theirs = all_stops(sites, field), candidate_stops(sites.xy_mm, field, sites.side)
    assert {frozenset(marks.tolist()) for marks in mine.marks} == {frozenset(theirs.marks(stop).tolist())
                                                                  for stop in range(len(theirs))}


def alter(name, change, word):
    return pytest.param(name, change, word, id=f"{name}: {word}")


def move_stop(written):
    written["stops"][0]["x_mm"] += 1.0


def drop_stop(written):
    gone = written["stops"].pop()["stop"]
    written["sites"] = [site for site in written["sites"] if site["stop"] != gone]
    written.update(n_stops=written["n_stops"] - 1, n_sites=len(written["sites"]))


def exchange_stops(written):
    first = written["sites"][0]["stop"]
    for site in written["sites"]:
        site["stop"] = 1 if site["stop"] == 2 else 2 if site["stop"] == 1 else site["stop"]
    assert first == 1


@pytest.mark.parametrize(("name", "change", "word"), [
    alter("stops", move_stop, "no stop at"),
    alter("stops", drop_stop, r"k_u|predicted|undetermined"),
    alter("stops", exchange_stops, "no stop at"),
    alter("stops", lambda written: written.update(n_stops=written["n_stops"] - 1), "n_stops"),
    alter("stops", lambda written: written["sites"].pop(), "do not agree|not the marks"),
    alter("stops", lambda written: written["terms"][0].update(k_u=written["terms"][0]["k_u"] * 0.99), "k_u"),
    alter("lost", lambda written: written.update(lower_bound=written["lower_bound"] + 1), "lower_bound"),
    alter("sides", lambda written: written["limits"][2].update(predicted=0.1), "predicted"),
])
def test_altered_plans_are_refused(made, name, change, word):
    written, certificate = result(made, name)
    change(written)
    with pytest.raises(CertificateError, match=word):
        certify(RECIPES[name], written, certificate)


def test_a_study_of_other_rules_is_refused(made):
    """The hashes forged: each rule is held against the plan anyway."""
    read = {site["id"] for site in result(made, "stops, rules")[0]["sites"]}
    other = next(f"E-{i}" for i in range(49) if f"E-{i}" not in read)
    for name, rules, word in (("stops, rules", Rules(required=(other,)), "required site"),
                              ("spacing", Rules(min_spacing_mm=400.0), "closer than min_spacing_mm"),
                              ("cells and zones", Rules(per_zone=(replace(CIRCLE, least=9),)), "per_zone"),
                              ("cells and zones", Rules(per_cell=(CellRule("exposure", 1),)), "per_cell"),
                              ("spacing", Rules(lost=1), "is lost"), ("spacing", Rules(max_sites=3), "max_sites")):
        written, certificate = result(made, name)
        with pytest.raises(CertificateError, match=word):
            certify(replace(RECIPES[name], rules=rules), written, certificate)


def test_a_certificate_of_more_information_is_refused(made):
    """Lower read rates, a larger stop error or no potential terms: another proof than the study's own is not taken."""
    for name, changed in (("read rates", {"measure": Measure(read_rate=(("cross", 0.5), ("hole", 0.4)))}),
                          ("stops", {"measure": replace(STOPS, stop_um=(0.0, 0.0))}),
                          ("sides", {"measure": Measure()}), ("potential and prior", {"potential": None})):
        written, certificate = result(made, name)
        try:
            found = certify(replace(RECIPES[name], **changed), written, certificate)
        except CertificateError:
            continue
        assert name == "read rates", "fewer readings make fewer sites impossible all the more"
        assert found.n_sites == written["n_sites"]


@pytest.mark.parametrize("search", [SearchOptions(objective="seconds"), SearchOptions(sites=9)])
def test_only_the_fewest_are_certified(made, search):
    written, certificate = result(made, "spacing")
    with pytest.raises(CertificateError, match="only plans of the fewest"):
        certify(replace(RECIPES["spacing"], search=search), written, certificate)


def test_no_site_of_a_small_lost_plan_is_needed_by_hand(made):
    """The certified claim itself: no smaller set bears every single loss (a few thousand of them tried)."""
    written, _ = result(made, "lost")
    asked = question(RECIPES["lost"])
    rng, count = np.random.default_rng(0), written["n_sites"] - 1
    assert written["fewest_proven"]
    tau = asked.limits.tau**2
    for _ in range(300):
        rows = rng.choice(asked.n, count, replace=False)
        left = [np.delete(rows, i) for (i,) in combinations(range(count), 1)]
        worst = max(float((np.diag(np.linalg.inv(np.einsum("imp,imq->pq", asked.whitened[part], asked.whitened[part])
                                                 + 1e-12 * np.eye(6)))[:6] / tau).max()) for part in left)
        assert worst > 1

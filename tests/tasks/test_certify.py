"""Certificates are accepted when they prove what the plan claims, and refused, with the place, when anything was altered."""

from __future__ import annotations

import copy
import math
from dataclasses import replace

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import CertificateError
from sampler.files.certificate import COMPRESSED_ABOVE, GZIP, decode_certificate, encode_certificate
from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.model.terms import FAMILIES, TERMS
from sampler.optimise.blocks import split
from sampler.optimise.certificate import bound_certificate
from sampler.optimise.relaxation import relax
from sampler.optimise.tree import decide
from sampler.panel.layout import Grid
from sampler.tasks.certify import _Built, _term, certify, digest
from sampler.tasks.proof_check import Evidence, check_proof
from sampler.tasks.prove import stated
from sampler.tasks.question import achieved, assumed_of, problem_of, question
from sampler.tasks.study import (
    CellRule,
    Measure,
    Potential,
    RegionLimit,
    Rules,
    Source,
    Study,
    TermLimit,
    TermPrior,
    ZoneRule,
)
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))
ORDER2 = Model(tuple(ModelTerm(name) for name in FAMILIES["order2"]))
SIX = tuple(FAMILIES["affine"])


ALL_TERMS = (TermLimit(SIX, 3.5),)


def invented(model=AFFINE, limits=ALL_TERMS, per_side=5, **changes):
    layout = core_layout(per_side)
    marks = layout.marks
    row = np.arange(len(marks))
    marks = replace(marks, side=np.where(row % 3 == 0, "back", "front"), kind=np.select(
        [row == 7, row == 9, row % 2 == 0], ["round", "cross", "square"], "plus"))
    plain = Study("invented", replace(layout, marks=marks), model, Noise((0.3, 0.4), (0.4, 0.3)), tuple(limits),
                  source=Source("study.toml", "a" * 64), layout_source=Source("layout.toml", "b" * 64))
    return replace(plain, **changes)


def planned(study: Study) -> tuple[dict, dict]:
    """plan.json and certificate.json of the fewest sites, by the tree alone."""
    asked = question(study)
    problem = problem_of(asked)
    parts = split(problem)
    relaxed = relax(parts, problem, seconds=60)
    z, limit = relaxed.rows.in_own_terms(problem)
    rules = tuple((int(rule), -float(relaxed.rule_duals[rule])) for rule in np.flatnonzero(relaxed.rule_duals))
    certificate = bound_certificate(problem, relaxed.bound, limit, z, relaxed.duals, rules)
    bound, count = relaxed.bound, math.ceil(relaxed.bound - 1e-6)
    while True:
        decision = decide(parts, problem, count, rows=relaxed.rows, weights=relaxed.weights)
        if decision.status == "possible":
            break
        certificate, bound, count = decision.certificate, count + 1.0, count + 1
    audit = achieved(asked, asked.units.visits(decision.chosen))
    certificate = stated(certificate, study, asked.limits)
    origin = np.asarray(study.layout.origin_mm)
    plan = {
        "format": 1, "study": {"path": study.source.path, "sha256": study.source.sha256},
        "layout": {"path": study.layout_source.path, "sha256": study.layout_source.sha256},
        "certificate": {"sha256": certificate["sha256"]},
        "candidates": asked.n, "n_sites": len(audit.sites), "lower_bound": bound,
        "fewest_proven": math.ceil(bound - 1e-6) >= len(audit.sites), "meets_limits": audit.meets_limits,
        "sites": [{"id": str(name), "x_mm": float(xy[0] - origin[0]), "y_mm": float(xy[1] - origin[1])}
                  for name, xy in zip(audit.sites.id, audit.sites.xy_mm, strict=True)],
        "terms": [{"name": term.name, "k_u": term.k_u} for term in audit.terms],
        "limits": [{"label": item.label, "max": item.maximum, "predicted": item.predicted} for item in audit.limits]}
    return plan, certificate


def shots() -> Grid:
    return Grid("shot", 2, 2, (240.0, 245.0), (250.0, 252.0))


def with_shots(**changes):
    study = invented(**changes)
    return replace(study, layout=replace(study.layout, grids=(shots(),)))


CELL_SCALE = Model((*AFFINE.terms, ModelTerm("scale_x", "shot"), ModelTerm("dx_x2y", "shot")))
STUDIES = {
    "term limits": invented(),
    "region limit": invented(limits=(RegionLimit("panel", 1.45),)),
    "near-saturated": invented(ORDER2, (TermLimit(ORDER2.names, 4.0),), per_side=5),
    "counting": invented(limits=(TermLimit(SIX, 30.0),)),
    "polygon": invented(limits=(RegionLimit("polygon", 1.2, np.array([[-100.0, -90], [120, -80], [0, 130]])),)),
    "marks": invented(limits=(RegionLimit("marks", 1.4),)),
    "rules": invented(rules=Rules(required=("E-6",), forbidden=("E-0",), max_sites=20)),
    "priors": invented(priors=(TermPrior(("orthogonality", "scale_y"), 0.9),)),
    "potential": invented(limits=(TermLimit(SIX, 4.0), RegionLimit("panel", 3.4, of="displacement")),
                          potential=Potential(Model((ModelTerm("dx_xy"), ModelTerm("dy_x2"))), 0.3)),
    "field": invented(limits=(RegionLimit("panel", 1.6, of="displacement"),), per_side=6,
                      noise=Noise((0.3, 0.4), (0.4, 0.3), 300.0)),
    "zones": with_shots(rules=Rules(required_kinds=("round",), forbidden_kinds=("cross",), per_zone=(
        ZoneRule("left", np.array([[-250.0, -250], [-50, -250], [-50, 250], [-250, 250]]), least=2, most=3),),
        per_cell=(CellRule("shot", most=3),))),
    "sides": invented(measure=Measure(side_um=(0.2, 0.1), flip_um=(0.3, 0.3), stop_um=(0.1, 0.0),
                                      read_rate=(("square", 0.9),))),
    "cells": with_shots(model=CELL_SCALE, limits=(RegionLimit("cells:shot", 2.2), TermLimit(SIX, 4.0)), per_side=8),
}


@pytest.fixture(scope="module")
def made():
    return {}


def result(made, name):
    if name not in made:
        made[name] = planned(STUDIES[name])
    return copy.deepcopy(made[name])


@pytest.mark.parametrize("name", STUDIES)
def test_honest_plans_are_certified(made, name):
    plan, certificate = result(made, name)
    certified = certify(STUDIES[name], plan, certificate)
    assert certified.n_sites == plan["n_sites"]
    assert certified.fewest_proven
    assert math.ceil(certified.lower_bound) == plan["n_sites"]
    assert certified.sentence.startswith(f"{plan['n_sites']} sites meet every limit, and no set of fewer does")
    back = decode_certificate(encode_certificate(certificate))
    assert digest(back) == certificate["sha256"]
    assert certify(STUDIES[name], plan, back) == certified
    assert encode_certificate(back) == encode_certificate(certificate)


def test_an_honest_interval_is_certified(made):
    plan, certificate = result(made, "term limits")
    weaker = {**plan, "fewest_proven": False, "lower_bound": plan["lower_bound"] - 1}
    assert not certify(STUDIES["term limits"], weaker, certificate).fewest_proven


def test_own_table_of_terms_agrees_with_the_model(rng):
    """The two are written apart on purpose; a term added to one must be added to the other."""
    layout = replace(core_layout(5), grids=(shots(),))
    model = Model(tuple(ModelTerm(name) for name in TERMS) + tuple(ModelTerm(name, "shot", 2) for name in TERMS))
    xy = rng.uniform(-250, 250, (200, 2))
    study = replace(invented(model=model), layout=layout)
    built = _Built(replace(study, limits=()))
    assert built.response(xy, {"shot": shots().locate(xy)}) == pytest.approx(
        design_blocks(model, places(layout, xy)), rel=1e-13, abs=1e-13)
    with pytest.raises(CertificateError, match="no term"):
        _term("dx_z", xy, np.ones(2))


@pytest.mark.parametrize("name", ["potential", "field", "priors", "cells", "sides"])
def test_rebuilt_readings_and_priors_agree_with_the_planner(name):
    built, asked = _Built(STUDIES[name]), question(STUDIES[name])
    assert built.whitened == pytest.approx(asked.whitened, rel=1e-12, abs=1e-12)
    assert built.prior.tolist() == assumed_of(STUDIES[name]).prior_precision.tolist()


# -- refusals ---------------------------------------------------------------------------------------------------------


def test_another_study_or_layout_is_refused(made):
    plan, certificate = result(made, "term limits")
    study = STUDIES["term limits"]
    for changed, word in ((replace(study, source=Source("study.toml", "c" * 64)), "another study"),
                          (replace(study, layout_source=Source("layout.toml", "c" * 64)), "another layout")):
        with pytest.raises(CertificateError, match=word):
            certify(changed, plan, certificate)
    # Even with the hashes forged, the numbers tell.
    for forged in (replace(study, limits=(TermLimit(SIX, 3.4),)), replace(study, noise=Noise((0.3, 0.41), (0.4, 0.3))),
                   replace(study, layout=core_layout(7))):
        with pytest.raises(CertificateError, match=r"plan\.json|certificate"):
            certify(forged, plan, certificate)


ALTERED_PLANS = {
    "fewest": lambda plan: plan["sites"].pop(),
    "unknown": lambda plan: plan["sites"][0].update(id="nowhere"),
    "twice": lambda plan: plan["sites"][0].update(plan["sites"][1]),
    "moved": lambda plan: plan["sites"][0].update(x_mm=plan["sites"][0]["x_mm"] + 1),
    "count": lambda plan: plan.update(n_sites=plan["n_sites"] - 1),
    "bound": lambda plan: plan.update(lower_bound=plan["lower_bound"] + 1),
    "predicted": lambda plan: plan["limits"][0].update(predicted=plan["limits"][0]["predicted"] * 0.99),
    "max": lambda plan: plan["limits"][0].update(max=plan["limits"][0]["max"] * 1.01),
    "k_u": lambda plan: plan["terms"][2].update(k_u=plan["terms"][2]["k_u"] * 1.001),
    "missing": lambda plan: plan.pop("terms"),
    "nonsense": lambda plan: plan.update(lower_bound="many"),
    "limits": lambda plan: plan["limits"].pop(),
    "meets": lambda plan: plan.update(meets_limits=False),
    "certificate": lambda plan: plan.update(certificate={"sha256": "0" * 64}),
}


@pytest.mark.parametrize("name", ALTERED_PLANS)
def test_an_altered_plan_is_refused(made, name):
    plan, certificate = result(made, "term limits")
    ALTERED_PLANS[name](plan)
    with pytest.raises(CertificateError, match=r"plan\.json|certificate\.json"):
        certify(STUDIES["term limits"], plan, certificate)


def test_rules_are_held_against_the_plan(made):
    plan, certificate = result(made, "term limits")
    chosen, other = plan["sites"][0]["id"], next(f"E-{i}" for i in range(1, 25) if f"E-{i}" not in
                                                 {site["id"] for site in plan["sites"]})
    study = replace(STUDIES["term limits"], layout=replace(STUDIES["term limits"].layout, grids=(shots(),)))
    zone = ZoneRule("whole", np.array([[-250.0, -250], [250, -250], [250, 250], [-250, 250]]), most=plan["n_sites"] - 1)
    for rules, word in ((Rules(forbidden=(chosen,)), "not a candidate"), (Rules(required=(other,)), "required"),
                        (Rules(max_sites=plan["n_sites"] - 1), "max_sites"), (Rules(per_zone=(zone,)), 'per_zone "whole"'),
                        (Rules(per_cell=(CellRule("shot", most=0),)), "per_cell shot, c"),
                        (Rules(min_spacing_mm=200.0), "min_spacing_mm"), (Rules(lost=1), "is lost")):
        with pytest.raises(CertificateError, match=word):
            certify(replace(study, rules=rules), plan, certificate)


def leaves(value, path=()):
    """Every place of a certificate that holds a number, a name, or an array."""
    if isinstance(value, dict):
        for name, item in value.items():
            yield from leaves(item, (*path, name))
    elif isinstance(value, list):
        for number, item in enumerate(value):
            yield from leaves(item, (*path, number))
    else:
        yield path, value


def mutated(certificate: dict, rng: np.random.Generator) -> dict:
    """One number, name or array changed, somewhere."""
    changed = copy.deepcopy(certificate)
    places = [(path, value) for path, value in leaves(changed)
              if not isinstance(value, np.ndarray) or value.size]
    path, value = places[rng.integers(len(places))]
    holder = changed
    for step in path[:-1]:
        holder = holder[step]
    if isinstance(value, np.ndarray):
        at = tuple(rng.integers(size) for size in value.shape)
        kind = rng.integers(4)
        if kind == 0 and value.dtype.kind == "f":
            value[at] = rng.choice([np.nan, np.inf, -1.0, 1e300])
        elif kind == 1:
            holder[path[-1]] = value[:-1]
        elif kind == 2:
            holder[path[-1]] = np.concatenate([value, value[:1]])
        else:
            value[at] = -value[at] if value[at] and rng.integers(2) else value[at] * 1.01 + 1
    elif isinstance(value, str):
        holder[path[-1]] = value + "x"
    else:
        holder[path[-1]] = (value or 0) + rng.choice([-1, 1, 0.5])
    return changed


def test_a_thousand_altered_certificates_are_refused(made):
    rng = np.random.default_rng(3)
    for name in ("near-saturated", "term limits", "region limit", "counting"):
        plan, certificate = result(made, name)
        for _ in range(250):
            with pytest.raises(CertificateError):
                certify(STUDIES[name], plan, mutated(certificate, rng))


def test_a_forger_who_mends_the_hash_proves_no_more_than_the_truth(made):
    """With hashes mended, what is still accepted is a valid proof: never of more than enumeration or the tree found."""
    rng = np.random.default_rng(4)
    refused = 0
    for name in ("near-saturated", "term limits", "counting"):
        plan, certificate = result(made, name)
        evidence = rebuilt(STUDIES[name])
        for _ in range(150):
            forged = mutated(certificate, rng)
            try:
                proven = check_proof(evidence, forged)
            except CertificateError:
                refused += 1
            else:
                assert math.ceil(proven.lower_bound) <= plan["n_sites"]
    assert refused > 200


def rebuilt(study: Study) -> Evidence:
    from sampler.tasks import certify as room

    return room._evidence(_Built(study))


def test_a_false_claim_of_one_more_is_refused(made):
    for name, word in (("near-saturated", "does not close"), ("counting", "does not exclude")):
        _, certificate = result(made, name)
        with pytest.raises(CertificateError, match=word):
            check_proof(rebuilt(STUDIES[name]), {**certificate, "excludes": certificate["excludes"] + 1})


def test_each_step_of_a_tree_is_needed(made):
    _, certificate = result(made, "near-saturated")
    steps = certificate["steps"]
    closing = np.flatnonzero(steps["kind"] == 2)
    assert len(closing) > 2
    evidence = rebuilt(STUDIES["near-saturated"])
    for leaf in closing:
        forged = copy.deepcopy(certificate)
        start = forged["steps"]["y"]["start"]
        forged["steps"]["y"]["value"][start[leaf]:start[leaf + 1]] = 0.0
        with pytest.raises(CertificateError, match=f"step {leaf} does not close"):
            check_proof(evidence, forged)


def test_a_row_outside_the_region_is_refused(made):
    _, certificate = result(made, "region limit")
    for where, word in (([300.0, 0.0], "not in the region"), ([np.nan, 0.0], "not in the region")):
        forged = copy.deepcopy(certificate)
        forged["rows"]["where_mm"][0] = where
        with pytest.raises(CertificateError, match=word):
            check_proof(rebuilt(STUDIES["region limit"]), forged)


def test_bytes(made):
    _, certificate = result(made, "term limits")
    data = encode_certificate(certificate)
    assert data.startswith(b"{")
    large = {**certificate, "rows": {**certificate["rows"], "z": np.random.default_rng(1).normal(size=(9000, 6))}}
    packed = encode_certificate(large)
    assert packed.startswith(GZIP)
    assert digest(decode_certificate(packed)) == digest(large)
    assert len(packed) > COMPRESSED_ABOVE / 2
    for damaged in (data[:-30], packed[:-9], packed[:400] + b"xxxx" + packed[404:], b"[]", b"\xff\xfe", b"",
                    data.replace(b"<f8", b"<f4", 1), data.replace(b'"base64": "', b'"base64": "!', 1)):
        with pytest.raises(CertificateError):
            decode_certificate(damaged)

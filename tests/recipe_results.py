"""Small real results of every kind that recipes add, for the rooms that show them; all invented."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
from invented_plans import core_layout

from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.route.machine import Machine
from sampler.tasks.audit import audit
from sampler.tasks.plan import plan
from sampler.tasks.results import Plan, SiteAudit
from sampler.tasks.study import Measure, Potential, RegionLimit, Rules, SearchOptions, Study, TermLimit
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))
MACHINE = Machine(speed_mm_s=(300.0, 200.0), flip_s=5.0, load_s=2.0, unload_s=1.0, origin="lower-left", rotation=90)


def recipe(two_sides: bool = False, **changes) -> Study:
    layout = core_layout(7, origin_mm=(-255.0, -257.5))
    if two_sides:
        side = np.where(np.arange(len(layout.marks)) % 2, "back", "front")
        layout = replace(layout, marks=replace(layout.marks, side=side))
    plain = Study("A recipe", layout, AFFINE, Noise((0.3, 0.4), (0.1, 0.1)), (TermLimit(AFFINE.names, 3.0),),
                  search=SearchOptions(seconds=20))
    return replace(plain, **changes)


RECIPES = {
    "stops": recipe(machine=MACHINE, machine_stated=True, measure=Measure(field_of_view_mm=(85.0, 80.0), stop_um=(0.2, 0.1))),
    "sides": recipe(two_sides=True, machine=MACHINE, machine_stated=True, rules=Rules(required=("E-1", "E-2")),
                    limits=(TermLimit(AFFINE.names, 1.8),)),
    "lost": recipe(rules=Rules(lost=1), measure=Measure(read_rate=(("", 0.95),))),
    "potential": recipe(potential=Potential(Model((ModelTerm("dx_x3"),)), 0.2), limits=(TermLimit(AFFINE.names, 2.2),
                                                                                        RegionLimit("panel", 1.2))),
    "seconds": recipe(machine=MACHINE, machine_stated=True, search=SearchOptions(seconds=3, objective="seconds")),
    "given": recipe(limits=(), search=SearchOptions(seconds=5, sites=8)),
    "floor": recipe(noise=Noise((0.3, 0.4), (0.3, 0.3), 200.0), limits=(TermLimit(("scale_x",), 1.0),)),
}


@cache
def planned(name: str) -> Plan:
    return plan(RECIPES[name])


@cache
def listed(name: str) -> SiteAudit:
    study = RECIPES[name]
    return audit(study, study.layout.marks.id[::4].tolist(), search_fewest=False)

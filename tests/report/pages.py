"""Pages of invented plans for the tests: small studies whose sites are chosen greedily, audited by the tasks."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
from invented_plans import core_layout, notched_layout, pick, study_of

from sampler.tasks.question import question
from sampler.tasks.review import Claims, TradeOffPoint, Verdict, recalled, review
from sampler.tasks.study import RegionLimit, Rules, Source, TermLimit

ODD = '<img src=x onerror="document.title=1">'
COMMAND = "sampler plan studies/core.toml --out results/core"


def with_ids(layout, ids):
    """The layout with its first marks renamed."""
    return replace(layout, marks=replace(layout.marks, id=np.array([*ids, *layout.marks.id[len(ids):]])))


def small_study(layout=None, region_um=0.86, **changes):
    study = study_of(core_layout() if layout is None else layout,
                     limits=(TermLimit(("scale_x", "scale_y"), 2.6), TermLimit(("dx_xy", "dy_xy"), 0.62),
                             RegionLimit("panel", region_um)), title="Invented organic core, pilot lot")
    return replace(study, **changes)


CLAIMS = Claims("proven", 23.09, 0.98765, 1.94, Source("studies/core.toml", "5" * 64), Source("layouts/core.toml", "7" * 64))


def page_of(study, count=24, points=(), verdict=None, claims=CLAIMS):
    study = replace(study, source=CLAIMS.study, layout_source=CLAIMS.layout)
    asked = question(study)
    sites = asked.candidates.sites
    ids = tuple(pick(study, sites, count).id.tolist())
    plan = recalled(study, ids, claims, asked)
    others = [TradeOffPoint(tuple(pick(study, sites, n).id.tolist()), bound) for n, bound in points]
    return review(plan, points=others, verdict=verdict, command=COMMAND, version="0.1.0", asked=asked)


@cache
def full_page():
    """A plan among eighteen other choices, with a mark of an odd name among its sites, and a verdict."""
    layout = with_ids(core_layout(), [ODD, "</script><b>x</b>"])
    required = small_study(layout, rules=Rules(required=("</script><b>x</b>",)))
    points = [(n, 3.9 / n**0.5) for n in (*range(8, 24, 2), 24, *range(26, 48, 2))]
    verdict = Verdict(True, "2,000 simulated panels: every limit held within its stated chance.",
                      ("scale_x: 3σ of the refit 2.31 ppm, predicted 2.33 ppm", "position: 0.84 µm, predicted 0.85 µm"))
    return page_of(required, points=points, verdict=verdict)


@cache
def big_page(count=3000):
    layout = notched_layout(count)
    return page_of(small_study(layout, region_um=0.9), 40)


@cache
def cannot_page():
    claims = Claims("cannot", np.nan, np.nan, 0.2, CLAIMS.study, CLAIMS.layout,
                    advice=("loosen the limit on the position from 0.1 to 0.31 µm", "or add candidate marks near the corners"))
    return page_of(small_study(region_um=0.1), claims=claims)

"""What a summary says of a recipe beside its limits: seconds, stops, lost marks, bias, and what was assumed."""

from __future__ import annotations

import math

from sampler.route.visit import Route
from sampler.tasks.advise import notes
from sampler.tasks.results import Audit, MissChance, Plan, SiteAudit
from sampler.tasks.wording import plain, significant

SAME_SECONDS = 0.05
"""Seconds are written to one digit after the point; what is less does not show."""


def plan_lines(plan: Plan) -> list[str]:
    """Sentences on a plan, only those that its study gives reason for."""
    said = [] if plan.route is None or not plan.study.machine_stated else [_seconds(plan.route)]
    return [*said, *_chance(plan.chance), *_bias(plan.audit), *notes(plan.study)]


def audit_lines(result: SiteAudit) -> list[str]:
    """Sentences on a listed set."""
    said = []
    if result.route is not None and result.quickest is not None and result.study.machine_stated:
        listed, best = result.route.seconds, result.quickest.seconds
        better = f"the best order found takes {best:.1f} s" if best < listed - SAME_SECONDS else "no better order was found"
        said = [f"One panel in the order listed: {listed:.1f} s; {better}."]
    return [*said, *_chance(result.chance), *_bias(result.audit), *notes(result.study)]


def _seconds(route: Route) -> str:
    parts = [f"{name} {value:.1f}" for name, value in (("travel", route.travel_s), ("reading", route.read_s),
                                                      ("turning over", route.flip_s), ("handling", route.handling_s)) if value]
    slower = f"at most {route.within_s:.1f} s from the quickest order"
    order = "order proven quickest" if route.within_s < SAME_SECONDS else slower
    return f"One panel: {route.seconds:.1f} s ({', '.join(parts)}); {order}."


def _chance(chance: MissChance | None) -> list[str]:
    if chance is None:
        return []
    low, high = (significant(100 * value, 2) for value in (chance.least, chance.most))
    between = f"{low} %" if low == high else f"{low} to {high} %"
    how = f" (95 % interval of {chance.panels:,} simulated panels)" if chance.panels else ""
    return [f"A panel misses a limit because marks do not read: {between}{how}."]


def _bias(audit: Audit) -> list[str]:
    """The largest share of its limit, or else of its k·u, that potential terms would put on a corrected term."""
    biased = [term for term in audit.terms if term.bias > 0]
    if not biased:
        return []
    worst = max(biased, key=lambda term: term.bias / (term.k_u if math.isnan(term.maximum) else term.maximum))
    return [f"Largest bias by potential terms: {plain(worst.name, 40)} {significant(worst.bias)} {worst.unit} (one sd)."]

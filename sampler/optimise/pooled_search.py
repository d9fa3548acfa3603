"""The search on pooled per-cell terms: bound by patterns, sets by assembly, and the proof as a certificate."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from sampler.optimise.arrow import RIDGE, Arrow, arrow_ratios
from sampler.optimise.assembly import MEETS, Assembly, assemble
from sampler.optimise.blocks import Array
from sampler.optimise.certificate import FORMAT
from sampler.optimise.patterns import values
from sampler.optimise.pool import Indices, cost_step
from sampler.optimise.pooled import Pooled, PooledBound, pooled
from sampler.optimise.problem import SiteProblem

SAFE = 1e-6
"""Share by which the bound that is claimed lies below the one computed, for the checker's roundings."""
TURN = 0.5
TURN_GROWTH = 2.0


@dataclass(frozen=True, slots=True)
class Found:
    """`chosen` sorted or None; the proven `bound` with its certificate; `worst_ratio` u/τ with every allowed site."""

    chosen: Indices | None
    bound: float
    certificate: dict[str, Any]
    worst_ratio: float


def search_pooled(problem: SiteProblem, shape: Arrow, *, seconds: float, rng: np.random.Generator,
                  tell: Callable[[float, Indices | None], None], stop: Callable[[], bool] | None = None) -> Found:
    """The cheapest sites found and the bound; `tell(bound, chosen)` at every gain. No losses and no spacing."""
    until = time.monotonic() + seconds
    everything = np.flatnonzero(~problem.forbidden)
    worst = float(np.sqrt(arrow_ratios(shape, everything).max(initial=0.0)))
    if worst**2 > MEETS:
        return Found(None, 0.0, {}, worst)
    question = pooled(problem, shape)
    proof, weights = question.best_bound(until - time.monotonic(), stop)
    claimed = proof.bound - SAFE * max(1.0, abs(proof.bound))
    certificate = patterns_certificate(question, proof, claimed)
    tell(claimed, None)
    if not np.isfinite(proof.bound):
        return Found(None, claimed, certificate, worst)
    step = cost_step(problem.cost) or SAFE * float(problem.cost.sum())
    least = step * float(np.ceil(claimed / step - SAFE))
    best = everything if _obeys(problem, everything) else None
    cost = np.inf if best is None else float(problem.cost[best].sum())
    worth = _worth(question, proof)
    if not any(each.any() for each in weights):
        weights = [np.exp(-(each - each.min(initial=np.inf)) / step) for each in worth]
    members = [np.isin(np.arange(problem.n), inside).astype(float) for inside in problem.rules.members]
    lower, upper = list(problem.rules.lower), list(problem.rules.upper)
    if problem.max_sites is not None:
        members, lower, upper = [*members, np.ones(problem.n)], [*lower, 0.0], [*upper, float(problem.max_sites)]
    assembly, turn = Assembly(shape, question.patterns, worth, members, np.array(lower), np.array(upper)), TURN
    while time.monotonic() < until and least < cost - step / 2 and not (stop is not None and stop()):
        at = assemble(assembly, weights, least, step, cost, rng=rng, deadline=min(until, time.monotonic() + turn), stop=stop)
        turn *= TURN_GROWTH
        if at is None:
            continue
        assembly.at = at
        chosen = assembly.chosen(question.patterns)
        if arrow_ratios(shape, chosen).max(initial=0.0) <= MEETS and _obeys(problem, chosen):
            best, cost = chosen, float(problem.cost[chosen].sum())
            tell(claimed, best)
    return Found(best, claimed, certificate, worst)


def _worth(question: Pooled, proof: PooledBound) -> list[Array]:
    """Cost and value of each cell's patterns at the bound's duals; without any, cost and a little of what they tell."""
    number = len(proof.y)
    quadratic = (proof.rows.z[:number].T * proof.y) @ proof.rows.z[:number]
    found = []
    for index, each in enumerate(question.patterns):
        mine = proof.rows.cell[:number] == index
        value = values(each.form, each.cell.columns, proof.rows.limit[:number][mine], proof.rows.z[:number][mine],
                       proof.y[mine], quadratic)
        found.append(each.cost + value - 1e-6 * np.trace(each.form.schur, axis1=1, axis2=2) / question.shape.p)
    return found


def _obeys(problem: SiteProblem, chosen: Indices) -> bool:
    inside = np.isin(np.arange(problem.n), chosen)
    counts = np.array([inside[members].sum() for members in problem.rules.members])
    return bool(np.all(counts >= problem.rules.lower) and np.all(counts <= problem.rules.upper)
                and not np.any(problem.required & ~inside)
                and (problem.max_sites is None or len(chosen) <= problem.max_sites))


def patterns_certificate(question: Pooled, proof: PooledBound, claimed: float) -> dict[str, Any]:
    """The proof by patterns, in the problem's own terms.

    `panel`: the panel's terms; `cells`: a site's key of each cell that was not enumerated whole, and up to how many sites
    beside the required ones it was; `rows`: limit (R,), z (R, p): the part on the panel's terms is the proof's, the rest only
    shows which side of an edge between cells is meant; `y` (R,), zero for limits that only exclude patterns; `rules`: index
    and value, positive for the lower count.
    """
    problem, shape = question.problem, question.shape
    used = np.flatnonzero(proof.y > 0)
    rows = [(int(proof.rows.cell[row]), int(proof.rows.limit[row]), proof.rows.z[row]) for row in used]
    rows += [(cell, int(limit), np.zeros(shape.p)) for cell, each in enumerate(question.patterns) for limit in each.excluding]
    z, limits = np.zeros((len(rows), problem.p)), np.zeros(len(rows), np.int64)
    for place, (cell, position, of_panel) in enumerate(rows):
        z[place, shape.terms] = of_panel * shape.scale[shape.terms]
        if cell < 0:
            limits[place] = shape.limits[position]
            continue
        each = shape.cells[cell]
        limits[place] = each.limits[position]
        total = each.grams.sum(axis=0) + each.prior
        rest = each.columns[shape.p:, position] - total[shape.p:, :shape.p] @ of_panel
        z[place, each.terms] = np.linalg.solve(total[shape.p:, shape.p:] + RIDGE * np.eye(len(each.terms)), rest) \
            * shape.scale[each.terms]
    part = [each for each in question.patterns if not each.complete]
    ruled = np.flatnonzero(proof.rule_duals)
    return {"format": FORMAT, "kind": "patterns", "lower_bound": float(claimed), "candidates": problem.n,
            "panel": shape.terms, "cells": {"key": [np.sort(problem.key[each.cell.sites])[0].item() for each in part],
                                            "most": np.array([each.most for each in part], np.int64)},
            "rows": {"limit": limits, "z": z}, "y": np.append(proof.y[used], np.zeros(len(rows) - len(used))),
            "rules": {"index": ruled, "value": proof.rule_duals[ruled]}}

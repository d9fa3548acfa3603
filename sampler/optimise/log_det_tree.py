"""The bound on log det, tightened by branching on how many sites lie at each place of the continuous optimum.

The continuous optimum gathers its weight at a few places, with a fractional number of sites at each. A place R is a set of
candidates; every whole set has w(R) ≤ k or w(R) ≥ k + 1, and either is one more rule of `log_det_bound`. The open node of
the greatest bound is branched first, so that the greatest bound of all open nodes is valid at any moment.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass, replace

import numpy as np

from sampler.optimise.blocks import Array, Split
from sampler.optimise.determinant import Determinant, determinants
from sampler.optimise.exchange import Clock, Stop
from sampler.optimise.log_det import LogDetBound, log_det_bound
from sampler.optimise.pool import Indices
from sampler.optimise.problem import CountRules, SiteProblem
from sampler.optimise.variances import inverted, weighted_information

SUPPORT = 1e-3
"""A weight above this belongs to the support."""
LIKENESS = (0.7, 0.9, 0.97, 0.995, 2.0)
"""Cosine, in the metric of M⁻¹, above which support sites share a place: coarse places are branched on first."""
FRACTIONAL = 0.1
"""A place's count this far from whole is worth a branch before finer places are looked at."""
WHOLE = 1e-4
RIDGE = 1e-9


@dataclass(frozen=True, slots=True)
class BranchedBound:
    """No set has a log det above `value`; `nodes` bounds were computed for it."""

    value: float
    nodes: int


def branched_log_det_bound(split: Split, problem: SiteProblem, budget: float, *, attained: float, gap: float = 0.0,
                           limited: bool = True, deadline: float = np.inf, stop: Stop | None = None) -> BranchedBound:
    """Upper bound on log det as `log_det_bound`, branched until it is within `gap` of `attained`, or time ends."""
    clock = Clock(deadline, stop)
    terms = determinants(split, problem)
    root = log_det_bound(split, problem, budget, limited=limited, deadline=deadline)
    heap: list[tuple[float, int, CountRules, LogDetBound]] = [(-root.value, 0, problem.rules, root)]
    closed, nodes = -np.inf, 1
    while heap and -heap[0][0] > max(attained + gap, closed) and not clock.over():
        negative, _, rules, node = heapq.heappop(heap)
        place = _place(terms, node.weights)
        if not len(place):
            closed = max(closed, -negative)
            continue
        at_most = float(np.floor(node.weights[place].sum()))
        for low, high in ((0.0, at_most), (at_most + 1.0, float(len(place)))):
            child = CountRules((*rules.members, place), np.append(rules.lower, low), np.append(rules.upper, high),
                               (*rules.label, "place"))
            bound = log_det_bound(split, replace(problem, rules=child), budget, limited=limited, deadline=deadline)
            nodes += 1
            heapq.heappush(heap, (max(negative, -bound.value), nodes, child, bound))
    return BranchedBound(max(closed, -heap[0][0] if heap else -np.inf, attained), nodes)


def _place(terms: list[Determinant], weights: Array) -> Indices:
    """The place to branch on: of the coarsest with a fractional count, the one nearest to a half; empty if all are whole."""
    support = np.flatnonzero(weights > SUPPORT)
    support = support[np.argsort(-weights[support], kind="stable")]
    feature = _features(terms, weights)
    best, most = np.zeros(0, np.int64), WHOLE
    for likeness in LIKENESS:
        centres: list[int] = []
        for site in support:
            if not len(centres) or np.abs(feature[centres] @ feature[site]).max() < likeness:
                centres.append(int(site))
        if not centres:
            break
        home = np.abs(feature @ feature[centres].T).argmax(axis=1)
        home[centres] = np.arange(len(centres))
        count = np.bincount(home, weights=weights, minlength=len(centres))
        off = np.abs(count - np.rint(count))
        if off.max() > most:
            best, most = np.flatnonzero(home == int(off.argmax())), float(off.max())
        if most > FRACTIONAL:
            break
    return best


def _features(terms: list[Determinant], weights: Array) -> Array:
    """Each site's readings in the metric of M⁻¹, all blocks side by side, of unit length, (n, d)."""
    used = np.flatnonzero(weights)
    parts = []
    for term in terms:
        if term.weight < 0:
            continue
        q = term.rows.shape[2]
        matrix = weighted_information(term.rows[used], term.prior, weights[used])
        root = np.linalg.cholesky(inverted(matrix + RIDGE * np.trace(matrix) / q * np.eye(q)))
        parts.append((term.rows @ root).reshape(len(weights), -1))
    feature = np.concatenate(parts, axis=1)
    return feature / np.maximum(np.linalg.norm(feature, axis=1, keepdims=True), np.finfo(float).tiny)

"""Visiting order of chosen units, and swaps that make the route quicker without losing what the plan must hold."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.blocks import split
from sampler.optimise.determinant import determinants, swap_gains
from sampler.optimise.search import meets
from sampler.route.bound import reading_seconds
from sampler.route.machine import to_machine_frame, travel_seconds
from sampler.route.visit import Route, far_side, follow, plan_route
from sampler.tasks.loss import worst_losses
from sampler.tasks.question import Question, knowledge_of, limits_achieved, problem_of
from sampler.tasks.results import MEETS
from sampler.tasks.units import Visits

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

LEAST_GAIN_S = 1e-3
"""Swaps that save less are not worth a change of plan."""
MOST_TRIED = 300
"""Swaps of one round whose limits are looked at, those that promise most first."""
RIDGE = 1e-9
"""Of the information of an average set of that size, for the change of log det by a swap; sets are judged without."""
ROUTE_ITERATIONS = 300
FEW_ROUNDS = 40


def panel_size(asked: Question) -> tuple[float, float]:
    return asked.study.layout.width_mm, asked.study.layout.height_mm


def routed(asked: Question, units: Indices, *, iterations: int | None = None, bound: bool = True) -> tuple[Visits, Route]:
    """The chosen units in visiting order, as readings, and the route over them; row k of the route is `units[k]`."""
    here = asked.units
    route = plan_route(here.xy_mm[units], asked.study.machine, panel_size(asked), side=here.side[units],
                       read_s=here.read_s[units], key=here.key[units], seed=asked.study.search.seed, iterations=iterations,
                       bound=bound)
    return here.visits(units[route.order]), route


def listed_route(asked: Question, rows: Indices) -> Route:
    """The route over marks (n,) in the order given."""
    sites = asked.candidates.sites
    return follow(np.arange(len(rows)), sites.xy_mm[rows], asked.study.machine, panel_size(asked), side=sites.side[rows],
                  read_s=sites.seconds[rows])


def best_route(asked: Question, rows: Indices) -> Route:
    """The quickest route found over the same marks."""
    sites = asked.candidates.sites
    return plan_route(sites.xy_mm[rows], asked.study.machine, panel_size(asked), side=sites.side[rows],
                      read_s=sites.seconds[rows], key=sites.id[rows], seed=asked.study.search.seed)


def held(asked: Question, visits: Visits) -> bool:
    """Whether the audit of the visits meets every limit, also after the losses that must be borne."""
    if any(limit.ratio > MEETS for limit in limits_achieved(asked, knowledge_of(asked, visits))):
        return False
    lost = asked.study.rules.lost
    if not lost or not asked.study.limits:
        return True
    maximum = [limit.maximum for limit in limits_achieved(asked, knowledge_of(asked, visits))]
    return all(loss.k_u <= most * MEETS for loss, most in zip(worst_losses(asked, visits, lost), maximum, strict=True))


def quicker(asked: Question, units: Indices, information_loss: float, until: float, stop: Callable[[], bool] | None) -> Indices:
    """As many units whose route takes less time, by swaps that keep every limit and rule.

    At most the share `information_loss` of D-efficiency is given up, against the units that came in; 1 gives up any.
    """
    problem = problem_of(asked)
    parts = split(problem)
    terms = determinants(parts, problem)
    spare = np.inf if information_loss >= 1.0 else -len(asked.study.model) * np.log1p(-information_loss)
    seconds = routed(asked, units, iterations=ROUTE_ITERATIONS, bound=False)[1].seconds
    for _ in range(FEW_ROUNDS):
        if time.monotonic() >= until or (stop is not None and stop()):
            break
        units = np.sort(units)
        ridge = RIDGE * len(units) / problem.n
        change = swap_gains(terms, [term.inverse(units, ridge) for term in terms], units)
        saved = _saved(asked, units)
        saved[(change < -spare) | (saved < LEAST_GAIN_S)] = -np.inf
        swap = None
        best = np.argsort(-saved, axis=None, kind="stable")[:MOST_TRIED]
        for place in best[np.isfinite(saved.ravel()[best])]:
            if time.monotonic() >= until:
                break
            site, position = np.unravel_index(place, saved.shape)
            tried = units.copy()
            tried[position] = site
            if not meets(parts, problem, np.sort(tried)):
                continue
            visits, route = routed(asked, np.sort(tried), iterations=ROUTE_ITERATIONS, bound=False)
            if route.seconds < seconds - LEAST_GAIN_S and held(asked, visits):
                swap, seconds, spare = tried, route.seconds, spare + float(change[site, position])
                break
        if swap is None:
            break
        units = swap
    return np.sort(units)


def _saved(asked: Question, units: Indices) -> Array:
    """Seconds that each swap saves at least while the other units keep their order, (all units, chosen); −∞ for a unit
    that is chosen. The newcomer is inserted where it costs least among the moves of its own side."""
    machine, here, n = asked.study.machine, asked.units, len(asked.units)
    far = far_side(n, here.side)
    seen = to_machine_frame(here.xy_mm, machine, panel_size(asked), far)
    reads = reading_seconds(machine, n, here.read_s)
    order = routed(asked, units, iterations=ROUTE_ITERATIONS, bound=False)[1].order
    along = units[order]
    count = len(along)
    # Stations of the route: the machine's start, the chosen units, the machine's end; a free end costs nothing.
    to = np.zeros((n, count + 2))
    to[:, 1:-1] = np.where(far[:, None] == far[along], travel_seconds(machine, seen[:, None], seen[along]), np.inf)
    for station, at in ((0, machine.start_mm), (count + 1, machine.end_mm)):
        if at is not None:
            to[:, station] = travel_seconds(machine, seen, at)
    between = np.zeros((count + 2, count + 2))
    between[1:-1], between[0, 1:-1], between[-1, 1:-1] = to[along], to[along, 0], to[along, -1]
    between[np.isinf(between)] = 0.0  # turning over: what the move from side to side takes is left out
    inserted = to[:, :-1] + to[:, 1:] - np.diagonal(between, 1)
    saved = np.empty((n, count))
    for position in range(count):
        around = between[position, position + 2]
        left = np.delete(inserted, [position, position + 1], axis=1).min(axis=1, initial=np.inf)
        merged = to[:, position] + to[:, position + 2] - around
        gone = between[position, position + 1] + between[position + 1, position + 2] - around + reads[along[position]]
        saved[:, order[position]] = gone - np.minimum(left, merged) - reads
    saved[units] = -np.inf
    return saved

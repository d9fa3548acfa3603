"""What the loss of readings does to the limits, worked out for many sets of lost readings at once.

With M = P₀ + Σ BᵢᵀBᵢ over all readings, and the rows of a lost set I stacked to B_I, g = B_I M⁻¹c and H = B_I M⁻¹B_Iᵀ:

    v₋ = v + gᵀ(I − H)⁻¹g        and        v + Σ_{i ∈ I} gᵢᵀgᵢ  ≤  v₋  ≤  v + Σ_{i ∈ I} gᵢᵀgᵢ / (1 − tr H)    (Woodbury).

Marks read in one stop share an error: it is a term of its own here, with a prior, so that each mark can be lost alone.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from sampler.model.basis import places
from sampler.tasks.question import Question, knowledge_of, worst_of
from sampler.tasks.results import Audit
from sampler.tasks.study import TermLimit
from sampler.tasks.units import Visits, one_by_one
from sampler.uncertainty.information import RANK_TOLERANCE, Knowledge, information
from sampler.uncertainty.position import WorstPlace

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

LAST_READING = 1e-9
"""Share of a reading's variance that all the others leave it, below which the reading is the only one of its kind."""
NEAR_WORST = 0.99
MOST_REFINED = 12
"""Of a region limit, the losses whose worst ratio on the raster is within this share of the worst are looked at between
raster points too, at most so many: a raster misses a worst place by far less."""
CHUNK_NUMBERS = 4_000_000


@dataclass(frozen=True, slots=True)
class Demands:
    """Directions (L, p), limits `maximum` (L,) on k·u, the part `fixed` (L,) of (k·u)² that no reading changes, and `owner`
    (L,), the audited limit that each belongs to. Regions are on their raster."""

    directions: Array
    maximum: Array
    fixed: Array
    owner: Indices


def demands(asked: Question) -> Demands:
    """Everything that the study's limits demand."""
    study, parts, owner = asked.study, [], 0
    for source, limit in enumerate(study.limits):
        if isinstance(limit, TermLimit):
            count = len(limit.terms)
            columns = [study.model.names.index(name) for name in limit.terms]
            parts.append((np.eye(asked.assumed.size)[columns], np.full(count, limit.maximum), np.zeros(count),
                          owner + np.arange(count)))
            owner += count
        else:
            at = asked.rasters[source]
            rows = asked.assumed.position(places(study.layout, at.xy_mm, at.cell), limit.of).reshape(-1, asked.assumed.size)
            fixed = (study.coverage_factor * asked.assumed.fixed_um(at.xy_mm, limit.of).ravel()) ** 2
            parts.append((rows, np.full(len(rows), limit.position_um), fixed, np.full(len(rows), owner)))
            owner += 1
    if not parts:
        return Demands(np.zeros((0, asked.assumed.size)), np.zeros(0), np.zeros(0), np.zeros(0, np.int64))
    directions, maximum, fixed, whose = (np.concatenate([part[k] for part in parts]) for k in range(4))
    return Demands(directions, maximum, fixed, whose)


class Losses:
    """The readings of visits, any of which may be lost; every ratio is squared: (k·u / limit)²."""

    def __init__(self, asked: Question, visits: Visits) -> None:
        rows, prior = _apart(asked, visits)
        knowledge = Knowledge.of(information(rows, prior))
        half = knowledge.vectors[:, knowledge.known] / np.sqrt(knowledge.values[knowledge.known]) / knowledge.scale[:, None]
        asks = demands(asked)
        extra = np.zeros((len(asks.maximum), rows.shape[2] - asks.directions.shape[1]))
        directions = np.concatenate([asks.directions, extra], axis=1)
        scale = asked.study.coverage_factor / asks.maximum
        self.owner = asks.owner
        self.before = knowledge.variance(directions) * scale**2 + asks.fixed / asks.maximum**2
        self.seen = rows @ half
        self.wanted = (directions @ half) * scale[:, None]
        self.told = self.seen @ self.wanted.T

    @property
    def limits(self) -> int:
        return int(self.owner.max(initial=-1)) + 1

    def after(self, sets: Indices) -> Array:
        """The ratios of every demand after the loss of each set of marks (sets, m), (sets, L)."""
        count = sets.shape[0]
        seen = self.seen[sets].reshape(count, -1, self.seen.shape[2])
        left, turn = np.linalg.eigh(np.eye(seen.shape[1]) - seen @ seen.transpose(0, 2, 1))
        part = turn.transpose(0, 2, 1) @ self.told[sets].reshape(count, seen.shape[1], -1)
        gone = left <= LAST_READING
        squares = part**2 / np.where(gone, 1.0, left)[:, :, None]
        squares[gone] = 0.0
        total = self.before + squares.sum(axis=1)
        for row, reading in np.argwhere(gone):
            total[row, part[row, reading] ** 2 > RANK_TOLERANCE * (self.wanted**2).sum(axis=1)] = np.inf
        return total

    def worst(self, sets: Indices) -> Array:
        """The worst ratio of each audited limit after each loss, (sets, limits)."""
        worst = np.full((len(sets), self.limits), -np.inf)
        step = max(1, CHUNK_NUMBERS // max(1, 2 * sets.shape[1] * len(self.owner)))
        for start in range(0, len(sets), step):
            part = slice(start, start + step)
            np.maximum.at(worst[part].T, self.owner, self.after(sets[part]).T)
        return worst

    def bounds(self, lost: NDArray[np.bool_], asked: Indices) -> tuple[Array, Array]:
        """Least and most of the ratios of the demands asked after the losses (sets, marks), each (sets, asked)."""
        told = (self.told[:, :, asked] ** 2).sum(axis=1)
        rise = lost.astype(float) @ told
        left = 1.0 - lost.astype(float) @ (self.seen**2).sum(axis=(1, 2))
        most = np.where(left[:, None] > 0, rise / np.where(left > 0, left, 1.0)[:, None], np.inf)
        return self.before[asked] + rise, self.before[asked] + most


def _apart(asked: Question, visits: Visits) -> tuple[Array, Array]:
    """Readings of the visited marks (n, 2, P) that err independently of each other, and the prior (P, P)."""
    rows, prior = asked.whitened[visits.marks], asked.assumed.prior_precision
    if asked.units.stops is None or max(asked.units.stop_um) == 0:
        return rows, prior
    n, p, stops = len(rows), rows.shape[2], len(visits.unit)
    shared = np.zeros((n, 2, stops, 2))
    ratio = np.asarray(asked.units.stop_um) / asked.units.sites.sigma_um[visits.marks]
    for axis in (0, 1):
        shared[np.arange(n), axis, visits.stop, axis] = ratio[:, axis]
    whole = np.eye(p + 2 * stops)
    whole[:p, :p] = prior
    return np.concatenate([rows, shared.reshape(n, 2, 2 * stops)], axis=2), whole


@dataclass(frozen=True, slots=True)
class WorstLoss:
    """The loss that hurts a limit most: the visited `units` lost, k·u then, and where in a region."""

    units: Indices
    k_u: float
    place: WorstPlace | None


def worst_losses(asked: Question, visits: Visits, lost: int) -> tuple[WorstLoss, ...]:
    """The worst loss of any `lost` of the visited units (marks, or stops) for each audited limit, exact over all such sets."""
    units = len(visits.unit)
    sets = np.array(list(combinations(range(units), min(lost, units))), np.int64).reshape(-1, min(lost, units))
    ratios = np.sqrt(_ratios(asked, visits, sets))
    found, number = [], 0
    for source, limit in enumerate(asked.study.limits):
        if isinstance(limit, TermLimit):
            for _ in limit.terms:
                at = int(ratios[:, number].argmax())
                found.append(WorstLoss(sets[at], float(ratios[at, number]) * limit.maximum, None))
                number += 1
            continue
        order = np.argsort(-ratios[:, number], kind="stable")[:MOST_REFINED]
        order = order[ratios[order, number] >= NEAR_WORST * ratios[order[0], number]]
        tried = []
        for at in order[:1] if np.isinf(ratios[order[0], number]) else order:
            worst = worst_of(asked, knowledge_of(asked, without(asked, visits, sets[at])), source)
            tried.append(WorstLoss(sets[at], asked.study.coverage_factor * worst.u_um, worst))
        found.append(max(tried, key=lambda loss: loss.k_u))
        number += 1
    return tuple(found)


def _ratios(asked: Question, visits: Visits, sets: Indices) -> Array:
    """Squared ratios of each audited limit after the loss of each set of units, (sets, limits)."""
    if _singly(asked, visits):
        return Losses(asked, visits).worst(sets)
    asks = demands(asked)
    worst = np.full((len(sets), int(asks.owner.max(initial=-1)) + 1), -np.inf)
    for row, gone in enumerate(sets):
        variance = knowledge_of(asked, without(asked, visits, gone)).variance(asks.directions)
        squares = (asked.study.coverage_factor**2 * variance + asks.fixed) / asks.maximum**2
        np.maximum.at(worst[row], asks.owner, squares)
    return worst


def without(asked: Question, visits: Visits, units: Indices) -> Visits:
    """The visits that are left when these of their units are lost; a mark of a lost stop is read in another that sees it."""
    if _singly(asked, visits):
        return one_by_one(np.delete(visits.marks, units))
    return asked.units.visits(np.delete(visits.unit, units))


def _singly(asked: Question, visits: Visits) -> bool:
    """Whether the visited units are marks, as in a listed set; then the loss of one leaves the others as they are."""
    return asked.units.stops is None or np.array_equal(visits.unit, visits.marks)


def with_losses(audit: Audit, asked: Question, visits: Visits) -> Audit:
    """The audit with what each limit is after the loss of as many units as the study's rules say."""
    lost = asked.study.rules.lost
    if not lost or not audit.limits:
        return audit
    after = worst_losses(asked, visits, lost)
    return replace(audit, lost=lost, limits=tuple(replace(limit, after_loss=loss.k_u)
                                                  for limit, loss in zip(audit.limits, after, strict=True)))

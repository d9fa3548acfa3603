"""The layout changed: the fewest sites on it, and among those the most of the old ones; or the fewest new sites."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

from sampler.errors import InputError
from sampler.optimise.problem import CountRules
from sampler.tasks.plan import plan
from sampler.tasks.question import Question, achieved, question
from sampler.tasks.results import Audit, Plan
from sampler.tasks.rules import unit_rules
from sampler.tasks.study import Study

Array = NDArray[np.float64]
Indices = NDArray[np.int64]
Progress = Callable[[float, float], None]

TOLERANCE_MM = 0.05
"""A mark within this distance of its old place has not moved; one under another name there is the same mark."""
TURN_SHARE = 0.5
LEAST_SECONDS = 0.5
"""Each question gets this share of what is left of the study's search seconds, and at least so many seconds."""


@dataclass(frozen=True, slots=True)
class Change:
    """What becomes of one site. `what` is "kept", "moved", "dropped" or "added"; `old_mm` and `new_mm` are in the layout's
    own frame, None where there is no such place; `id` is its name now (its old one when dropped)."""

    what: str
    id: str
    old_mm: tuple[float, float] | None
    new_mm: tuple[float, float] | None
    reason: str


@dataclass(frozen=True, slots=True)
class Replanned:
    """The plan on the new layout, and what changed.

    `before`: what the old sites that are left would achieve, None when none is. `new_at_least`: no plan of as many sites (with
    `fewest_new`: no plan at all) does with fewer new sites; `new_proven` when that is the number added.
    """

    plan: Plan
    changes: tuple[Change, ...]
    before: Audit | None
    fewest_new: bool
    new_at_least: int
    tolerance_mm: float

    def count(self, what: str) -> int:
        return sum(change.what == what for change in self.changes)

    @property
    def new_proven(self) -> bool:
        return self.new_at_least >= self.count("added")


@dataclass(frozen=True, slots=True)
class _Old:
    """An old site found again: its row among the candidates, or −1 and why not."""

    id: str
    old_mm: tuple[float, float]
    row: int
    reason: str


def replan(study: Study, ids: Sequence[str], own_mm: Array, *, fewest_new: bool = False, most_new: int | None = None,
           tolerance_mm: float = TOLERANCE_MM, progress: Progress | None = None,
           stop: Callable[[], bool] | None = None) -> Replanned:
    """Plans the study, whose layout is the new one, for an old plan's sites (`own_mm` (n, 2), the layout's own frame).

    An old site is found again by its id, else by its place within the tolerance. By default the fewest sites, and among
    those the most old ones; `fewest_new`: the fewest new sites, with as many old ones as the limits need. `most_new` caps
    the new sites of either. Raises InputError for a plan that counts stops.
    """
    if study.measure.field_of_view_mm is not None:
        raise InputError(f"{study.source.path}: re-planning matches single marks, and this study counts stops; take "
                         "field_of_view_mm out, or plan anew")
    until = time.monotonic() + study.search.seconds
    asked = question(study)
    old = _found_again(asked, ids, own_mm, tolerance_mm)
    rows = np.array([site.row for site in old if site.row >= 0], np.int64)
    before = achieved(asked, asked.units.visits(rows)) if len(rows) else None

    def at_most(new: int | None, sites: int | None) -> Plan:
        """The plan with at most so many new sites, and so many sites in all."""
        left = max(LEAST_SECONDS, (until - time.monotonic()) * TURN_SHARE)
        rules = replace(study.rules, max_sites=_least(study.rules.max_sites, sites))
        if new == 0 and sites == len(rows):  # then all old sites are the only set there is
            rules = replace(rules, required=tuple(asked.candidates.sites.id[rows].tolist()))
        limited = replace(study, search=replace(study.search, seconds=left), rules=rules)
        return plan(limited, asked=_with_few_new(replace(asked, study=limited, rules=unit_rules(limited, asked.units)), rows,
                                                  _least(most_new, new)), progress=progress, stop=stop)

    base = at_most(None, None)
    if base.status == "cannot":
        return Replanned(replace(base, study=study, advice=_advice(base, most_new)), (), before, fewest_new, 0, tolerance_mm)
    best, at_least = _fewest_new(asked, rows, base, None if fewest_new else len(base.sites), at_most)
    final = _as_planned(best, base, study)
    return Replanned(final, _changes(asked, old, final, tolerance_mm), before, fewest_new, at_least, tolerance_mm)


def _least(*numbers: int | None) -> int | None:
    given = [number for number in numbers if number is not None]
    return min(given) if given else None


def _with_few_new(asked: Question, old: Indices, most_new: int | None) -> Question:
    """The question with the rule that at most so many candidates that are not old sites are chosen."""
    if most_new is None:
        return asked
    counts = asked.rules.counts
    new = np.setdiff1d(np.arange(asked.n), old)
    return replace(asked, rules=replace(asked.rules, counts=CountRules(
        (*counts.members, new), np.append(counts.lower, 0.0), np.append(counts.upper, float(most_new)),
        (*counts.label, f"at most {most_new} new sites"))))


def _fewest_new(asked: Question, old: Indices, base: Plan, sites: int | None,
                at_most: Callable[[int | None, int | None], Plan]) -> tuple[Plan, int]:
    """The plan with the fewest new sites, of at most `sites` sites, and a number that no such plan falls below.

    Plans with at most k new sites exist for every k from some least one on: halving finds it.
    """
    names = set(asked.candidates.sites.id[old].tolist())
    best, low, unproven = base, 0, False
    high = sum(str(name) not in names for name in base.sites.id)
    tried = 0  # nothing new at all is the likeliest answer
    while low < high:
        found = at_most(tried, sites)
        if found.status != "cannot":
            best = found
            high = sum(str(name) not in names for name in found.sites.id)
        else:
            unproven |= not found.excluded
            low = tried + 1
        tried = (low + high) // 2
    return best, 0 if unproven else low


def _as_planned(best: Plan, base: Plan, study: Study) -> Plan:
    """The plan with the bound and the proof of the study itself, which knows nothing of old and new."""
    proven = base.fewest_proven and len(best.sites) == len(base.sites)
    efficiency = base.d_efficiency_at_least * math.exp((best.audit.log_det - base.audit.log_det) / len(study.model)) \
        if len(best.sites) == len(base.sites) else math.nan
    return replace(best, study=study, status="proven" if proven else "interval", lower_bound=base.lower_bound,
                   certificate=base.certificate, d_efficiency_at_least=min(1.0, efficiency), warnings=study.warnings)


def _advice(base: Plan, most_new: int | None) -> tuple[str, ...]:
    if most_new is None or not base.audit.meets_limits:
        return base.advice
    return (f"no plan with at most {most_new} new sites was found: raise --most-new, or loosen the limits", *base.advice)


def _found_again(asked: Question, ids: Sequence[str], own_mm: Array, tolerance_mm: float) -> list[_Old]:
    layout, sites = asked.study.layout, asked.candidates.sites
    place = {str(name): row for row, name in enumerate(sites.id)}
    drawn = {str(name): mark for mark, name in enumerate(layout.marks.id)}
    taken = {place[name] for name in ids if name in place}
    distance, nearest = (np.asarray(part) for part in KDTree(sites.xy_mm - layout.origin_mm).query(own_mm))
    found = []
    for number, name in enumerate(ids):
        at = (float(own_mm[number, 0]), float(own_mm[number, 1]))
        if name in place:
            found.append(_Old(name, at, place[name], ""))
        elif distance[number] <= tolerance_mm and int(nearest[number]) not in taken:
            taken.add(int(nearest[number]))
            found.append(_Old(name, at, int(nearest[number]), f"now named {sites.id[int(nearest[number])]}"))
        elif name in drawn:
            found.append(_Old(name, at, -1, f"now {asked.candidates.reason[drawn[name]]}"))
        else:
            found.append(_Old(name, at, -1, "gone from the layout"))
    return found


def _changes(asked: Question, old: list[_Old], final: Plan, tolerance_mm: float) -> tuple[Change, ...]:
    layout, sites = asked.study.layout, asked.candidates.sites
    own = {str(name): (float(x), float(y)) for name, (x, y) in
           zip(final.sites.id, np.round(final.sites.xy_mm - layout.origin_mm, 9) + 0.0, strict=True)}
    changes = []
    known = set()
    for site in old:
        name = site.id if site.row < 0 else str(sites.id[site.row])
        known.add(name)
        if site.row < 0:
            changes.append(Change("dropped", site.id, site.old_mm, None, site.reason))
        elif name not in own:
            changes.append(Change("dropped", site.id, site.old_mm, None, "no longer needed"))
        else:
            moved = math.dist(own[name], site.old_mm)
            far = f"by {moved:.3g} mm" if moved > tolerance_mm else ""
            changes.append(Change("moved" if far else "kept", name, site.old_mm, own[name],
                                  "; ".join(part for part in (site.reason, far) if part)))
    changes += [Change("added", name, None, own[name], "needed to meet the limits") for name in own if name not in known]
    order = {"kept": 0, "moved": 1, "dropped": 2, "added": 3}
    return tuple(sorted(changes, key=lambda change: order[change.what]))

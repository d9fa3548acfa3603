"""A study's rules as rows on the units of the search, and what contradicts among them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.spatial import KDTree

from sampler.errors import InputError
from sampler.optimise.contradiction import Statement, counting, smallest_contradiction
from sampler.optimise.problem import CountRules
from sampler.panel.layout import EDGE_TOLERANCE_MM, Layout, Sites
from sampler.panel.region import inside_region
from sampler.tasks.study import Rules, Study, ZoneRule
from sampler.tasks.units import Units

Indices = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class UnitRules:
    """`required` (units,), and `counts` the rows on them."""

    required: NDArray[np.bool_]
    counts: CountRules


def barred(rules: Rules, sites: Sites) -> NDArray[np.bool_]:
    """Sites that may not be measured by their id or kind, (n,)."""
    return np.isin(sites.id, rules.forbidden) | np.isin(sites.kind, rules.forbidden_kinds)


def unit_rules(study: Study, units: Units) -> UnitRules:
    """The rules as the search needs them. With stops every count is of stops that read a mark of the group."""
    rules, sites, n = study.rules, units.sites, len(units)
    asked = np.isin(sites.id, rules.required) | np.isin(sites.kind, rules.required_kinds)
    rows: list[tuple[str, Indices, float, float]] = []
    required = np.zeros(n, bool)
    if units.stops is None:
        required = asked
    else:
        rows += [(f'required "{sites.id[mark]}"', units.containing(np.array([mark])), 1.0, np.inf)
                 for mark in np.flatnonzero(asked)]
    for cell_rule in rules.per_cell:
        grid = study.layout.grid(cell_rule.grid)
        cell = grid.locate(sites.xy_mm)
        most = np.inf if cell_rule.most is None else float(cell_rule.most)
        for index in range(grid.cells):
            members = np.flatnonzero(cell == index)
            if len(members):
                rows.append((f"per_cell {grid.name}, cell {grid.cell_label(index)}", units.containing(members),
                             float(cell_rule.least), most))
    for zone in rules.per_zone:
        members = np.flatnonzero(inside_zone(study.layout, zone, sites.xy_mm))
        rows.append((f'per_zone "{zone.name}"', units.containing(members), float(zone.least),
                     np.inf if zone.most is None else float(zone.most)))
    if study.search.sites is not None:
        rows.append((f"[search] sites = {study.search.sites}", np.arange(n), float(study.search.sites),
                     float(study.search.sites)))
    counts = CountRules(tuple(row[1] for row in rows), np.array([row[2] for row in rows]),
                        np.array([row[3] for row in rows]), tuple(row[0] for row in rows))
    return UnitRules(required, counts)


def inside_zone(layout: Layout, zone: ZoneRule, xy_mm: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Which points (n, 2) lie in a zone, its edge included."""
    if zone.circle_mm is None:
        return inside_region(layout, "polygon", zone.polygon_mm, xy_mm)
    x, y, radius = zone.circle_mm
    return np.hypot(xy_mm[:, 0] - x, xy_mm[:, 1] - y) <= radius + EDGE_TOLERANCE_MM


def check_rules(study: Study, units: Units, found: UnitRules) -> None:
    """Raises InputError naming the smallest set of rules that no choice satisfies."""
    n, rules = len(units), study.rules
    statements = [counting(f'required "{units.key[unit]}"', np.array([unit]), n, 1, 1)
                  for unit in np.flatnonzero(found.required)]
    statements += [counting(_said(label, lower, upper), members, n, lower, upper) for label, members, lower, upper in
                   zip(found.counts.label, found.counts.members, found.counts.lower, found.counts.upper, strict=True)]
    if rules.max_sites is not None:
        statements.append(counting(f"max_sites = {rules.max_sites}", np.arange(n), n, 0, rules.max_sites))
    if rules.min_spacing_mm is not None:
        close = _close_pairs(units, found, rules.min_spacing_mm)
        if len(close):
            pairs = csr_array((np.ones(2 * len(close)), close.ravel(), np.arange(0, 2 * len(close) + 1, 2)),
                              shape=(len(close), n))
            statements.append(Statement(f"min_spacing_mm = {rules.min_spacing_mm:g}", pairs, np.zeros(len(close)),
                                        np.ones(len(close))))
    group = smallest_contradiction(statements)
    if group is not None:
        where = study.source.path or study.title
        named = "; ".join(statements[index].label for index in group)
        raise InputError(f"{where}: [rules] cannot be obeyed {'together' if len(group) > 1 else 'at all'}: {named}; "
                         "change one of them")


def _said(label: str, lower: float, upper: float) -> str:
    if lower == upper:
        return f"{label}: exactly {lower:g}"
    if np.isinf(upper):
        return f"{label}: at least {lower:g}"
    return f"{label}: at most {upper:g}" if lower <= 0 else f"{label}: {lower:g} to {upper:g}"


def _close_pairs(units: Units, found: UnitRules, spacing_mm: float) -> Indices:
    """Pairs closer than the spacing among units that a rule may force to be chosen, (k, 2)."""
    forced = found.required.copy()
    for members, lower in zip(found.counts.members, found.counts.lower, strict=True):
        if lower > 0:
            forced[members] = True
    where = np.flatnonzero(forced)
    pairs = KDTree(units.xy_mm[where]).query_pairs(spacing_mm * (1 - 1e-12), output_type="ndarray") if len(where) else \
        np.zeros((0, 2), np.int64)
    return where[pairs]


def not_on_side(layout: Layout, side: str) -> NDArray[np.str_]:
    """Why a mark may not be measured because of its side, (marks,): "" when it may."""
    marks = layout.marks
    if side == "both":
        return np.full(len(marks), "", "U1")
    return np.where(marks.side == side, "", f"not on the {side} side")

"""Stops, found again for `certify`: which groups of marks one field of view can read, and what such a stop tells.

Nothing here is shared with the rooms that plan: groups are found by trying every left and lower edge, and the stop's shared
error is taken out by the square root of its whole covariance.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.errors import CertificateError
from sampler.panel.layout import Sites

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

SAME_PLACE_MM = 1e-6


@dataclass(frozen=True, slots=True)
class Stops:
    """`marks`: the rows of the sites that each stop reads; `xy_mm` (s, 2) the middle of their bounding boxes; `key` (s,)."""

    marks: tuple[Indices, ...]
    xy_mm: Array
    key: NDArray[np.str_]

    def __len__(self) -> int:
        return len(self.marks)

    def any_of(self, sites: NDArray[np.bool_]) -> NDArray[np.bool_]:
        """Which stops read any of the sites (n,)."""
        return np.array([bool(sites[marks].any()) for marks in self.marks])

    def read(self, units: Indices) -> list[Indices]:
        """The marks of each of the units, in their order; a mark that several see is read at the first."""
        seen: set[int] = set()
        groups = []
        for unit in units:
            fresh = [mark for mark in self.marks[unit].tolist() if mark not in seen]
            seen.update(fresh)
            groups.append(np.array(fresh, np.int64))
        return groups

    def stated(self, plan: dict[str, Any], rows: Indices, origin_mm: tuple[float, float]) -> Indices:
        """The stops that plan.json lists, by where they stand; its sites must be the marks that these read, each at its stop."""
        units = []
        for stop in plan["stops"]:
            at = np.array([stop["x_mm"], stop["y_mm"]], float) + origin_mm
            here = np.flatnonzero(np.abs(self.xy_mm - at).max(axis=1) <= SAME_PLACE_MM)
            mine = set(rows[[site["stop"] == stop["stop"] for site in plan["sites"]]].tolist())
            here = np.array([unit for unit in here if mine <= set(self.marks[unit].tolist())], np.int64)
            if not len(here):
                raise CertificateError(f"plan.json: no stop at ({at[0]:g}, {at[1]:g}) mm reads the marks of stop {stop['stop']}")
            units.append(int(here[0]))
        if len(set(units)) != len(units) or plan["n_stops"] != len(units):
            raise CertificateError("plan.json: n_stops and the list of stops do not agree")
        read = np.concatenate([np.zeros(0, np.int64), *self.read(np.array(units, np.int64))])
        if not np.array_equal(np.sort(read), np.sort(rows)):
            raise CertificateError("plan.json: its sites are not the marks that its stops read")
        return np.array(units, np.int64)


def all_stops(sites: Sites, field_of_view_mm: tuple[float, float]) -> Stops:
    """Every group of marks that lie in one field and in no larger group, once."""
    width, height = field_of_view_mm
    groups: set[frozenset[int]] = set()
    for side in np.unique(sites.side):
        rows = np.flatnonzero(sites.side == side)
        xy = sites.xy_mm[rows]
        for x in np.unique(xy[:, 0]):
            column = np.flatnonzero((xy[:, 0] >= x - SAME_PLACE_MM) & (xy[:, 0] <= x + width + SAME_PLACE_MM))
            for y in np.unique(xy[column, 1]):
                inside = column[(xy[column, 1] >= y - SAME_PLACE_MM) & (xy[column, 1] <= y + height + SAME_PLACE_MM)]
                groups.add(frozenset(rows[inside].tolist()))
    by_mark: dict[int, list[frozenset[int]]] = {}
    for group in groups:
        for mark in group:
            by_mark.setdefault(mark, []).append(group)
    largest = [group for group in groups if not any(group < other for other in by_mark[min(group)])]
    marks = tuple(np.array(sorted(group), np.int64) for group in sorted(largest, key=sorted))
    box = [(sites.xy_mm[each].min(axis=0) + sites.xy_mm[each].max(axis=0)) / 2 for each in marks]
    return Stops(marks, np.array(box), np.array(["+".join(sorted(sites.id[each])) for each in marks]))


def stop_readings(groups: Sequence[Indices], readings: Array, sigma: Array, stop_um: tuple[float, float]) -> Array:
    """Readings (s, 2·most, p) of groups of marks, whitened by their covariance: σᵢ² of each mark, and the stop's on all.

    `readings` (n, 2, p) are already divided by `sigma` (n, 2). The root is the symmetric one, marks in ascending rows.
    """
    most = max((len(group) for group in groups), default=0)
    found = np.zeros((len(groups), most, 2, readings.shape[2]))
    for number, group in enumerate(groups):
        for axis in (0, 1):
            shared = stop_um[axis] / sigma[group, axis]
            values, vectors = np.linalg.eigh(np.eye(len(group)) + np.outer(shared, shared))
            found[number, :len(group), axis] = (vectors / np.sqrt(values)) @ vectors.T @ readings[group, axis]
    return found.reshape(len(groups), 2 * most, -1)

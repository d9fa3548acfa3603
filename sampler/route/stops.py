"""Stops that read every mark in a field of view: all useful groupings, none that another contains."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

from sampler.errors import InputError

Array = NDArray[np.float64]
Index = NDArray[np.int64]

UNIT_MM = 1e-6             # coordinates are compared as whole nanometres: marks one field apart share it, despite rounding
CHUNK = 4_000_000          # comparisons held in memory at once


@dataclass(frozen=True, slots=True)
class Stops:
    """Stage positions `xy_mm` (s, 2) and their marks: stop k reads `indices[indptr[k]:indptr[k + 1]]`, ascending rows.

    Ordered by the left, then the lower edge of their marks (then side), so independent of the order of the marks.
    """

    xy_mm: Array
    indptr: Index
    indices: Index

    def __len__(self) -> int:
        return len(self.xy_mm)

    def marks(self, stop: int) -> Index:
        return self.indices[self.indptr[stop]:self.indptr[stop + 1]]

    @property
    def stop_of(self) -> Index:
        """The stop of each entry of `indices`."""
        return np.repeat(np.arange(len(self)), np.diff(self.indptr))


def candidate_stops(xy_mm: Array, field_of_view_mm: tuple[float, float],
                    side: NDArray[np.str_] | None = None) -> Stops:
    """Every largest group of marks (n, 2) that one field (width, height) covers, once; edges of the field included.

    A stop stands over the centre of its marks' bounding box. Marks of different `side` (n,) never share a stop.
    A largest group is all that lies in the field whose left edge is at its leftmost mark and whose lower edge is at its
    lowest; so fields at such pairs of marks miss none. A group with bounding box [a, b] × [c, d] is a largest one
    exactly when no mark outside it lies in [b − w, a + w] × [d − h, c + h].
    Raises `InputError` for a field that is not positive.
    """
    if not all(size > 0 for size in field_of_view_mm):
        raise InputError(f"field_of_view_mm is {list(field_of_view_mm)}; give a positive width and height")
    n = len(xy_mm)
    width, height = (round(size / UNIT_MM) for size in field_of_view_mm)
    at = np.rint(np.asarray(xy_mm, float).reshape(n, 2) / UNIT_MM).astype(np.int64)
    if side is not None and n:  # sides far apart in y, so that nothing later needs to know them
        at[:, 1] += np.unique(side, return_inverse=True)[1] * (np.ptp(at[:, 1]) + 2 * height + 1)
    order = np.lexsort((at[:, 1], at[:, 0]))
    x, y = at[order].T
    start, near = _neighbours(x, y, width, height)
    left, low = _anchors(x, y, start, near)
    sizes = np.diff(start)[left]
    parts = np.array_split(np.arange(len(left)), int(sizes.sum()) // CHUNK + 1)
    groups = [_largest(x, y, start, near, left[part], low[part], width, height) for part in parts]
    count, members = (np.concatenate(columns) for columns in zip(*groups, strict=True))
    indptr = np.concatenate([[0], np.cumsum(count)])
    indices = order[members]
    indices = indices[np.lexsort((indices, np.repeat(np.arange(len(count)), count)))]
    drawn = np.asarray(xy_mm, float).reshape(n, 2)[indices]
    if not n:
        return Stops(drawn, indptr, indices)
    box = np.minimum.reduceat(drawn, indptr[:-1]) + np.maximum.reduceat(drawn, indptr[:-1])
    return Stops(box / 2, indptr, indices)


def _neighbours(x: Index, y: Index, width: int, height: int) -> tuple[Index, Index]:
    """For each mark the marks that may share a field with it, itself too: (n + 1,) pointers into the list of rows."""
    n = len(x)
    scaled = np.column_stack([x / width, y / height])
    pairs = KDTree(scaled).query_pairs(1.0 + 1e-9, p=np.inf, output_type="ndarray") if n else np.zeros((0, 2), np.int64)
    a, b = pairs[(np.abs(np.diff(x[pairs], axis=1)[:, 0]) <= width) & (np.abs(np.diff(y[pairs], axis=1)[:, 0]) <= height)].T
    itself = np.arange(n)
    tail, head = np.concatenate([a, b, itself]), np.concatenate([b, a, itself])
    return np.concatenate([[0], np.cumsum(np.bincount(tail, minlength=n))]), head[np.lexsort((head, tail))]


def _anchors(x: Index, y: Index, start: Index, near: Index) -> tuple[Index, Index]:
    """Pairs (leftmost mark, lowest mark) of fields that hold both; one pair for each left and lower edge."""
    tail = np.repeat(np.arange(len(x)), np.diff(start))
    useful = (x[near] >= x[tail]) & (y[near] <= y[tail])
    left, low = tail[useful], near[useful]
    order = np.lexsort((y[low], x[left]))
    left, low = left[order], low[order]
    new = np.ones(len(left), bool)
    new[1:] = (np.diff(x[left]) > 0) | (np.diff(y[low]) > 0) | (np.diff(y[low]) < 0)
    return left[new], low[new]


def _largest(x: Index, y: Index, start: Index, near: Index, left: Index, low: Index, width: int,
             height: int) -> tuple[Index, Index]:
    """Sizes and members of the groups of these fields that no further mark can join."""
    count = start[left + 1] - start[left]
    if not len(count):
        return count, near[:0]
    first = np.concatenate([[0], np.cumsum(count)[:-1]])
    field = np.repeat(np.arange(len(left)), count)
    mark = near[np.arange(count.sum()) + np.repeat(start[left] - first, count)]
    x_mark, y_mark, a, c = x[mark], y[mark], x[left], y[low]
    member = (x_mark >= a[field]) & (y_mark >= c[field]) & (y_mark <= (c + height)[field])
    b = np.maximum.reduceat(np.where(member, x_mark, a[field]), first)
    d = np.maximum.reduceat(np.where(member, y_mark, c[field]), first)
    could_join = (x_mark >= (b - width)[field]) & (y_mark >= (d - height)[field]) & (y_mark <= (c + height)[field])
    size = np.add.reduceat(member.astype(np.int64), first)
    largest = size == np.add.reduceat(could_join.astype(np.int64), first)
    return size[largest], mark[member & largest[field]]

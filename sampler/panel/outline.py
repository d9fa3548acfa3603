"""Polygons of the panel through shapely: validity, the area that may be used, what lies inside."""

from __future__ import annotations

import re

import numpy as np
import shapely
from numpy.typing import NDArray

from sampler.panel.layout import EDGE_TOLERANCE_MM, KeepOut, Layout

Array = NDArray[np.float64]


def polygon_fault(vertices_mm: Array) -> str | None:
    """Why vertices (k, 2) do not bound an area, in words that follow "the polygon"; None when they do."""
    if len(np.unique(vertices_mm, axis=0)) < 3:
        return "has fewer than three different corners"
    ring = shapely.Polygon(vertices_mm)
    if not ring.is_valid:
        at = re.search(r"\[([^ ]+) ([^ \]]+)", shapely.is_valid_reason(ring))
        return "crosses or touches itself" + (f" near ({float(at[1]):g}, {float(at[2]):g})" if at else "")
    return None if ring.area > EDGE_TOLERANCE_MM else "has no area"


def counter_clockwise(vertices_mm: Array) -> Array:
    """The polygon without a repeated last corner, counter-clockwise, starting at the same corner."""
    if len(vertices_mm) > 1 and np.array_equal(vertices_mm[0], vertices_mm[-1]):
        vertices_mm = vertices_mm[:-1]
    if shapely.LinearRing(vertices_mm).is_ccw:
        return vertices_mm
    return np.concatenate([vertices_mm[:1], vertices_mm[:0:-1]])


def shrunk(vertices_mm: Array, by_mm: float) -> shapely.Geometry:
    """The polygon moved inward by `by_mm` (outward when negative) with square corners; may be empty or in pieces."""
    return shapely.buffer(shapely.Polygon(vertices_mm), -by_mm, join_style="mitre")


def usable_area(layout: Layout) -> shapely.Geometry:
    """The outline less the edge exclusion; may be empty or in pieces."""
    return shrunk(layout.outline_mm, layout.edge_exclusion_mm)


def covered(area: shapely.Geometry, xy_mm: Array) -> NDArray[np.bool_]:
    """Which points (n, 2) lie in the area or on its boundary."""
    shapely.prepare(area)
    inside: NDArray[np.bool_] = shapely.intersects_xy(area, xy_mm[:, 0], xy_mm[:, 1])
    return inside


def inside_keep_out(keep_out: KeepOut, xy_mm: Array) -> NDArray[np.bool_]:
    """Which points (n, 2) lie strictly inside a keep-out; a point within 1e-6 mm of its edge does not.

    A circle is exact, never a polygon.
    """
    if keep_out.circle_mm is not None:
        x, y, radius = keep_out.circle_mm
        return np.hypot(xy_mm[:, 0] - x, xy_mm[:, 1] - y) < radius - EDGE_TOLERANCE_MM
    assert keep_out.vertices_mm is not None
    low, high = keep_out.vertices_mm.min(axis=0), keep_out.vertices_mm.max(axis=0)
    inside = ((xy_mm > low) & (xy_mm < high)).all(axis=1)
    inside[inside] = covered(shrunk(keep_out.vertices_mm, EDGE_TOLERANCE_MM), xy_mm[inside])
    return inside

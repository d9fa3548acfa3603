"""Points of the regions that position limits hold over."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray
from scipy.spatial import KDTree

from sampler.panel.candidates import candidates
from sampler.panel.layout import EDGE_TOLERANCE_MM, Grid, Layout
from sampler.panel.outline import covered, shrunk, usable_area

Array = NDArray[np.float64]
Cells = dict[str, NDArray[np.int64]]

SIDE_STEP_MM = 1e-5
"""How far beside a point its sides are looked up: more than the tolerance of a cell's edge, far below any street."""
QUADRANTS = np.array([[-1.0, -1.0], [1.0, -1.0], [-1.0, 1.0], [1.0, 1.0]])


@dataclass(frozen=True, slots=True)
class RegionPoints:
    """Points `xy_mm` (k, 2) of a region and, for each grid, the cell meant at each, (k,), −1 outside cells.

    A point on the common edge of two cells occurs once for each side that belongs to the region.
    """

    xy_mm: Array
    cell: Cells

    def __len__(self) -> int:
        return len(self.xy_mm)


def region_points(layout: Layout, region: str, polygon_mm: Array | None, spacing_mm: float) -> RegionPoints:
    """A raster inside a region, at most `spacing_mm` apart, with its boundary and every corner of cells within it.

    `region` is "panel" (the outline less the edge exclusion), "cells:GRID" (all cells of a grid), "marks" (the
    candidates) or "polygon" with `polygon_mm` (k, 2). Besides the raster there are points along the region's
    boundary with all its corners; where cells of any grid meet the region, the corners of each cell clipped to the
    region, as seen from every side. Raises KeyError for an unknown region.
    """
    if region == "marks":
        return _located(layout, candidates(layout).sites.xy_mm)
    if region.startswith("cells:"):
        return _cell_points(layout, layout.grid(region.removeprefix("cells:")), spacing_mm)
    area = _area(layout, region, polygon_mm)
    if area.is_empty:
        return _located(layout, np.zeros((0, 2)))
    low, high = np.array(area.bounds[:2]), np.array(area.bounds[2:])
    raster = _lattice(*(np.linspace(low[axis], high[axis], _count(high[axis] - low[axis], spacing_mm))
                        for axis in (0, 1)))
    inner = shapely.buffer(area, -EDGE_TOLERANCE_MM, join_style="mitre")
    shapely.prepare(inner)
    raster = raster[shapely.contains_xy(inner, raster[:, 0], raster[:, 1])]
    boundary = shapely.get_coordinates(shapely.segmentize(area.boundary, spacing_mm))
    edge_x, edge_y = _edges(layout)
    crossings = _lattice(edge_x, edge_y)
    crossings = crossings[covered(area, crossings)]
    clipped = _boundary_crossings(area, low, high, edge_x, edge_y)
    on_edge = _near(raster[:, 0], edge_x) | _near(raster[:, 1], edge_y)
    special = _distinct(np.concatenate([raster[on_edge], boundary, crossings, clipped]))
    wide = shapely.buffer(area, EDGE_TOLERANCE_MM, join_style="mitre")
    return _joined(layout, _located(layout, raster[~on_edge]), _sides(layout, special, lambda xy, cell: covered(wide, xy)))


def inside_region(layout: Layout, region: str, polygon_mm: Array | None, xy_mm: Array) -> NDArray[np.bool_]:
    """Which points (n, 2) lie in a region of `region_points`, its boundary included (within 1e-6 mm)."""
    xy_mm = np.asarray(xy_mm, float).reshape(-1, 2)
    if region == "marks":
        distance, _ = KDTree(candidates(layout).sites.xy_mm).query(xy_mm)
        return np.asarray(distance <= EDGE_TOLERANCE_MM)
    if region.startswith("cells:"):
        return layout.grid(region.removeprefix("cells:")).locate(xy_mm) >= 0
    return covered(shapely.buffer(_area(layout, region, polygon_mm), EDGE_TOLERANCE_MM, join_style="mitre"), xy_mm)


def _area(layout: Layout, region: str, polygon_mm: Array | None) -> shapely.Geometry:
    if region == "panel":
        return usable_area(layout)
    if region == "polygon" and polygon_mm is not None:
        return shrunk(polygon_mm, 0.0)
    raise KeyError(f"unknown region {region!r}")


def _count(length_mm: float, spacing_mm: float) -> int:
    return max(2, int(np.ceil(length_mm / spacing_mm - 1e-9)) + 1)


def _lattice(x: Array, y: Array) -> Array:
    return np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)


def _distinct(xy_mm: Array) -> Array:
    """The points without repeats, to the tolerance, in a fixed order."""
    _, first = np.unique(np.rint(xy_mm / EDGE_TOLERANCE_MM), axis=0, return_index=True)
    return xy_mm[first]


def _near(value: Array, lines: Array) -> NDArray[np.bool_]:
    """Which values lie on one of the lines, to the tolerance."""
    if not len(lines):
        return np.zeros(len(value), bool)
    after = np.searchsorted(lines, value)
    below, above = lines[np.maximum(after - 1, 0)], lines[np.minimum(after, len(lines) - 1)]
    near: NDArray[np.bool_] = np.minimum(np.abs(value - below), np.abs(value - above)) <= EDGE_TOLERANCE_MM
    return near


def _edges(layout: Layout) -> tuple[Array, Array]:
    """The x of every vertical cell edge and the y of every horizontal one, of all grids; a cell's corners lie on both."""
    edges = []
    for axis in (0, 1):
        lines = np.concatenate([np.zeros(0), *(np.unique(grid.cell_centres_mm[:, axis]) + side * grid.cell_mm[axis] / 2
                                               for grid in layout.grids for side in (-1, 1))])
        edges.append(_distinct(lines[:, None])[:, 0])
    return edges[0], edges[1]


def _boundary_crossings(area: shapely.Geometry, low: Array, high: Array, edge_x: Array, edge_y: Array) -> Array:
    """Where the lines of cell edges cross the boundary of the area, (k, 2)."""
    across = np.array([[(x, low[1] - 1), (x, high[1] + 1)] for x in edge_x]
                      + [[(low[0] - 1, y), (high[0] + 1, y)] for y in edge_y]).reshape(-1, 2, 2)
    if not len(across):
        return np.zeros((0, 2))
    return shapely.get_coordinates(shapely.intersection(shapely.linestrings(across), area.boundary))


def _located(layout: Layout, xy_mm: Array) -> RegionPoints:
    return RegionPoints(xy_mm, {grid.name: grid.locate(xy_mm) for grid in layout.grids})


def _joined(layout: Layout, *parts: RegionPoints) -> RegionPoints:
    return RegionPoints(np.concatenate([part.xy_mm for part in parts]),
                        {grid.name: np.concatenate([part.cell[grid.name] for part in parts]) for grid in layout.grids})


def _sides(layout: Layout, xy_mm: Array, belongs: Callable[[Array, Cells], NDArray[np.bool_]]) -> RegionPoints:
    """Each point once for every different combination of cells beside it.

    Cells are upright rectangles, so the four quadrants around a point show all its sides. `belongs(xy, cell)` says
    which quadrants belong to the region; a point none of whose quadrants does (a sharp corner) is located as is.
    """
    n = len(xy_mm)
    if not layout.grids or not n:
        return _located(layout, xy_mm)
    beside = (xy_mm[:, None, :] + SIDE_STEP_MM * QUADRANTS).reshape(-1, 2)
    cell = {grid.name: grid.locate(beside) for grid in layout.grids}
    keep = np.asarray(belongs(beside, cell)).reshape(n, 4)
    combination = np.stack([index.reshape(n, 4) for index in cell.values()])
    for later in range(1, 4):
        for earlier in range(later):
            same = (combination[:, :, later] == combination[:, :, earlier]).all(axis=0)
            keep[:, later] &= ~(same & keep[:, earlier])
    row, quadrant = np.nonzero(keep)
    shown = RegionPoints(xy_mm[row], {name: index.reshape(n, 4)[row, quadrant] for name, index in cell.items()})
    return _joined(layout, shown, _located(layout, xy_mm[~keep.any(axis=1)]))


def _cell_points(layout: Layout, grid: Grid, spacing_mm: float) -> RegionPoints:
    """A raster of every cell with its edges and corners, and the crossings of all other grids' edges inside cells."""
    half = np.asarray(grid.cell_mm) / 2
    local = _lattice(*(np.linspace(-half[axis], half[axis], _count(grid.cell_mm[axis], spacing_mm)) for axis in (0, 1)))
    centres = grid.cell_centres_mm
    on_edge = (np.abs(local) >= half - EDGE_TOLERANCE_MM).any(axis=1)
    interior = _located(layout, (centres[:, None] + local[~on_edge]).reshape(-1, 2))
    edge = (centres[:, None] + local[on_edge]).reshape(-1, 2)
    edge_x, edge_y = _edges(layout)
    crossings = _lattice(edge_x, edge_y)
    special = _distinct(np.concatenate([edge, crossings[grid.locate(crossings) >= 0]]))
    return _joined(layout, interior, _sides(layout, special, lambda xy, cell: cell[grid.name] >= 0))

"""Uncertainty of the predicted position, and the worst place of a region."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.model.basis import places
from sampler.panel.layout import Layout
from sampler.panel.region import RegionPoints, inside_region, region_points
from sampler.uncertainty.assumed import Assumed
from sampler.uncertainty.information import Knowledge

Array = NDArray[np.float64]

RASTER_STEPS = 60
"""Raster steps along the longer side of a region, for finding its worst places before refining them."""
REFINE_STARTS = 12
REFINE_ROUNDS = 6
"""Each round halves the step around each start: 2⁻⁶ of a raster step. Variance is a polynomial of degree ≤ 10 across the
panel, so its maximum is then true to far better than the 0.1 % promised."""
CHUNK_POINTS = 100_000


@dataclass(frozen=True, slots=True)
class WorstPlace:
    """Where a region's standard uncertainty is largest, and for which axis (0: dx, 1: dy)."""

    u_um: float
    xy_mm: tuple[float, float]
    axis: int
    cell: dict[str, int]


def position_u(assumed: Assumed, layout: Layout, knowledge: Knowledge, xy_mm: Array,
               cell: dict[str, NDArray[np.int64]] | None = None, of: str = "correction") -> Array:
    """Standard uncertainty of the predicted dx and dy at points (n, 2), in µm, (n, 2); infinite where undetermined.

    `of`: "correction" or "displacement", as in the study's region limits.
    """
    parts = []
    for start in range(0, len(xy_mm), CHUNK_POINTS):
        part = slice(start, start + CHUNK_POINTS)
        here = None if cell is None else {name: index[part] for name, index in cell.items()}
        rows = assumed.position(places(layout, xy_mm[part], here), of).reshape(-1, assumed.size)
        variance = knowledge.variance(rows).reshape(-1, 2) + assumed.fixed_um(xy_mm[part], of) ** 2
        parts.append(np.sqrt(variance))
    return np.concatenate(parts) if parts else np.zeros((0, 2))


def raster(layout: Layout, region: str, polygon_mm: Array | None = None, steps: int = RASTER_STEPS) -> RegionPoints:
    """Points of a region, `steps` of them along its longer side (of a cell's longer side for a grid's cells)."""
    if region.startswith("cells:"):
        extent = max(layout.grid(region.removeprefix("cells:")).cell_mm)
        steps = max(4, steps // 4)
    else:
        outline = layout.outline_mm if polygon_mm is None else polygon_mm
        extent = float(np.ptp(outline, axis=0).max())
    return region_points(layout, region, polygon_mm, extent / steps)


def worst_place(assumed: Assumed, layout: Layout, knowledge: Knowledge, region: str, polygon_mm: Array | None = None,
                points: RegionPoints | None = None, of: str = "correction") -> WorstPlace:
    """The largest standard uncertainty of dx or dy in a region: raster, then refined around its worst places."""
    points = raster(layout, region, polygon_mm) if points is None else points
    u = position_u(assumed, layout, knowledge, points.xy_mm, points.cell, of)
    at, worse = divmod(int(np.argmax(u)), 2)
    best = WorstPlace(float(u[at, worse]), (float(points.xy_mm[at, 0]), float(points.xy_mm[at, 1])), worse,
                      {name: int(index[at]) for name, index in points.cell.items()})
    if region == "marks" or not np.isfinite(best.u_um):
        return best
    step = float(np.ptp(points.xy_mm, axis=0).max()) / RASTER_STEPS
    if region.startswith("cells:"):
        step = max(layout.grid(region.removeprefix("cells:")).cell_mm) / max(4, RASTER_STEPS // 4)
    for axis in (0, 1):
        starts = _apart(points.xy_mm, u[:, axis], step)
        centre = points.xy_mm[starts]
        cell = {name: index[starts] for name, index in points.cell.items()}
        value = u[starts, axis]
        offsets = np.stack(np.meshgrid([-1, 0, 1], [-1, 0, 1]), axis=-1).reshape(-1, 2)
        for power in range(1, REFINE_ROUNDS + 1):
            around = centre[:, None, :] + offsets * step / 2**power
            flat = around.reshape(-1, 2)
            same = {name: np.repeat(index, len(offsets)) for name, index in cell.items()}
            inside = inside_region(layout, region, polygon_mm, flat)
            for name, index in same.items():
                inside &= _in_cell(layout, name, index, flat)
            found = np.full(len(flat), -1.0)
            if inside.any():
                found[inside] = position_u(assumed, layout, knowledge, flat[inside],
                                           {name: index[inside] for name, index in same.items()}, of)[:, axis]
            tried = found.reshape(len(centre), -1)
            pick = tried.argmax(axis=1)
            better = tried[np.arange(len(centre)), pick] > value
            centre = np.where(better[:, None], around[np.arange(len(centre)), pick], centre)
            value = np.maximum(value, tried[np.arange(len(centre)), pick])
        top = int(value.argmax())
        if value[top] > best.u_um:
            best = WorstPlace(float(value[top]), (float(centre[top, 0]), float(centre[top, 1])), axis,
                              {name: int(index[top]) for name, index in cell.items()})
    return best


def _apart(xy_mm: Array, value: Array, step: float) -> NDArray[np.int64]:
    """The places of largest value, no two within two raster steps of each other, at most REFINE_STARTS."""
    chosen: list[int] = []
    for row in np.argsort(-value, kind="stable")[: 50 * REFINE_STARTS]:
        if all(np.abs(xy_mm[row] - xy_mm[other]).max() > 2 * step for other in chosen):
            chosen.append(int(row))
        if len(chosen) == REFINE_STARTS:
            break
    return np.array(chosen)


def _in_cell(layout: Layout, grid: str, cell: NDArray[np.int64], xy_mm: Array) -> NDArray[np.bool_]:
    """Whether points still lie in the cell they started from; points outside every cell must stay outside."""
    at = layout.grid(grid)
    off = np.abs(xy_mm - at.cell_centres_mm[cell])
    inside = (off <= np.asarray(at.cell_mm) / 2 + 1e-9).all(axis=1)
    return np.where(cell >= 0, inside, at.locate(xy_mm) < 0)

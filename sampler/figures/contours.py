"""Filled contours of the position uncertainty, up to the outline of the panel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import BoundaryNorm
from matplotlib.figure import Figure
from matplotlib.patches import Polygon
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from sampler.figures import style
from sampler.panel.layout import Layout
from sampler.tasks.results import PositionMap

Array = NDArray[np.float64]

_MOST_LEVELS = 9
# Below this part of its value a map counts as flat: contours would draw rounding errors.
_FLAT = 1e-3
# A limit this much above the largest value still stretches the colours up to itself.
_REACH_TO_LIMIT = 1.5


@dataclass(frozen=True, slots=True)
class Raster:
    """k·u of the worse axis in µm, `values` (r, c), NaN where nothing is known; `levels` ascending.

    `low`, `high`: the range of the values within the edge exclusion, which is what the map shows.
    """

    x_mm: Array
    y_mm: Array
    values: Array
    levels: Array
    low: float = np.nan
    high: float = np.nan

    @property
    def known(self) -> bool:
        return len(self.levels) > 0


def worse_axis(position: PositionMap, layout: Layout, limits: tuple[float, ...]) -> Raster:
    """The raster to draw, in the layout's own frame: the worse axis, carried two steps beyond the panel, with levels.

    Points that the sites do not determine (infinite) stay empty. `limits` in µm may stretch the levels.
    """
    x, y = (axis - origin for axis, origin in zip((position.x_mm, position.y_mm), layout.origin_mm, strict=True))
    worse = position.k_u_um.max(axis=2)
    points = np.stack(np.meshgrid(x, y), axis=-1)
    shown = worse[np.isfinite(worse) & (_to_edge(points, layout.outline_mm - np.asarray(layout.origin_mm))
                                        >= layout.edge_exclusion_mm)]
    step_x, step_y = (np.diff(axis).mean() if len(axis) > 1 else 1.0 for axis in (x, y))
    x, y = (np.concatenate([[axis[0] - step], axis, [axis[-1] + step]]) for axis, step in ((x, step_x), (y, step_y)))
    values = np.pad(worse, 1, constant_values=np.nan)
    undetermined = np.isinf(values)
    values[undetermined] = np.nan
    if shown.size == 0:
        return Raster(x, y, values, np.zeros(0))
    for _ in range(2):
        values = np.where(undetermined, np.nan, _carried(values))
    low, high = float(shown.min()), float(shown.max())
    return Raster(x, y, values, _levels(low, high, limits), low, high)


def _to_edge(points: Array, outline: Array) -> Array:
    """Distance of points (..., 2) to the nearest edge of a closed polygon (k, 2)."""
    nearest = np.full(points.shape[:-1], np.inf)
    for start, end in zip(outline, np.roll(outline, -1, axis=0), strict=True):
        along = end - start
        t = np.clip((points - start) @ along / max(along @ along, 1e-12), 0.0, 1.0)
        nearest = np.minimum(nearest, np.linalg.norm(points - start - t[..., None] * along, axis=-1))
    return nearest


def _carried(values: Array) -> Array:
    """Each empty cell filled from its four neighbours, continued in a straight line where two in a row are known."""
    wide = np.pad(values, 2, constant_values=np.nan)
    rows, columns = values.shape
    guesses = []
    for down, right in ((1, 0), (-1, 0), (0, 1), (0, -1)):
        near, far = (wide[2 + k * down:2 + k * down + rows, 2 + k * right:2 + k * right + columns] for k in (1, 2))
        guesses.append(np.where(np.isnan(far), near, 2 * near - far))
    stack = np.stack(guesses)
    count = (~np.isnan(stack)).sum(axis=0)
    filled = np.where(count > 0, np.nansum(stack, axis=0) / np.maximum(count, 1), np.nan)
    return np.where(np.isnan(values), filled, values)


def _levels(low: float, high: float, limits: tuple[float, ...]) -> Array:
    high = max([high, *(limit for limit in limits if limit <= _REACH_TO_LIMIT * high)])
    if high - low <= _FLAT * high:
        low, high = 0.9 * low, 1.1 * high
    return np.asarray(MaxNLocator(_MOST_LEVELS, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high))


def draw_contours(axes: Axes, raster: Raster, limits: tuple[float, ...], clip: Polygon, taken: Array) -> None:
    """Fill the contours inside `clip` and draw each limit within their range as a heavy line.

    The labels of the limits keep clear of `taken` (k, 2).
    """
    norm = BoundaryNorm(raster.levels, style.RAMP.N)
    # The rim and the edge strip may leave the levels; what the map shows does not.
    values = np.clip(raster.values, raster.levels[0], raster.levels[-1])
    fill = axes.contourf(raster.x_mm, raster.y_mm, values, levels=raster.levels, cmap=style.RAMP, norm=norm, zorder=1)
    fill.set_edgecolor("face")  # closes the hair lines between neighbouring fills in SVG viewers
    fill.set_linewidth(0.3)
    fill.set_clip_path(clip)
    lines = axes.contour(raster.x_mm, raster.y_mm, values, levels=raster.levels[1:-1], colors=style.INK,
                         linewidths=0.35, alpha=0.45, zorder=1.2)
    lines.set_clip_path(clip)
    for limit in sorted({limit for limit in limits if raster.low < limit < raster.high}):
        for colour, width, order in ((style.PAPER, 4.4, 3.0), (style.INK, 2.2, 3.1)):
            line = axes.contour(raster.x_mm, raster.y_mm, raster.values, levels=[limit], colors=colour,
                                linewidths=width, zorder=order)
            line.set_clip_path(clip)
        vertices = np.concatenate([np.zeros((0, 2)), *(path.vertices for path in line.get_paths())])
        outline = clip.get_xy()
        vertices = vertices[((vertices >= outline.min(axis=0)) & (vertices <= outline.max(axis=0))).all(axis=1)]
        if len(vertices) == 0:  # the limit lies in a gap between determined parts of the map
            continue
        place = _label_place(vertices, outline, taken)
        axes.text(place[0], place[1], f"limit {limit:.6g} µm", fontsize=style.SMALL_PT + 0.5, fontweight="bold",
                  ha="center", va="center", zorder=6.4,
                  bbox={"boxstyle": "round,pad=0.25", "facecolor": style.PAPER, "edgecolor": style.INK,
                        "linewidth": 0.7})


def _label_place(line: Array, outline: Array, taken: Array) -> Array:
    """The vertex of a limit line that is farthest from the panel's edge and from the places already `taken` (k, 2)."""
    # The text is wide: a place to its side is in the way sooner than one above it.
    squeeze = np.array([0.4, 1.0])
    room = 0.7 * _to_edge(line * squeeze, outline * squeeze)
    if len(taken):
        room = np.minimum(room, np.linalg.norm((line[:, None] - taken[None]) * squeeze, axis=2).min(axis=1))
    return line[np.argmax(room)]


def draw_colour_bar(figure: Figure, box: tuple[float, float, float, float], raster: Raster, limits: tuple[float, ...],
                    coverage_factor: float) -> None:
    """A colour bar with units in the `box` (figure fractions); limits in range are marked across it."""
    bar = figure.add_axes(box)
    scale = ScalarMappable(BoundaryNorm(raster.levels, style.RAMP.N), style.RAMP)
    figure.colorbar(scale, cax=bar, ticks=raster.levels, spacing="proportional", drawedges=False, format="%g")
    bar.set_ylabel(f"k·u of position, worse of dx and dy, µm (k = {coverage_factor:g})", fontsize=style.TEXT_PT)
    bar.tick_params(length=2)
    for limit in set(limits):
        if raster.levels[0] <= limit <= raster.levels[-1]:
            bar.axhline(limit, color=style.INK, linewidth=2.4)

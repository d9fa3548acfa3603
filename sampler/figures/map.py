"""The map of a plan or audit: the panel to scale, what could be measured, what is, and how certain positions become."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import cycle
from typing import Any

import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection, PolyCollection
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Polygon
from numpy.typing import NDArray

from sampler.figures import style
from sampler.figures.bars import bars_height, draw_bars
from sampler.figures.contours import Raster, draw_colour_bar, draw_contours, worse_axis
from sampler.figures.labels import place_labels
from sampler.panel.candidates import Candidates
from sampler.panel.layout import Layout
from sampler.panel.thinning import thinned
from sampler.tasks.results import MEETS, Audit, Plan, SiteAudit
from sampler.tasks.study import Study
from sampler.tasks.wording import plain, share, significant

Array = NDArray[np.float64]

BACK = "back"
MOST_NUMBERS = 100
MOST_DOTS = 4900
MANY_DOTS = 1000
MOST_OTHER_DOTS = 900
MOST_CELLS = 2500
MOST_NAMED_KEEP_OUTS = 12

# Inches. The map's longer side is fixed; the rest of the picture is laid around it.
_MAP_IN = 6.4
_LEFT, _RIGHT, _TOP, _AXIS = 0.72, 0.25, 0.78, 0.52
_BAR_GAP, _BAR_WIDTH, _BAR_TEXT = 0.14, 0.16, 0.78
_LIMITS_IN = 3.0
_LEGEND_ROW = 0.215
_LEGEND_COLUMN = 2.7
_POINTS = 72.0


@dataclass(frozen=True, slots=True)
class _Scene:
    """What one map shows. `numbered`: the sites are a choice in an order; otherwise all candidates are meant.

    `stop` (n,) is the stop of each site, from 1, and `stop_xy_mm` where each stands, when a stop reads several marks.
    """

    study: Study
    candidates: Candidates
    audit: Audit
    subtitle: str
    numbered: bool
    order: str
    route: bool
    stop: NDArray[np.int64] | None = None
    stop_xy_mm: Array | None = None

    @property
    def sides(self) -> bool:
        """Whether both sides of the panel are measured, so that marks must tell on which they lie."""
        return len(np.unique(self.candidates.sites.side)) > 1

    @property
    def layout(self) -> Layout:
        return self.study.layout

    @property
    def position_limits(self) -> tuple[float, ...]:
        return tuple({limit.maximum: None for limit in self.audit.limits if limit.where_mm is not None})


def plan_map(plan: Plan, *, route: bool = False) -> dict[str, bytes]:
    """`map.png` and `map.svg` of a plan; `route` joins the sites in visiting order.

    When the limits cannot be met the map is of all candidates measured: the best that the layout can give.
    """
    met = plan.status != "cannot"
    answer = plan.answer if met else f"cannot be met, even with all {len(plan.sites):,} candidates measured"
    return _map(_Scene(plan.study, plan.candidates, plan.audit, f"{answer}; {_worst(plan.audit)}", met,
                       "in visiting order", route and met, plan.stop if met else None, plan.stop_xy_mm if met else None))


def audit_map(result: SiteAudit, *, route: bool = False) -> dict[str, bytes]:
    """`map.png` and `map.svg` of a given site list; `route` joins the sites in the order of the list."""
    audit = result.audit
    missed = sum(not limit.worst_ratio <= MEETS for limit in audit.limits)
    verdict = f"{missed} of {len(audit.limits)} limits missed" if missed else "every limit met"
    fewest = f"; fewest plan: {result.fewest.answer}" if result.fewest is not None else ""
    return _map(_Scene(result.study, result.candidates, audit,
                       f"{_count(len(audit.sites), 'listed site')}, {verdict}{fewest}", True,
                       "in the order of the list", route))


def _count(number: int, noun: str) -> str:
    return f"{number:,} {noun}" if number == 1 else f"{number:,} {noun}s"


def _worst(audit: Audit) -> str:
    if not audit.limits:
        return "no limits set"
    worst = audit.worst
    return f"tightest limit {plain(worst.label, 40)} " + (f"at {share(worst.worst_ratio)}" if np.isfinite(worst.worst_ratio) else
                                                          "not determined")


def _map(scene: _Scene) -> dict[str, bytes]:
    return style.pictures("map", lambda: _draw(scene))


def _draw(scene: _Scene) -> Figure:
    layout = scene.layout
    origin = np.asarray(layout.origin_mm)
    outline = layout.outline_mm - origin
    low, high = outline.min(axis=0), outline.max(axis=0)
    margin = 0.02 * (high - low).max()
    span = high - low + 2 * margin
    inch_per_mm = _MAP_IN / span.max()
    map_w, map_h = span * inch_per_mm
    body = max(map_h, bars_height(scene.audit.limits))
    right = _LEFT + map_w + _BAR_GAP + _BAR_WIDTH + _BAR_TEXT
    width = right + _LIMITS_IN + _RIGHT
    columns = int((width - 0.5) // _LEGEND_COLUMN)

    raster = worse_axis(scene.audit.position, layout, scene.position_limits)
    figure = style.figure(1.0, 1.0)
    axes = figure.add_axes((0, 0, 1, 1))
    axes.set(xlim=(low[0] - margin, high[0] + margin), ylim=(low[1] - margin, high[1] + margin),
             xlabel="x, mm", ylabel="y, mm")
    axes.set_facecolor(style.PAPER)
    for spine in axes.spines.values():
        spine.set_visible(False)
    points_per_mm = inch_per_mm * _POINTS
    if not raster.known:
        middle = (low + high) / 2
        axes.text(middle[0], middle[1], "position not determined by these sites", ha="center", va="center", zorder=6,
                  bbox={"facecolor": style.PAPER, "edgecolor": style.SOFT, "linewidth": 0.6})
    legend = [*_draw_panel(axes, layout, outline, raster, scene, points_per_mm), *_draw_marks(axes, scene, origin),
              *_draw_sites(axes, scene, origin, points_per_mm)]

    # Only now the number of legend rows is known, and with it the height.
    legend_rows = -(-len(legend) // columns)
    foot = _AXIS + legend_rows * _LEGEND_ROW + 0.12
    height = _TOP + body + foot
    figure.set_size_inches(width, height)

    def box(x: float, y: float, w: float, h: float) -> tuple[float, float, float, float]:
        return x / width, y / height, w / width, h / height

    axes.set_position(box(_LEFT, foot + body - map_h, map_w, map_h))
    if raster.known:
        draw_colour_bar(figure, box(_LEFT + map_w + _BAR_GAP, foot + body - map_h, _BAR_WIDTH, map_h), raster,
                        scene.position_limits, scene.study.coverage_factor)
    draw_bars(figure.add_axes(box(right, foot, _LIMITS_IN, body)), scene.audit.limits, scene.study.coverage_factor,
              (_LIMITS_IN, body))
    figure.legend(handles=legend, loc="lower left", bbox_to_anchor=(0.25 / width, 0.04 / height), ncols=columns,
                  frameon=False, fontsize=style.SMALL_PT + 0.5, handlelength=1.8, columnspacing=1.6, borderpad=0,
                  labelspacing=0.45)
    for text, down, size, weight, colour in (
            (plain(scene.study.title, int(width * 8.6)), 0.28, style.TITLE_PT, "bold", style.INK),
            (plain(scene.subtitle, int(width * 12)), 0.53, style.TEXT_PT + 1, "normal",
             style.SOFT if scene.audit.meets_limits else style.ALARM_INK)):
        figure.text(0.25 / width, 1 - down / height, text, fontsize=size, fontweight=weight, color=colour, va="center")
    return figure


def _draw_panel(axes: Axes, layout: Layout, outline: Array, raster: Raster, scene: _Scene,
                points_per_mm: float) -> list[Artist]:
    """Outline, contours, edge exclusion, cells and keep-outs; returns legend entries."""
    legend: list[Artist] = []
    axes.add_patch(Polygon(outline, closed=True, facecolor="none", edgecolor=style.INK, linewidth=1.2, zorder=5,
                           joinstyle="miter"))
    clip = Polygon(outline, closed=True, facecolor="none", edgecolor="none", linewidth=0)
    axes.add_patch(clip)
    limits = scene.position_limits
    if raster.known:
        taken = scene.audit.sites.xy_mm if scene.numbered else np.zeros((0, 2))
        draw_contours(axes, raster, limits, clip, taken[:MOST_NUMBERS] - np.asarray(layout.origin_mm))
    for limit in sorted(limits):
        note = ", nowhere reached" if limit >= raster.high else ", exceeded everywhere" if limit <= raster.low else ""
        legend.append(Line2D([], [], color=style.INK, linewidth=2.2, label=f"limit {limit:.6g} µm{note}"))
    if layout.edge_exclusion_mm > 0:
        # A stroke of twice the exclusion, cut at the outline, covers exactly the places within the exclusion.
        strip = 2 * layout.edge_exclusion_mm * points_per_mm
        for colour, extra, order in ((style.SOFT, 1.2, 3.5), (style.TROUGH, 0.0, 3.6)):
            band = axes.add_patch(Polygon(outline, closed=True, fill=False, edgecolor=colour, linewidth=strip + extra,
                                          joinstyle="round", zorder=order))
            band.set_clip_path(clip)
        legend.append(Patch(facecolor=style.TROUGH, edgecolor=style.SOFT, linewidth=0.6,
                            label=f"edge exclusion {layout.edge_exclusion_mm:g} mm"))
    for grid, dashes in zip(layout.grids, cycle(("-", (0, (4, 2)), (0, (1, 1.5)), "-.")), strict=False):
        name = f"cells of grid {plain(grid.name, 24)}"
        if grid.cells > MOST_CELLS:
            legend.append(Line2D([], [], linestyle="none", label=f"{name}: {grid.cells:,}, not drawn"))
            continue
        half = np.asarray(grid.cell_mm) / 2 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
        width = 0.7 if dashes == "-" else 0.45
        cells = grid.cell_centres_mm[:, None] + half[None] - np.asarray(layout.origin_mm)
        axes.add_collection(PolyCollection(list(cells), facecolors="none", edgecolors=style.SOFT, linewidths=width,
                                           linestyles=[dashes], zorder=3.7), autolim=False)
        legend.append(Line2D([], [], color=style.SOFT, linewidth=width, linestyle=dashes, label=name))
    for keep_out in layout.keep_outs:
        boundary = keep_out.boundary_mm() - np.asarray(layout.origin_mm)
        axes.add_patch(Polygon(boundary, closed=True, facecolor=(1, 1, 1, 0.72), edgecolor=style.SOFT, linewidth=0.8,
                               hatch="////", zorder=3.8))
        if len(layout.keep_outs) <= MOST_NAMED_KEEP_OUTS:
            centre = (boundary.min(axis=0) + boundary.max(axis=0)) / 2
            wide = np.ptp(boundary[:, 0]) >= np.ptp(boundary[:, 1])
            axes.text(centre[0], centre[1], plain(keep_out.name, 24), fontsize=style.SMALL_PT - 0.5, ha="center",
                      va="center", zorder=4.2, rotation=0 if wide else 90,
                      bbox={"boxstyle": "round,pad=0.15", "facecolor": style.PAPER, "edgecolor": "none", "alpha": 0.85})
    if layout.keep_outs:
        legend.append(Patch(facecolor=style.PAPER, edgecolor=style.SOFT, linewidth=0.8, hatch="/////",
                            label="keep-out"))
    return legend


def _draw_marks(axes: Axes, scene: _Scene, origin: Array) -> list[Artist]:
    """Candidates faint, other marks fainter, both thinned when many; returns legend entries."""
    legend: list[Artist] = []
    others = scene.layout.marks.xy_mm[scene.candidates.reason != ""] - origin
    free = scene.candidates.sites.xy_mm - origin
    crosses: dict[str, Any] = {"marker": "x", "markersize": 2.6, "color": style.FAINT, "markeredgewidth": 0.5}
    dots: dict[str, Any] = {"marker": "o", "markersize": 2.0 if len(free) < MANY_DOTS else 1.3, "color": style.SOFT,
                            "markeredgewidth": 0.0}
    groups = [(others, MOST_OTHER_DOTS, "mark that is no candidate", "marks that are no candidates", crosses)]
    if scene.sides:
        back = scene.candidates.sites.side == BACK
        rings = dots | {"marker": "D", "markerfacecolor": "none", "markeredgecolor": style.SOFT, "markeredgewidth": 0.5}
        groups += [(free[~back], MOST_DOTS // 2, "candidate on the front", "candidates on the front", dots),
                   (free[back], MOST_DOTS // 2, "candidate on the back", "candidates on the back", rings)]
    else:
        groups.append((free, MOST_DOTS, "candidate", "candidates", dots))
    for xy, most, one, many, look in groups:
        if len(xy) == 0:
            continue
        drawn = thinned(xy, most)
        axes.plot(*xy[drawn].T, linestyle="none", zorder=4.0, scalex=False, scaley=False, **look)
        label = f"{len(xy):,} {one if len(xy) == 1 else many}"
        if len(drawn) < len(xy):
            label += f", {len(drawn):,} of them drawn"
        legend.append(Line2D([], [], linestyle="none", label=label, **{**look, "markersize": 3.0}))
    return legend


def _draw_sites(axes: Axes, scene: _Scene, origin: Array, points_per_mm: float) -> list[Artist]:
    """The sites with their numbers, the route between them and the worst position; returns legend entries."""
    legend: list[Artist] = []
    sites = scene.audit.sites
    xy = sites.xy_mm - origin
    n = len(sites)
    look: dict[str, Any]
    stands, stand_side = xy, sites.side
    if scene.stop is not None and scene.stop_xy_mm is not None:
        stands = scene.stop_xy_mm - origin
        stand_side = sites.side[[int(np.argmax(scene.stop == number)) for number in range(1, len(stands) + 1)]]
        legend += _draw_fields(axes, stands, scene)
    if scene.route and len(stands) > 1:
        legend += _draw_route(axes, stands, stand_side)
    if n and scene.numbered:
        largest = 5.6 if scene.stop is None else 3.2  # marks of one stop lie close together
        size = float(np.clip(5.6 * np.sqrt(MOST_NUMBERS / max(n, MOST_NUMBERS)), 2.6, largest))
        filled: dict[str, Any] = {"linestyle": "none", "markersize": size, "markerfacecolor": style.INK,
                                  "markeredgecolor": style.PAPER, "markeredgewidth": 0.7}
        hollow = filled | {"markerfacecolor": style.PAPER, "markeredgecolor": style.INK, "markeredgewidth": 1.3}
        drawn = thinned(xy, MOST_DOTS)
        rules = scene.study.rules
        required = np.isin(sites.id, np.asarray(rules.required, dtype=str)) | np.isin(sites.kind, rules.required_kinds)
        back = (sites.side == BACK) & scene.sides
        note = f", numbered {scene.order}" if len(stands) <= MOST_NUMBERS else ""
        fields = "" if scene.stop is None else f" in {_count(len(stands), 'stop')}"
        for shown, marker, look, label in (
                (~required & ~back, "o", filled, f"{_count(int((~back).sum()) if back.any() else n, 'site')}"
                 f"{' on the front' if back.any() else fields + note}"),
                (~required & back, "D", hollow, f"{_count(int(back.sum()), 'site')} on the back"),
                (required & ~back, "s", filled, "required site"),
                (required & back, "s", hollow, "required site on the back")):
            rows = drawn[shown[drawn]]
            if len(rows):
                axes.plot(*xy[rows].T, marker=marker, zorder=6, scalex=False, scaley=False, **look)
                legend.append(Line2D([], [], marker=marker, label=label, **look))
        if len(stands) <= MOST_NUMBERS:
            outline = scene.layout.outline_mm - origin
            _draw_numbers(axes, stands, outline.min(axis=0), outline.max(axis=0), points_per_mm)
    worst = scene.audit.worst_position
    if worst.where_mm is not None and np.isfinite(worst.predicted):
        look = {"linestyle": "none", "marker": "^", "markersize": 8.5, "markerfacecolor": style.PAPER,
                "markeredgecolor": style.INK, "markeredgewidth": 1.3}
        axes.plot(*(np.asarray(worst.where_mm) - origin), zorder=5.8, scalex=False, scaley=False, **look)
        legend.append(Line2D([], [], label=f"worst position, {worst.axis} {significant(worst.predicted)} µm", **look))
    return legend


def _draw_route(axes: Axes, xy: Array, side: NDArray[np.str_]) -> list[Artist]:
    """The way from stand to stand, dashed on the back and broken where the panel is turned over; returns legend entries."""
    cuts = np.flatnonzero(side[1:] != side[:-1]) + 1
    legend: list[Artist] = []
    for part, where in zip(np.split(xy, cuts), np.split(side, cuts), strict=True):
        dashes = (0, (4, 2)) if where[0] == BACK and len(cuts) else "-"
        for colour, width, order in ((style.PAPER, 2.6, 5.5), (style.INK, 0.9, 5.6)):
            axes.plot(*part.T, color=colour, linewidth=width, zorder=order, alpha=0.85, scalex=False, scaley=False,
                      linestyle=dashes if colour == style.INK else "-")
        label = f"route on the {where[0]}" if len(cuts) else "route"
        legend.append(Line2D([], [], color=style.INK, linewidth=0.9, linestyle=dashes, label=label))
    return legend


def _draw_fields(axes: Axes, stands: Array, scene: _Scene) -> list[Artist]:
    """The field of view at each stop; returns its legend entry."""
    field = scene.study.measure.field_of_view_mm
    if field is None:
        return []
    corners = np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]) * np.asarray(field) / 2
    axes.add_collection(PolyCollection(list(stands[:, None] + corners), facecolors="none", edgecolors=style.INK,
                                       linewidths=0.7, zorder=6.05), autolim=False)
    return [Patch(facecolor="none", edgecolor=style.INK, linewidth=0.7,
                  label=f"field of view, {field[0]:g} × {field[1]:g} mm")]


def _draw_numbers(axes: Axes, xy: Array, low: Array, high: Array, points_per_mm: float) -> None:
    """Numbers 1…n beside their sites, joined to them by a hair line where crowding pushed them away."""
    digits = np.array([len(str(number)) for number in range(1, len(xy) + 1)])
    sizes = np.stack([4.5 * digits + 1.5, np.full(len(xy), 7.5)], axis=1)
    points = (xy - low) * points_per_mm
    centres = place_labels(points, sizes, (high - low) * points_per_mm)
    edge = np.clip(points, centres - sizes / 2, centres + sizes / 2)
    far = np.linalg.norm(points - edge, axis=1) > 6.5
    leaders = np.stack([points[far], edge[far]], axis=1) / points_per_mm + low
    axes.add_collection(LineCollection(list(leaders), colors=style.INK, linewidths=0.5, zorder=6.1), autolim=False)
    corners = np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]]) / 2
    boxes = (centres[:, None] + sizes[:, None] * corners[None]) / points_per_mm + low
    axes.add_collection(PolyCollection(list(boxes), facecolors=style.PAPER, edgecolors="none", alpha=0.78, zorder=6.2),
                        autolim=False)
    for number, (x, y) in enumerate(centres / points_per_mm + low, start=1):
        axes.text(x, y, str(number), fontsize=style.SMALL_PT, ha="center", va="center_baseline", zorder=6.3)

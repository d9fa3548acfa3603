"""What measured panels said, drawn: residual vectors, variogram, ladder of models, terms panel by panel, term charts."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Polygon
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from sampler.figures import style
from sampler.panel.layout import Layout
from sampler.tasks.characterise import Characterisation
from sampler.tasks.fit import FitResult
from sampler.tasks.wording import plain, significant

Array = NDArray[np.float64]

MOST_ARROWS = 1200
MOST_PANELS = 5
MOST_TERMS = 20
ARROW_SHARE = 0.04
"""Length of the arrow of one residual standard deviation, in panel widths."""
AXES = (("dx", style.FILL, "o"), ("dy", style.ALARM, "s"))


def characterise_figures(result: Characterisation) -> dict[str, bytes]:
    """residuals, variogram, models and terms, each as PNG and SVG; a variogram only where there are marks enough."""
    files = style.pictures("residuals", lambda: _residuals(result))
    if any(axis.variogram is not None for axis in result.axes):
        files |= style.pictures("variogram", lambda: _variogram(result))
    return files | style.pictures("models", lambda: _models(result)) | style.pictures("terms", lambda: _terms(result))


def headed(drawn: Figure, title: str, subtitle: str, left_in: float = 0.25) -> None:
    """Title and one line of explanation at the top left."""
    width, height = drawn.get_size_inches()
    drawn.text(left_in / width, 1 - 0.26 / height, title, fontsize=style.TITLE_PT, fontweight="bold", va="center")
    drawn.text(left_in / width, 1 - 0.52 / height, subtitle, fontsize=style.TEXT_PT, color=style.SOFT, va="center")


def boxes(columns: int, rows: int, box_in: tuple[float, float], gap_in: tuple[float, float],
          margin_in: tuple[float, float, float, float]) -> tuple[Figure, list[Axes]]:
    """A figure of equal boxes, row by row from the top; margins left, right, top, bottom."""
    left, right, top, bottom = margin_in
    width = left + right + columns * box_in[0] + (columns - 1) * gap_in[0]
    height = top + bottom + rows * box_in[1] + (rows - 1) * gap_in[1]
    drawn = style.figure(width, height)
    made = []
    for number in range(columns * rows):
        row, column = divmod(number, columns)
        x = left + column * (box_in[0] + gap_in[0])
        y = height - top - box_in[1] - row * (box_in[1] + gap_in[1])
        made.append(drawn.add_axes((x / width, y / height, box_in[0] / width, box_in[1] / height)))
    for axes in made:
        for side in ("top", "right"):
            axes.spines[side].set_visible(False)
    return drawn, made


def vectors(axes: Axes, layout: Layout, xy_mm: Array, dxy_um: Array, unit_um: float) -> None:
    """Displacements (n, 2) at marks (n, 2) on the panel's outline; `unit_um` is drawn ARROW_SHARE of the width long."""
    origin = np.asarray(layout.origin_mm)
    outline = layout.outline_mm - origin
    axes.add_patch(Polygon(outline, closed=True, facecolor="none", edgecolor=style.INK, linewidth=0.9))
    for grid in layout.grids[:1]:
        half = np.asarray(grid.cell_mm) / 2
        for centre in grid.cell_centres_mm - origin:
            corners = centre + half * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
            axes.add_patch(Polygon(corners, closed=True, facecolor="none", edgecolor=style.HAIR, linewidth=0.5))
    shown = np.flatnonzero(~np.isnan(dxy_um).any(axis=1))
    if len(shown) > MOST_ARROWS:
        shown = shown[np.linspace(0, len(shown) - 1, MOST_ARROWS).astype(int)]
    xy = xy_mm[shown] - origin
    size = float(layout.width_mm)
    axes.quiver(xy[:, 0], xy[:, 1], dxy_um[shown, 0], dxy_um[shown, 1], angles="xy", scale_units="xy",
                scale=unit_um / (ARROW_SHARE * size), width=0.0035, color=style.INK, headwidth=3.5, headlength=4)
    low, high = outline.min(axis=0), outline.max(axis=0)
    margin = 0.04 * (high - low).max()
    axes.set(xlim=(low[0] - margin, high[0] + margin), ylim=(low[1] - margin, high[1] + margin), aspect="equal",
             xticks=[], yticks=[])
    for spine in axes.spines.values():
        spine.set_visible(False)


def _residuals(result: Characterisation) -> Figure:
    averages, sites = result.averages, result.readings.sites
    r = result.residual_um
    known = ~np.isnan(r)
    count = np.stack([np.bincount(averages.site[known[:, axis]], minlength=len(sites)) for axis in (0, 1)], axis=1)
    total = np.stack([np.bincount(averages.site, np.nan_to_num(r[:, axis]), len(sites)) for axis in (0, 1)], axis=1)
    mean = np.divide(total, count, out=np.full(total.shape, np.nan), where=count > 0)
    names = result.readings.panel_names
    square = np.array([np.nanmean(r[averages.panel == i] ** 2) if known[averages.panel == i].any() else -1.0
                       for i in range(len(names))])
    worst = [int(i) for i in np.argsort(-square, kind="stable") if square[i] >= 0][:MOST_PANELS]
    shown: list[tuple[str, Array, Array]] = []
    if len(worst) > 1:
        shown.append((f"mean of {len(names)} panels", sites.xy_mm, mean))
    for i in worst:
        here = averages.panel == i
        shown.append((f"panel {plain(names[i], 18)}, {significant(float(np.sqrt(square[i])))} µm",
                      sites.xy_mm[averages.site[here]], r[here]))
    unit = float(np.sqrt(np.nanmean(r**2))) if known.any() else 1.0
    unit = float(f"{max(unit, 1e-12):.1g}")
    columns = min(3, len(shown))
    rows = -(-len(shown) // columns)
    width = 2.9 if columns > 1 else 4.6
    ratio = float(np.ptp(result.layout.outline_mm[:, 1]) / np.ptp(result.layout.outline_mm[:, 0]))
    drawn, made = boxes(columns, rows, (width, width * ratio), (0.12, 0.32), (0.25, 0.25, 0.95, 0.45))
    for axes, (name, xy, dxy) in zip(made, shown, strict=False):
        vectors(axes, result.layout, xy, dxy, unit)
        axes.set_title(name, fontsize=style.TEXT_PT, pad=2)
    for axes in made[len(shown):]:
        axes.set_axis_off()
    more = f"; the {len(worst)} with the largest" if len(worst) < len(names) else ""
    headed(drawn, "What the model leaves", f"residuals of {result.choice.family}{more}" +
           (f"; {len(result.outliers)} flagged readings left out" if result.outliers else ""))
    _arrow_key(drawn, ARROW_SHARE * width / 1.08, f"{unit:g} µm")
    return drawn


def _arrow_key(drawn: Figure, length_in: float, text: str) -> None:
    width, height = drawn.get_size_inches()
    axes = drawn.add_axes((0, 0, 1, 0.4 / height))
    axes.set(xlim=(0, width), ylim=(0, 0.4))
    axes.set_axis_off()
    axes.annotate("", (0.25 + length_in, 0.2), (0.25, 0.2), arrowprops={"arrowstyle": "-|>", "color": style.INK, "linewidth": 1.1,
                                                                     "mutation_scale": 7, "shrinkA": 0, "shrinkB": 0})
    axes.text(0.33 + length_in, 0.2, text, va="center", fontsize=style.TEXT_PT)


def _variogram(result: Characterisation) -> Figure:
    shown = [(axis, look) for axis, look in zip(result.axes, AXES, strict=True) if axis.variogram is not None]
    drawn, made = boxes(len(shown), 1, (3.7, 2.7), (0.75, 0), (0.75, 0.3, 1.2, 0.65))
    for axes, (axis, (name, colour, marker)) in zip(made, shown, strict=True):
        found = axis.variogram
        assert found is not None
        size = 8 + 40 * np.sqrt(found.pairs / found.pairs.max())
        axes.scatter(found.distance_mm, found.gamma_um2, s=size, marker=marker, color=colour, zorder=3, label="pairs of marks",
                     linewidth=0)
        looks: dict[str, dict[str, Any]] = {"smooth": {"color": style.INK, "linewidth": 1.3},
                                            "rough": {"color": style.SOFT, "linewidth": 1.0, "dashes": (4, 2)}}
        for fit in axis.fits:
            axes.plot(found.distance_mm, fit.curve_um2, zorder=2, **looks[fit.family],
                      label=f"{fit.family}: range {significant(fit.range_mm)} mm")
        axes.set(xlabel="distance, mm", ylabel="half mean squared difference, µm²", ylim=(0, None), xlim=(0, None))
        p = "" if axis.moran is None else f", p = {axis.moran.p_value:.2g}"
        alike = "alike" if axis.correlated else "not alike"
        axes.set_title(f"{name}: neighbours {alike}{p}", fontsize=style.TEXT_PT + 0.5, loc="left", pad=24)
        axes.legend(loc="lower left", bbox_to_anchor=(-0.02, 0.99), frameon=False, fontsize=style.SMALL_PT, ncols=3,
                    columnspacing=0.9, handlelength=1.5, handletextpad=0.4)
    headed(drawn, "How alike neighbours are", "variogram of the residuals; curves as the fit of the model lets them be seen")
    return drawn


def _models(result: Characterisation) -> Figure:
    choice = result.choice
    ladders = list(choice.ladders.items())
    drawn, made = boxes(len(ladders), 1, (4.3, 2.8), (0.9, 0), (0.8, 0.3, 1.15, 0.95))
    looks = {(False, False): (style.INK, "-", "o", "panel terms"), (True, False): (style.FILL, "--", "s", "and shared"),
             (False, True): (style.ALARM, ":", "^", "and each cell's"), (True, True): (style.ALARM_INK, "-.", "D", "and both")}
    for axes, (grid, rungs) in zip(made, ladders, strict=True):
        families = list(dict.fromkeys(rung.family for rung in rungs))
        for key, (colour, line, marker, label) in looks.items():
            mine = [rung for rung in rungs if (rung.shared, rung.each) == key]
            error = [rung.quarters_um if rung.each else rung.cells_um for rung in mine]
            if not np.isfinite(error).any():
                continue
            axes.plot([families.index(rung.family) for rung in mine], error, line, color=colour, marker=marker, markersize=4,
                      label=label, linewidth=1.2)
            for rung, value in zip(mine, error, strict=True):
                if (rung.family, rung.shared, rung.each) == (choice.family, grid in choice.shared, grid in choice.each):
                    axes.plot([families.index(rung.family)], [value], "o", markersize=13, markerfacecolor="none",
                              markeredgecolor=style.INK, markeredgewidth=1.4)
        axes.set_yscale("log")
        axes.set(xticks=range(len(families)), xticklabels=families, ylabel="error at readings left out, µm")
        axes.yaxis.set_major_formatter(lambda value, _: f"{value:.3g}")
        axes.yaxis.set_minor_formatter(lambda value, _: f"{value:.2g}")
        axes.tick_params(axis="y", which="minor", labelsize=style.SMALL_PT)
        axes.set_title(f"cells of {plain(grid, 30)}" if grid else "", fontsize=style.TEXT_PT + 0.5, loc="left")
        axes.legend(loc="upper left", bbox_to_anchor=(-0.02, -0.13), frameon=False, fontsize=style.SMALL_PT + 0.5, ncols=2)
    headed(drawn, f"Models tried; {choice.family} recommended (ring)",
           plain(f"left out: {choice.blocks}; for cells' own terms, quarters of cells", 86))
    return drawn


def _terms(result: Characterisation) -> Figure:
    names = result.terms.names[:MOST_TERMS]
    columns = min(4, len(names))
    rows = -(-len(names) // columns)
    drawn, made = boxes(columns, rows, (1.9, 1.15), (0.55, 0.45), (0.6, 0.2, 1.0, 0.55))
    lot = result.readings.lot[[result.readings.panel_names.index(name) for name in result.panel]]
    place = np.arange(len(result.panel))
    marks = "osD^vPX"
    for number, (axes, name) in enumerate(zip(made, names, strict=False)):
        value, u = result.theta[:, number], result.u[:, number]
        axes.errorbar(place, value, 2 * u, fmt="none", ecolor=style.FAINT, elinewidth=0.9, zorder=1)
        for which in np.unique(lot):
            mine = lot == which
            axes.plot(place[mine], value[mine], marks[which % len(marks)], markersize=3.2, zorder=2,
                      color=style.FILL if which % 2 == 0 else style.ALARM_INK)
        axes.axhline(float(value.mean()), color=style.SOFT, linewidth=0.7, zorder=0)
        axes.set_title(f"{plain(name, 26)}, {result.terms.units[number]}", fontsize=style.SMALL_PT + 0.5, loc="left", pad=3)
        _panel_axis(axes, len(place), number >= len(names) - columns)
    for axes in made[len(names):]:
        axes.set_axis_off()
    more = f"; first {MOST_TERMS} of {len(result.terms)}" if len(result.terms) > MOST_TERMS else ""
    headed(drawn, "Terms panel by panel", f"with 2u, the mean as a line{more}" +
           ("; marks tell lots apart" if len(np.unique(lot)) > 1 else ""))
    return drawn


def _panel_axis(axes: Axes, panels: int, named: bool) -> None:
    axes.set_xlim(-0.6, panels - 0.4)
    axes.xaxis.set_major_locator(MaxNLocator(nbins=5, integer=True))
    axes.xaxis.set_major_formatter(lambda at, _: f"{at + 1:g}")
    axes.tick_params(labelsize=style.SMALL_PT)
    axes.set_xlabel("panel, in order of time" if named else "", fontsize=style.SMALL_PT)


def term_charts(result: FitResult) -> dict[str, bytes]:
    """`terms.png` and `terms.svg`: each term over the panels in order of time, with its limits of three sigma."""
    return style.pictures("terms", lambda: _charts(result))


def _charts(result: FitResult) -> Figure:
    model = result.study.model
    names = sorted(range(len(model)), key=lambda j: -int(result.charts[model.names[j]].outside.sum()))[:MOST_TERMS]
    names = sorted(names)
    columns = min(2, len(names))
    rows = -(-len(names) // columns)
    drawn, made = boxes(columns, rows, (3.6, 1.05), (0.6, 0.45), (0.65, 0.25, 1.0, 0.55))
    place = np.arange(len(result.panel))
    size = 3.0 if len(place) <= 100 else 1.4
    for number, (axes, j) in enumerate(zip(made, names, strict=False)):
        chart, value = result.charts[model.names[j]], result.theta[:, j]
        if len(place) <= 100:
            axes.errorbar(place, value, 2 * result.u[:, j], fmt="none", ecolor=style.HAIR, elinewidth=0.9, zorder=1)
        for level, dashes in ((chart.lower, (4, 2)), (chart.mean, (1, 0)), (chart.upper, (4, 2))):
            if np.isfinite(level):
                axes.axhline(level, color=style.SOFT, linewidth=0.7, dashes=dashes, zorder=0)
        axes.plot(place[~chart.outside], value[~chart.outside], "o", color=style.FILL, markersize=size, zorder=2)
        axes.plot(place[chart.outside], value[chart.outside], "D", color=style.ALARM_INK, markersize=size + 1, zorder=3)
        axes.set_title(f"{plain(model.names[j], 40)}, {model.units[j]}", fontsize=style.SMALL_PT + 0.5, loc="left", pad=3)
        _panel_axis(axes, len(place), number >= len(names) - columns)
    for axes in made[len(names):]:
        axes.set_axis_off()
    outside = sum(int(chart.outside.sum()) for chart in result.charts.values())
    more = f"; {MOST_TERMS} of {len(model)} terms" if len(model) > MOST_TERMS else ""
    headed(drawn, "Terms over time", f"dashed: mean ± 3 sigma of neighbouring panels; {outside} values outside (diamonds){more}")
    return drawn

"""The map of a change: which sites stay, move, go and come."""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import Polygon

from sampler.figures.style import ALARM_INK, FAINT, HAIR, INK, SMALL_PT, SOFT, TEXT_PT, TITLE_PT, figure, pictures
from sampler.panel.thinning import thinned
from sampler.tasks.replan import Replanned

MOST_CANDIDATES = 5000
CORNERS = np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
LOOKS = {"kept": ("o", INK, INK), "moved": ("s", INK, "none"), "added": ("D", INK, "#6f97a6"), "dropped": ("x", ALARM_INK, None)}
"""Marker, edge and face of each kind of change: told apart by shape, not by colour alone."""


def change_map(result: Replanned) -> dict[str, bytes]:
    """change.png and change.svg."""
    return pictures("change", lambda: _draw(result))


def _draw(result: Replanned) -> Figure:
    study = result.plan.study
    layout, origin = study.layout, np.asarray(study.layout.origin_mm)
    drawn = figure(7.6, 7.6 * layout.height_mm / layout.width_mm + 1.2)
    axes = drawn.add_axes((0.09, 0.15, 0.88, 0.74))
    axes.add_patch(Polygon(layout.outline_mm - origin, fill=False, edgecolor=INK, linewidth=1.2))
    for keep_out in layout.keep_outs:
        axes.add_patch(Polygon(keep_out.boundary_mm() - origin, facecolor="none", edgecolor=SOFT, hatch="////", linewidth=0.6))
    for grid in layout.grids:
        half = np.asarray(grid.cell_mm) / 2
        for centre in grid.cell_centres_mm - origin:
            axes.add_patch(Polygon(centre + half * CORNERS, fill=False, edgecolor=HAIR, linewidth=0.5))
    candidates = result.plan.candidates.sites.xy_mm - origin
    shown = candidates[thinned(candidates, MOST_CANDIDATES)]
    axes.scatter(shown[:, 0], shown[:, 1], s=2.0, color=FAINT, linewidths=0, label="candidates", zorder=2)
    for what, (marker, edge, face) in LOOKS.items():
        changes = [change for change in result.changes if change.what == what]
        places = np.array([change.old_mm if what == "dropped" else change.new_mm for change in changes], float).reshape(-1, 2)
        axes.scatter(places[:, 0], places[:, 1], s=34, marker=marker, linewidths=1.3, zorder=4, label=f"{len(changes)} {what}",
                     edgecolors=None if face is None else edge, facecolors=edge if face is None else face)
        for change in changes:
            if what == "moved" and change.old_mm is not None and change.new_mm is not None:
                axes.plot(*zip(change.old_mm, change.new_mm, strict=True), color=INK, linewidth=0.9, zorder=3)
            at = change.old_mm if what == "dropped" else change.new_mm
            if what != "kept" and at is not None:
                axes.annotate(change.id, at, xytext=(5, 4), textcoords="offset points", fontsize=SMALL_PT,
                              color=edge, zorder=5)
    axes.set_aspect("equal")
    axes.margins(0.03)
    axes.set_xlabel("x, mm", fontsize=TEXT_PT)
    axes.set_ylabel("y, mm", fontsize=TEXT_PT)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    axes.legend(loc="upper center", bbox_to_anchor=(0.5, -0.09), ncols=5, frameon=False, fontsize=TEXT_PT)
    drawn.text(0.09, 0.955, study.title, fontsize=TITLE_PT, fontweight="bold")
    drawn.text(0.09, 0.92, f"{result.plan.answer}; on {layout.name}", fontsize=TEXT_PT, color=SOFT)
    return drawn

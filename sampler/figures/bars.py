"""One bar for each limit: what is predicted against what is allowed."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Rectangle

from sampler.figures import style
from sampler.tasks.results import MEETS, AuditedLimit
from sampler.tasks.wording import against, plain, share

MOST_BARS = 20
_ROW_IN = 0.40
_BAR_IN = 0.115
_HEAD_IN = 0.62
_FOOT_IN = 0.30
_LETTER_IN = 0.0735  # mean width of a letter at the size of the row texts
_GREATEST_SHARE = 2.0


def shown_limits(limits: tuple[AuditedLimit, ...]) -> tuple[AuditedLimit, ...]:
    """The limits that get a bar: all in the study's order, or the tightest twenty, tightest first."""
    if len(limits) <= MOST_BARS:
        return limits
    return tuple(sorted(limits, key=lambda limit: -limit.worst_ratio)[:MOST_BARS])


def bars_height(limits: tuple[AuditedLimit, ...]) -> float:
    """Inches that the bars ask for, 0.33 a row at the least."""
    return _HEAD_IN + _FOOT_IN + 0.33 * max(1, len(shown_limits(limits)))


def draw_bars(axes: Axes, limits: tuple[AuditedLimit, ...], coverage_factor: float,
              size_in: tuple[float, float]) -> None:
    """Draw into bare axes of the given size: for each limit its name and values, and a bar of its share of the limit.

    A bar beyond the limit is hatched as well as coloured; one that is not determined runs out of the axes.
    """
    width, height = size_in
    axes.set(xlim=(0, width), ylim=(height, 0))
    axes.set_axis_off()
    after = "k·u after the worst loss" if any(np.isfinite(limit.after_loss) for limit in limits) else "Predicted k·u"
    axes.text(0, 0.10, f"{after} against its limit (k = {coverage_factor:g})", fontsize=style.TEXT_PT,
              va="center", fontweight="bold")
    shown = shown_limits(limits)
    if not shown:
        axes.text(0, 0.42, "The study sets no limits.", fontsize=style.TEXT_PT, va="center", color=style.SOFT)
        return
    if len(shown) < len(limits):
        axes.text(0, 0.29, f"tightest {len(shown)} of {len(limits)} limits", fontsize=style.SMALL_PT + 0.5, va="center",
                  color=style.SOFT)
    worst = max((limit.worst_ratio for limit in shown if np.isfinite(limit.worst_ratio)), default=1.0)
    per_share = width / min(max(1.12, worst * 1.02), _GREATEST_SHARE)
    pitch = min(_ROW_IN, (height - _HEAD_IN - _FOOT_IN) / len(shown))
    for row, limit in enumerate(shown):
        _draw_row(axes, limit, _HEAD_IN + row * pitch, width, per_share)
    foot = _HEAD_IN + len(shown) * pitch + 0.02
    axes.text(per_share, _HEAD_IN - 0.13, "limit", fontsize=style.SMALL_PT + 0.5, ha="center", va="center",
              fontweight="bold")
    for mark in (0.0, 0.25, 0.5, 0.75, 1.0):
        axes.plot([mark * per_share] * 2, [foot, foot + 0.04], color=style.SOFT, linewidth=0.6)
        axes.text(mark * per_share, foot + 0.12, f"{100 * mark:.0f} %", fontsize=style.SMALL_PT, va="center",
                  ha="left" if mark == 0 else "center", color=style.SOFT)


def _draw_row(axes: Axes, limit: AuditedLimit, top: float, width: float, per_share: float) -> None:
    ratio = limit.worst_ratio
    over = not ratio <= MEETS
    predicted, maximum = against(ratio * limit.maximum, limit.maximum)
    if not np.isfinite(ratio):
        value = f"not determined (limit {maximum} {limit.unit})"
    else:
        # A bar that leaves the axes shows where it ends only by its number.
        tail = f" ({share(ratio)})" if ratio * per_share > width else ""
        value = f"{predicted} of {maximum} {limit.unit}{tail}"
    weight = "bold" if over else "normal"
    room = int(width / _LETTER_IN) - len(value) - 2
    axes.text(0, top + 0.09, plain(limit.label, max(8, room)), fontsize=style.TEXT_PT - 0.5, va="center")
    axes.text(width, top + 0.09, value, fontsize=style.TEXT_PT - 0.5, va="center", ha="right", fontweight=weight)
    length = min(ratio * per_share, width) if np.isfinite(ratio) else width
    bar: dict[str, Any] = {"facecolor": style.ALARM, "hatch": "//////", "edgecolor": style.PAPER}
    if not over:
        bar = {"facecolor": style.FILL}
    axes.add_patch(Rectangle((0, top + 0.175), width, _BAR_IN, facecolor=style.TROUGH, linewidth=0))
    axes.add_patch(Rectangle((0, top + 0.175), length, _BAR_IN, linewidth=0, **bar))
    axes.plot([per_share] * 2, [top + 0.15, top + 0.2 + _BAR_IN], color=style.INK, linewidth=2.0, solid_capstyle="butt")

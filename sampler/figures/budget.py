"""Who eats the overlay budget: one bar for each contributor, and what is left for sampling."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.figure import Figure
from matplotlib.patches import Patch, Rectangle

from sampler.figures import style
from sampler.tasks.budget import BudgetResult
from sampler.tasks.wording import plain, significant

MOST_BARS = 16
_WIDTH_IN, _ROW_IN, _BAR_IN = 8.2, 0.31, 0.16
_NAME_IN, _VALUE_IN, _MARGIN_IN = 2.25, 1.95, 0.25
_HEAD_IN, _FOOT_IN, _GAP_IN = 1.08, 0.66, 0.10

_MEAN: dict[str, Any] = {"facecolor": style.SOFT}
_SPREAD: dict[str, Any] = {"facecolor": style.FILL}
_SAMPLING: dict[str, Any] = {"facecolor": style.PAPER, "edgecolor": style.FILL, "hatch": "....", "linewidth": 0.8}
_OVER: dict[str, Any] = {"facecolor": style.ALARM, "edgecolor": style.PAPER, "hatch": "//////", "linewidth": 0.0}


def budget_figure(result: BudgetResult) -> dict[str, bytes]:
    """`budget.png` and `budget.svg`."""
    return style.pictures("budget", lambda: _draw(result))


def _draw(result: BudgetResult) -> Figure:
    asked, plan = result.budget, result.supported
    tolerance, k = asked.tolerance_um, asked.coverage_factor
    shown = result.by_size[:MOST_BARS]
    rows = [(plain(eater.name, 30), f"{significant(eater.quoted_um)} µm, {100 * eater.variance_share:.0f} % of variance",
             [(abs(eater.mean_um), _MEAN), (eater.k_sigma_um, _SPREAD)]) for eater in shown]
    hidden = len(result.eaters) - len(shown)
    rows.append((f"together{f', {hidden} smaller too' if hidden else ''}", f"{significant(float(asked.spent_um()))} µm",
                 [(asked.mean_um, _MEAN), (k * asked.sigma_um, _SPREAD)]))
    if not result.spent:
        rows.append(("limit for sampling", f"k·u at most {result.position_to_enter_um:g} µm",
                     [(result.position_limit_um, _SAMPLING)]))
    if plan is not None and np.isfinite(plan.k_u_um):
        rows.append(("the plan's sampling", f"k·u {significant(plan.k_u_um)} µm", [(plan.k_u_um, _SAMPLING)]))
        rows.append(("together with the plan", f"{significant(plan.spent_um)} µm",
                     [(asked.mean_um, _MEAN), (plan.spent_um - asked.mean_um, _SPREAD)]))
    height = _HEAD_IN + _ROW_IN * len(rows) + _GAP_IN + _FOOT_IN
    room = _WIDTH_IN - _NAME_IN - _VALUE_IN - 2 * _MARGIN_IN
    longest = max(max(sum(length for length, _ in parts) for _, _, parts in rows), tolerance, 1e-9)
    per_um = room / (1.04 * longest)

    figure = style.figure(_WIDTH_IN, height)
    axes = figure.add_axes((0, 0, 1, 1))
    axes.set(xlim=(0, _WIDTH_IN), ylim=(height, 0))
    axes.set_axis_off()
    zero = _MARGIN_IN + _NAME_IN
    axes.text(_MARGIN_IN, 0.28, plain(asked.name, 70), fontsize=style.TITLE_PT, fontweight="bold", va="center")
    for down, text, good in ((0.53, result.answer, not result.spent), (0.74, result.plan_answer, result.fits)):
        axes.text(_MARGIN_IN, down, plain(text[:1].upper() + text[1:], 118), fontsize=style.TEXT_PT, va="center",
                  color=style.SOFT if good else style.ALARM_INK)
    top = _HEAD_IN
    total = len(shown)
    for row, (name, value, parts) in enumerate(rows):
        if row == total:
            top += _GAP_IN
            axes.plot([_MARGIN_IN, _WIDTH_IN - _MARGIN_IN], [top - _GAP_IN / 2] * 2, color=style.HAIR, linewidth=0.6)
        weight = "bold" if name.startswith("together") else "normal"
        axes.text(_MARGIN_IN, top + _ROW_IN / 2, name, va="center", fontweight=weight)
        axes.text(_WIDTH_IN - _MARGIN_IN, top + _ROW_IN / 2, value, va="center", ha="right", fontweight=weight)
        at = 0.0
        for length, look in parts:
            _bar(axes, (zero + at * per_um, top + (_ROW_IN - _BAR_IN) / 2), length * per_um, look)
            at += length
        if at > max(tolerance, 0.0):
            begin = max(tolerance, 0.0)
            _bar(axes, (zero + begin * per_um, top + (_ROW_IN - _BAR_IN) / 2), (at - begin) * per_um, _OVER)
        top += _ROW_IN
    axes.plot([zero, zero], [_HEAD_IN - 0.04, top + 0.04], color=style.SOFT, linewidth=0.6)
    if tolerance > 0:
        at = zero + tolerance * per_um
        axes.plot([at, at], [_HEAD_IN - 0.04, top + 0.04], color=style.INK, linewidth=1.6)
        axes.text(at, top + 0.15, f"tolerance {tolerance:.6g} µm", ha="center", va="center",
                  fontsize=style.SMALL_PT + 0.5, fontweight="bold")
    axes.text(zero, top + 0.15, "0", ha="center", va="center", fontsize=style.SMALL_PT + 0.5, color=style.SOFT)
    entries = [Patch(label="|mean|, adds", **_MEAN), Patch(label=f"{k:g}·sigma, in quadrature", **_SPREAD),
               Patch(label="k·u of sampling", **_SAMPLING), Patch(label="over the tolerance", **_OVER)]
    figure.legend(handles=entries, loc="lower left", bbox_to_anchor=(_MARGIN_IN / _WIDTH_IN, 0.06 / height), ncols=4,
                  frameon=False, fontsize=style.SMALL_PT + 0.5, borderpad=0, columnspacing=1.6, handlelength=1.8)
    return figure


def _bar(axes: Any, corner: tuple[float, float], length: float, look: dict[str, Any]) -> None:
    axes.add_patch(Rectangle(corner, length, _BAR_IN, **{"linewidth": 0.0, **look}))

"""Claimed against observed: one row for each uncertainty that a plan claims."""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure

from sampler.figures import style
from sampler.figures.estimation import headed
from sampler.tasks.verify import Verification
from sampler.tasks.wording import plain, significant

MOST_ROWS = 24
_ROW_IN, _NAME_IN, _PLOT_IN, _VALUE_IN = 0.27, 2.4, 3.6, 2.0


def verify_figure(result: Verification) -> dict[str, bytes]:
    """`verify.png` and `verify.svg`."""
    return style.pictures("verify", lambda: _draw(result))


def _draw(result: Verification) -> Figure:
    shown = sorted(result.checked, key=lambda item: item.p_value)[:MOST_ROWS]
    shown = [item for item in result.checked if item in shown]
    rows = len(shown) + len(result.pilot)
    width, top, foot = _NAME_IN + _PLOT_IN + _VALUE_IN + 0.5, 0.95, 0.6
    height = top + rows * _ROW_IN + foot
    drawn = style.figure(width, height)
    left = 0.25 + _NAME_IN
    axes = drawn.add_axes((left / width, foot / height, _PLOT_IN / width, rows * _ROW_IN / height))
    ratios = [item.observed / item.claim.k_u for item in shown] + [item.ratio for item in result.pilot]
    every = np.concatenate([ratios, *(item.panels for item in result.pilot)])
    reach = max(0.12, 1.1 * float(np.nanmax(np.abs(every - 1))))
    axes.set(xlim=(max(0.0, 1 - reach), 1 + reach), ylim=(rows - 0.5, -0.5), yticks=[],
             xlabel="observed over claimed")
    for side in ("left", "right", "top"):
        axes.spines[side].set_visible(False)
    axes.axvline(1.0, color=style.SOFT, linewidth=0.8, zorder=0)
    texts = []
    for row, item in enumerate(shown):
        low, high = (end / item.claim.k_u for end in item.expected)
        axes.plot([low, high], [row, row], color=style.HAIR, linewidth=6, solid_capstyle="butt", zorder=1)
        value = f"{significant(item.observed)} of {significant(item.claim.k_u)} {item.claim.unit}"
        texts.append((item.claim.label, value, item.held))
    for row, pilot in enumerate(result.pilot, len(shown)):
        axes.plot(pilot.panels, np.full(len(pilot.panels), row), "|", color=style.FAINT, markersize=8, zorder=1)
        name = "pilot: all marks" if row == len(shown) else "pilot: marks not visited"
        texts.append((name, f"{pilot.ratio:.3g} ×, p = {pilot.p_value:.2g}", pilot.held))
    for row, (ratio, (name, value, held)) in enumerate(zip(ratios, texts, strict=True)):
        axes.plot([ratio], [row], "o" if held else "D", color=style.INK if held else style.ALARM_INK, markersize=4.5, zorder=3)
        at = 1 - (top + (row + 0.5) * _ROW_IN) / height
        drawn.text(0.25 / width, at, plain(name, 36), fontsize=style.TEXT_PT, va="center")
        drawn.text(1 - 0.25 / width, at, value, fontsize=style.TEXT_PT, va="center", ha="right",
                   fontweight="normal" if held else "bold", color=style.INK if held else style.ALARM_INK)
    answer = "The plan held" if result.held else "The plan failed"
    panels = "; ticks: single pilot panels" if result.pilot else ""
    headed(drawn, answer, f"k·u observed on {result.panels:,} simulated panels over k·u claimed; "
                          f"grey: what chance allows{panels}")
    return drawn

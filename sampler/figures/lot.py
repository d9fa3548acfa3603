"""Seconds for a lot over the sites on each measured panel."""

from __future__ import annotations

from matplotlib.figure import Figure

from sampler.figures import style
from sampler.figures.estimation import boxes, headed
from sampler.tasks.lot import LotResult
from sampler.tasks.wording import plain


def lot_figure(result: LotResult) -> dict[str, bytes]:
    """`lot.png` and `lot.svg`."""
    return style.pictures("lot", lambda: _draw(result))


def _draw(result: LotResult) -> Figure:
    drawn, (axes,) = boxes(1, 1, (6.4, 3.1), (0, 0), (0.85, 0.5, 1.0, 0.6))
    curve = result.curve
    axes.plot([choice.sites for choice in curve], [choice.seconds for choice in curve], "-", color=style.FILL, linewidth=1.3)
    for number, choice in enumerate(curve):
        best = choice is result.best
        axes.plot([choice.sites], [choice.seconds], "o" if choice.groups == 1 else "s", color=style.INK if best else style.FILL,
                  markersize=8 if best else 5)
        sets = f", {choice.groups} sets" if choice.groups > 1 else ""
        axes.annotate(f"{choice.panels}{sets}", (choice.sites, choice.seconds), (0, (9, -15)[number % 2]), ha="center",
                      textcoords="offset points", fontsize=style.SMALL_PT, fontweight="bold" if best else "normal")
    if result.forward is not None:
        axes.plot([result.forward.sites], [result.forward.seconds], "D", color=style.ALARM_INK, markersize=6)
        axes.annotate(f"feed-forward: all {result.lot:,}", (result.forward.sites, result.forward.seconds), (-7, -3),
                      textcoords="offset points", ha="right", fontsize=style.SMALL_PT, color=style.ALARM_INK)
    if not curve and result.forward is None:
        axes.text(0.5, 0.5, "no number of panels meets the limits", transform=axes.transAxes, ha="center")
    axes.set(xscale="log", yscale="log")
    counts = sorted({choice.sites for choice in curve} | ({result.forward.sites} if result.forward else set()))
    axes.set_xticks(counts, [str(count) for count in counts])
    axes.minorticks_off()
    axes.margins(0.08, 0.15)
    axes.yaxis.set_major_formatter(lambda value, _: f"{value:,.0f}")
    axes.set(xlabel="sites on each measured panel", ylabel="seconds for the lot")
    headed(drawn, f"A lot of {result.lot:,} panels", plain("numbers: panels measured so that the lot's mean meets the limits" + (
        "; feedback is useless here" if result.feedback_useless else ""), 100))
    return drawn

"""What pilot panels said as text: the answer first, at most 24 lines of 80 columns."""

from __future__ import annotations

import textwrap

from sampler.estimation.noise_parts import AxisNoise
from sampler.tasks.characterise import Characterisation
from sampler.tasks.wording import plain, significant

WIDTH, HEIGHT = 80, 24
MOST_NOTES = 3
MOST_TERMS = 4


def characterise_summary(result: Characterisation) -> str:
    """Model, noise, variation, read rates, outliers and what to check."""
    readings, choice = result.readings, result.choice
    lines = sentence(f"{counted(len(result.panel), 'pilot panel')}, {counted(len(readings), 'reading')} of "
                     f"{counted(len(readings.sites), 'mark')}: {_model(result)} is recommended")
    lines += [line for reason in choice.reason[:2] for line in sentence(reason, first="  ")[:3]]
    lines += [line for axis in result.axes for line in sentence(_noise(axis))[:2]]
    reach = f", alike over {significant(result.noise.local_range_mm)} mm" if result.noise.local_range_mm else ""
    lines += sentence(f"For a plan: mark_um {_pair(result.noise.mark_um)}, local_um {_pair(result.noise.local_um)}{reach}")
    lines += sentence(_variation(result))[:3]
    rates = [f"{100 * rate.rate:.3g} % of {counted(rate.tried, 'reading')}"
             + (f" of kind {plain(rate.kind, 20)}" if rate.kind else "") for rate in result.rates[:3]]
    lines += sentence("Read: " + "; ".join(rates))[:2]
    lines += sentence(f"{counted(len(result.outliers), 'reading')} flagged as not belonging" +
                      (" (outliers.csv)" if result.outliers else ""))
    if result.skipped:
        name, why = result.skipped[0]
        lines += sentence(f"{counted(len(result.skipped), 'panel')} skipped: {plain(name, 20)}: {why}")[:2]
    rest = [*(f"Warning: {warning}" for warning in result.warnings), *(f"Note: {note}" for note in result.notes)]
    for said in rest[:MOST_NOTES]:
        lines += sentence(said)[:2]
    return "\n".join(lines[:HEIGHT - 2] + ['In the study: process = "process.toml" beside it, then: sampler plan'])


def sentence(text: str, first: str = "") -> list[str]:
    """A sentence wrapped to the screen."""
    text = plain(text, 6 * WIDTH)
    return textwrap.wrap(f"{first}{text[:1].upper()}{text[1:]}" + ("" if text.endswith(".") else "."), WIDTH,
                         subsequent_indent=first + "  ", break_on_hyphens=False)


def counted(number: int, noun: str) -> str:
    return f"{number:,} {noun}" if number == 1 else f"{number:,} {noun}s"


def _model(result: Characterisation) -> str:
    choice = result.choice
    return (f"model {choice.family}" + "".join(f" with terms shared by the cells of {grid}" for grid in choice.shared)
            + "".join(f" with terms of each cell of {grid}" for grid in choice.each))


def _noise(axis: AxisNoise) -> str:
    said = f"{axis.axis}: {_interval(axis.left_um, axis.left_interval)} µm left by the model"
    if axis.reading_um is not None and axis.reading_interval is not None:
        said += f"; reading {_interval(axis.reading_um, axis.reading_interval)}"
    if axis.local_um is not None and axis.local_interval is not None:
        said += f"; local {_interval(axis.local_um, axis.local_interval)}"
    if axis.moran is not None:
        said += f"; neighbours {'alike' if axis.correlated else 'not alike'} (p = {axis.moran.p_value:.2g})"
    return said


def _variation(result: Characterisation) -> str:
    found = result.variation
    if found is None or found.panels < 2:
        return "One panel: nothing can be said of how panels vary"
    sd = sorted(((value, name, unit) for value, name, unit in zip(found.sd, result.terms.names, result.terms.units, strict=True)
                 if value > 0), key=lambda item: -item[0])[:MOST_TERMS]
    if not sd:
        return "Panel-to-panel variation does not show"
    return "Panels vary by (standard deviation) " + ", ".join(f"{name} {significant(value)} {unit}" for value, name, unit in sd)


def _interval(value: float, interval: tuple[float, float]) -> str:
    return f"{significant(value)} ({significant(interval[0], 2)} to {significant(interval[1], 2)})"


def _pair(values: tuple[float, float]) -> str:
    return f"[{significant(values[0])}, {significant(values[1])}]"

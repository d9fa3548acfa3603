"""process.toml: what pilot panels said, in the words of a study."""

from __future__ import annotations

import json
from collections.abc import Iterable, Sequence

import numpy as np

from sampler import __version__
from sampler.estimation.model_choice import EACH, LADDER, shared_terms
from sampler.tasks.characterise import Characterisation

SIGNIFICANT = 6
"""Digits written: far beyond what pilots can tell, and short enough to read."""


def process_toml(result: Characterisation) -> str:
    """A characterisation as TOML: `[noise]`, `[model]` and `[[prior]]` as a study has them, `[[read_rate]]` by kind,
    and `[variation]`, the covariances of terms between panels of a lot and between lots, for planning lots."""
    readings, noise = result.readings, result.noise
    lines = [f"# What {len(result.panel)} pilot panels said; written by sampler {__version__}.", "format = 1", "",
             *(f"# {note}" for note in (*result.choice.reason, *result.notes)), "", "[noise]",
             f"mark_um = {_list(noise.mark_um)}", f"local_um = {_list(noise.local_um)}"]
    if noise.local_range_mm:
        lines.append(f"local_range_mm = {_number(noise.local_range_mm)}")
    lines += ["", "[model]", f"panel = {_texts(LADDER[result.choice.family])}"]
    for grid in dict.fromkeys([*result.choice.shared, *result.choice.each]):
        each = grid in result.choice.each
        lines += [f"[model.{json.dumps(grid, ensure_ascii=False)}]"]
        lines += [f"shared = {_texts(shared_terms(each))}"] * (grid in result.choice.shared)
        lines += [f"each = {_texts(EACH)}"] * each
    for name, (mean, sd) in result.priors.items():
        lines += ["", "[[prior]]", f"terms = {_texts([name])}", f"sd = {_number(sd)}", f"mean = {_number(mean)}"]
    for rate in result.rates:
        lines += ["", "[[read_rate]]", f"kind = {json.dumps(rate.kind, ensure_ascii=False)}", f"rate = {_number(rate.rate)}",
                  f"interval = {_list(rate.interval)}"]
    found = result.variation
    if found is not None and not np.isnan(found.panel).any():
        lines += ["", "[variation]", f"terms = {_texts(result.terms.names)}", f"panels = {found.panels}",
                  f"lots = {len(readings.lot_names)}", f"mean = {_list(found.mean)}",
                  f"panel_covariance = {_rows(found.panel)}", f"lot_covariance = {_rows(found.lot)}"]
    return "\n".join(lines) + "\n"


def _number(value: float) -> str:
    text = f"{float(value):.{SIGNIFICANT}g}"
    return text if any(letter in text for letter in ".en") else f"{text}.0"


def _list(values: Iterable[float]) -> str:
    return "[" + ", ".join(_number(value) for value in values) + "]"


def _rows(matrix: np.ndarray) -> str:
    return "[\n" + "".join(f"  {_list(row)},\n" for row in matrix) + "]"


def _texts(values: Sequence[str]) -> str:
    return "[" + ", ".join(json.dumps(value, ensure_ascii=False) for value in values) + "]"

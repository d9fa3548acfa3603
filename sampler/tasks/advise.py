"""What would help when the limits cannot be met, and what a plan rests on."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from sampler.tasks.question import Question, achieved, everything, question
from sampler.tasks.results import Audit
from sampler.tasks.study import Study

BETTER_READINGS = (0.5, 0.25, 0.1)
"""Shares of the reading noise that are tried where a limit cannot be met."""


def notes(study: Study) -> tuple[str, ...]:
    """What a reader should know of the study's assumptions, a sentence each."""
    if max(study.noise.local_um) > 0 and not study.noise.local_range_mm:
        return ("local_um counts as independent from mark to mark (no local_range_mm).",)
    return ()


def round_up(value: float, digits: int = 3) -> float:
    """The next number of `digits` significant digits that is not smaller."""
    if not np.isfinite(value) or value <= 0:
        return value
    unit = 10.0 ** (math.floor(math.log10(value)) - digits + 1)
    steps = math.ceil(value / unit - 1e-9)
    return float(f"{steps * unit:.{digits}g}")


def advise(asked: Question, audit: Audit) -> tuple[str, ...]:
    """Sentences for the engineer; `audit` is of all candidates that may be measured, and misses limits.

    Any one of them is enough on its own, but for the marks to add, whose place is only a hint.
    """
    study = asked.study
    missed = sorted((limit for limit in audit.limits if limit.ratio > 1), key=lambda limit: -limit.ratio)
    said = []
    for limit in missed:
        if np.isfinite(limit.predicted):
            said.append(f"loosen {limit.label} to {round_up(limit.predicted):g} {limit.unit} (now {limit.maximum:g}; "
                        f"{limit.predicted:.3g} with every candidate measured, which no number of them beats)")
        else:
            said.append(f"{limit.label} is not determined by the candidates at all: add marks, or drop the limit")
    ratio = missed[0].ratio
    if np.isfinite(ratio) and asked.assumed.size > asked.assumed.corrected:
        said += _beside(asked)
    elif np.isfinite(ratio):
        mark, local = np.asarray(study.noise.mark_um), np.asarray(study.noise.local_um)
        left = (mark**2 + local**2) / ratio**2 - local**2
        if np.all(left > 0):
            said.append(f"or lower the reading noise mark_um to {_pair(np.sqrt(left))} µm (now {_pair(mark)})")
        else:
            said.append(f"a better reading alone will not do: the local part {_pair(local)} µm is too large; "
                        f"mark and local noise would both have to fall by a factor of {round_up(ratio):g}")
        said.append(f"or have {round_up(ratio**2, 2):g} × as many marks in the same places")
    places = [limit for limit in missed if limit.where_mm is not None]
    if places and places[0].where_mm is not None:
        x, y = np.subtract(places[0].where_mm, study.layout.origin_mm)
        said.append(f"marks near x = {x:.1f}, y = {y:.1f} mm, where the predicted position is worst, help most")
    return tuple(said)


def _beside(asked: Question) -> list[str]:
    """Where something beside the corrected terms is assumed: whether better readings of all candidates would help."""
    study = asked.study
    marks, mark = study.layout.marks, np.asarray(study.noise.mark_um)
    for share in BETTER_READINGS:
        layout = replace(study.layout, marks=replace(marks, sigma_um=marks.sigma_um * share))
        noise = replace(study.noise, mark_um=(float(mark[0] * share), float(mark[1] * share)))
        better = question(replace(study, layout=layout, noise=noise))
        if achieved(better, everything(better)).meets_limits:
            return [f"or lower the reading noise mark_um to {_pair(mark * share)} µm (now {_pair(mark)})"]
    return [f"reading noise of {BETTER_READINGS[-1]:g} × mark_um misses it too: local distortion, potential terms or shared "
            "errors set its floor, and no number of sites beats it"]


def _pair(values: np.ndarray) -> str:
    return "[" + ", ".join(f"{math.floor(value * 1e3) / 1e3:g}" for value in values) + "]"

"""What would help when the limits cannot be met."""

from __future__ import annotations

import math

import numpy as np

from sampler.tasks.question import Question
from sampler.tasks.results import Audit


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
                        f"{limit.predicted:.3g} with every candidate measured)")
        else:
            said.append(f"{limit.label} is not determined by the candidates at all: add marks, or drop the limit")
    ratio = missed[0].ratio
    if np.isfinite(ratio):
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


def _pair(values: np.ndarray) -> str:
    return "[" + ", ".join(f"{math.floor(value * 1e3) / 1e3:g}" for value in values) + "]"

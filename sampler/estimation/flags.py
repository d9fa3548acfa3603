"""Readings that do not belong, for people."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.estimation.readings import Averages, Readings


@dataclass(frozen=True, slots=True)
class Flagged:
    """A reading (the mean of its repeats) taken out of the fits: of which panel, mark and axis, its value, and
    its residual against a fit without it over its standard deviation."""

    panel: str
    id: str
    axis: str
    value_um: float
    studentised: float


def flags(readings: Readings, averages: Averages, flagged: NDArray[np.bool_],
          studentised: NDArray[np.float64]) -> tuple[Flagged, ...]:
    """The flagged (m, 2) means with their residuals (m, 2), panel by panel."""
    rows, axis = np.nonzero(flagged)
    return tuple(Flagged(readings.panel_names[averages.panel[row]], str(readings.sites.id[averages.site[row]]), ("dx", "dy")[a],
                         float(averages.dxy_um[row, a]), float(studentised[row, a])) for row, a in zip(rows, axis, strict=True))

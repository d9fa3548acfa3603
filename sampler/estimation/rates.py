"""How often marks read."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtri

from sampler.estimation.readings import Readings
from sampler.estimation.variance import LEVEL


@dataclass(frozen=True, slots=True)
class ReadRate:
    """How often marks of a kind gave both dx and dy; `interval` at 95 % (Wilson 1927)."""

    kind: str
    read: int
    tried: int
    interval: tuple[float, float]

    @property
    def rate(self) -> float:
        return self.read / self.tried


def wilson(read: int, tried: int, level: float = LEVEL) -> tuple[float, float]:
    """Score interval of a rate (Wilson 1927)."""
    z2 = float(ndtri((1 + level) / 2)) ** 2
    centre = (read + z2 / 2) / (tried + z2)
    half = np.sqrt(z2 * (read * (tried - read) / tried + z2 / 4)) / (tried + z2)
    return max(float(centre - half), 0.0), min(float(centre + half), 1.0)


def read_rates(readings: Readings) -> tuple[ReadRate, ...]:
    """One for each kind of mark, in order of its name."""
    kinds, code = np.unique(readings.sites.kind, return_inverse=True)
    of = code[readings.site]
    tried = np.bincount(of, minlength=len(kinds))
    read = np.bincount(of, ~readings.lost, minlength=len(kinds)).astype(int)
    return tuple(ReadRate(str(kind), r, t, wilson(r, t))
                 for kind, r, t in zip(kinds, read.tolist(), tried.tolist(), strict=True))


def often_lost(readings: Readings, least: int = 2) -> tuple[tuple[str, int, int], ...]:
    """Marks lost at least `least` times: id, times lost, times tried; most often lost first."""
    tried = np.bincount(readings.site, minlength=len(readings.sites))
    lost = np.bincount(readings.site, readings.lost, minlength=len(readings.sites)).astype(int)
    rows = np.flatnonzero(lost >= least)
    rows = rows[np.argsort(-lost[rows], kind="stable")]
    return tuple((str(readings.sites.id[row]), int(lost[row]), int(tried[row])) for row in rows)

"""What the search chooses one by one: single marks, or stops that read every mark in the field of view."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.panel.layout import Sites
from sampler.route.stops import Stops, candidate_stops

Array = NDArray[np.float64]
Indices = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Visits:
    """Chosen units made into readings: `marks` (n,) rows of the sites, stop by stop; `stop` (n,) the stop of each, from 0;
    `unit` (s,) the unit of each stop. A mark in the field of several stops is read at the first of them only."""

    marks: Indices
    stop: Indices
    unit: Indices


def one_by_one(marks: Indices) -> Visits:
    """Marks read one by one, in the order given; no error of a stop is shared then."""
    return Visits(marks, np.arange(len(marks)), marks)


@dataclass(frozen=True, slots=True)
class Units:
    """`stops` is None when every unit is one mark; then unit i is site i."""

    sites: Sites
    stops: Stops | None
    stop_um: tuple[float, float]

    def __len__(self) -> int:
        return len(self.sites) if self.stops is None else len(self.stops)

    @property
    def xy_mm(self) -> Array:
        return self.sites.xy_mm if self.stops is None else self.stops.xy_mm

    @property
    def key(self) -> NDArray[np.str_]:
        """A name for each unit: its marks' ids."""
        if self.stops is None:
            return self.sites.id
        return np.array(["+".join(sorted(self.sites.id[self.stops.marks(stop)])) for stop in range(len(self.stops))])

    @property
    def side(self) -> NDArray[np.str_]:
        return self.sites.side if self.stops is None else self.sites.side[self.stops.indices[self.stops.indptr[:-1]]]

    @property
    def read_s(self) -> Array:
        """Seconds of reading each unit, NaN where the machine's hold: a stop takes as long as its slowest mark."""
        if self.stops is None:
            return self.sites.seconds
        seconds = np.nan_to_num(self.sites.seconds, nan=-np.inf)[self.stops.indices]
        slowest = np.maximum.reduceat(seconds, self.stops.indptr[:-1])
        return np.where(np.isfinite(slowest), slowest, np.nan)

    def containing(self, marks: Indices) -> Indices:
        """The units that read any of the marks, sorted."""
        if self.stops is None:
            return np.sort(marks)
        return np.unique(self.stops.stop_of[np.isin(self.stops.indices, marks)])

    def visits(self, units: Indices) -> Visits:
        """The readings of chosen units, in the order given."""
        if self.stops is None:
            return Visits(units, np.arange(len(units)), units)
        marks = np.concatenate([np.zeros(0, np.int64), *(self.stops.marks(int(unit)) for unit in units)])
        stop = np.repeat(np.arange(len(units)), np.diff(self.stops.indptr)[units])
        _, first = np.unique(marks, return_index=True)
        first = np.sort(first)
        return Visits(marks[first], stop[first], units)

    def rows(self, whitened: Array) -> Array:
        """Whitened readings of every unit, (units, m, p), from those of every site (n, 2, p)."""
        if self.stops is None:
            return whitened
        return correlated(whitened[self.stops.indices], self._weights(self.stops.indices), self.stops.stop_of,
                          len(self.stops))

    def readings(self, visits: Visits, whitened: Array) -> Array:
        """Whitened readings of the visits, (stops, m, p)."""
        if self.stops is None:
            return whitened[visits.marks]
        return correlated(whitened[visits.marks], self._weights(visits.marks), visits.stop, len(visits.unit))

    def _weights(self, marks: Indices) -> Array:
        return np.asarray(self.stop_um) / self.sites.sigma_um[marks]


def units_of(sites: Sites, field_of_view_mm: tuple[float, float] | None, stop_um: tuple[float, float]) -> Units:
    """Units of sites whose `sigma_um` (n, 2) is complete: the noise of each reading without the stop's own error.

    A stop with a single mark only has more noise, which the sites' sigma then already holds.
    """
    if field_of_view_mm is None:
        return Units(sites, None, (0.0, 0.0))
    return Units(sites, candidate_stops(sites.xy_mm, field_of_view_mm, sites.side), stop_um)


def correlated(whitened: Array, ratio: Array, stop: Indices, stops: int) -> Array:
    """Readings of marks (k, 2, p) made into whitened readings of their stops (stops, m, p), padded with zeros.

    Marks of one stop share an error: with v = stop sigma / mark sigma per axis, R = D(I + vvᵀ)D, and
    R^(-1/2) = (I − γ v vᵀ) D⁻¹ with γ = (1 − 1/√(1 + ‖v‖²)) / ‖v‖² (rank-one update). `ratio` (k, 2) is v.
    """
    square = np.stack([np.bincount(stop, ratio[:, axis] ** 2, stops) for axis in (0, 1)], axis=1)
    gamma = np.where(square > 0, (1 - 1 / np.sqrt(1 + square)) / np.where(square > 0, square, 1.0), 0.0)
    shared = np.zeros((stops, 2, whitened.shape[2]))
    np.add.at(shared, stop, ratio[:, :, None] * whitened)
    rows = whitened - (gamma[stop] * ratio)[:, :, None] * shared[stop]
    count = np.bincount(stop, minlength=stops)
    place = np.arange(len(stop)) - (np.cumsum(count) - count)[stop]
    padded = np.zeros((stops, int(count.max(initial=0)), 2, whitened.shape[2]))
    padded[stop, place] = rows
    return padded.reshape(stops, 2 * padded.shape[1], whitened.shape[2])

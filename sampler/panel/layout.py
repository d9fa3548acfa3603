"""The panel as drawn, in its own frame: mm, origin at the panel centre, x to the right, y up."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Self

import numpy as np
from numpy.typing import NDArray

# Marks drawn on a cell's edge belong to the cell although floating point puts them a hair outside.
EDGE_TOLERANCE_MM = 1e-6


def readonly(array: NDArray) -> NDArray:
    """The same array, made read-only; values that flow are never written to."""
    array.setflags(write=False)
    return array


@dataclass(frozen=True, slots=True)
class Grid:
    """A stepped pattern of equal cells: exposure shots, drill scan fields.

    Cells are numbered row by row from the lower left, 0-based; cell 0 is `c1r1`.
    """

    name: str
    columns: int
    rows: int
    cell_mm: tuple[float, float]
    pitch_mm: tuple[float, float]
    centre_mm: tuple[float, float] = (0.0, 0.0)

    @property
    def cells(self) -> int:
        return self.columns * self.rows

    @property
    def cell_centres_mm(self) -> NDArray[np.float64]:
        """Centres of all cells, (cells, 2)."""
        x = (np.arange(self.columns) - (self.columns - 1) / 2) * self.pitch_mm[0] + self.centre_mm[0]
        y = (np.arange(self.rows) - (self.rows - 1) / 2) * self.pitch_mm[1] + self.centre_mm[1]
        return np.stack([np.tile(x, self.rows), np.repeat(y, self.columns)], axis=1)

    def cell_label(self, cell: int) -> str:
        return f"c{cell % self.columns + 1}r{cell // self.columns + 1}"

    def locate(self, xy_mm: NDArray[np.float64]) -> NDArray[np.int64]:
        """The cell each point lies in, (n,); -1 between or outside cells. Of two abutting cells the nearer centre wins."""
        step = (xy_mm - np.asarray(self.centre_mm)) / np.asarray(self.pitch_mm)
        counts = np.array([self.columns, self.rows])
        index = np.clip(np.rint(step + (counts - 1) / 2), 0, counts - 1).astype(np.int64)
        cell = index[:, 1] * self.columns + index[:, 0]
        off = np.abs(xy_mm - self.cell_centres_mm[cell])
        inside = (off <= np.asarray(self.cell_mm) / 2 + EDGE_TOLERANCE_MM).all(axis=1)
        return np.where(inside, cell, -1)


@dataclass(frozen=True, slots=True)
class KeepOut:
    """Where no site may lie. `circle_mm` is (x, y, radius); every other shape is its polygon `vertices_mm` (k, 2)."""

    name: str
    vertices_mm: NDArray[np.float64] | None = None
    circle_mm: tuple[float, float, float] | None = None

    def boundary_mm(self) -> NDArray[np.float64]:
        """Vertices to draw, (k, 2); a circle as a 96-gon."""
        if self.circle_mm is None:
            assert self.vertices_mm is not None
            return self.vertices_mm
        x, y, radius = self.circle_mm
        angle = np.linspace(0.0, 2 * np.pi, 96, endpoint=False)
        return np.stack([x + radius * np.cos(angle), y + radius * np.sin(angle)], axis=1)


@dataclass(frozen=True, slots=True)
class Sites:
    """Marks as columns, never one object per mark.

    `sigma_um` (n, 2) is the standard uncertainty of reading the mark once, NaN where the study's noise holds;
    `read_rate` (n,) the chance that it reads; `seconds` (n,) the time of one read, NaN where the machine's holds.
    """

    id: NDArray[np.str_]
    xy_mm: NDArray[np.float64]
    side: NDArray[np.str_]
    kind: NDArray[np.str_]
    sigma_um: NDArray[np.float64]
    read_rate: NDArray[np.float64]
    seconds: NDArray[np.float64]

    def __post_init__(self) -> None:
        for field in fields(self):
            readonly(getattr(self, field.name))

    def __len__(self) -> int:
        return len(self.id)

    @classmethod
    def at(cls, id: NDArray[np.str_], xy_mm: NDArray[np.float64]) -> Self:
        """Plain front-side marks with nothing known of each."""
        n = len(id)
        return cls(np.asarray(id), np.ascontiguousarray(xy_mm, float), np.full(n, "front"), np.full(n, ""),
                   np.full((n, 2), np.nan), np.ones(n), np.full(n, np.nan))

    def take(self, rows: NDArray) -> Self:
        """The given rows (indices or mask), in that order."""
        return type(self)(*(getattr(self, field.name)[rows] for field in fields(self)))


@dataclass(frozen=True, slots=True)
class Layout:
    """A panel: outline and edge exclusion, grids, keep-outs and every mark drawn, candidates or not.

    All coordinates are in the centred panel frame. `origin_mm` is where the layout file's own origin lies in that
    frame: (0, 0), or the lower-left corner; written coordinates are `xy_mm - origin_mm`.
    `outline_mm` (k, 2) is the polygon of the panel, counter-clockwise.
    """

    name: str
    width_mm: float
    height_mm: float
    outline_mm: NDArray[np.float64]
    edge_exclusion_mm: float
    grids: tuple[Grid, ...]
    keep_outs: tuple[KeepOut, ...]
    marks: Sites
    origin_mm: tuple[float, float] = (0.0, 0.0)

    @property
    def half_mm(self) -> tuple[float, float]:
        return self.width_mm / 2, self.height_mm / 2

    def grid(self, name: str) -> Grid:
        return next(grid for grid in self.grids if grid.name == name)

"""The one function that builds the basis: fit, predict, plan and figures all call `design_blocks`."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.model.terms import TERMS
from sampler.panel.layout import Layout

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ModelTerm:
    """A term of the panel (`grid` None), of a grid's cells together (`cell` None), or of one cell."""

    term: str
    grid: str | None = None
    cell: int | None = None
    cell_label: str = ""

    @property
    def name(self) -> str:
        if self.grid is None:
            return self.term
        return f"{self.grid}.{self.term}" if self.cell is None else f"{self.grid}[{self.cell_label}].{self.term}"

    @property
    def unit(self) -> str:
        return TERMS[self.term].unit


@dataclass(frozen=True, slots=True)
class Model:
    """Distortion as an ordered tuple of terms; column j of every design block belongs to `terms[j]`."""

    terms: tuple[ModelTerm, ...]

    def __len__(self) -> int:
        return len(self.terms)

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(term.name for term in self.terms)

    @property
    def units(self) -> tuple[str, ...]:
        return tuple(term.unit for term in self.terms)


@dataclass(frozen=True, slots=True)
class Places:
    """Points with all that the basis needs of them.

    `xy_mm` (n, 2) in the panel frame; `half_mm` of the panel; for each grid: the cell of each point `(n,)`, −1 outside,
    its coordinates from the cell's centre `(n, 2)`, and half the cell's size.
    """

    xy_mm: Array
    half_mm: tuple[float, float]
    cell: dict[str, NDArray[np.int64]]
    local_mm: dict[str, Array]
    cell_half_mm: dict[str, tuple[float, float]]

    def __len__(self) -> int:
        return len(self.xy_mm)


def places(layout: Layout, xy_mm: Array, cell: dict[str, NDArray[np.int64]] | None = None) -> Places:
    """Points (n, 2) of a layout, located in each of its grids; `cell` overrides the located cells of a grid.

    The override is for points on the common edge of two cells, where either side may be meant.
    """
    xy_mm = np.asarray(xy_mm, float).reshape(-1, 2)
    cells, local, half = {}, {}, {}
    for grid in layout.grids:
        index = cell[grid.name] if cell and grid.name in cell else grid.locate(xy_mm)
        cells[grid.name] = index
        local[grid.name] = np.where(index[:, None] >= 0, xy_mm - grid.cell_centres_mm[index], 0.0)
        half[grid.name] = (grid.cell_mm[0] / 2, grid.cell_mm[1] / 2)
    return Places(xy_mm, layout.half_mm, cells, local, half)


def design_blocks(model: Model, at: Places) -> Array:
    """What each point would read per unit of each term, (n, 2, p): `blocks[i] @ theta` is (dx, dy) in µm at point i.

    Outside a grid's cells its terms have no response.

    >>> from sampler.model.basis import Model, ModelTerm, Places
    >>> at = Places(np.array([[100.0, -50.0]]), (200.0, 100.0), {}, {}, {})
    >>> design_blocks(Model((ModelTerm("translation_x"), ModelTerm("scale_x"), ModelTerm("rotation"),
    ...                      ModelTerm("dy_xy"))), at)
    array([[[ 1.  ,  0.1 ,  0.05,  0.  ],
            [ 0.  ,  0.  ,  0.1 , -0.25]]])
    """
    n = len(at)
    blocks = np.zeros((n, 2, len(model)))
    frames: dict[str | None, tuple[Array, Array, Array, Array]] = {}
    for column, item in enumerate(model.terms):
        if item.grid not in frames:
            xy, half = (at.xy_mm, at.half_mm) if item.grid is None else (at.local_mm[item.grid],
                                                                           at.cell_half_mm[item.grid])
            frames[item.grid] = (xy[:, 0], xy[:, 1], xy[:, 0] / half[0], xy[:, 1] / half[1])
        frame = frames[item.grid]
        present: NDArray[np.bool_] | None = None
        if item.grid is not None:
            cell = at.cell[item.grid]
            present = cell >= 0 if item.cell is None else cell == item.cell
        for axis, response in enumerate((TERMS[item.term].dx, TERMS[item.term].dy)):
            if response is None:
                continue
            if present is None:
                blocks[:, axis, column] = response(*frame)
            else:
                blocks[present, axis, column] = response(*(values[present] for values in frame))
    return blocks

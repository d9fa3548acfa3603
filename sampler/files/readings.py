"""Readings of panels, as metrology tools and spreadsheets write them."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from sampler.errors import InputError
from sampler.estimation.readings import Readings
from sampler.files.faults import Faults
from sampler.files.source import shown_path
from sampler.files.table import Column, read_table
from sampler.panel.layout import Layout

COLUMNS = (
    Column("panel"), Column("dx_um", number=True, blank=True), Column("dy_um", number=True, blank=True),
    Column("id", required=False, blank=True), Column("x_mm", number=True, required=False, blank=True),
    Column("y_mm", number=True, required=False, blank=True), Column("lot", required=False, blank=True),
    Column("repeat", required=False, blank=True), Column("side", required=False, blank=True),
    Column("kind", required=False, blank=True),
)


def read_readings(path: str | Path, layout: Layout) -> Readings:
    """The readings of a CSV file: `panel`, `id` or `x_mm` and `y_mm` (from the layout's origin), `dx_um`, `dy_um`, and
    if given `lot`, `repeat`, `side`, `kind`. Blank or nan displacements are lost readings. Raises InputError with every
    fault."""
    faults = Faults(shown_path(path))
    read = read_table(path, COLUMNS, faults)
    faults.close()
    assert read is not None
    columns = read[0].columns
    if ("x_mm" in columns) != ("y_mm" in columns):
        raise InputError(f"{shown_path(path)}: only one of x_mm and y_mm is given; give both, or id")
    xy = np.column_stack([columns["x_mm"], columns["y_mm"]]) + layout.origin_mm if "x_mm" in columns else None
    return Readings.of(layout, columns["panel"], np.column_stack([columns["dx_um"], columns["dy_um"]]), id=columns.get("id"),
                       xy_mm=xy, lot=columns.get("lot"), repeat=columns.get("repeat"), side=columns.get("side"),
                       kind=columns.get("kind"), where=shown_path(path))

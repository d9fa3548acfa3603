"""An invented pilot with its layout and study as files."""

from __future__ import annotations

import numpy as np

LAYOUT = """format = 1
name = "invented organic core"
[panel]
width_mm = 510.0
height_mm = 515.0
edge_exclusion_mm = 8.0
origin = "centre"
[[grid]]
name = "exposure"
columns = 4
rows = 4
cell_mm = [118.0, 119.0]
pitch_mm = [122.0, 123.0]
[[marks]]
file = "marks.csv"
"""
STUDY = """format = 1
title = "Invented study"
layout = "layout.toml"
{assumed}
[[limit]]
region = "panel"
position_um = {position_um}
"""
TYPED = """[model]
panel = ["affine", "trapezoid"]
[noise]
mark_um = [0.25, 0.25]
local_um = [0.3, 0.3]
"""


def write_layout(folder, layout):
    """The panel of `core_layout` with these marks."""
    (folder / "layout.toml").write_text(LAYOUT, encoding="utf-8")
    lines = [f"{name},{x!r},{y!r}" for name, (x, y) in zip(layout.marks.id, layout.marks.xy_mm.tolist(), strict=True)]
    (folder / "marks.csv").write_text("id,x_mm,y_mm\n" + "\n".join(lines) + "\n", encoding="utf-8")


def write_readings(path, readings):
    """One row for each reading, lost ones blank."""
    lines = ["panel,id,lot,dx_um,dy_um"]
    for site, panel, dxy in zip(readings.site, readings.panel, readings.dxy_um.tolist(), strict=True):
        cells = ["" if np.isnan(value) else f"{value:.5f}" for value in dxy]
        lot = readings.lot_names[readings.lot[panel]]
        lines.append(",".join([readings.panel_names[panel], str(readings.sites.id[site]), lot, *cells]))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def write_pilot(folder, pilot, rng, position_um=0.8):
    """layout.toml, marks.csv, pilot.csv; study.toml with model and noise typed, next.toml with those of process/."""
    write_layout(folder, pilot.layout)
    for name, assumed in (("study", TYPED), ("next", 'process = "process/process.toml"')):
        (folder / f"{name}.toml").write_text(STUDY.format(assumed=assumed, position_um=position_um), encoding="utf-8")
    write_readings(folder / "pilot.csv", pilot.readings(rng)[0])

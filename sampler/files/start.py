"""A bare table of marks read as far as it says what it holds, and the layout and study to begin with written down."""

from __future__ import annotations

import csv
import io
import json
from dataclasses import replace
from pathlib import Path

import numpy as np

from sampler.errors import InputError
from sampler.files.faults import Faults
from sampler.files.source import shown_path
from sampler.files.table import Column, first_rows, plain_name, read_table
from sampler.tasks.headings import Columns, guess_columns
from sampler.tasks.start import INVENTED_LOCAL_UM, INVENTED_MARK_UM, WANTED_SITES, Start, StartOptions, start

ROWS_LOOKED_AT = 200
COORDINATE_DIGITS = 9
"""Digits after the point of mm: the noise of changing the unit goes, a femtometre stays."""


def read_start(path: str | Path, options: StartOptions | None = None) -> Start:
    """What a table of marks can be taken for. Raises InputError, naming the option where something is in doubt."""
    options = options or StartOptions()
    faults = Faults(shown_path(path))
    rows = first_rows(path, ROWS_LOOKED_AT, faults)
    faults.close()
    columns = guess_columns(rows, options.x, options.y, options.id)
    for doubt in columns.doubts:
        faults.add(doubt)
    if columns.x is not None and columns.x in (columns.y, columns.name):
        faults.add("one column is meant for two things; name different ones with --x, --y and --id")
    faults.close()
    assert columns.x is not None and columns.y is not None
    header = [plain_name(cell) for cell in rows[0]] if columns.headed else [f"column_{i + 1}" for i in range(len(rows[0]))]
    wanted = [Column(header[columns.x], number=True), Column(header[columns.y], number=True)]
    wanted += [Column(header[at], blank=True) for at in (columns.name, columns.kind) if at is not None]
    read = read_table(path, wanted, faults, None if columns.headed else header)
    faults.close()
    assert read is not None
    table = read[0].columns
    xy = np.stack([table[wanted[0].name], table[wanted[1].name]], axis=1)
    try:
        return start(None if columns.name is None else table[header[columns.name]], xy,
                     None if columns.kind is None else table[header[columns.kind]], columns.unit,
                     replace(options, name=options.name or Path(path).stem), (_columns_said(columns, rows[0]),))
    except InputError as error:
        raise InputError(f"{shown_path(path)}: {fault}" for fault in error.faults) from error


def _columns_said(columns: Columns, first: list[str]) -> str:
    said = []
    for what, at in (("x", columns.x), ("y", columns.y), ("name", columns.name), ("kind", columns.kind)):
        if at is not None:
            said.append(f'{what} from "{first[at].strip()}"' if columns.headed else f"{what} from column {at + 1}")
    return f"columns: {', '.join(said)}" + ("" if columns.headed else "; the table has no headings")


def start_files(begun: Start) -> dict[str, str]:
    """`study.toml`, `layout.toml` and `marks.csv`, ready for `sampler plan`."""
    return {"study.toml": study_toml(begun), "layout.toml": layout_toml(begun), "marks.csv": marks_csv(begun)}


def start_json(begun: Start) -> str:
    """What was found and guessed, as JSON."""
    layout = begun.layout
    return json.dumps({"name": layout.name, "marks": len(layout.marks), "width_mm": layout.width_mm,
                       "height_mm": layout.height_mm, "origin": begun.origin, "grids": [grid.name for grid in layout.grids],
                       "model": list(begun.families), "position_um": begun.position_um, "findings": list(begun.findings)},
                      ensure_ascii=False)


def marks_csv(begun: Start) -> str:
    """The marks in mm in the layout's own frame."""
    layout = begun.layout
    xy = np.round(layout.marks.xy_mm - np.asarray(layout.origin_mm), COORDINATE_DIGITS) + 0.0
    columns = {"id": layout.marks.id.tolist(), "x_mm": xy[:, 0].tolist(), "y_mm": xy[:, 1].tolist()}
    if (layout.marks.kind != "").any():
        columns["kind"] = layout.marks.kind.tolist()
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(zip(*columns.values(), strict=True))
    return out.getvalue()


def layout_toml(begun: Start) -> str:
    """The layout with its marks in `marks.csv` beside it; what was guessed is said in comments."""
    layout = begun.layout
    lines = ["# A layout to begin with. Guessed from the table of marks; look through it once:",
             *(f"#   {_comment(finding)}" for finding in begun.findings), "",
             "format = 1", f"name = {_text(layout.name)}", "", "[panel]", f"width_mm = {layout.width_mm!r}",
             f"height_mm = {layout.height_mm!r}", f'origin = "{begun.origin}"',
             "# edge_exclusion_mm = 5.0        # how far from the edge no mark may be measured"]
    for grid in layout.grids:
        centre = [float(np.round(value - origin, COORDINATE_DIGITS)) + 0.0
                  for value, origin in zip(grid.centre_mm, layout.origin_mm, strict=True)]
        lines += ["", "[[grid]]", f"name = {_text(grid.name)}                # a guess; what makes the pattern",
                  f"columns = {grid.columns}", f"rows = {grid.rows}",
                  f"cell_mm = {list(grid.cell_mm)}          # a guess; the true size of a cell",
                  f"pitch_mm = {list(grid.pitch_mm)}", f"centre_mm = {centre}"]
    lines += ["", "[[marks]]", 'file = "marks.csv"', "", "# [[keep_out]]                    # where nothing may be measured",
              '# name = "clamp"', "# rectangle_mm = [0.0, 0.0, 10.0, 10.0]"]
    return "\n".join(lines) + "\n"


def study_toml(begun: Start) -> str:
    """A study of `layout.toml` that runs at once; every invented value is marked as such."""
    grids = [f"# [model.{grid.name}]                # what all cells of the grid have in common\n"
             '# shared = ["translation", "rotation"]' for grid in begun.layout.grids]
    region = [f'# [[limit]]\n# region = "cells:{grid.name}"\n# position_um = {begun.position_um:g}'
              for grid in begun.layout.grids[:1]]
    return "\n".join([
        "# A study to begin with: it runs as it is. Values marked INVENTED stand for none of your process; replace them.",
        "", "format = 1", f"title = {_text(f'First plan of {begun.layout.name}')}", 'layout = "layout.toml"',
        "coverage_factor = 3.0             # limits hold k·u with this k", "",
        "[model]", f"panel = {json.dumps(list(begun.families))}", *grids, "",
        "[noise]", f"mark_um = [{INVENTED_MARK_UM}, {INVENTED_MARK_UM}]           # INVENTED: reading one mark once, x and y",
        f"local_um = [{INVENTED_LOCAL_UM}, {INVENTED_LOCAL_UM}]            # INVENTED: what no term of the model explains", "",
        "[[limit]]", 'region = "panel"',
        f"position_um = {begun.position_um:g}                # INVENTED: one that about {WANTED_SITES} well placed sites meet",
        "", *region, "# [[limit]]", '# terms = ["rotation"]', "# max = 2.0                       # in the term's unit, on k·u",
        "",
        "[rules]", "# required = []                   # ids of marks that are always measured",
        "# forbidden = []", "# max_sites = 60", "", "[search]", "seconds = 60", "seed = 1"]) + "\n"


def _text(value: str) -> str:
    """A TOML text: JSON's escapes are TOML's, but for DEL."""
    return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")


def _comment(finding: str) -> str:
    return " ".join("".join(letter if letter.isprintable() else " " for letter in finding).split())

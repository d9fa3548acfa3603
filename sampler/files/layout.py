"""Layout files."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from sampler.files.faults import MOST_ROWS, Faults, did_you_mean, shown
from sampler.files.schema import (
    Bounds,
    Key,
    Values,
    exactly_one,
    format_number,
    number,
    numbers,
    one_of,
    points,
    read_keys,
    table,
    tables,
    text,
    whole,
)
from sampler.files.source import beside, read_toml, sha256, shown_path
from sampler.files.table import Column, read_table
from sampler.panel.layout import EDGE_TOLERANCE_MM, Grid, KeepOut, Layout, Sites
from sampler.panel.outline import counter_clockwise, polygon_fault, usable_area
from sampler.tasks.study import Source

Array = NDArray[np.float64]

A_LAYOUT = "a layout file (TOML)"
POSITIVE = Bounds(above=0)
SIDES = ("front", "back")
SHAPES = ("rectangle_mm", "circle_mm", "polygon_mm")
NAME = re.compile(r"[A-Za-z][A-Za-z0-9_-]*")
NOT_A_GRID = ("panel", "potential")
"""Names that `[model]` uses itself."""

SHAPE_KEYS = (
    Key("rectangle_mm", numbers(4, "[x0, y0, x1, y1]")),
    Key("circle_mm", numbers(3, "[x, y, radius]")),
    Key("polygon_mm", points(3)),
)

KEYS = (
    Key("format", format_number, "format = 1"),
    Key("name", text),
    Key("panel", table(
        Key("width_mm", number(POSITIVE), "the panel's width in mm"),
        Key("height_mm", number(POSITIVE), "the panel's height in mm"),
        Key("edge_exclusion_mm", number(Bounds(at_least=0)), default=0.0),
        Key("outline_mm", points(3)),
        Key("origin", one_of("centre", "lower-left"), default="centre"),
    ), "a table [panel]"),
    Key("grid", tables(
        Key("name", text, "a name for the grid"),
        Key("columns", whole(Bounds(at_least=1)), "the number of columns"),
        Key("rows", whole(Bounds(at_least=1)), "the number of rows"),
        Key("cell_mm", numbers(2, "[width, height] of a cell", POSITIVE), "[width, height] of a cell in mm"),
        Key("pitch_mm", numbers(2, "[x, y] steps", POSITIVE)),
        Key("centre_mm", numbers(2, "[x, y] of the grid's centre")),
    ), default=[]),
    Key("marks", tables(
        Key("file", text),
        Key("grid", text),
        Key("prefix", text),
        Key("at_mm", points(1)),
        Key("side", one_of(*SIDES), default="front"),
        Key("kind", text, default=""),
        least=1,
    ), "at least one table [[marks]]"),
    Key("keep_out", tables(
        Key("name", text, "a name for the keep-out"),
        *SHAPE_KEYS,
    ), default=[]),
)

MARK_COLUMNS = (
    Column("id"),
    Column("x_mm", number=True),
    Column("y_mm", number=True),
    Column("side", required=False, blank=True, choices=SIDES),
    Column("kind", required=False, blank=True),
    Column("sigma_x_um", number=True, required=False, blank=True, bounds=POSITIVE),
    Column("sigma_y_um", number=True, required=False, blank=True, bounds=POSITIVE),
    Column("read_rate", number=True, required=False, blank=True, bounds=Bounds(above=0, at_most=1)),
    Column("seconds", number=True, required=False, blank=True, bounds=Bounds(at_least=0)),
)

UM_FACTOR = 20.0
"""Coordinates that span more than this many panels are taken for µm."""
INCH_SHARES = (0.5 / 25.4, 1.05 / 25.4)
"""Marks that span this share of the panel both ways, about its middle or corner, are taken for inches."""
PANEL_MM = (40.0, 5000.0)
"""Panels outside this are taken for inches or µm."""


@dataclass(frozen=True, slots=True)
class LayoutFile:
    """A layout with what it came from. `origin_mm` converts the file's coordinates: panel frame = file + origin_mm."""

    layout: Layout
    source: Source


def read_layout(path: str | Path) -> Layout:
    """The layout of a TOML file with the mark files it names. Raises InputError with every fault of all of them."""
    faults = Faults(shown_path(path))
    read = layout_file(path, faults)
    faults.close()
    assert read is not None
    return read.layout


def layout_file(path: str | Path, faults: Faults) -> LayoutFile | None:
    """The layout and its source, or None with every fault added.

    The source's SHA-256 is of the layout file's bytes followed by the bytes of its mark files in the order named
    (`cat layout.toml marks.csv | sha256sum`), so that a changed mark file changes it.
    """
    faults = faults.of(shown_path(path))
    before = len(faults.messages)
    toml = read_toml(path, A_LAYOUT, faults)
    if toml is None:
        return None
    values = read_keys(toml[0], KEYS, "", faults)
    origin = _origin(values["panel"], faults)
    grids = _grids(values["grid"] or [], origin, faults)
    keep_outs = _keep_outs(values["keep_out"] or [], origin, faults)
    groups, files = [], []
    _each_file_once(values["marks"] or [], faults)
    for group in values["marks"] or []:
        marks, data = _marks(group, path, grids, origin, values["panel"], faults)
        groups += [] if marks is None else [marks]
        files += [] if data is None else [data]
    marks = _together(groups)
    _unique(marks, faults)
    if len(faults.messages) > before:
        return None
    panel = values["panel"]
    layout = Layout(values["name"] or Path(path).stem, panel["width_mm"], panel["height_mm"], _outline(panel, origin),
                    panel["edge_exclusion_mm"], tuple(grids), tuple(keep_outs), marks, origin)
    if usable_area(layout).is_empty:
        faults.add(f"[panel] edge_exclusion_mm is {layout.edge_exclusion_mm:g}, which leaves nothing of the panel; make "
                   "it smaller")
        return None
    return LayoutFile(layout, Source(shown_path(path), sha256(toml[1], *files)))


def _origin(panel: Values | None, faults: Faults) -> tuple[float, float]:
    """Where the file's origin lies in the centred frame; (0, 0) while the panel's size is faulty."""
    if panel is None or panel["width_mm"] is None or panel["height_mm"] is None:
        return 0.0, 0.0
    size = panel["width_mm"], panel["height_mm"]
    unit = "inches" if max(size) < PANEL_MM[0] else "µm" if max(size) > PANEL_MM[1] else None
    if unit:
        faults.warn(f"[panel] width_mm and height_mm are {size[0]:g} and {size[1]:g}, which look like {unit}; give mm")
    origin = (-size[0] / 2, -size[1] / 2) if panel["origin"] == "lower-left" else (0.0, 0.0)
    if panel["outline_mm"] is not None:
        fault = polygon_fault(panel["outline_mm"])
        if fault:
            faults.add(f"[panel] outline_mm {fault}; list the corners in order along the outline")
        elif (np.abs(panel["outline_mm"] + origin) > np.array(size) / 2 + EDGE_TOLERANCE_MM).any():
            low, high = np.array([[-0.5], [0.5]]) * size - origin
            faults.add(f"[panel] outline_mm reaches outside the panel, which is x from {low[0]:g} to {high[0]:g} and y from "
                       f"{low[1]:g} to {high[1]:g} mm; mend the outline, the size or the origin")
    return origin


def _outline(panel: Values, origin: tuple[float, float]) -> Array:
    if panel["outline_mm"] is not None:
        return counter_clockwise(panel["outline_mm"] + origin)
    half = np.array([panel["width_mm"], panel["height_mm"]]) / 2
    return half * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])


def _grids(listed: list[Values], origin: tuple[float, float], faults: Faults) -> list[Grid]:
    grids: list[Grid] = []
    for values in listed:
        name, place = values["name"], values["place"]
        if name is not None and (NAME.fullmatch(name) is None or name in NOT_A_GRID):
            faults.add(f"{place} name is {shown(name)}; give letters, digits, - and _ beginning with a letter, and not "
                       + " or ".join(f'"{other}"' for other in NOT_A_GRID))
        if name in [grid.name for grid in grids]:
            faults.add(f'{place} name "{name}" is already taken; name each grid once')
        if any(values[key] is None for key in ("name", "columns", "rows", "cell_mm")):
            continue
        cell = values["cell_mm"]
        pitch = values["pitch_mm"] or cell
        if values["pitch_mm"] and min(pitch[0] - cell[0], pitch[1] - cell[1]) < -EDGE_TOLERANCE_MM:
            faults.add(f"{place} pitch_mm {shown(list(pitch))} is smaller than cell_mm {shown(list(cell))}, so that cells "
                       "overlap; give a pitch of at least the cell")
        centre = values["centre_mm"]
        grids.append(Grid(name, values["columns"], values["rows"], cell, pitch, (0.0, 0.0) if centre is None else
                          (centre[0] + origin[0], centre[1] + origin[1])))
    return grids


def _keep_outs(listed: list[Values], origin: tuple[float, float], faults: Faults) -> list[KeepOut]:
    return [drawn for values in listed if (drawn := drawn_shape(values, "keep-out", origin, faults)) is not None]


def drawn_shape(values: Values, what: str, origin: tuple[float, float], faults: Faults) -> KeepOut | None:
    """The named rectangle, circle or polygon of a table of `SHAPE_KEYS`, in the centred frame; None with a fault added."""
    shape = exactly_one(values, SHAPES, faults)
    name = values["name"]
    if shape is None or name is None:
        return None
    place = f'{what} "{name}" {shape}'
    if shape == "circle_mm":
        x, y, radius = values[shape]
        if radius <= 0:
            faults.add(f"{place} has the radius {radius:g}; give a radius above 0")
            return None
        return KeepOut(name, None, (x + origin[0], y + origin[1], radius))
    corners = values[shape]
    if shape == "rectangle_mm":
        x0, y0, x1, y1 = corners
        if x1 <= x0 or y1 <= y0:
            faults.add(f"{place} is {shown(list(corners))}, which has no positive size; give [x0, y0, x1, y1] with "
                       "x0 < x1 and y0 < y1")
            return None
        corners = np.array([[x0, y0], [x1, y0], [x1, y1], [x0, y1]])
    fault = polygon_fault(corners)
    if fault:
        faults.add(f"{place} {fault}; list the corners in order along its edge")
        return None
    return KeepOut(name, counter_clockwise(corners + np.array(origin)))


def _each_file_once(groups: list[Values], faults: Faults) -> None:
    first: dict[str, Values] = {}
    for group in groups:
        name = group["file"]
        if name is not None and first.setdefault(name, group) is not group:
            faults.add(f'{group["place"]} file "{name}" is already read by {first[name]["place"]}; name each file once')
            group["file"] = None


def _marks(group: Values, path: str | Path, grids: list[Grid], origin: tuple[float, float], panel: Values | None,
           faults: Faults) -> tuple[Sites | None, bytes | None]:
    """The marks of one [[marks]] table, and the bytes of the file they came from."""
    kind = exactly_one(group, ("file", "grid"), faults)
    if kind == "file":
        unused = [key for key in ("prefix", "at_mm") if key in group["present"]]
        if unused:
            faults.add(f"{group['place']} has file and {' and '.join(unused)}; {unused[0]} goes with grid")
        return _marks_from_file(beside(path, group["file"]), group, origin, panel, faults)
    if kind is None:
        return None, None
    missing = [key for key in ("prefix", "at_mm") if key not in group["present"]]
    for key in missing:
        faults.add(f"{group['place']} {key} is missing; give "
                   + ('a text that its ids begin with, such as "E"' if key == "prefix" else "a list of points [x, y]"))
    grid = next((grid for grid in grids if grid.name == group["grid"]), None)
    if grid is None:
        names = [grid.name for grid in grids]
        faults.add(f'{group["place"]} grid "{group["grid"]}" is not a grid of this layout; '
                   + did_you_mean(group["grid"], names, "the grids are " + ", ".join(names) if names else "add a [[grid]]"))
    if grid is None or group["prefix"] is None or group["at_mm"] is None:
        return None, None
    labels = np.array([grid.cell_label(cell) for cell in range(grid.cells)])
    at = group["at_mm"]
    numbers = np.array([f"-{k}" for k in range(1, len(at) + 1)])
    ids = np.char.add(np.char.add(f"{group['prefix']}-", labels)[:, None], numbers[None, :]).ravel()
    return _sites(ids, (grid.cell_centres_mm[:, None] + at).reshape(-1, 2), {}, group), None


def _marks_from_file(path: Path, group: Values, origin: tuple[float, float], panel: Values | None,
                     faults: Faults) -> tuple[Sites | None, bytes | None]:
    read = read_table(path, MARK_COLUMNS, faults)
    if read is None:
        return None, None
    columns = read[0].columns
    xy = np.stack([columns["x_mm"], columns["y_mm"]], axis=1)
    if panel is not None and panel["width_mm"] is not None and panel["height_mm"] is not None:
        _doubt_units(xy, (panel["width_mm"], panel["height_mm"]), panel["origin"], faults.of(shown_path(path)))
    return _sites(columns["id"], xy + np.array(origin), columns, group), read[1]


def _doubt_units(xy: Array, size: tuple[float, float], origin: str, faults: Faults) -> None:
    """Warns when coordinates fit the panel better in another unit, or from another origin."""
    reach = np.abs(xy).max(axis=0) / size
    span = np.ptp(xy, axis=0) / size
    if reach.max() > UM_FACTOR:
        faults.warn(f"x_mm and y_mm reach {np.abs(xy).max():g}, on a panel of {size[0]:g} × {size[1]:g} mm; they look like "
                    "µm: give mm")
    elif len(xy) > 2 and (span > INCH_SHARES[0]).all() and (span < INCH_SHARES[1]).all():
        faults.warn(f"x_mm and y_mm span {np.ptp(xy[:, 0]):g} and {np.ptp(xy[:, 1]):g} on a panel of {size[0]:g} × "
                    f"{size[1]:g} mm; they look like inches: give mm")
    elif origin == "centre" and (xy >= 0).all() and (xy <= size).all() and (reach > 0.6).all():
        faults.warn("no x_mm or y_mm is negative and they reach over half the panel's size; if they are measured from the "
                    'lower left corner, set origin = "lower-left" in the layout')


def _sites(ids: NDArray[np.str_], xy_mm: Array, columns: dict[str, NDArray[Any]], group: Values) -> Sites:
    n = len(ids)
    unknown = np.full(n, np.nan)
    side, kind = columns.get("side"), columns.get("kind")
    rate = columns.get("read_rate", np.ones(n))
    return Sites(
        ids, np.ascontiguousarray(xy_mm, float),
        np.full(n, group["side"]) if side is None else np.where(side == "", group["side"], side),
        np.full(n, group["kind"]) if kind is None else np.where(kind == "", group["kind"], kind),
        np.stack([columns.get("sigma_x_um", unknown), columns.get("sigma_y_um", unknown)], axis=1),
        np.where(np.isnan(rate), 1.0, rate), np.array(columns.get("seconds", unknown)))


def _together(groups: Sequence[Sites]) -> Sites:
    if len(groups) == 1:
        return groups[0]
    names = ("id", "xy_mm", "side", "kind", "sigma_um", "read_rate", "seconds")
    if not groups:
        return Sites.at(np.zeros(0, "U1"), np.zeros((0, 2)))
    return Sites(*(np.concatenate([getattr(group, name) for group in groups]) for name in names))


def _unique(marks: Sites, faults: Faults) -> None:
    """Adds the ids that occur more than once, and the marks of one side at the same place."""
    ids = pa.array(marks.id).dictionary_encode()
    if len(ids.dictionary) < len(marks):
        count = np.bincount(ids.indices.to_numpy())
        twice = np.flatnonzero(count > 1)
        for i in twice[:MOST_ROWS]:
            faults.add(f'mark id "{ids.dictionary[int(i)].as_py()}" occurs {count[i]} times; give each mark its own id')
        if len(twice) > MOST_ROWS:
            faults.add(f"and {len(twice) - MOST_ROWS:,} more ids occur more than once")
    place = np.rint(marks.xy_mm / EDGE_TOLERANCE_MM)
    order = np.lexsort((marks.side == "back", place[:, 1], place[:, 0]))
    same = (place[order[1:]] == place[order[:-1]]).all(axis=1) & (marks.side[order[1:]] == marks.side[order[:-1]])
    pairs = np.flatnonzero(same)
    for i in pairs[:MOST_ROWS]:
        first, second = sorted((order[i], order[i + 1]))
        faults.add(f'marks "{marks.id[first]}" and "{marks.id[second]}" lie at the same place; keep one of them')
    if len(pairs) > MOST_ROWS:
        faults.add(f"and {len(pairs) - MOST_ROWS:,} more marks lie at the place of another")

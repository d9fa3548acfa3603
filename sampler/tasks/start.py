"""A first layout and study from a bare table of marks: unit, panel, origin, grids and values to begin with.

Everything guessed is said: `Start.findings` is what a person must look through once.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.model.terms import FAMILIES
from sampler.panel.layout import EDGE_TOLERANCE_MM, Grid, Layout, Sites
from sampler.tasks.budget import rounded
from sampler.tasks.headings import UNITS_MM
from sampler.tasks.repetition import Repetition, repetitions, short
from sampler.uncertainty.information import Knowledge, information, whiten

Array = NDArray[np.float64]

USUAL_MM = ((305.0, 457.0), (457.0, 610.0), (510.0, 515.0), (533.0, 610.0), (600.0, 600.0))
"""Usual panels (common practice, no source), each also turned by 90°."""
SURE_MM = (200.0, 800.0)
"""The longer side over all marks when the unit is right, on nearly every panel; one unit in it and none other
in `POSSIBLE_MM` is taken without asking."""
POSSIBLE_MM = (50.0, 1500.0)
GUESSED_UNITS = ("mm", "um", "inch", "m")
MOST_MARGIN = 0.15
"""A usual panel is taken when the outermost marks are within this share of its side from its edge."""
CENTRED = 0.02
"""Marks whose extent is centred on zero to this share of it are given from the panel's centre."""
INVENTED_MARK_UM = 0.25
INVENTED_LOCAL_UM = 0.5
WANTED_SITES = 20
"""The invented position limit is one that about so many well placed sites meet."""
MODELS = (("affine", "trapezoid"), ("affine",), ("similarity",))


@dataclass(frozen=True, slots=True)
class StartOptions:
    """What the engineer says instead of having it guessed. `unit` is a key of `UNITS_MM`, `origin` "centre" or "lower-left";
    `x`, `y` and `id` name columns by heading or by number from 1."""

    unit: str = ""
    origin: str = ""
    panel_mm: tuple[float, float] | None = None
    x: str | None = None
    y: str | None = None
    id: str | None = None
    name: str = ""


@dataclass(frozen=True, slots=True)
class Start:
    """A layout to begin with, the families of a model that its marks determine, and a position limit that they can meet.

    `origin` is what the layout file says, "centre" or "lower-left"; `findings` are sentences, the guesses first.
    """

    layout: Layout
    origin: str
    repeats: tuple[Repetition, ...]
    families: tuple[str, ...]
    position_um: float
    findings: tuple[str, ...]


def start(id: NDArray[np.str_] | None, xy: Array, kind: NDArray[np.str_] | None = None, unit: str = "",
          options: StartOptions | None = None, said: tuple[str, ...] = ()) -> Start:
    """Guesses what a table of marks leaves open.

    `xy` (n, 2) are the numbers as they stand in the table, `unit` what its headings say; `id` (n,) None when no column names
    the marks; `said`: findings made before. Raises InputError when the unit or the origin is in doubt, naming the option.
    """
    options = options or StartOptions()
    findings = list(said)
    scale = UNITS_MM[_unit(xy, options.unit or unit, bool(options.unit), findings)]
    xy_mm = xy * scale
    ids = _ids(id, len(xy), findings)
    rows = _distinct(xy_mm, ids, findings)
    xy_mm, ids = xy_mm[rows], ids[rows]
    origin, shift, size = _frame(xy_mm, options, findings)
    centred = xy_mm - shift
    if origin == "lower-left":
        centred = centred - np.asarray(size) / 2
    marks = replace(Sites.at(ids, centred), kind=kind[rows].astype(str)) if kind is not None else Sites.at(ids, centred)
    half = np.asarray(size) / 2
    outline = half * np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]])
    grids, repeats = _grids(centred, size, findings)
    layout = Layout(options.name or "new panel", *size, outline, 0.0, grids, (), marks,
                    (-half[0], -half[1]) if origin == "lower-left" else (0.0, 0.0))
    families, position = _question(layout, findings)
    return Start(layout, origin, repeats, families, position, tuple(findings))


def _unit(xy: Array, named: str, by_option: bool, findings: list[str]) -> str:
    """The unit of the numbers: as named, else the only one that makes a panel of them."""
    width, height = (float(side) for side in np.ptp(xy, axis=0))
    longer = max(width, height)
    if not longer > 0:
        raise InputError(f"all {len(xy):,} marks lie at one place, {xy[0, 0]:.6g}, {xy[0, 1]:.6g}; give the columns of the "
                         "coordinates with --x and --y")
    if named:
        if not by_option and not POSSIBLE_MM[0] <= longer * UNITS_MM[named] <= POSSIBLE_MM[1]:
            raise InputError(f"the headings say {named}, but then the marks cover {_size(width, height, named)}; "
                             "say the true unit with --unit " + " or ".join(UNITS_MM))
        findings.append(f"unit: {named}, as {'asked' if by_option else 'the headings say'}")
        return named
    possible = [unit for unit in GUESSED_UNITS if POSSIBLE_MM[0] <= longer * UNITS_MM[unit] <= POSSIBLE_MM[1]]
    if len(possible) == 1 and SURE_MM[0] <= longer * UNITS_MM[possible[0]] <= SURE_MM[1]:
        findings.append(f"unit: {possible[0]}, the only one of {', '.join(GUESSED_UNITS)} that makes a panel of the marks "
                        f"({_size(width, height, possible[0])})")
        return possible[0]
    meanings = "; ".join(f"--unit {unit}: {_size(width, height, unit)}" for unit in possible or GUESSED_UNITS)
    raise InputError(f"the unit of the coordinates is in doubt: they cover {width:.6g} × {height:.6g}; say it with {meanings}")


def _size(width: float, height: float, unit: str) -> str:
    return f"{width * UNITS_MM[unit]:.6g} × {height * UNITS_MM[unit]:.6g} mm"


def _ids(id: NDArray[np.str_] | None, count: int, findings: list[str]) -> NDArray[np.str_]:
    """The names as given when there is one for each mark, otherwise M1, M2, … with leading zeros."""
    if id is not None:
        names = np.char.strip(id.astype(str))
        blank, repeated = int((names == "").sum()), count - len(np.unique(names))
        if not blank and not repeated:
            return names
        why = " and ".join(text for number, text in ((blank, f"{blank:,} blank"), (repeated, f"{repeated:,} repeated")) if number)
        findings.append(f"names: M1, M2, … in the order of the table, because its own hold {why}")
    else:
        findings.append("names: M1, M2, … in the order of the table, because no column names the marks")
    digits = len(str(count))
    return np.char.add("M", np.char.zfill(np.arange(1, count + 1).astype(str), digits))


def _distinct(xy_mm: Array, ids: NDArray[np.str_], findings: list[str]) -> NDArray[np.int64]:
    """The first mark at each place, in the order of the table."""
    _, first = np.unique(np.rint(xy_mm / EDGE_TOLERANCE_MM), axis=0, return_index=True)
    rows = np.sort(first)
    if len(rows) < len(xy_mm):
        dropped = np.setdiff1d(np.arange(len(xy_mm)), rows)
        names = ", ".join(str(ids[row]) for row in dropped[:3]) + (", …" if len(dropped) > 3 else "")
        findings.append(f"left out: {len(dropped):,} marks at a place that an earlier mark has ({names})")
    return rows


def _frame(xy_mm: Array, options: StartOptions, findings: list[str]) -> tuple[str, Array, tuple[float, float]]:
    """The origin, what to subtract from all coordinates first, and the panel's size."""
    low, high = xy_mm.min(axis=0), xy_mm.max(axis=0)
    span = high - low
    off_centre = np.abs(low + high) / 2
    centred = bool((off_centre <= CENTRED * np.maximum(span, span.max())).all())
    origin = options.origin or ("centre" if centred else "lower-left" if (low >= -EDGE_TOLERANCE_MM).all() else "")
    shift = np.zeros(2)
    # Marks are as far from one edge as from the other, unless the origin says otherwise.
    need = 2 * np.maximum(np.abs(low), np.abs(high)) if origin == "centre" else high + np.maximum(low, 0.0)
    if not origin or (not options.origin and origin == "lower-left" and (low > span * 0.5).any()):
        origin, need = "centre", span
        shift = np.array([short(float(middle), 0.05) for middle in (low + high) / 2])
        findings.append(f"origin: ({shift[0]:g}, {shift[1]:g}) mm of the table, the middle of the marks, is taken as the panel's "
                        "centre, because the table's own zero is neither its centre nor its lower left corner")
        need = 2 * np.maximum(np.abs(low - shift), np.abs(high - shift))
    else:
        findings.append(f"origin: {origin}, " + ("as asked" if options.origin else
                        "because the marks lie evenly about zero" if origin == "centre" else
                        "because the marks lie above and to the right of zero"))
    if options.panel_mm is not None:
        width, height = options.panel_mm
        half = np.array([width, height]) / 2
        off = np.abs(xy_mm - (shift if origin == "centre" else half)) - half
        outside = int((off > EDGE_TOLERANCE_MM).any(axis=1).sum())
        if outside == len(xy_mm):
            raise InputError(f"no mark lies on a panel of {width:g} × {height:g} mm with its origin at {origin}; mend --panel, "
                             "--origin or --unit")
        findings.append(f"panel: {width:g} × {height:g} mm, as asked"
                        + (f"; {outside:,} marks lie outside it" if outside else ""))
        return origin, shift, options.panel_mm
    usual = _usual(need, high - shift if origin == "lower-left" else need)
    if usual is not None:
        findings.append(f"panel: {usual[0]:g} × {usual[1]:g} mm, the nearest usual one that holds the marks")
        return origin, shift, usual
    size = (math.ceil(need[0] / 5 + 2) * 5.0, math.ceil(need[1] / 5 + 2) * 5.0)
    findings.append(f"panel: {size[0]:g} × {size[1]:g} mm, the marks ({need[0]:.6g} × {need[1]:.6g} mm) and a margin rounded up, "
                    "because no usual panel is near")
    return origin, shift, size


def _usual(need_mm: Array, least_mm: Array) -> tuple[float, float] | None:
    """The usual panel with the least to spare on both sides; None when none is near.

    `need_mm` is what the marks cover with equal margins, `least_mm` what the panel must reach in any case.
    """
    sizes = np.array(sorted({size for usual in USUAL_MM for size in (usual, usual[::-1])}))
    spare = sizes - need_mm
    fits = (sizes >= least_mm - EDGE_TOLERANCE_MM).all(axis=1) & (np.abs(spare) <= 2 * MOST_MARGIN * sizes).all(axis=1)
    if not fits.any():
        return None
    # Of a panel and the same turned, the one with more even margins.
    cost = np.where(fits, np.abs(spare).sum(axis=1) + 0.01 * np.abs(spare[:, 0] - spare[:, 1]), np.inf)
    return float(sizes[cost.argmin(), 0]), float(sizes[cost.argmin(), 1])


def _grids(xy_mm: Array, size: tuple[float, float], findings: list[str]) -> tuple[tuple[Grid, ...], tuple[Repetition, ...]]:
    """The grids that the marks repeat in, with cells that abut as far as the panel reaches."""
    found, lattice = repetitions(xy_mm)
    grids = []
    for number, one in enumerate(found, 1):
        grid = one.grid
        room = [size[axis] - 2 * abs(grid.centre_mm[axis]) - (count - 1) * grid.pitch_mm[axis]
                for axis, count in enumerate((grid.columns, grid.rows))]
        need = 2 * np.abs(one.pattern_mm).max(axis=0) + 2 * EDGE_TOLERANCE_MM
        cell = tuple(max(min(grid.pitch_mm[axis], room[axis]), math.ceil(need[axis] * 1e3) / 1e3) for axis in (0, 1))
        grids.append(replace(grid, name=f"grid{number}" if len(found) > 1 else "exposure", cell_mm=(cell[0], cell[1])))
        missing = f", {one.missing:,} marks missing" if one.missing else ""
        findings.append(f"grid {grids[-1].name}: {grid.columns} columns × {grid.rows} rows at {grid.pitch_mm[0]:g} × "
                        f"{grid.pitch_mm[1]:g} mm, {len(one.pattern_mm):,} marks in each cell{missing}; the name and cell_mm = "
                        f"[{cell[0]:g}, {cell[1]:g}] are guesses")
    if not found:
        findings.append("grid: none" + ("; the marks do not repeat" if lattice is None else
                        f"; the marks stand evenly, {lattice.columns} × {lattice.rows} at {lattice.pitch_mm[0]:g} × "
                        f"{lattice.pitch_mm[1]:g} mm, which shows no cells"))
    return tuple(grids), tuple(replace(one, grid=grid) for one, grid in zip(found, grids, strict=True))


def _question(layout: Layout, findings: list[str]) -> tuple[tuple[str, ...], float]:
    """The largest model that the marks determine, and a position limit over the panel that about `WANTED_SITES` meet.

    These families know most from marks in the corners (the D-optimal support of a bilinear model on a square), so the limit is
    what the marks nearest to the four corners reach; with it the marks that there are can always meet it.
    """
    inside = (np.abs(layout.marks.xy_mm) <= np.asarray(layout.half_mm) + EDGE_TOLERANCE_MM).all(axis=1)
    xy = layout.marks.xy_mm[inside]
    distance = np.abs(xy[:, None] - layout.outline_mm).max(axis=2)
    nearest = np.unique(np.argsort(distance, axis=0, kind="stable")[:WANTED_SITES // 4])
    for families in MODELS:
        model = Model(tuple(ModelTerm(term) for term in dict.fromkeys(name for one in families for name in FAMILIES[one])))
        for chosen in (xy[nearest], xy):
            worst = _worst_position(layout, model, chosen)
            if not math.isfinite(worst):
                continue
            if families != MODELS[0]:
                findings.append(f"model: {' and '.join(families)}, because these marks determine no larger one")
            return families, rounded(worst, 2, up=True)
    raise InputError(f"{len(layout.marks)} marks in these places do not determine even translation, rotation and magnification; "
                     "give at least two marks apart from each other")


def _worst_position(layout: Layout, model: Model, xy_mm: Array) -> float:
    """The worst 3·u in µm of dx and dy over the panel, which is in one of its corners, with the invented noise."""
    sigma = math.hypot(INVENTED_MARK_UM, INVENTED_LOCAL_UM)
    blocks = whiten(design_blocks(model, places(layout, xy_mm)), np.full((len(xy_mm), 2), sigma))
    corners = design_blocks(model, places(layout, layout.outline_mm)).reshape(-1, len(model))
    return 3 * math.sqrt(Knowledge.of(information(blocks)).variance(corners).max())

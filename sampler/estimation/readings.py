"""What was measured: displacements of marks on panels, checked against the layout and grouped by what each panel read.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from sampler.errors import InputError
from sampler.panel.layout import Layout, Sites, readonly

Array = NDArray[np.float64]
Codes = NDArray[np.int64]

MATCH_MM = 0.01
"""A reading this near to a drawn mark is of that mark: far above the rounding of files, far below any distance of
marks."""
MOVED_MM = 0.1
"""Coordinates given beside an id that lie further than this from the drawn mark are doubted in a warning."""
NAMED = 5
"""Names listed in a message before the rest are only counted."""


@dataclass(frozen=True, slots=True)
class Readings:
    """Readings as columns, one row each: row i is of mark `sites[site[i]]` on panel `panel_names[panel[i]]`.

    `dxy_um` (n, 2) is NaN where a reading was lost. Panels stand in order of their first row, which is taken as their
    order in time; `lot` (panels,) points into `lot_names`, one unnamed lot when no lot was given. `repeat` (n,) points
    into `repeat_names`; rows of one panel and mark are repeats of each other with or without it. `sites` are the
    distinct marks that have a row. `warnings`: what was left out or looks doubtful, one sentence each.
    """

    sites: Sites
    site: Codes
    panel: Codes
    dxy_um: Array
    repeat: Codes
    panel_names: tuple[str, ...]
    lot: Codes
    lot_names: tuple[str, ...]
    repeat_names: tuple[str, ...]
    warnings: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        for array in (self.site, self.panel, self.dxy_um, self.repeat, self.lot):
            readonly(array)

    def __len__(self) -> int:
        return len(self.site)

    @property
    def panels(self) -> int:
        return len(self.panel_names)

    @property
    def lost(self) -> NDArray[np.bool_]:
        """Rows of which either axis was not read, (n,)."""
        return np.asarray(np.isnan(self.dxy_um).any(axis=1))

    @classmethod
    def of(cls, layout: Layout, panel: Sequence[Any] | NDArray, dxy_um: Array, *, id: Sequence[Any] | NDArray | None = None,
           xy_mm: Array | None = None, lot: Sequence[Any] | NDArray | None = None,
           repeat: Sequence[Any] | NDArray | None = None, side: Sequence[Any] | NDArray | None = None,
           kind: Sequence[Any] | NDArray | None = None, where: str = "readings") -> Self:
        """Readings from columns of n rows; marks by `id`, or by `xy_mm` (n, 2) in the centred panel frame.

        Rows of ids that the layout does not have, or of places off the panel, are left out and named in `warnings`. A
        place where no mark is drawn is used as it is. Raises InputError, all faults together, when nothing can be made
        of them.
        """
        n = len(panel)
        dxy = np.array(dxy_um, float).reshape(-1, 2)
        columns = {"dx_um and dy_um": dxy, "id": id, "x_mm and y_mm": xy_mm, "lot": lot, "repeat": repeat, "side": side,
                   "kind": kind}
        faults = [f"{where}: {name} has {len(column)} rows, panel {n}; give one value for each row"
                  for name, column in columns.items() if column is not None and len(column) != n]
        if id is None and xy_mm is None:
            faults.append(f"{where}: no marks are named; give the column id, or x_mm and y_mm")
        if n == 0:
            faults.append(f"{where}: there are no rows; give one row for each reading")
        if np.isinf(dxy).any():
            faults.append(f"{where}: dx_um or dy_um is infinite in {int(np.isinf(dxy).any(axis=1).sum())} rows; give finite "
                          "numbers, or leave the cell of a lost reading blank")
        if faults:
            raise InputError(faults)
        warnings: list[str] = []
        sites, site = (_by_id(layout, id, xy_mm, where, warnings) if id is not None
                       else _by_place(layout, np.asarray(xy_mm, float).reshape(-1, 2), side, kind, where, warnings))
        keep = site >= 0
        if not keep.any():
            raise InputError([*warnings, f"{where}: no reading is of a mark of the layout {layout.name!r}; give this panel's "
                              "readings, or its layout"])
        panel_code, panel_names = _coded(panel)
        lot_code, lot_names = _coded(np.zeros(n, int).astype(str) if lot is None else lot)
        if lot is None:
            lot_names = ("",)
        first = np.full(len(panel_names), -1)
        first[panel_code[::-1]] = lot_code[::-1]
        torn = np.unique(panel_code[lot_code != first[panel_code]])
        if len(torn):
            raise InputError(f"{where}: in more than one lot: panel {_named([panel_names[i] for i in torn])}; give panels of "
                             "different lots different names")
        repeat_code, repeat_names = (np.zeros(n, np.int64), ("",)) if repeat is None else _coded(repeat)
        used, place = np.unique(site[keep], return_inverse=True)
        has = np.unique(panel_code[keep])
        renumber = np.full(len(panel_names), -1)
        renumber[has] = np.arange(len(has))
        return cls(sites.take(used), place.astype(np.int64), renumber[panel_code[keep]], dxy[keep], repeat_code[keep],
                   tuple(panel_names[i] for i in has), first[has], lot_names, repeat_names, tuple(warnings))

    def averaged(self) -> Averages:
        """The mean of the repeats of each panel and mark."""
        order = np.lexsort((self.site, self.panel))
        panel, site, y = self.panel[order], self.site[order], self.dxy_um[order]
        new = np.r_[True, (np.diff(panel) != 0) | (np.diff(site) != 0)]
        start = np.flatnonzero(new)
        read = ~np.isnan(y)
        count = np.add.reduceat(read.astype(np.int64), start, axis=0)
        total = np.add.reduceat(np.where(read, y, 0.0), start, axis=0)
        mean = np.divide(total, count, out=np.full(total.shape, np.nan), where=count > 0)
        off = np.where(read, y - mean[np.cumsum(new) - 1], 0.0)
        return Averages(panel[start], site[start], mean, count, np.add.reduceat(off**2, start, axis=0), self.panels)


@dataclass(frozen=True, slots=True)
class Averages:
    """One row for each panel and mark, by panel: the mean of its repeats `dxy_um` (m, 2), NaN where none was read,
    their number `count` (m, 2), and the sum of their squared distances from the mean, `within_um2` (m, 2)."""

    panel: Codes
    site: Codes
    dxy_um: Array
    count: Codes
    within_um2: Array
    panels: int

    def __len__(self) -> int:
        return len(self.panel)

    def without(self, flagged: NDArray[np.bool_]) -> Averages:
        """The same with flagged (m, 2) means taken as not read."""
        return Averages(self.panel, self.site, np.where(flagged, np.nan, self.dxy_um), np.where(flagged, 0, self.count),
                        np.where(flagged, 0.0, self.within_um2), self.panels)

    def patterns(self) -> list[Pattern]:
        """Panels grouped by the marks that they read and how often, in order of their first panel; a panel that read
        nothing is in none."""
        bounds = np.searchsorted(self.panel, np.arange(self.panels + 1))
        groups: dict[bytes, list[tuple[int, NDArray[np.int64]]]] = {}
        for panel in range(self.panels):
            rows = np.arange(bounds[panel], bounds[panel + 1])
            rows = rows[self.count[rows].any(axis=1)]
            if len(rows):
                key = self.site[rows].tobytes() + self.count[rows].tobytes()
                groups.setdefault(key, []).append((panel, rows))
        found = []
        for members in groups.values():
            rows = np.stack([rows for _, rows in members])
            found.append(Pattern(np.array([panel for panel, _ in members]), self.site[rows[0]], self.count[rows[0]],
                                 self.dxy_um[rows], rows))
        return found


@dataclass(frozen=True, slots=True)
class Pattern:
    """Panels (g,) that read the same marks `site` (k,) equally often `count` (k, 2): `dxy_um` (g, k, 2), rows of the
    averages `rows` (g, k). Vectors over its readings run over `seen`, mark by mark, dx before dy."""

    panels: Codes
    site: Codes
    count: Codes
    dxy_um: Array
    rows: NDArray[np.int64]

    @property
    def seen(self) -> NDArray[np.bool_]:
        """Which axes were read, (2 k,)."""
        return self.count.ravel() > 0

    @property
    def axis(self) -> NDArray[np.int64]:
        """0 for dx, 1 for dy of each reading, (n,)."""
        return np.tile([0, 1], len(self.site))[self.seen]

    @property
    def mark(self) -> NDArray[np.int64]:
        """The position in `site` of each reading, (n,)."""
        return np.repeat(np.arange(len(self.site)), 2)[self.seen]

    @property
    def y(self) -> Array:
        """The readings, (g, n)."""
        return self.dxy_um.reshape(len(self.panels), -1)[:, self.seen]

    def of(self, per_site: Array) -> Array:
        """The rows (n, …) that belong to the readings, of an array (sites, 2, …)."""
        return per_site[self.site].reshape(2 * len(self.site), *per_site.shape[2:])[self.seen]


def _named(names: Sequence[str]) -> str:
    listed = ", ".join(f'"{name}"' for name in names[:NAMED])
    return listed if len(names) <= NAMED else f"{listed} and {len(names) - NAMED:,} more"


def _coded(values: Sequence[Any] | NDArray) -> tuple[Codes, tuple[str, ...]]:
    """Codes (n,) and names in order of first appearance."""
    codes: dict[Any, int] = {}
    listed = values.tolist() if isinstance(values, np.ndarray) else values
    code = np.fromiter((codes.setdefault(value, len(codes)) for value in listed), np.int64, len(listed))
    return code, tuple(str(name) for name in codes)


def _by_id(layout: Layout, id: Sequence[Any] | NDArray, xy_mm: Array | None, where: str,
           warnings: list[str]) -> tuple[Sites, Codes]:
    """The layout's marks and each row's mark, −1 for an id that the layout does not have."""
    code, names = _coded(id)
    row_of = {name: row for row, name in enumerate(layout.marks.id.tolist())}
    row = np.array([row_of.get(name, -1) for name in names], np.int64)
    unknown = [name for name, found in zip(names, row, strict=True) if found < 0]
    site = row[code]
    if unknown:
        warnings.append(f"{where}: {_named(unknown)} {'is' if len(unknown) == 1 else 'are'} not in the layout; "
                        f"{_rows((site < 0).sum())} left out")
    if xy_mm is not None:
        given = np.asarray(xy_mm, float).reshape(-1, 2)
        off = np.where(site >= 0, np.linalg.norm(given - layout.marks.xy_mm[site], axis=1), 0.0)
        if (off > MOVED_MM).any():
            worst = int(np.nanargmax(off))
            warnings.append(f"{where}: the coordinates of {_rows((off > MOVED_MM).sum())} differ from the layout, of "
                            f'"{names[code[worst]]}" by {off[worst]:.3g} mm; the layout\'s are used')
    return layout.marks, site


def _by_place(layout: Layout, xy_mm: Array, side: Sequence[Any] | NDArray | None, kind: Sequence[Any] | NDArray | None,
              where: str, warnings: list[str]) -> tuple[Sites, Codes]:
    """Drawn marks that were read and places without one, and each row's; −1 for a place off the panel."""
    n, marks = len(xy_mm), layout.marks
    site = np.full(n, -1)
    sides = np.array(["front"] * n if side is None else ["" if name is None else str(name) for name in side])
    with np.errstate(invalid="ignore"):
        on = (np.abs(xy_mm) <= np.asarray(layout.half_mm) + MOVED_MM).all(axis=1)
    for name in dict.fromkeys(sides.tolist()):
        drawn = np.arange(len(marks)) if side is None else np.flatnonzero(marks.side == name)
        rows = np.flatnonzero(on & (sides == name))
        if len(drawn) and len(rows):
            distance, near = cKDTree(marks.xy_mm[drawn]).query(xy_mm[rows])
            site[rows] = np.where(distance <= MATCH_MM, drawn[near], -1)
    if not on.all():
        off = np.flatnonzero(~on)
        places = [f"({x:g}, {y:g})" for x, y in xy_mm[off[:NAMED]].tolist()]
        warnings.append(f"{where}: off the panel: {_named(places)}; {_rows(len(off))} left out; are the coordinates in mm and "
                        "from the layout's origin?")
    undrawn = np.flatnonzero(on & (site < 0))
    if not len(undrawn):
        return marks, site
    steps = np.rint(xy_mm[undrawn] / MATCH_MM).astype(np.int64)
    _, side_code = np.unique(sides[undrawn], return_inverse=True)
    order = np.lexsort((side_code, steps[:, 1], steps[:, 0]))
    keys = np.column_stack([steps, side_code])[order]
    new = np.r_[True, (np.diff(keys, axis=0) != 0).any(axis=1)]
    first = undrawn[order[new]]
    place = np.empty(len(undrawn), np.int64)
    place[order] = np.cumsum(new) - 1
    site[undrawn] = len(marks) + place
    xy = xy_mm[first]
    added = Sites.at(np.array([f"({x:g}, {y:g})" for x, y in xy.tolist()]), xy)
    kinds = added.kind if kind is None else np.array(["" if kind[i] is None else str(kind[i]) for i in first])
    added = Sites(added.id, added.xy_mm, sides[first], kinds, added.sigma_um, added.read_rate, added.seconds)
    return Sites(*(np.concatenate([getattr(marks, name), getattr(added, name)])
                   for name in ("id", "xy_mm", "side", "kind", "sigma_um", "read_rate", "seconds"))), site


def _rows(count: int) -> str:
    return "1 row" if count == 1 else f"{count:,} rows"

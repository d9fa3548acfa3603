"""What a drawing holds that may be a mark, as columns, and the choice among it."""

from __future__ import annotations

import fnmatch
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.errors import MissingExtraError
from sampler.files.faults import Faults

SIZE_TOLERANCE_MM = 5e-4
"""Sizes are asked for as they are printed, to a µm."""
MOST_DRAWN = 3_000_000
"""More places than this are not marks but a fill pattern, and would not fit in memory."""
MOST_LISTED = 24


@dataclass(frozen=True, slots=True)
class Group:
    """Things drawn alike. `name` is a block, cell, aperture or tool; `size` in `unit`, NaN without one."""

    kind: str
    layer: str
    name: str
    size: float
    attribute: str
    count: int
    unit: str

    def __str__(self) -> str:
        parts = [f"{self.count:,} × {self.kind}"]
        parts += [f'{what} "{value}"' for what, value in (("name", self.name), ("layer", self.layer),
                                                         ("attribute", self.attribute)) if value]
        if not np.isnan(self.size):
            parts.append(f"size {self.size:.6g}{' ' + self.unit if self.unit else ''}")
        return ", ".join(parts)


@dataclass(frozen=True, slots=True)
class Selection:
    """What to take; None takes any. `layer`, `name`, `kind` and `attribute` may hold * and ?, in any case of letters;
    `size` is in mm, or in the unit of a file that does not say its unit."""

    layer: str | None = None
    name: str | None = None
    kind: str | None = None
    attribute: str | None = None
    size: float | None = None

    def __str__(self) -> str:
        return " ".join(f'--{what} "{value}"' if isinstance(value, str) else f"--{what} {value:g}"
                        for what, value in (("layer", self.layer), ("name", self.name), ("kind", self.kind),
                                            ("attribute", self.attribute), ("size", self.size)) if value is not None)


@dataclass(frozen=True, slots=True)
class Drawn:
    """Everything drawn that may be a mark, in columns (n,), in `unit`: mm, or "" when the file does not say its unit.

    `group` (n,) indexes `groups`; `text` (n,) is a label's text, "" for others.
    """

    xy: NDArray[np.float64]
    group: NDArray[np.int64]
    groups: tuple[Group, ...]
    text: NDArray[np.str_]
    unit: str

    @classmethod
    def of(cls, parts: Iterable[Part], unit: str) -> Drawn:
        """Gathers parts; parts alike become one group."""
        parts = [part for part in parts if len(part.xy)]
        keys = [(part.kind, part.layer, part.name, f"{part.size:.9g}", part.attribute) for part in parts]
        place = {key: i for i, key in enumerate(sorted(set(keys)))}
        count = [0] * len(place)
        size = [0.0] * len(place)
        for part, key in zip(parts, keys, strict=True):
            count[place[key]] += len(part.xy)
            size[place[key]] = part.size
        groups = tuple(Group(kind, layer, name, size[i], attribute, count[i], unit)
                       for (kind, layer, name, _, attribute), i in place.items())
        return cls(np.concatenate([np.zeros((0, 2)), *(part.xy for part in parts)]),
                   np.concatenate([np.zeros(0, np.int64), *(np.full(len(part.xy), place[key]) for part, key
                                                            in zip(parts, keys, strict=True))]),
                   groups, np.concatenate([np.zeros(0, str), *(np.full(len(part.xy), part.text) for part in parts)]), unit)

    def choose(self, selection: Selection, faults: Faults) -> NDArray[np.int64]:
        """Rows of what is selected, in the order drawn; faults when nothing is, or when there is a choice and none is made."""
        if not self.groups:
            faults.add("nothing in the file can be a mark: no point, circle, closed outline, text, block, cell, flash or drill")
            return np.zeros(0, np.int64)
        wanted = np.array([_matches(group, selection) for group in self.groups])
        if not wanted.any():
            faults.add(f"nothing is drawn as {selection}; the file holds {self.listed()}")
        elif selection == Selection() and len(self.groups) > 1:
            faults.add("say which of the things drawn are the marks, with --name, --layer, --kind, --attribute or --size; the "
                       f"file holds {self.listed()}")
        return np.flatnonzero(wanted[self.group])

    def listed(self) -> str:
        """The groups in words, the most frequent first."""
        ranked = sorted(self.groups, key=lambda group: (-group.count, str(group)))
        more = f"; and {len(ranked) - MOST_LISTED:,} more" if len(ranked) > MOST_LISTED else ""
        return "; ".join(map(str, ranked[:MOST_LISTED])) + more


@dataclass(frozen=True, slots=True)
class Part:
    """Places `xy` (n, 2) of things drawn alike."""

    kind: str
    xy: NDArray[np.float64]
    layer: str = ""
    name: str = ""
    size: float = float("nan")
    attribute: str = ""
    text: str = ""


def missing_extra(format: str, extra: str, faults: Faults) -> MissingExtraError:
    return MissingExtraError(f'{faults.where}: reading {format} needs the extra {extra}, which is not installed; install it '
                             f'with: pip install "sampler[{extra}]"')


def too_many() -> str:
    return f"the file draws more than {MOST_DRAWN:,} things; export the marks alone"


def short_reason(error: Exception) -> str:
    """A package's own words about a broken file, on one short line."""
    return " ".join(str(error).split())[:120] or type(error).__name__


def _matches(group: Group, selection: Selection) -> bool:
    for asked, found in ((selection.layer, group.layer), (selection.name, group.name), (selection.kind, group.kind),
                         (selection.attribute, group.attribute)):
        if asked is not None and not fnmatch.fnmatchcase(found.casefold(), asked.casefold()):
            return False
    return selection.size is None or abs(group.size - selection.size) <= SIZE_TOLERANCE_MM

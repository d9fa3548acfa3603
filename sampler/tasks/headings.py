"""Which columns of a bare table hold a mark's name and place, judged by their headings and by what stands in them."""

from __future__ import annotations

import itertools
import re
from collections.abc import Sequence
from dataclasses import dataclass

UNITS_MM = {"mm": 1.0, "um": 1e-3, "inch": 25.4, "m": 1e3, "mil": 0.0254, "nm": 1e-6}
"""Units a coordinate may come in, in mm."""
_UNIT_NAMES = {"mm": "mm", "millimeter": "mm", "millimetre": "mm", "um": "um", "micron": "um", "microns": "um",
               "mikrometer": "um", "micrometer": "um", "in": "inch", "inch": "inch", "inches": "inch", "zoll": "inch",
               "m": "m", "meter": "m", "metre": "m", "mil": "mil", "mils": "mil", "nm": "nm"}
# Words that may stand beside the axis letter; of several columns those with a word of `_DESIGNED` are the design.
_PLACE = {"pos", "position", "coord", "coordinate", "coordinates", "koord", "koordinate", "loc", "location", "lage", "mark",
          "marke", "center", "centre", "mitte", "ref", "abs", "value", "wert", "punkt", "point", "achse", "axis", "pad", "site"}
_DESIGNED = {"design", "designed", "nom", "nominal", "soll", "sollwert", "target", "cad"}
_NAMES = {"id": 3, "markid": 3, "name": 2, "bezeichnung": 2, "label": 2, "mark": 2, "marke": 2, "markname": 2, "fiducial": 2,
          "passermarke": 2, "site": 2, "refdes": 2, "nr": 1, "no": 1, "nummer": 1, "number": 1, "num": 1, "index": 1,
          "point": 1, "punkt": 1, "pkt": 1, "ref": 1, "target": 1}
_KINDS = {"kind", "type", "typ", "art", "class", "klasse", "shape", "form"}
NUMBER = re.compile(r"[+\-\u2212]?(\d+[.,]?\d*|[.,]\d+)([eE][+-]?\d+)?")


@dataclass(frozen=True, slots=True)
class Heading:
    """A heading taken apart: `axis` is "x", "y" or ""; `unit` a key of `UNITS_MM` or ""; `designed` rates a place:
    2 design, 1 plain, 0 with a word that says something else (then it is no place)."""

    text: str
    words: tuple[str, ...]
    axis: str
    unit: str
    designed: int


def heading(text: str) -> Heading:
    """Takes a heading apart, in English or German, whatever its case and punctuation.

    >>> [(h.axis, h.unit) for h in map(heading, ["X [um]", "y_mm", "PosX", "Koordinate Y (Zoll)", "dx_um", "X-Soll"])]
    [('x', ''), ('y', ''), ('x', ''), ('y', ''), ('', ''), ('x', '')]
    """
    bare = re.sub(r"[µμ]", "u", text.strip().strip('"'))
    bare = re.sub(r"(?<=[a-zäöü])(?=[A-Z])", " ", bare)
    words = [word for word in re.split(r"[\W_]+", bare.casefold()) if word]
    units = [_UNIT_NAMES[word] for word in words if word in _UNIT_NAMES]
    if len(set(units)) > 1 and "in" in words:  # "x in mm"
        units = [unit for unit in units if unit != "inch"]
    words = [word for word in words if word not in _UNIT_NAMES]
    # "posx" and "xkoord" are a word and a letter.
    axes, rest = [], []
    for word in words:
        known = _PLACE | _DESIGNED
        if word in ("x", "y"):
            axes.append(word)
        elif word[:1] in ("x", "y") and word[1:] in known:
            axes.append(word[0])
            rest.append(word[1:])
        elif word[-1:] in ("x", "y") and word[:-1] in known:
            axes.append(word[-1])
            rest.append(word[:-1])
        elif word in ("xmm", "ymm", "xum", "yum"):
            axes.append(word[0])
            units.append(word[1:])
        else:
            rest.append(word)
    axis = axes[0] if len(axes) == 1 else ""
    odd = [word for word in rest if word not in _PLACE | _DESIGNED and not word.isdigit()]
    designed = 0 if odd else 2 if set(rest) & _DESIGNED else 1
    return Heading(text.strip(), tuple(rest), axis if designed else "", units[0] if len(set(units)) == 1 else "", designed)


@dataclass(frozen=True, slots=True)
class Columns:
    """Places of the columns, 0-based; None where the table has none. `unit` as its heading says, "" when it does not.

    `doubts` holds one sentence for each thing that has to be asked for.
    """

    x: int | None
    y: int | None
    name: int | None
    kind: int | None
    unit: str
    headed: bool
    doubts: tuple[str, ...] = ()


def guess_columns(rows: Sequence[Sequence[str]], x: str | None = None, y: str | None = None,
                  name: str | None = None) -> Columns:
    """Which columns hold what, from the first rows of a table; `x`, `y` and `name` are headings, or numbers from 1."""
    numeric_below = [all(_is_number(row[i]) for row in rows[1:] if len(row) > i) and len(rows) > 1
                     for i in range(len(rows[0]))]
    headed = any(cell.strip() and not _is_number(cell) and (numeric_below[i] or len(rows) == 1 or _says_place(cell))
                 for i, cell in enumerate(rows[0]))
    numeric = numeric_below if headed else [all(_is_number(row[i]) for row in rows if len(row) > i)
                                            for i in range(len(rows[0]))]
    doubts: list[str] = []
    headings = [heading(cell) for cell in rows[0]] if headed else []
    given = {key: _given(wanted, rows[0], headed, key, doubts) for key, wanted in (("x", x), ("y", y), ("id", name))}
    at_x, at_y, at_name = given["x"], given["y"], given["id"]
    taken = [at for at in given.values() if at is not None]
    free = [i for i, number in enumerate(numeric) if number and i not in taken]
    if headed:
        at_x = at_x if at_x is not None or x else _place_column(headings, numeric, "x", doubts)
        at_y = at_y if at_y is not None or y else _place_column(headings, numeric, "y", doubts)
        if at_name is None and not name:
            rated = [max((_NAMES.get(word, 0) for word in (*one.words, "".join(one.words))), default=0) if not one.axis else 0
                     for one in headings]
            rated = [0 if i in (at_x, at_y) else rate for i, rate in enumerate(rated)]
            at_name = rated.index(max(rated)) if any(rated) else None
    else:
        if at_name is None and not name:
            texts = [i for i, number in enumerate(numeric) if not number and i not in taken]
            counted = [i for i in free if _counts([row[i] for row in rows])] if len(free) > 2 - len(taken) else []
            at_name = next(iter(texts or counted), None)
        free = [i for i in free if i != at_name]
        missing = (at_x is None) + (at_y is None)
        if len(free) > missing and not (x or y):
            doubts.append(f"the table has no headings and {len(free)} columns of numbers; say which hold x and y with "
                          "--x and --y, as numbers from 1")
        else:
            at_x = at_x if at_x is not None or not free else free.pop(0)
            at_y = at_y if at_y is not None or not free else free.pop(0)
            for at, axis in ((at_x, "x"), (at_y, "y")):
                if at is None and not doubts:
                    doubts.append(f"no column holds numbers for {axis}; give a table with a name, x and y in each row")
    unit = ""
    if headed and at_x is not None and at_y is not None:
        units = {headings[at].unit for at in (at_x, at_y)} - {""}
        unit = units.pop() if len(units) == 1 else ""
        if units:
            doubts.append(f'the headings "{headings[at_x].text}" and "{headings[at_y].text}" name different units; '
                          "bring both to one unit and say it with --unit")
    kind = next((i for i, one in enumerate(headings) if set(one.words) & _KINDS and i not in (at_x, at_y, at_name)), None)
    return Columns(at_x, at_y, at_name, kind, unit, headed, tuple(doubts))


def _is_number(cell: str) -> bool:
    return not cell.strip() or NUMBER.fullmatch(cell.strip()) is not None


def _says_place(cell: str) -> bool:
    return bool(heading(cell).axis)


def _counts(cells: Sequence[str]) -> bool:
    """Whether cells are whole numbers in steps of one, as row numbers are."""
    whole = [int(cell) for cell in cells if re.fullmatch(r"\d+", cell.strip())]
    return len(whole) == len(cells) > 1 and all(after - before == 1 for before, after in itertools.pairwise(whole))


def _given(wanted: str | None, first: Sequence[str], headed: bool, key: str, doubts: list[str]) -> int | None:
    """The column that an option names, by heading or by number from 1."""
    if not wanted:
        return None
    names = [cell.strip() for cell in first] if headed else []
    if wanted.strip() in names:
        return names.index(wanted.strip())
    if wanted.strip().isdigit() and 1 <= int(wanted) <= len(first):
        return int(wanted) - 1
    allowed = ", ".join(f'"{name}"' for name in names[:12]) + " or " if headed else ""
    doubts.append(f'--{key} names the column "{wanted}", which is not there; give {allowed}a number from 1 to {len(first)}')
    return None


def _place_column(headings: Sequence[Heading], numeric: Sequence[bool], axis: str, doubts: list[str]) -> int | None:
    """The column whose heading says that it holds this axis of the designed place."""
    found = [i for i, one in enumerate(headings) if one.axis == axis and numeric[i]]
    best = [i for i in found if headings[i].designed == max(headings[j].designed for j in found)]
    if len(best) == 1:
        return best[0]
    names = ", ".join(f'"{one.text}"' for one in headings[:12])
    if best:
        doubts.append(f"several columns may hold {axis}: " + ", ".join(f'"{headings[i].text}"' for i in best)
                      + f"; say which with --{axis}")
    else:
        doubts.append(f"no heading says that its column of numbers holds {axis}; the headings are {names}; say which with "
                      f"--{axis}")
    return None

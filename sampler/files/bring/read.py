"""Which format a file has, and the marks in it."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

from sampler.errors import InputError
from sampler.files.bring.drawn import Drawn, Selection
from sampler.files.bring.dxf import read_dxf
from sampler.files.bring.gds import read_gds, read_oasis
from sampler.files.bring.gerber import read_excellon, read_gerber
from sampler.files.faults import Faults
from sampler.files.source import read_bytes, shown_path
from sampler.tasks.start import Start, StartOptions, start

Reader = Callable[[Path, bytes, Faults], Drawn | None]

READERS: dict[str, Reader] = {"DXF": read_dxf, "GDSII": read_gds, "OASIS": read_oasis, "Gerber": read_gerber,
                              "Excellon": read_excellon}
SUFFIXES = {"dxf": "DXF", "gds": "GDSII", "gds2": "GDSII", "gdsii": "GDSII", "sf": "GDSII", "oas": "OASIS", "oasis": "OASIS",
            "gbr": "Gerber", "ger": "Gerber", "drl": "Excellon", "xln": "Excellon", "exc": "Excellon"}


def drawn(path: str | Path) -> Drawn:
    """Everything in a file that may be a mark. Raises InputError, and MissingExtraError without the format's package."""
    faults = Faults(shown_path(path))
    data = read_bytes(path, f"a {', '.join(READERS)} file", faults, binary=True)
    faults.close()
    assert data is not None
    kind = _format(Path(path), data)
    if kind is None:
        raise InputError(f"{shown_path(path)}: this is none of {', '.join(READERS)}; give such a file, or a CSV file to start")
    found = READERS[kind](Path(path), data, faults)
    faults.close()
    assert found is not None
    lost = int((~np.isfinite(found.xy)).any(axis=1).sum())
    if lost:
        raise InputError(f"{shown_path(path)}: {lost:,} places are not finite numbers; mend the drawing")
    return found


def bring(path: str | Path, selection: Selection | None = None, options: StartOptions | None = None) -> Start:
    """The selected marks of a drawing with the layout and study to begin with; `files.start.start_files` writes them.

    Labels that differ from each other name their marks. Raises InputError, listing what the file holds when the selection
    matches nothing or is missing and needed; MissingExtraError when the format's package is not installed.
    """
    options = options or StartOptions()
    found = drawn(path)
    faults = Faults(shown_path(path))
    rows = found.choose(selection or Selection(), faults)
    faults.close()
    taken = [found.groups[i] for i in np.unique(found.group[rows])]
    said = [f"taken: {'; '.join(map(str, taken))}"]
    left = len(found.groups) - len(taken)
    if left:
        said.append(f"not taken: {left} other {'group' if left == 1 else 'groups'} of things drawn")
    text = found.text[rows]
    names = text if len(rows) and len(np.unique(text)) == len(rows) and (text != "").all() else None
    try:
        return start(names, found.xy[rows], None, found.unit, replace(options, name=options.name or Path(path).stem), tuple(said))
    except InputError as error:
        raise InputError(f"{shown_path(path)}: {fault}" for fault in error.faults) from error


def _format(path: Path, data: bytes) -> str | None:
    """The format by the first bytes, else by the name's ending."""
    head = data[:4096]
    if head.startswith(b"\x00\x06\x00\x02"):
        return "GDSII"
    if head.startswith(b"%SEMI-OASIS"):
        return "OASIS"
    if b" Binary DXF" in head[:30] or re.match(rb"\s*(999[^\n]*\n[^\n]*\n\s*)*0\s*\r?\n\s*SECTION", head):
        return "DXF"
    if re.search(rb"%(FS|MO|TF\.|AD)", head):
        return "Gerber"
    if re.match(rb"(\s|;[^\n]*\n|%)*M48", head):
        return "Excellon"
    return SUFFIXES.get(path.suffix[1:].casefold())

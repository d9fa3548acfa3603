"""Marks from GDSII and OASIS layouts."""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.files.bring.drawn import MOST_DRAWN, Drawn, Part, missing_extra, short_reason, too_many
from sampler.files.faults import Faults

END_OF_LIBRARY = 0x0400
OASIS_END = 2
OASIS_END_LENGTH = 256
"""The last record of an OASIS file has exactly this many bytes and begins with its code (SEMI P39)."""


def read_gds(path: Path, data: bytes, faults: Faults) -> Drawn | None:
    fault = _record_fault(data)
    if fault:
        faults.add(f"the GDSII file is broken: {fault}; export it again")
        return None
    return _read(path, "GDSII", faults)


def read_oasis(path: Path, data: bytes, faults: Faults) -> Drawn | None:
    if len(data) < OASIS_END_LENGTH or data[-OASIS_END_LENGTH] != OASIS_END:
        faults.add("the OASIS file is broken: it does not end with its END record, so that a part is missing; export it again")
        return None
    return _read(path, "OASIS", faults)


def _record_fault(data: bytes) -> str | None:
    """What is wrong with the chain of records of a GDSII file: each has its length, at least 4 and even, and its code."""
    at, code = 0, -1
    while at + 4 <= len(data) and code != END_OF_LIBRARY:
        length, code = struct.unpack_from(">HH", data, at)
        if length < 4 or length % 2:
            return f"the record at byte {at} has the length {length}"
        if at + length > len(data):
            return f"it ends within the record at byte {at}, so that a part is missing"
        at += length
    return None if code == END_OF_LIBRARY else "it does not end with its ENDLIB record, so that a part is missing"


def _read(path: Path, format: str, faults: Faults) -> Drawn | None:
    """Cell references, and shapes (the centre of their box) and labels by layer/datatype, over the whole hierarchy.

    References are followed at any depth through arrays, rotation, magnification and mirroring, from the top cells down.
    """
    try:
        import gdstk
    except ImportError as error:
        raise missing_extra(format, "gds", faults) from error
    try:
        library = (gdstk.read_gds if format == "GDSII" else gdstk.read_oas)(str(path))
        tops = library.top_level()
    except Exception as error:  # what the package raises on broken files is not of one kind
        faults.add(f"the {format} file is broken ({short_reason(error)}); export it again")
        return None
    cells: dict[str, Any] = {cell.name: cell for cell in library.cells}
    if len(cells) < len(library.cells):
        faults.add(f"two cells of the {format} file have one name; export it again")
        return None
    placed = _placements(cells, [cell.name for cell in tops], faults)
    if placed is None:
        return None
    parts: list[Part] = []
    total = 0
    for name, placement in placed.items():
        things = [*cells[name].polygons, *cells[name].paths, *cells[name].labels]
        total += len(placement.at) * sum(thing.repetition.size or 1 for thing in things)
        if total > MOST_DRAWN:
            faults.add(too_many())
            return None
        parts += _drawn_in(cells[name], placement)
        if placement.referenced:
            parts.append(Part("cell", _xy(placement.at), name=name))
    return Drawn.of((Part(part.kind, part.xy * (library.unit * 1e3), part.layer, part.name, part.size * library.unit * 1e3, "",
                          part.text) for part in parts), "mm")


@dataclass(frozen=True, slots=True)
class _Placement:
    """Where a cell is placed, as z → at + turn·z or, mirrored, at + turn·z̄, with x + iy for a place, all (k,)."""

    at: NDArray[np.complex128]
    turn: NDArray[np.complex128]
    mirrored: NDArray[np.bool_]
    referenced: bool = True

    def of(self, z: NDArray[np.complex128]) -> NDArray[np.complex128]:
        """Places z (n,) of the cell in all its placements, (k, n)."""
        return self.at[:, None] + self.turn[:, None] * np.where(self.mirrored[:, None], z.conj(), z)


    def holding(self, inner: _Placement) -> _Placement:
        """Placements (m,) in this cell, in all of its own: (k·m,)."""
        turn = self.turn[:, None] * np.where(self.mirrored[:, None], inner.turn.conj(), inner.turn)
        return _Placement(self.of(inner.at).ravel(), turn.ravel(), (self.mirrored[:, None] ^ inner.mirrored).ravel())


def _children(cell: Any) -> dict[str, _Placement]:
    """Where a cell places each other cell."""
    rows: dict[str, list[tuple[complex, complex, bool]]] = {}
    for reference in cell.references:
        turn = complex(reference.magnification * np.exp(1j * reference.rotation))
        origin, mirrored = complex(*reference.origin), bool(reference.x_reflection)
        rows.setdefault(reference.cell_name, []).extend((origin + offset, turn, mirrored)
                                                        for offset in _offsets(reference).tolist())
    return {name: _Placement(np.array([row[0] for row in some]), np.array([row[1] for row in some]),
                             np.array([row[2] for row in some], bool)) for name, some in rows.items()}


def _xy(z: NDArray[np.complex128]) -> NDArray[np.float64]:
    return np.stack([z.real, z.imag], axis=-1).reshape(-1, 2)


def _offsets(thing: Any) -> NDArray[np.complex128]:
    """The places of a repetition relative to the first one, in the frame of the cell that holds the thing."""
    if not thing.repetition.size:
        return np.zeros(1, complex)
    offsets = np.asarray(thing.repetition.get_offsets(), float).reshape(-1, 2)
    return np.asarray(offsets[:, 0] + 1j * offsets[:, 1])


def _placements(cells: dict[str, Any], tops: list[str], faults: Faults) -> dict[str, _Placement] | None:
    """All placements of every cell that is reached from the top cells, parents before children."""
    waiting: dict[str, int] = dict.fromkeys(cells, 0)
    for cell in cells.values():
        for child in {reference.cell_name for reference in cell.references}:
            waiting[child] += 1
    found: dict[str, list[_Placement]] = {name: [] for name in cells}
    done: dict[str, _Placement] = {}
    ready, total = list(tops), 0
    for name in tops:
        found[name].append(_Placement(np.zeros(1, complex), np.ones(1, complex), np.zeros(1, bool), False))
    while ready:
        name = ready.pop()
        lots = found[name]
        done[name] = here = _Placement(np.concatenate([lot.at for lot in lots]), np.concatenate([lot.turn for lot in lots]),
                                       np.concatenate([lot.mirrored for lot in lots]), lots[0].referenced)
        for child, local in _children(cells[name]).items():
            total += len(here.at) * len(local.at)
            if total > MOST_DRAWN:
                faults.add(too_many())
                return None
            found[child].append(here.holding(local))
            waiting[child] -= 1
            if not waiting[child]:
                ready.append(child)
    if len(done) < len(cells):
        circle = ", ".join(sorted(set(cells) - set(done))[:6])
        faults.add(f"cells of the file hold each other in a circle ({circle}); export it again")
        return None
    return done


def _drawn_in(cell: Any, placement: _Placement) -> Iterator[Part]:
    """Shapes and labels of one cell in all its placements."""
    shapes: dict[tuple[str, float], list[complex]] = {}
    for shape in [*cell.polygons, *cell.paths]:
        (left, bottom), (right, top) = _first_box(shape) if shape.repetition.size else shape.bounding_box()
        # A repeated thing is given by its first one; its repetition runs in the cell's frame.
        at = (complex((left + right) / 2, (bottom + top) / 2) + _offsets(shape)).tolist()
        layers = ({(shape.layer, shape.datatype)} if hasattr(shape, "layer") else
                  set(zip(shape.layers, shape.datatypes, strict=True)))
        for layer, kind in layers:
            shapes.setdefault((f"{layer}/{kind}", round(max(right - left, top - bottom), 6)), []).extend(at)
    scale = np.round(np.abs(placement.turn), 9)
    for (where, side), middles in shapes.items():
        places = placement.of(np.array(middles))
        for magnification in np.unique(scale):
            yield Part("shape", _xy(places[scale == magnification]), where, "", side * float(magnification))
    for label in cell.labels:
        yield Part("label", _xy(placement.of(complex(*label.origin) + _offsets(label))), f"{label.layer}/{label.texttype}",
                   text=label.text)


def _first_box(shape: Any) -> Any:
    """The box of a repeated thing without its repetition."""
    alone = shape.copy()
    alone.repetition = None
    return alone.bounding_box()

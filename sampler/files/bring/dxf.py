"""Marks from DXF drawings."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any

import numpy as np

from sampler.files.bring.drawn import MOST_DRAWN, Drawn, Part, missing_extra, short_reason, too_many
from sampler.files.faults import Faults

IN_MM = {1: 25.4, 2: 304.8, 4: 1.0, 5: 10.0, 6: 1e3, 9: 0.0254, 12: 1e-6, 13: 1e-3, 14: 100.0}
"""Values of $INSUNITS in mm; 0, and no value, mean that the file does not say."""
DEEPEST = 32
BINARY = b" Binary DXF"


def read_dxf(path: Path, data: bytes, faults: Faults) -> Drawn | None:
    """Points, circles, closed outlines (the centre of their box), texts and block inserts of the model space.

    Inserts are followed at any depth through rows and columns, rotation, scaling and mirroring; what lies on layer 0 in a
    block is on the layer of its insert.
    """
    try:
        import ezdxf
    except ImportError as error:
        raise missing_extra("DXF", "dxf", faults) from error
    if not data.rstrip().endswith(b"EOF") and BINARY not in data[:len(BINARY) + 20]:
        faults.add("the DXF file has no EOF at its end, so that a part may be missing; export it again")
        return None
    try:
        document = ezdxf.readfile(str(path))
    except Exception as error:  # what the package raises on broken files is not of one kind
        faults.add(f"the DXF file is broken ({short_reason(error)}); export it again")
        return None
    code = document.header.get("$INSUNITS", 0)
    scale = IN_MM.get(code, 1.0)
    gathered: dict[tuple[Any, ...], list[tuple[float, float]]] = {}
    walk = _walk(document.modelspace(), ezdxf.math.Matrix44(), "", document, faults, 0)
    for key, x, y in itertools.islice(walk, MOST_DRAWN + 1):
        gathered.setdefault(key, []).append((x, y))
    if sum(map(len, gathered.values())) > MOST_DRAWN:
        faults.add(too_many())
        return None
    parts = [Part(kind, np.array(xy) * scale, layer, name, size * scale, text=text)
             for (kind, layer, name, size, text), xy in gathered.items()]
    return Drawn.of(parts, "mm" if code in IN_MM else "")


Row = tuple[tuple[Any, ...], float, float]


def _walk(entities: Iterable[Any], to_world: Any, layer_of_insert: str, document: Any, faults: Faults,
          depth: int) -> Iterator[Row]:
    """Every place in a space or block: ((kind, layer, name, size, text), x, y) in world coordinates."""
    if depth > DEEPEST:
        faults.add(f"blocks are nested more than {DEEPEST} deep, or hold themselves; explode them")
        return
    stretch = to_world.transform_direction((1, 0, 0)).magnitude
    for entity in entities:
        kind = entity.dxftype()
        layer = entity.dxf.layer if entity.dxf.layer != "0" or not layer_of_insert else layer_of_insert
        if kind == "INSERT":
            block = document.blocks.get(entity.dxf.name)
            if block is None:
                faults.add(f'the block "{entity.dxf.name}" is inserted but not defined; export the drawing again')
                continue
            for single in entity.multi_insert() if entity.mcount > 1 else (entity,):
                inner = single.matrix44() @ to_world
                x, y, _ = inner.transform(block.block.dxf.base_point)
                yield ("block", layer, entity.dxf.name, float("nan"), ""), x, y
                yield from _walk(block, inner, layer, document, faults, depth + 1)
            continue
        place = _place(kind, entity)
        if place is not None:
            what, at, size, text = place
            x, y, _ = to_world.transform(at)
            yield (what, layer, "", round(size * stretch, 9), text), x, y


def _place(kind: str, entity: Any) -> tuple[str, Any, float, str] | None:
    """What an entity would be as a mark: its kind, where, its size and its text; None when it is none."""
    if kind == "POINT":
        return "point", entity.dxf.location, float("nan"), ""
    if kind == "CIRCLE":
        return "circle", entity.ocs().to_wcs(entity.dxf.center), 2 * entity.dxf.radius, ""
    if kind in ("TEXT", "MTEXT"):
        at = entity.dxf.insert if kind == "MTEXT" else entity.ocs().to_wcs(entity.dxf.insert)
        return "text", at, float("nan"), entity.plain_text().strip() if kind == "TEXT" else entity.text.strip()
    if kind == "LWPOLYLINE" and entity.closed:
        corners = np.array(list(entity.vertices()))
        low, high = corners.min(axis=0), corners.max(axis=0)
        middle = (low + high) / 2
        at = entity.ocs().to_wcs((middle[0], middle[1], entity.dxf.elevation))
        return "outline", at, float((high - low).max()), ""
    return None

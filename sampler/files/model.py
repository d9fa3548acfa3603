"""Names of terms in study files: families, grids, cells."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence

from sampler.files.faults import Faults, did_you_mean
from sampler.files.schema import Values
from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES, TERMS
from sampler.panel.layout import Grid
from sampler.tasks.study import Potential

NAMES = [*TERMS, *FAMILIES]
QUALIFIED = re.compile(r"(?P<grid>[^.\[\]]+)(\[(?P<cell>[^\]]*)\])?\.(?P<term>.+)")


def model(values: Values, grids: Sequence[Grid] | None, faults: Faults) -> Model | None:
    """The model of a `[model]` table, or None with every fault added; `grids` None when the layout is not known."""
    before = len(faults.messages)
    terms = [ModelTerm(term) for term in _expanded(values.get("panel") or (), "[model] panel", faults)]
    for name, part in values.items():
        if name in ("panel", "potential") or part is None:
            continue
        place = f"[model.{name}]"
        if part["shared"] is None and part["each"] is None:
            faults.add(f"{place} has neither shared nor each; give the terms that its cells share in shared, or those that "
                       "each cell has of its own in each")
        shared = _expanded(part["shared"] or (), f"{place} shared", faults)
        each = _expanded(part["each"] or (), f"{place} each", faults)
        for both in [term for term in shared if term in each]:
            faults.add(f'{place} has "{both}" in shared and in each; keep one')
        terms += [ModelTerm(term, name) for term in shared]
        grid = None if grids is None else _grid(name, place, grids, faults)
        if grid is not None:
            terms += [ModelTerm(term, name, cell, grid.cell_label(cell)) for cell in range(grid.cells) for term in each]
    if not terms and values["panel"] is not None and len(faults.messages) == before:
        faults.add("[model] has no terms; give panel a list of terms or families")
    return None if len(faults.messages) > before else Model(tuple(terms))


def potential(values: Values | None, given: Model, faults: Faults) -> Potential | None:
    """The terms of `[model.potential]` that the model does not correct anyway."""
    if values is None:
        return None
    terms = [term for term in _expanded(values["terms"] or (), "[model.potential] terms", faults)
             if term not in given.names]
    if not terms and values["terms"] is not None:
        faults.add("[model.potential] terms are all in [model] already; give terms that are not corrected")
    return Potential(Model(tuple(ModelTerm(term) for term in terms)), values["sd_um"])


def named_terms(names: Sequence[str], given: Model, grids: Sequence[Grid] | None, place: str,
                  faults: Faults) -> tuple[str, ...]:
    """The terms of a model that names, families or "all" mean, in the model's order, without repeats."""
    wanted: set[str] = set()
    for name in names:
        if name == "all":
            wanted |= set(given.names)
            continue
        match = QUALIFIED.fullmatch(name)
        grid, cell, term = (match["grid"], match["cell"], match["term"]) if match else (None, None, name)
        if grid is not None and grids is not None:
            known = _grid(grid, f'{place} "{name}"', grids, faults)
            if known is None:
                continue
            labels = [known.cell_label(index) for index in range(known.cells)]
            if cell is not None and cell not in labels:
                faults.add(f'{place} "{name}": "{cell}" is not a cell of {grid}; the cells are {labels[0]} to {labels[-1]}')
                continue
        lacking = []
        for one in _expanded([term], place, faults):
            found = [item.name for item in given.terms
                     if item.term == one and item.grid == grid and (cell is None or item.cell_label == cell)]
            wanted |= set(found)
            lacking += [] if found else [one]
        if lacking == [term]:
            spare = [other for other in given.names if other not in names]
            faults.add(f'{place} name "{name}", which the model does not have; '
                       + did_you_mean(name, spare, "add it to [model] or drop it here"))
        elif lacking:
            faults.add(f'{place} name "{name}", but the model does not have {", ".join(lacking)}; add them to [model] or name '
                       "single terms")
    return tuple(name for name in given.names if name in wanted)


def _expanded(names: Iterable[str], place: str, faults: Faults) -> list[str]:
    """Single terms of names and families, without repeats."""
    terms: dict[str, None] = {}
    for name in names:
        if name in FAMILIES:
            terms |= dict.fromkeys(FAMILIES[name])
        elif name in TERMS:
            terms[name] = None
        else:
            faults.add(f'{place} "{name}" is not a term or family; '
                       + did_you_mean(name, NAMES, f"the families are {', '.join(FAMILIES)}"))
    return list(terms)


def _grid(name: str, place: str, grids: Sequence[Grid], faults: Faults) -> Grid | None:
    names = [grid.name for grid in grids]
    if name in names:
        return grids[names.index(name)]
    faults.add(f'{place}: "{name}" is not a grid of the layout; '
               + did_you_mean(name, names, "the grids are " + ", ".join(names) if names else "the layout has no grids"))
    return None

"""The tables of a study that say how a panel is measured: [measure], [machine], [rules] and [search]."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from sampler.files.faults import Faults, did_you_mean
from sampler.files.layout import SHAPE_KEYS, drawn_shape
from sampler.files.schema import (
    Bounds,
    Key,
    Values,
    flag,
    named_numbers,
    number,
    numbers,
    one_number_of,
    one_of,
    table,
    tables,
    text,
    texts,
    whole,
)
from sampler.panel.candidates import candidates
from sampler.panel.layout import Layout
from sampler.route.machine import CORNERS, QUARTER_TURNS, SIDES, TURNED_OVER, Machine
from sampler.tasks.study import CellRule, Measure, Rules, SearchOptions, ZoneRule

POSITIVE, NOT_NEGATIVE = Bounds(above=0), Bounds(at_least=0)
RATE = Bounds(above=0, at_most=1)
SHARED = numbers(2, "[x, y]", NOT_NEGATIVE)
MOST_LOST = 2
NEEDS_MACHINE = "needs the machine's speeds and times; add a table [machine]"

MEASURE = table(
    Key("side", one_of(*SIDES, "both"), default="both"),
    Key("field_of_view_mm", numbers(2, "[width, height]", POSITIVE)),
    Key("stop_um", SHARED, default=(0.0, 0.0)),
    Key("side_um", SHARED, default=(0.0, 0.0)),
    Key("flip_um", SHARED, default=(0.0, 0.0)),
    Key("read_rate", named_numbers("kinds of marks with the chance that each reads, such as hole = 0.98", RATE), default=()),
)
MACHINE = table(
    Key("speed_mm_s", numbers(2, "[x, y]", POSITIVE)),
    Key("acceleration_mm_s2", numbers(2, "[x, y]", POSITIVE)),
    *(Key(name, number(NOT_NEGATIVE)) for name in ("settling_s", "read_s", "flip_s", "load_s", "unload_s")),
    Key("start_mm", numbers(2, "[x, y] in the machine's frame")),
    Key("end_mm", numbers(2, "[x, y] in the machine's frame")),
    Key("origin", one_of(*CORNERS)),
    Key("rotation", one_number_of(*QUARTER_TURNS)),
    Key("mirrored", flag),
    Key("flip_axis", one_of(*TURNED_OVER)),
    Key("first_side", one_of(*SIDES)),
)
COUNTS = (Key("min", whole(NOT_NEGATIVE)), Key("max", whole(NOT_NEGATIVE)))


def one_or_more(value: Any, place: str, faults: Faults) -> list[Values] | None:
    """`per_cell = {grid = …, min = 1}` means the same as a single table [[rules.per_cell]]."""
    read: list[Values] | None = tables(Key("grid", text, "the name of a grid"), *COUNTS)(
        [value] if isinstance(value, dict) else value, place, faults)
    return read


RULES = table(
    *(Key(name, texts, default=()) for name in ("required", "forbidden", "required_kinds", "forbidden_kinds")),
    Key("max_sites", whole(Bounds(at_least=1))),
    Key("max_seconds", number(POSITIVE)),
    Key("min_spacing_mm", number(POSITIVE)),
    Key("lost", whole(Bounds(at_least=0, at_most=MOST_LOST)), default=0),
    Key("per_cell", one_or_more, default=[]),
    Key("per_zone", tables(Key("name", text, "a name for the zone"), *SHAPE_KEYS, *COUNTS), default=[]),
)
SEARCH = table(
    Key("seconds", number(POSITIVE), default=60.0),
    Key("seed", whole(NOT_NEGATIVE), default=1),
    Key("objective", one_of("sites", "seconds"), default="sites"),
    Key("sites", whole(Bounds(at_least=1))),
    Key("prefer", one_of("information", "time"), default="information"),
    Key("information_loss", number(Bounds(at_least=0, at_most=0.5)), default=0.02),
)


def measure(values: Values | None, layout: Layout | None, rates: Sequence[tuple[str, float]], faults: Faults) -> Measure:
    """The [measure] table; `rates`: read rates by kind from elsewhere, which the study's own replace."""
    own = {} if values is None else dict(values["read_rate"] or ())
    if layout is not None:
        _known_kinds("[measure] read_rate", list(own), layout, faults)
    both = tuple((dict(rates) | own).items())
    if values is None:
        return Measure(read_rate=both)
    return Measure(values["side"], values["field_of_view_mm"], values["stop_um"] or (0.0, 0.0),
                   values["side_um"] or (0.0, 0.0), values["flip_um"] or (0.0, 0.0), both)


def machine(values: Values | None) -> Machine:
    """The [machine] table; what it leaves out stays at the machine's defaults."""
    return Machine(**{name: value for name, value in (values or {}).items() if value is not None})


def search(values: Values | None, rules: Rules, has_machine: bool, faults: Faults) -> SearchOptions:
    """The [search] table, held against what it needs."""
    if rules.max_seconds is not None and not has_machine:
        faults.add(f"[rules] max_seconds {NEEDS_MACHINE}")
    if values is None or None in (value for key, value in values.items() if key != "sites"):
        return SearchOptions()
    options = SearchOptions(**values)
    if options.objective == "seconds" and not has_machine:
        faults.add(f'[search] objective "seconds" {NEEDS_MACHINE}')
    if options.prefer == "time" and not has_machine:
        faults.add(f'[search] prefer "time" {NEEDS_MACHINE}')
    if options.sites is not None and options.objective == "seconds":
        faults.add('[search] has sites and objective "seconds"; give one of them')
    if options.sites is not None and rules.max_sites is not None and options.sites > rules.max_sites:
        faults.add(f"[search] sites is {options.sites}, but [rules] max_sites is {rules.max_sites}; change one of them")
    return options


def rules(values: Values | None, layout: Layout | None, faults: Faults) -> Rules:
    """The rules, checked against the marks and grids of the layout."""
    if values is None:
        return Rules()
    required, forbidden, most = values["required"] or (), values["forbidden"] or (), values["max_sites"]
    kinds, banned = values["required_kinds"] or (), values["forbidden_kinds"] or ()
    for key, names, others in (("required", required, forbidden), ("required_kinds", kinds, banned)):
        for name in [name for name in names if name in others]:
            faults.add(f'[rules] {key} "{name}" is also forbidden; drop it from one of the two')
    if most is not None and len(required) > most:
        faults.add(f"[rules] max_sites is {most}, but {len(required)} sites are required; raise it to at least "
                   f"{len(required)}")
    if layout is not None:
        _known_marks(required, forbidden, layout, faults)
        _known_kinds("[rules] required_kinds", kinds, layout, faults)
        _known_kinds("[rules] forbidden_kinds", banned, layout, faults)
    cells = [_cell_rule(item, layout, faults) for item in values["per_cell"] or []]
    zones = [_zone_rule(item, layout, faults) for item in values["per_zone"] or []]
    return Rules(required, forbidden, kinds, banned, most, values["max_seconds"], values["min_spacing_mm"],
                 values["lost"] or 0, tuple(rule for rule in cells if rule is not None),
                 tuple(zone for zone in zones if zone is not None))


def _known_marks(required: Sequence[str], forbidden: Sequence[str], layout: Layout, faults: Faults) -> None:
    ids = layout.marks.id
    row = {name: np.flatnonzero(ids == name) for name in dict.fromkeys([*required, *forbidden])}
    for key, names in (("required", required), ("forbidden", forbidden)):
        for name in [name for name in names if not len(row[name])]:
            faults.add(f'[rules] {key} "{name}" is not a mark of the layout; '
                       + did_you_mean(name, ids.tolist(), "give ids of marks"))
    known = [name for name in required if len(row[name])]
    marks = layout.marks.take(np.array([row[name][0] for name in known], np.int64))
    for name, reason in zip(known, candidates(replace(layout, marks=marks)).reason, strict=True):
        if reason:
            faults.add(f'[rules] required mark "{name}" lies {reason}; move the mark, drop it from required, or mend the '
                       "layout")


def _known_kinds(place: str, kinds: Sequence[str], layout: Layout, faults: Faults) -> None:
    known = np.unique(layout.marks.kind).tolist()
    for kind in [kind for kind in kinds if kind not in known]:
        named = [name for name in known if name]
        faults.add(f'{place} "{kind}" is not a kind of any mark; '
                   + did_you_mean(kind, named, f"the kinds are {', '.join(named)}" if named else "the marks have no kinds"))


def _counts(values: Values, faults: Faults) -> bool:
    """Whether min and max of a rule make sense; a fault is added when they do not."""
    place, least, most = values["place"], values["min"], values["max"]
    if not {"min", "max"} & values["present"]:
        faults.add(f"{place} has neither min nor max; give at least one of them")
    elif least is not None and most is not None and least > most:
        faults.add(f"{place} min is {least} and max is {most}; give a max of at least min")
    else:
        return (least is not None or "min" not in values["present"]) and (most is not None or "max" not in values["present"])
    return False


def _cell_rule(values: Values, layout: Layout | None, faults: Faults) -> CellRule | None:
    place, grid = values["place"], values["grid"]
    counted = _counts(values, faults)
    names = [] if layout is None else [other.name for other in layout.grids]
    if grid is None or layout is None:
        return None
    if grid not in names:
        faults.add(f'{place} grid "{grid}" is not a grid of the layout; '
                   + did_you_mean(grid, names, "the grids are " + ", ".join(names) if names else "the layout has no grids"))
        return None
    return CellRule(grid, values["min"] or 0, values["max"]) if counted else None


def _zone_rule(values: Values, layout: Layout | None, faults: Faults) -> ZoneRule | None:
    counted = _counts(values, faults)
    shape = drawn_shape(values, "zone", (0.0, 0.0) if layout is None else layout.origin_mm, faults)
    if shape is None or not counted:
        return None
    return ZoneRule(shape.name, shape.boundary_mm(), values["min"] or 0, values["max"], shape.circle_mm)

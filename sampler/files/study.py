"""Study files."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from sampler.files.faults import Faults, did_you_mean
from sampler.files.layout import layout_file
from sampler.files.model import model, named_terms, potential
from sampler.files.recipe import MACHINE, MEASURE, RATE, RULES, SEARCH, machine, measure, rules, search
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
    text_or_texts,
    texts,
)
from sampler.files.source import beside, read_toml, sha256, shown_path
from sampler.model.basis import Model
from sampler.panel.candidates import candidates
from sampler.panel.layout import Layout
from sampler.panel.outline import counter_clockwise, covered, polygon_fault, shrunk
from sampler.tasks.study import RegionLimit, Source, Study, TermLimit, TermPrior
from sampler.uncertainty.noise import Noise

A_STUDY = "a study file (TOML)"
A_PROCESS = "a file that `characterise` wrote (TOML)"
REGIONS = ("panel", "marks", "polygon")
FEW_MARKS = 2000
"""Marks looked at first for whether there is any candidate; all of them only when none of these is."""

PLACEHOLDERS: dict[str, Any] = {"model": {"panel": ["affine"]}, "noise": {"mark_um": [1.0, 1.0]}}
"""Stand in for what a faulty process file would have said, so that its absence is not a fault of its own."""


def _any_text(value: Any, place: str, faults: Faults) -> str | None:
    return value if isinstance(value, str) else text(value, place, faults)


NOISE = (
    Key("mark_um", numbers(2, "[x, y]", Bounds(above=0)), "[x, y], the standard uncertainty of one reading in µm"),
    Key("local_um", numbers(2, "[x, y]", Bounds(at_least=0)), default=(0.0, 0.0)),
    Key("local_range_mm", number(Bounds(at_least=0))),
)
PANEL_TERMS = Key("panel", texts, default=())
GRID_TERMS = table(Key("shared", texts), Key("each", texts))
PRIOR = (
    Key("terms", text_or_texts, "names of terms, families or \"all\""),
    Key("sd", number(Bounds(above=0)), "the standard deviation in the term's unit"),
    Key("mean", number(), default=0.0),
)
KEYS = (
    Key("format", format_number, "format = 1"),
    Key("name", text),
    Key("title", text),
    Key("layout", text, "the path of the layout file, relative to this file"),
    Key("process", text),
    Key("coverage_factor", number(Bounds(above=0)), default=3.0),
    Key("model", table(
        PANEL_TERMS,
        Key("potential", table(
            Key("terms", texts, "terms or families that are perhaps present"),
            Key("sd_um", number(Bounds(above=0)), "their standard deviation"),
        )),
        others=GRID_TERMS,
    ), "a table [model]"),
    Key("noise", table(*NOISE), "a table [noise]"),
    Key("prior", tables(*PRIOR), default=[]),
    Key("limit", tables(
        Key("terms", text_or_texts),
        Key("max", number(Bounds(above=0))),
        Key("region", text),
        Key("polygon_mm", points(3)),
        Key("position_um", number(Bounds(above=0))),
        Key("of", one_of("correction", "displacement"), default="correction"),
    ), default=[]),
    Key("measure", MEASURE),
    Key("machine", MACHINE),
    Key("rules", RULES),
    Key("search", SEARCH),
)
PROCESS_KEYS = (
    Key("format", format_number, "format = 1"),
    Key("model", table(PANEL_TERMS, others=GRID_TERMS), default={}),
    Key("noise", table(*NOISE), default={}),
    Key("prior", tables(*PRIOR), default=[]),
    Key("read_rate", tables(Key("kind", _any_text, "the kind of the marks"), Key("rate", number(RATE), "the share that read"),
                            Key("interval", numbers(2, "[low, high]", Bounds(at_least=0, at_most=1)))), default=[]),
    Key("variation", lambda value, place, faults: value),
)
"""What a study takes from a process file; what else such a file says is for other tasks."""


def read_study(path: str | Path) -> Study:
    """The study of a TOML file with its layout. Raises InputError with every fault of all their files together."""
    faults = Faults(shown_path(path))
    toml = read_toml(path, A_STUDY, faults)
    written, process = ({}, _Process()) if toml is None else _with_process(toml[0], path, faults)
    values = {} if toml is None else read_keys(written, KEYS, "", faults)
    read = layout_file(beside(path, values["layout"]), faults) if values.get("layout") else None
    layout = None if read is None else read.layout
    given = model(values["model"], None if layout is None else layout.grids, faults) if values.get("model") else None
    perhaps = potential(values["model"]["potential"], given, faults) if given is not None else None
    priors = [_prior(prior, given, layout, faults) for prior in values.get("prior") or [] if given is not None]
    if given is not None:
        priors = [*_known_priors(process.priors, given), *priors]
    limits = [_limit(limit, given, layout, faults) for limit in values.get("limit") or []]
    ruled = rules(values.get("rules"), layout, faults)
    measured = measure(values.get("measure"), layout, process.rates, faults)
    options = search(values.get("search"), ruled, "machine" in written, faults)
    misspelt = any('did you mean "limit"' in said for said in faults.messages)
    if values.get("limit") == [] and options.sites is None and not misspelt:
        faults.add("limit is missing; give at least one table [[limit]], or a number of sites in [search] sites")
    if layout is not None:
        _some_candidate(layout, ruled.forbidden, faults.of(read.source.path if read else ""))
    faults.close()
    assert toml is not None and read is not None and layout is not None and given is not None
    noise = Noise(values["noise"]["mark_um"], values["noise"]["local_um"], values["noise"]["local_range_mm"] or None)
    if process.range_mm and noise.local_range_mm is None and max(noise.local_um) > 0:
        faults.warn(f"[noise] local_range_mm is 0, so that local distortion counts as independent from mark to mark, but "
                    f"{process.path} found it alike over {process.range_mm:g} mm: this undercounts sites severalfold")
    return Study(
        values["title"] or values["name"] or Path(path).stem, layout, given, noise,
        tuple(limit for limit in limits if limit is not None), values["coverage_factor"], ruled, options,
        priors=tuple(priors), potential=perhaps, measure=measured, machine=machine(values["machine"]),
        machine_stated=values["machine"] is not None, source=Source(shown_path(path), sha256(toml[1], process.data)),
        layout_source=read.source, warnings=tuple(dict.fromkeys(faults.warnings)))


@dataclass(frozen=True, slots=True)
class _Process:
    """What pilot panels said: the file's bytes, its priors as read, read rates by kind, and the range of its local part."""

    path: str = ""
    data: bytes = b""
    priors: tuple[Values, ...] = ()
    rates: tuple[tuple[str, float], ...] = ()
    range_mm: float = 0.0


def _with_process(written: dict[str, Any], path: str | Path, faults: Faults) -> tuple[dict[str, Any], _Process]:
    """The study's TOML with the tables that it takes from its process file; its own keys win one by one."""
    named = written.get("process")
    if not isinstance(named, str) or not named.strip():
        return written, _Process()
    where = beside(path, named)
    faults = faults.of(shown_path(where))
    before = len(faults.messages)
    toml = read_toml(where, A_PROCESS, faults)
    values = {} if toml is None else read_keys(toml[0], PROCESS_KEYS, "", faults)
    if toml is None or len(faults.messages) > before:
        return {**PLACEHOLDERS, **written}, _Process()
    given = {name: toml[0].get(name, {}) for name in ("model", "noise")}
    merged = {name: {**table, **own} if isinstance(own := written.get(name, {}), dict) else own for name, table in given.items()}
    rates = tuple((item["kind"], item["rate"]) for item in values["read_rate"])
    return {**written, **{name: table for name, table in merged.items() if table}}, _Process(
        shown_path(where), toml[1], tuple(values["prior"]), rates, values["noise"].get("local_range_mm") or 0.0)


def _known_priors(priors: Sequence[Values], given: Model) -> list[TermPrior]:
    """A process file's priors of the terms that the model has; one about other terms says nothing of this study."""
    return [TermPrior(terms, prior["sd"], prior["mean"]) for prior in priors
            if (terms := tuple(name for name in prior["terms"] if name in given.names))]


def _prior(values: Values, given: Model, layout: Layout | None, faults: Faults) -> TermPrior:
    terms = named_terms(values["terms"] or (), given, None if layout is None else layout.grids, f"{values['place']} terms",
                        faults)
    return TermPrior(terms, values["sd"], values["mean"] or 0.0)


def _limit(values: Values, given: Model | None, layout: Layout | None, faults: Faults) -> TermLimit | RegionLimit | None:
    place = values["place"]
    if "polygon_mm" in values["present"] and "region" not in values["present"]:
        values = {**values, "region": "polygon", "present": {*values["present"], "region"}}
    kind = exactly_one(values, ("terms", "region"), faults)
    if kind is None:
        return None
    maximum, foreign = ("max", "position_um") if kind == "terms" else ("position_um", "max")
    if foreign in values["present"]:
        faults.add(f"{place} has {kind} and {foreign}; with {kind} give {maximum}")
    elif maximum not in values["present"]:
        faults.add(f"{place} {maximum} is missing; give the largest k·u allowed")
    if kind == "terms":
        terms = () if given is None else named_terms(values["terms"], given, None if layout is None else layout.grids,
                                                     f"{place} terms", faults)
        return TermLimit(terms, values["max"])
    return _region_limit(values, layout, faults)


def _region_limit(values: Values, layout: Layout | None, faults: Faults) -> RegionLimit | None:
    place, region, polygon = values["place"], values["region"], values["polygon_mm"]
    if region != "polygon" and polygon is not None:
        faults.add(f'{place} has polygon_mm and the region "{region}"; drop one of them')
    if region == "polygon":
        if polygon is None and "polygon_mm" in values["present"]:
            return None
        fault = "is missing" if polygon is None else polygon_fault(polygon)
        if fault:
            faults.add(f"{place} polygon_mm {fault}; list its corners in order along its edge")
            return None
        if layout is not None:
            polygon = counter_clockwise(polygon + np.array(layout.origin_mm))
            if not covered(shrunk(layout.outline_mm, -1e-6), polygon).all():
                faults.warn(f"{place} polygon_mm reaches outside the panel; positions are predicted there all the same")
    elif layout is not None:
        allowed = [*REGIONS, *(f"cells:{grid.name}" for grid in layout.grids)]
        if region not in allowed:
            faults.add(f'{place} region "{region}" is not known; ' + did_you_mean(region, allowed, "give one of "
                                                                                 + ", ".join(allowed)))
    return RegionLimit(region, values["position_um"], polygon, values["of"])


def _some_candidate(layout: Layout, forbidden: Sequence[str], faults: Faults) -> None:
    """Adds a fault when no mark may be measured."""
    marks = layout.marks
    few = marks.take(np.linspace(0, len(marks) - 1, min(len(marks), FEW_MARKS)).astype(int))
    if not np.isin(candidates(replace(layout, marks=few)).sites.id, forbidden).all():
        return
    found = candidates(layout)
    free = ~np.isin(found.sites.id, forbidden)
    if not free.any():
        why = "; ".join([f"{count:,} {reason}" for reason, count in found.counts().items()]
                        + [f"{len(free):,} forbidden"] * bool(len(free)))
        doubt = "".join(f" ({warning})" for warning in faults.warnings if "look like" in warning)
        faults.add(f"no mark may be measured: {why}{doubt}; move marks, or shrink the keep-outs or the edge exclusion")

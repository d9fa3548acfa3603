"""Study files."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np

from sampler.files.faults import Faults, did_you_mean
from sampler.files.layout import layout_file
from sampler.files.model import model, named_terms, potential
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
    whole,
)
from sampler.files.source import beside, read_toml, sha256, shown_path
from sampler.model.basis import Model
from sampler.panel.candidates import candidates
from sampler.panel.layout import Layout
from sampler.panel.outline import counter_clockwise, covered, polygon_fault, shrunk
from sampler.tasks.study import RegionLimit, Rules, SearchOptions, Source, Study, TermLimit, TermPrior
from sampler.uncertainty.noise import Noise

A_STUDY = "a study file (TOML)"
REGIONS = ("panel", "marks", "polygon")
FEW_MARKS = 2000
"""Marks looked at first for whether there is any candidate; all of them only when none of these is."""

KEYS = (
    Key("format", format_number, "format = 1"),
    Key("name", text),
    Key("title", text),
    Key("layout", text, "the path of the layout file, relative to this file"),
    Key("coverage_factor", number(Bounds(above=0)), default=3.0),
    Key("model", table(
        Key("panel", texts, default=()),
        Key("potential", table(
            Key("terms", texts, "terms or families that are perhaps present"),
            Key("sd_um", number(Bounds(above=0)), "their standard deviation"),
        )),
        others=table(Key("shared", texts), Key("each", texts)),
    ), "a table [model]"),
    Key("noise", table(
        Key("mark_um", numbers(2, "[x, y]", Bounds(above=0)), "[x, y], the standard uncertainty of one reading in µm"),
        Key("local_um", numbers(2, "[x, y]", Bounds(at_least=0)), default=(0.0, 0.0)),
        Key("local_range_mm", number(Bounds(above=0))),
    ), "a table [noise]"),
    Key("prior", tables(
        Key("terms", text_or_texts, "names of terms, families or \"all\""),
        Key("sd", number(Bounds(above=0)), "the standard deviation in the term's unit"),
    ), default=[]),
    Key("limit", tables(
        Key("terms", text_or_texts),
        Key("max", number(Bounds(above=0))),
        Key("region", text),
        Key("polygon_mm", points(3)),
        Key("position_um", number(Bounds(above=0))),
        Key("of", one_of("correction", "displacement"), default="correction"),
        least=1,
    ), "at least one table [[limit]]"),
    Key("rules", table(
        Key("required", texts, default=()),
        Key("forbidden", texts, default=()),
        Key("max_sites", whole(Bounds(at_least=1))),
    )),
    Key("search", table(
        Key("seconds", number(Bounds(above=0)), default=60.0),
        Key("seed", whole(Bounds(at_least=0)), default=1),
    )),
)


def read_study(path: str | Path) -> Study:
    """The study of a TOML file with its layout. Raises InputError with every fault of all their files together."""
    faults = Faults(shown_path(path))
    toml = read_toml(path, A_STUDY, faults)
    values = {} if toml is None else read_keys(toml[0], KEYS, "", faults)
    read = layout_file(beside(path, values["layout"]), faults) if values.get("layout") else None
    layout = None if read is None else read.layout
    given = model(values["model"], None if layout is None else layout.grids, faults) if values.get("model") else None
    perhaps = potential(values["model"]["potential"], given, faults) if given is not None else None
    priors = [_prior(prior, given, layout, faults) for prior in values.get("prior") or [] if given is not None]
    limits = [_limit(limit, given, layout, faults) for limit in values.get("limit") or []]
    rules = _rules(values.get("rules"), layout, faults)
    if layout is not None:
        _some_candidate(layout, rules.forbidden, faults.of(read.source.path if read else ""))
    faults.close()
    assert toml is not None and read is not None and layout is not None and given is not None
    noise, search = values["noise"], values["search"]
    return Study(
        values["title"] or values["name"] or Path(path).stem, layout, given,
        Noise(noise["mark_um"], noise["local_um"], noise["local_range_mm"]),
        tuple(limit for limit in limits if limit is not None), values["coverage_factor"], rules,
        SearchOptions(search["seconds"], search["seed"]) if search else SearchOptions(),
        priors=tuple(priors), potential=perhaps, source=Source(shown_path(path), sha256(toml[1])), layout_source=read.source,
        warnings=tuple(dict.fromkeys(faults.warnings)))


def _prior(values: Values, given: Model, layout: Layout | None, faults: Faults) -> TermPrior:
    terms = named_terms(values["terms"] or (), given, None if layout is None else layout.grids, f"{values['place']} terms",
                        faults)
    return TermPrior(terms, values["sd"])


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


def _rules(values: Values | None, layout: Layout | None, faults: Faults) -> Rules:
    """The rules, checked against the marks of the layout."""
    if values is None:
        return Rules()
    required, forbidden, most = values["required"] or (), values["forbidden"] or (), values["max_sites"]
    for name in [name for name in required if name in forbidden]:
        faults.add(f'[rules] required "{name}" is also forbidden; drop it from one of the two')
    if most is not None and len(required) > most:
        faults.add(f"[rules] max_sites is {most}, but {len(required)} sites are required; raise it to at least "
                   f"{len(required)}")
    if layout is not None:
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
    return Rules(required, forbidden, most)


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

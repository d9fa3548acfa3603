"""Results as text, and result folders that are written whole or not at all."""

from __future__ import annotations

import csv
import io
import json
import math
import os
import secrets
import shutil
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler import __version__
from sampler.errors import InputError
from sampler.files.source import shown_path
from sampler.panel.layout import Layout, Sites
from sampler.route.machine import SIDES, to_machine_frame
from sampler.route.visit import Route
from sampler.tasks.advise import notes
from sampler.tasks.results import Audit, AuditedLimit, MissChance, Plan, SiteAudit
from sampler.tasks.study import Study

RESULT_FILES = ("plan.json", "certificate.json", "audit.json", "sites.csv", "map.png", "map.svg")
"""Files that a result consists of: a new result in the same folder replaces or removes them all."""
COORDINATE_DIGITS = 9
"""Digits after the point of mm: the noise of moving the origin goes, a femtometre stays."""
SECOND_DIGITS = 3
NOT_DETERMINED = "not determined by these sites"
BEFORE, AFTER, READY = ".sampler-before-", ".sampler-after-", ".sampler-ready-"


def plan_json(plan: Plan) -> str:
    """A plan as JSON, format 1. When the limits cannot be met there are no sites, and `terms` and `limits` say what all
    candidates together would reach. Numbers that do not exist are null, with a `reason` where one is needed."""
    cannot = plan.status == "cannot"
    sites = plan.sites.take(np.zeros(0, np.int64)) if cannot else plan.sites
    return json_text({
        **_provenance(plan.study), **_certificate(plan.certificate), "candidates": len(plan.candidates.sites),
        "n_sites": len(sites),
        "lower_bound": _finite(plan.lower_bound), "fewest_proven": plan.fewest_proven, "status": plan.status,
        "log_det": None if cannot else _finite(plan.audit.log_det),
        "d_efficiency_at_least": _finite(plan.d_efficiency_at_least),
        "meets_limits": not cannot and plan.audit.meets_limits,
        "predicted_with": "all candidates" if cannot else "sites", **_audited(plan.study.layout, plan.audit),
        **_chance(plan.chance), **_panel(plan.study, plan.route, seconds_at_least=_finite(plan.seconds_at_least)),
        **_stops(plan), "sites": _sites(plan.study, sites, plan.stop, None if cannot else plan.at_s),
        "not_candidates": plan.candidates.counts(), "advice": list(plan.advice), "notes": list(notes(plan.study)),
        "warnings": list(plan.warnings), "interrupted": plan.interrupted,
        "seconds": round(plan.seconds, 3), "seed": plan.study.search.seed})


def audit_json(result: SiteAudit) -> str:
    """The audit of a given site list as JSON, format 1; `fewest` is what a plan would need."""
    fewest = result.fewest
    add = result.best_to_add
    return json_text({
        **_provenance(result.study), "candidates": len(result.candidates.sites), "n_sites": len(result.audit.sites),
        "meets_limits": result.audit.meets_limits, "log_det": _finite(result.audit.log_det),
        "d_efficiency": _finite(result.d_efficiency), "droppable": list(result.droppable),
        "best_to_add": None if add is None else {"id": add[0], "worst_ratio": _finite(add[1])},
        "fewest": None if fewest is None else {
            "status": fewest.status, "n_sites": None if fewest.status == "cannot" else len(fewest.sites),
            "lower_bound": _finite(fewest.lower_bound), "fewest_proven": fewest.fewest_proven},
        **_audited(result.study.layout, result.audit), **_chance(result.chance),
        **_panel(result.study, result.route, quickest=None if result.quickest is None else _rounded(result.quickest.seconds)),
        "sites": _sites(result.study, result.audit.sites, None, result.at_s),
        "notes": list(notes(result.study)), "warnings": list(result.warnings)})


def sites_csv(result: Plan | SiteAudit, frame: str = "panel") -> str:
    """The site list in visiting order; only its header when there is no plan.

    `frame` "panel": in the layout's own frame; "machine": as the study's machine sees the panel, turned over for the far
    side. Stops and the second of each read are listed when the study has them.
    """
    study, sites = result.study, result.audit.sites
    stop = at_s = None
    if isinstance(result, Plan) and result.status == "cannot":
        sites = sites.take(np.zeros(0, np.int64))
    else:
        stop = result.stop if isinstance(result, Plan) else None
        at_s = result.at_s if study.machine_stated else None
    axes = ("x_mm", "y_mm") if frame == "panel" else ("machine_x_mm", "machine_y_mm")
    far = sites.side == SIDES[1]
    columns: dict[str, list[Any]] = {"order": list(range(1, len(sites) + 1)), "id": sites.id.tolist()}
    columns |= dict(zip(axes, _framed(study, sites.xy_mm, far, frame).T.tolist(), strict=True))
    columns |= {"side": sites.side.tolist(), "kind": sites.kind.tolist()}
    if stop is not None and isinstance(result, Plan) and result.stop_xy_mm is not None:
        stands = _framed(study, result.stop_xy_mm[stop - 1], far, frame)
        columns |= {"stop": stop.tolist(), **dict(zip((f"stop_{axis}" for axis in axes), stands.T.tolist(), strict=True))}
    if at_s is not None:
        columns["at_s"] = [_rounded(value) for value in at_s]
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(zip(*columns.values(), strict=True))
    return out.getvalue()


def _framed(study: Study, xy_mm: NDArray[np.float64], far: NDArray[np.bool_], frame: str) -> NDArray[np.float64]:
    if frame == "panel":
        return _own_frame(study.layout, xy_mm)
    size = (study.layout.width_mm, study.layout.height_mm)
    return np.round(to_machine_frame(xy_mm, study.machine, size, far), COORDINATE_DIGITS) + 0.0


def _own_frame(layout: Layout, xy_mm: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.round(np.asarray(xy_mm, float) - layout.origin_mm, COORDINATE_DIGITS) + 0.0  # + 0.0: no negative zero


def _sites(study: Study, sites: Sites, stop: NDArray[np.int64] | None,
           at_s: NDArray[np.float64] | None) -> list[dict[str, Any]]:
    listed: list[dict[str, Any]] = [{"id": name, "x_mm": x, "y_mm": y, "order": order} for order, (name, (x, y)) in
                                    enumerate(zip(sites.id.tolist(), _own_frame(study.layout, sites.xy_mm).tolist(),
                                                  strict=True), 1)]
    if stop is not None:
        listed = [site | {"stop": int(number)} for site, number in zip(listed, stop, strict=True)]
    if study.machine_stated and at_s is not None:
        listed = [site | {"at_s": _rounded(second)} for site, second in zip(listed, at_s, strict=True)]
    return listed


def _stops(plan: Plan) -> dict[str, Any]:
    if plan.stop_xy_mm is None:
        return {}
    return {"n_stops": plan.units, "stops": [{"stop": number, "x_mm": x, "y_mm": y} for number, (x, y) in
                                             enumerate(_own_frame(plan.study.layout, plan.stop_xy_mm).tolist(), 1)]}


def _panel(study: Study, route: Route | None, **more: float | None) -> dict[str, Any]:
    """Where the seconds of one panel go, when the study states its machine."""
    if route is None or not study.machine_stated:
        return {}
    parts = {"seconds": route.seconds, "travel_s": route.travel_s, "read_s": route.read_s, "flip_s": route.flip_s,
             "handling_s": route.handling_s, "travel_at_least_s": route.travel_at_least_s}
    return {"panel": {name: _rounded(value) for name, value in parts.items()} | more}


def _chance(chance: MissChance | None) -> dict[str, Any]:
    if chance is None:
        return {}
    return {"miss_chance": {"at_least": chance.least, "at_most": chance.most, "simulated_panels": chance.panels}}


def _rounded(seconds: float) -> float:
    return round(float(seconds), SECOND_DIGITS)


def _provenance(study: Study) -> dict[str, Any]:
    return {"format": 1, "version": __version__, "title": study.title,
            "study": {"path": study.source.path, "sha256": study.source.sha256},
            "layout": {"path": study.layout_source.path, "sha256": study.layout_source.sha256},
            "coverage_factor": study.coverage_factor}


def _certificate(certificate: dict[str, Any]) -> dict[str, Any]:
    """Which certificate.json goes with the plan; nothing when its proof was not stated."""
    return {"certificate": {"sha256": certificate["sha256"]}} if "sha256" in certificate else {}


def _audited(layout: Layout, audit: Audit) -> dict[str, Any]:
    biased = any(term.bias > 0 for term in audit.terms)
    return {"terms": [{"name": term.name, "unit": term.unit, **_known("k_u", term.k_u)}
                      | ({"bias": term.bias} if biased else {}) for term in audit.terms],
            "limits": [_limit(layout, limit) for limit in audit.limits], **({"lost": audit.lost} if audit.lost else {}),
            "worst_position": _limit(layout, audit.worst_position)}


def _limit(layout: Layout, limit: AuditedLimit) -> dict[str, Any]:
    written = {"label": limit.label, "max": _finite(limit.maximum), **_known("predicted", limit.predicted),
               "unit": limit.unit, "ratio": _finite(limit.ratio)}
    if not math.isnan(limit.after_loss):
        written |= {"after_loss": _finite(limit.after_loss)}
    if math.isfinite(limit.floor):
        written |= {"floor": limit.floor}
    if limit.where_mm is not None:
        written["where_mm"] = _own_frame(layout, np.array(limit.where_mm)).tolist()
    return written | ({"axis": limit.axis} if limit.axis else {})


def _finite(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _known(name: str, value: float) -> dict[str, Any]:
    """A number by name; null with the reason when it is infinite."""
    return {name: _finite(value)} | ({} if math.isfinite(value) else {"reason": NOT_DETERMINED})


def json_text(values: dict[str, Any]) -> str:
    """JSON with one line for each key and for each item of a list of objects."""
    lines = []
    for key, value in values.items():
        if isinstance(value, list) and value and isinstance(value[0], dict):
            items = ",\n".join("  " + json.dumps(item, ensure_ascii=False, allow_nan=False) for item in value)
            lines.append(f"{json.dumps(key)}: [\n{items}\n ]")
        else:
            lines.append(f"{json.dumps(key)}: {json.dumps(value, ensure_ascii=False, allow_nan=False)}")
    return "{" + ",\n ".join(lines) + "}\n"


def write_results(folder: str | Path, files: Mapping[str, bytes | str], *, must_be_new: bool = False) -> None:
    """Writes a result, all its files or none; an existing result in the folder is replaced whole or not at all.

    `must_be_new`: refuses when one of the files is there already, for files that people go on to edit.

    A new folder is built beside its place and then renamed. In a folder that exists, the new files are first written
    and flushed to a folder inside it; then the old result's files (those in `files`, and for a plan or an audit all
    `RESULT_FILES`) move away, the new ones in, and the first of `files` comes last, so that whoever reads it finds all the
    others. Other files are never touched. A failure puts the old files back; what a killed process left is put right by
    the next call.
    Raises InputError when the folder cannot be written.
    """
    target = Path(folder)
    if must_be_new and (there := [name for name in files if os.path.lexists(target / name)]):
        raise InputError(f"{shown_path(target / there[0])} exists and may have been edited; give another folder with --out, or "
                         "remove it first")
    try:
        if target.is_dir():
            _recover(target)
            _replace(target, files)
        elif target.exists() or target.is_symlink():
            raise InputError(f"{shown_path(target)}: this is a file; give a folder with --out")
        else:
            target.parent.mkdir(parents=True, exist_ok=True)
            _create(target, files)
    except OSError as error:
        raise InputError(f"{shown_path(error.filename or target)}: cannot be written ({error.strerror or error}); choose "
                         "another folder with --out, or close what holds its files open") from error


def _create(target: Path, files: Mapping[str, bytes | str]) -> None:
    new = _new_folder(target.parent, f".{target.name}-")
    try:
        _write_all(new, files)
        os.rename(new, target)
        _flush(target.parent)
    except BaseException:
        shutil.rmtree(new, ignore_errors=True)
        raise


def _replace(target: Path, files: Mapping[str, bytes | str]) -> None:
    after = _new_folder(target, AFTER)
    before = ready = None
    moved: list[str] = []
    try:
        _write_all(after, files)
        before = _new_folder(target, BEFORE)
        for name in dict.fromkeys([*files, *(RESULT_FILES if set(files) & set(RESULT_FILES) else ())]):
            if os.path.lexists(target / name):
                os.rename(target / name, before / name)
        ready = target / after.name.replace(AFTER, READY)
        os.rename(after, ready)  # from here on a killed process is finished by the next call, before here it is undone
        for name in reversed(list(files)):
            os.rename(ready / name, target / name)
            moved.append(name)
        _flush(target)
    except BaseException:
        for name in moved:
            os.unlink(target / name)
        if before is not None:
            _move_out(before, target)
        for leftover in (after, ready):
            if leftover is not None:
                shutil.rmtree(leftover, ignore_errors=True)
        raise
    shutil.rmtree(before, ignore_errors=True)
    shutil.rmtree(ready, ignore_errors=True)  # last: without it the old files would count as to be put back


def _recover(target: Path) -> None:
    """Puts right what a killed process left: undone when its new files were not all ready, finished when they were."""
    for ready in target.glob(READY + "*"):
        _move_out(ready, target)
        _remove(target, BEFORE)
    for before in target.glob(BEFORE + "*"):
        _move_out(before, target)
    _remove(target, AFTER)


def _remove(target: Path, prefix: str) -> None:
    for folder in target.glob(prefix + "*"):
        shutil.rmtree(folder)


def _move_out(folder: Path, target: Path) -> None:
    for entry in sorted(folder.iterdir()):
        os.replace(entry, target / entry.name)
    folder.rmdir()


def _new_folder(parent: Path, prefix: str) -> Path:
    """A new folder with the rights that the user's folders get."""
    folder = parent / f"{prefix}{secrets.token_hex(4)}"
    folder.mkdir()
    return folder


def _write_all(folder: Path, files: Mapping[str, bytes | str]) -> None:
    for name, content in files.items():
        with open(folder / name, "wb") as file:
            file.write(content.encode() if isinstance(content, str) else content)
            file.flush()
            os.fsync(file.fileno())
    _flush(folder)


def _flush(folder: Path) -> None:
    """Makes names in a folder last through a power cut, where the system can."""
    if hasattr(os, "O_DIRECTORY"):
        handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)

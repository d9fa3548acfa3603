"""Re-planning: the old plan's sites, the study with its layout replaced, and the change written down."""

from __future__ import annotations

import csv
import io
import os
import re
import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np

from sampler.errors import InputError
from sampler.files.output import json_text, plan_json
from sampler.files.plan import PlanFile
from sampler.files.source import shown_path
from sampler.files.study import read_study
from sampler.tasks.replan import Replanned
from sampler.tasks.study import Study

PATH_KEY = re.compile(r'^(\s*(layout|process)\s*=\s*)("(?:[^"\\]|\\.)*"|\'[^\']*\')', re.MULTILINE)


def old_sites(plan: PlanFile) -> tuple[tuple[str, ...], np.ndarray]:
    """Ids and places (n, 2), in the layout's own frame, of a written plan's sites. Raises InputError when it has none."""
    try:
        own = np.array([[float(site["x_mm"]), float(site["y_mm"])] for site in plan.values["sites"]]).reshape(-1, 2)
    except (KeyError, TypeError, ValueError) as error:
        raise InputError(f"{shown_path(plan.path)}: a site without x_mm or y_mm; plan again") from error
    if not len(own):
        raise InputError(f"{shown_path(plan.path)}: this plan "
                         "has no sites (its limits could not be met); plan the new layout anew")
    return plan.ids, own


def study_on(study: str | Path, layout: str | Path, folder: str | Path) -> tuple[Study, str]:
    """The study with another layout, as if it lay in `folder`, and its text to be written there as study.toml.

    Paths in it are turned to be relative to the folder. Raises InputError with every fault.
    """
    study, folder = Path(study), Path(folder)
    read_study(study)  # whatever is wrong with the study itself is said of its own file
    text = study.read_text(encoding="utf-8-sig")

    def moved(found: re.Match[str]) -> str:
        target = Path(layout) if found[2] == "layout" else study.parent / found[3][1:-1]
        try:
            target = Path(os.path.relpath(target.resolve(), folder.resolve()))
        except ValueError:  # another drive
            target = target.resolve()
        return f'{found[1]}"{target.as_posix()}"'

    head, table, rest = text.partition("\n[")
    changed = PATH_KEY.sub(moved, head) + table + rest
    folder.resolve().parent.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory(dir=folder.resolve().parent) as beside:
        place = Path(beside) / "study.toml"
        place.write_text(changed, encoding="utf-8", newline="\n")
        try:
            read = read_study(place)
        except InputError as error:
            raise InputError(fault.replace(shown_path(place), f"{shown_path(study)} with {layout}") for fault in error.faults) \
                from error
    source = replace(read.source, path=(folder / "study.toml").as_posix())
    return replace(read, source=source, layout_source=replace(read.layout_source, path=Path(layout).as_posix())), changed


def replan_json(result: Replanned) -> str:
    """What changed and what is proven of it; plan.json beside it is the plan itself."""
    before = result.before
    return json_text({
        "format": 1, "question": "fewest new sites" if result.fewest_new else "fewest sites, most kept",
        "n_sites": len(result.plan.sites) if result.plan.status != "cannot" else 0, "fewest_proven": result.plan.fewest_proven,
        **{what: result.count(what) for what in ("kept", "moved", "dropped", "added")},
        "new_at_least": result.new_at_least, "fewest_new_proven": result.new_proven, "tolerance_mm": result.tolerance_mm,
        "old_sites_worst_ratio": None if before is None or not np.isfinite(before.worst.ratio) else before.worst.ratio,
        "old_sites_meet_limits": before is not None and before.meets_limits,
        "changes": [{"what": change.what, "id": change.id, "old_mm": change.old_mm, "new_mm": change.new_mm,
                     "reason": change.reason} for change in result.changes]})


def change_csv(result: Replanned) -> str:
    """One line for each site kept, moved, dropped or added, in the layout's own frame."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["what", "id", "old_x_mm", "old_y_mm", "x_mm", "y_mm", "reason"])
    for change in result.changes:
        writer.writerow([change.what, change.id, *(change.old_mm or ("", "")), *(change.new_mm or ("", "")), change.reason])
    return out.getvalue()


def replan_files(result: Replanned, study_text: str) -> dict[str, bytes | str]:
    """Everything but the pictures: plan.json first, since it is what a reader waits for."""
    return {"plan.json": plan_json(result.plan), "replan.json": replan_json(result), "change.csv": change_csv(result),
            "study.toml": study_text}

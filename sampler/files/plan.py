"""plan.json read back."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from sampler.errors import InputError
from sampler.files.faults import Faults
from sampler.files.schema import Key, format_number, read_keys, table, tables, text
from sampler.files.source import read_bytes, shown_path
from sampler.files.study import read_study
from sampler.panel.layout import Sites
from sampler.tasks.study import Source, Study

A_PLAN = "the plan.json of a result, or its folder"
SOURCE = table(Key("path", text, "the path of the file"), Key("sha256", text, "its SHA-256"))
KEYS = (
    Key("format", format_number, "format = 1"),
    Key("version", text, "the version that wrote it"),
    Key("study", SOURCE, "the study's path and sha256"),
    Key("layout", SOURCE, "the layout's path and sha256"),
    Key("sites", tables(Key("id", text, "the id of the mark")), "the list of sites"),
)
"""What every command needs of a plan; a plan holds more, which `PlanFile.values` gives as it stands."""


@dataclass(frozen=True, slots=True)
class PlanFile:
    """A written plan: ids in visiting order, what it was made from, and everything it says as plain JSON `values`."""

    path: Path
    ids: tuple[str, ...]
    study: Source
    layout: Source
    version: str
    values: dict[str, Any]

    def study_path(self) -> Path:
        """Where the study lies now: its recorded path from the working directory, else from the plan's folder or the
        nearest folder above it where that path exists."""
        recorded = Path(self.study.path)
        above = [folder / recorded for folder in self.path.resolve().parents]
        return next((path for path in [recorded, *above] if path.is_file()), recorded)

    def sites_of(self, study: Study) -> Sites:
        """The plan's marks in visiting order. Raises InputError when the layout no longer has them."""
        marks = study.layout.marks
        row_of = {name: row for row, name in enumerate(marks.id.tolist())}
        gone = [name for name in self.ids if name not in row_of]
        if gone:
            raise InputError(f"{shown_path(self.path)}: {len(gone)} of {len(self.ids)} sites, \"{gone[0]}\" first, are not in "
                             f"the layout {study.layout_source.path}; plan again")
        return marks.take(np.array([row_of[name] for name in self.ids], np.int64))


def read_plan(path: str | Path) -> PlanFile:
    """The plan in a plan.json, or in the folder that holds it. Raises InputError with every fault."""
    path = Path(path)
    if path.is_dir():
        path = path / "plan.json"
    faults = Faults(shown_path(path))
    data = read_bytes(path, A_PLAN, faults)
    faults.close()
    assert data is not None
    try:
        written = json.loads(data.decode("utf-8-sig"), parse_constant=_no_constant)
    except (ValueError, RecursionError) as error:
        faults.add(f"this is not JSON: {error}; plan again")
        written = {}
    if not isinstance(written, dict):
        faults.add(f"this holds no plan; give {A_PLAN}")
    faults.close()
    needed: dict[str, Any] = {key.name: written[key.name] for key in KEYS if key.name in written}
    if isinstance(needed.get("sites"), list):
        needed["sites"] = [{"id": site["id"]} if isinstance(site, dict) and "id" in site else site
                           for site in needed["sites"]]
    values = read_keys(needed, KEYS, "", faults)
    ids = [site["id"] for site in values["sites"] or []]
    if len(set(ids)) < len(ids):
        faults.add("a site is listed more than once; plan again")
    faults.close()
    return PlanFile(path, tuple(ids), Source(**values["study"]), Source(**values["layout"]), values["version"], written)


def planned(path: str | Path) -> tuple[Study, Sites | None]:
    """The study of a plan, with its sites in visiting order, or of a study file, without."""
    if not (Path(path).is_dir() or Path(path).suffix.lower() == ".json"):
        return read_study(path), None
    plan = read_plan(path)
    study = read_study(plan.study_path())
    return study, plan.sites_of(study)


def _no_constant(name: str) -> float:
    raise ValueError(f"{name} is not a JSON number")

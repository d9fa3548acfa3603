"""A folder of results read back for its report page: the plan's claims and the verification beside it."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

from sampler.errors import InputError
from sampler.files.faults import Faults
from sampler.files.plan import PlanFile
from sampler.files.source import read_bytes, shown_path
from sampler.tasks.review import Claims, Verdict
from sampler.tasks.study import Study

VERIFICATION = "verify.json"


def claims_of(plan: PlanFile, study: Study) -> Claims:
    """What plan.json says that only another search could find again. Raises InputError when it is damaged."""
    values = plan.values
    try:
        origin_x, origin_y = study.layout.origin_mm
        stops = tuple((stop["x_mm"] + origin_x, stop["y_mm"] + origin_y) for stop in values.get("stops", ()))
        return Claims(
            str(values["status"]), _number(values["lower_bound"]), _number(values["d_efficiency_at_least"]),
            float(values["seconds"]), plan.study, plan.layout, tuple(values["advice"]), tuple(values["warnings"]),
            bool(values["interrupted"]), tuple(int(site["stop"]) for site in values["sites"]) if stops else (), stops,
            _number(values.get("panel", {}).get("seconds_at_least")))
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise InputError(f"{shown_path(plan.path)}: damaged, {type(error).__name__}: {error}; plan again") from error


def _number(value: Any) -> float:
    return math.nan if value is None else float(value)


def read_verdict(folder: str | Path) -> Verdict | None:
    """What `verify` said of the plan in a folder, if it did."""
    try:
        if (verification := _optional(Path(folder) / VERIFICATION)) is not None:
            return Verdict(bool(verification["held"]), str(verification["summary"]), tuple(verification["findings"]))
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise InputError(f"{shown_path(Path(folder) / VERIFICATION)}: damaged, {type(error).__name__}: {error}; verify again or "
                         "remove it") from error
    return None


def _optional(path: Path) -> Any:
    if not path.is_file():
        return None
    faults = Faults(shown_path(path))
    data = read_bytes(path, "a JSON file", faults)
    faults.close()
    assert data is not None
    return json.loads(data)

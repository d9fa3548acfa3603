"""A folder of results read back for its report page: the plan's claims, the trade-off and the verification beside it."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

from sampler.errors import InputError
from sampler.files.faults import Faults
from sampler.files.plan import PlanFile
from sampler.files.source import read_bytes, shown_path
from sampler.tasks.review import Claims, TradeOffPoint, Verdict
from sampler.tasks.study import Study

TRADE_OFF, VERIFICATION = "tradeoff.json", "verify.json"


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


def read_beside(folder: str | Path) -> tuple[tuple[TradeOffPoint, ...], Verdict | None]:
    """The trade-off's points and the verification's verdict in a folder, as far as they are there."""
    points: tuple[TradeOffPoint, ...] = ()
    verdict = None
    try:
        if (trade_off := _optional(Path(folder) / TRADE_OFF)) is not None:
            points = tuple(TradeOffPoint(tuple(point["ids"]), _number(point["ratio_at_least"]))
                           for point in trade_off["curves"][0]["points"] if point["ids"])
        if (verification := _optional(Path(folder) / VERIFICATION)) is not None:
            verdict = Verdict(bool(verification["held"]), str(verification["summary"]), tuple(verification["findings"]))
    except (KeyError, TypeError, ValueError, AttributeError, IndexError) as error:
        raise InputError(f"{shown_path(Path(folder))}: {TRADE_OFF} or {VERIFICATION} is damaged, {type(error).__name__}: "
                         f"{error}; make it again or remove it") from error
    return points, verdict


def _optional(path: Path) -> Any:
    if not path.is_file():
        return None
    faults = Faults(shown_path(path))
    data = read_bytes(path, "a JSON file", faults)
    faults.close()
    assert data is not None
    return json.loads(data)

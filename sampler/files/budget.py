"""Reading a budget file, and writing the worked-out budget."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

from sampler.errors import InputError
from sampler.files.faults import Faults
from sampler.files.schema import Bounds, Key, Values, format_number, number, read_keys, table, tables, text
from sampler.files.source import read_bytes, read_toml, sha256, shown_path
from sampler.tasks.budget import Blame, Budget, BudgetResult, Channel, Contributor
from sampler.tasks.study import Source

LONGEST_UM = 1e9
"""A kilometre: beyond any panel, and far from where sums of squares overflow."""
DIAMETER = number(Bounds(above=0, at_most=LONGEST_UM))
SIGMA = number(Bounds(at_least=0, at_most=LONGEST_UM))
FACTOR = number(Bounds(above=0, at_most=100))

CONTRIBUTOR = [Key("name", text, "a name of its own"), Key("mean_um", number(Bounds(at_least=-LONGEST_UM, at_most=LONGEST_UM))),
               Key("sigma_um", SIGMA), Key("k_sigma_um", SIGMA), Key("coverage_factor", FACTOR)]
CHANNEL = [Key("pitch_um", DIAMETER, "the distance between pad centres"), Key("line_um", DIAMETER, "the width of a line"),
           Key("space_um", DIAMETER, "the space between lines and to pads")]
BUDGET = [Key("format", format_number, "format = 1"), Key("name", text),
          Key("via_um", DIAMETER, "the diameter of the via"), Key("pad_um", DIAMETER, "the diameter of its pad"),
          Key("required_ring_um", SIGMA, default=0.0), Key("coverage_factor", FACTOR, default=3.0),
          Key("contributor", tables(*CONTRIBUTOR), default=()), Key("channel", table(*CHANNEL))]
A_PLAN = "the plan.json or audit.json of a plan with sites"
SMALLEST_PAD_UM = 1.0
"""A smaller pad was probably given in mm."""


def read_budget(path: str | Path) -> Budget:
    """The budget of a TOML file. Raises InputError with every fault."""
    faults = Faults(shown_path(path))
    read = read_toml(path, "a budget file (TOML)", faults)
    faults.close()
    assert read is not None
    content, data = read
    values = read_keys(content, BUDGET, "", faults)
    contributors = _contributors(values, faults)
    via, pad, channel = values["via_um"], values["pad_um"], values["channel"]
    if via is not None and pad is not None:
        if pad <= via:
            faults.add(f"pad_um {pad:g} is not larger than via_um {via:g}; give a pad that is larger than its via"
                       + (", or swap the two" if pad < via else ""))
        elif pad < SMALLEST_PAD_UM:
            faults.warn(f"pad_um {pad:g} looks like mm; every length of a budget is in µm")
    if channel is not None and channel["pitch_um"] is not None and pad is not None and channel["pitch_um"] <= pad:
        faults.add(f"[channel] pitch_um {channel['pitch_um']:g} is not larger than pad_um {pad:g}, so that pads would touch; "
                   "give the distance between the centres of neighbouring pads")
    faults.close()
    return Budget(values["name"] or Path(path).stem, via, pad, values["required_ring_um"], contributors,
                  values["coverage_factor"], None if channel is None else Channel(**channel),
                  Source(shown_path(path), sha256(data)), tuple(faults.warnings))


def read_position(path: str | Path) -> tuple[float, float]:
    """The worst predicted position k·u in µm of a plan.json or audit.json, infinite when not determined, and its k.

    Raises InputError.
    """
    faults = Faults(shown_path(path))
    data = read_bytes(path, A_PLAN, faults)
    faults.close()
    assert data is not None
    try:
        content = json.loads(data)
        worst, k = content["worst_position"]["predicted"], content["coverage_factor"]
        k_u = math.inf if worst is None else float(worst)
        if not (k_u >= 0 and float(k) > 0 and math.isfinite(k)):
            raise ValueError
    except (ValueError, TypeError, KeyError) as error:
        raise InputError(f"{shown_path(path)}: this holds no worst_position with its coverage_factor; give {A_PLAN}") from error
    if content.get("status") == "cannot":
        raise InputError(f"{shown_path(path)}: this plan found that its limits cannot be met and has no sites; give one that has")
    return k_u, float(k)


def _contributors(values: Values, faults: Faults) -> tuple[Contributor, ...]:
    """The contributors; `k_sigma_um` is k times sigma with its own or the budget's coverage factor."""
    items = []
    first: dict[str, str] = {}
    for item in values["contributor"] or ():
        name, place = item["name"], item["place"]
        if name is not None and first.setdefault(name, place) != place:
            faults.add(f'{place} name "{name}" is also the name of {first[name]}; give each contributor its own')
        mean, sigma, k_sigma, k = (item[key] for key in ("mean_um", "sigma_um", "k_sigma_um", "coverage_factor"))
        if sigma is not None and k_sigma is not None:
            faults.add(f"{place} has sigma_um and k_sigma_um; give one of them")
        elif mean is None and sigma is None and k_sigma is None:
            faults.add(f"{place} has none of mean_um, sigma_um, k_sigma_um; give at least one")
        if k is not None and k_sigma is None:
            faults.add(f"{place} has coverage_factor without k_sigma_um; give k_sigma_um or leave coverage_factor out")
        if k_sigma is not None:
            k = k or values["coverage_factor"]
            sigma = k_sigma / k if k else None
        items.append(Contributor(name or "", mean or 0.0, sigma or 0.0))
    return tuple(items)


def budget_json(result: BudgetResult) -> str:
    """The worked-out budget as JSON; null stands for what does not exist or is not determined."""
    asked, plan = result.budget, result.supported
    content: dict[str, Any] = {
        "format": 1, "budget": {"path": asked.source.path, "sha256": asked.source.sha256}, "name": asked.name,
        "coverage_factor": asked.coverage_factor, "via_um": asked.via_um, "pad_um": asked.pad_um,
        "required_ring_um": asked.ring_um, "tolerance_um": asked.tolerance_um, "mean_um": asked.mean_um,
        "k_sigma_um": asked.coverage_factor * asked.sigma_um, "spent_um": float(asked.spent_um()),
        "spent_without_sampling": result.spent, "position_limit_um": _finite(result.position_limit_um),
        "smallest_pad_without_sampling_um": float(asked.smallest_pad_um()), "lines": result.lines,
        "contributors": [{"name": eater.name, "mean_um": eater.mean_um, "k_sigma_um": eater.k_sigma_um,
                          "quoted_um": eater.quoted_um, "mean_share": eater.mean_share,
                          "variance_share": eater.variance_share, "saves_um": eater.saves_um} for eater in result.eaters],
        "blame": _blame(result.blame),
        "next_line": None if result.next_line is None else {
            "lines": result.next_line.lines, "pad_um": result.next_line.pad_um,
            "position_limit_um": _finite(result.next_line.position_limit_um)},
        "plan": None if plan is None else {
            "k_u_um": _finite(plan.k_u_um), "spent_um": _finite(plan.spent_um), "fits": result.fits,
            "smallest_pad_um": _finite(plan.smallest_pad_um), "lines": plan.lines, "blame": _blame(plan.blame)},
        "warnings": list(asked.warnings)}
    return json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n"


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _blame(blame: Blame | None) -> dict[str, Any] | None:
    return None if blame is None else {"name": blame.name, "must_shrink_to": _finite(blame.factor), "over_um": blame.over_um}

"""What a written plan claims, and the witness's findings as JSON."""

from __future__ import annotations

import math
from typing import Any, TypeGuard

import numpy as np
from numpy.typing import NDArray

from sampler import __version__
from sampler.errors import InputError
from sampler.files.characterise import finite, finites
from sampler.files.output import json_text
from sampler.files.plan import PlanFile
from sampler.files.source import shown_path
from sampler.tasks.study import Study
from sampler.tasks.verify import FALSE_ALARM, Claim, Verification


def claims_of(plan: PlanFile, study: Study) -> tuple[Claim, ...]:
    """The plan's predicted uncertainties: each term, and each position limit at its worst place. Raises InputError."""
    faults: list[str] = []
    where = shown_path(plan.path)
    if not plan.ids or plan.values.get("status") == "cannot":
        raise InputError(f"{where}: this plan has no sites, so there is nothing to verify; its limits cannot be met")
    claims = []
    limits = [item for item in _list(plan, "limits") if isinstance(item, dict)]
    names = set(study.model.names)
    most = {item.get("label"): item.get("max") for item in limits}
    for term in _list(plan, "terms"):
        name, k_u = (term.get("name"), term.get("k_u")) if isinstance(term, dict) else (None, None)
        if name not in names or not _positive(k_u):
            faults.append(f"{where}: terms: {name!r} with k_u {k_u!r} is not a term of the study with its k·u; plan again")
            continue
        maximum = most.get(name)
        claims.append(Claim(str(name), str(term.get("unit", "")), float(k_u), float(maximum) if _positive(maximum) else math.nan))
    for limit in limits:
        if "where_mm" not in limit:
            continue
        place, k_u, axis = limit["where_mm"], limit.get("predicted"), limit.get("axis")
        if not (isinstance(place, list) and len(place) == 2 and all(isinstance(x, int | float) for x in place) and _positive(k_u)
                and axis in ("dx", "dy")):
            faults.append(f"{where}: limits: {limit.get('label')!r} has no place, axis or predicted k·u; plan again")
            continue
        x, y = (np.asarray(place, float) + study.layout.origin_mm).tolist()
        claims.append(Claim(str(limit.get("label")), "µm", float(k_u), float(limit.get("max") or math.nan), (x, y),
                            ("dx", "dy").index(axis)))
    if not claims and not faults:
        faults.append(f"{where}: the plan claims nothing; plan again")
    if faults:
        raise InputError(faults)
    return tuple(claims)


def stops_of(plan: PlanFile) -> NDArray[np.int64] | None:
    """Which stop reads each site, where the plan says so."""
    stops = [site.get("stop") for site in plan.values["sites"]]
    return np.array(stops, np.int64) if all(isinstance(stop, int) for stop in stops) else None


def _list(plan: PlanFile, key: str) -> list[Any]:
    found = plan.values.get(key)
    return found if isinstance(found, list) else []


def _positive(value: Any) -> TypeGuard[float]:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value) and value > 0


def verify_json(plan: PlanFile, result: Verification) -> str:
    """The verdict as JSON, format 1: `held`, `summary`, and `findings`, a line each, as the report page reads them."""
    losses = result.losses
    return json_text({
        "format": 1, "version": __version__, "held": result.held, "summary": result.summary, "findings": findings(result),
        "plan": {"path": shown_path(plan.path), "study_sha256": plan.study.sha256, "layout_sha256": plan.layout.sha256},
        "panels": result.panels, "false_alarm": FALSE_ALARM, "detectable_error": finite(result.detectable),
        "claims": [{"label": item.claim.label, "unit": item.claim.unit, "claimed_k_u": finite(item.claim.k_u),
                    "observed_k_u": finite(item.observed), "chance_allows": finites(item.expected), "p": finite(item.p_value),
                    "coverage_2u": item.coverage, "max": finite(item.claim.maximum), "held": item.held}
                   for item in result.checked],
        "worse_places": list(result.worse),
        "lost_marks": None if losses is None else {
            "panels": losses.panels, "lost_any": losses.lost_any, "coverage_2u": losses.coverage, "ratio": finite(losses.ratio),
            "p": losses.p_value, "missed_a_limit": losses.missed, "without_fit": losses.unfitted, "held": losses.held},
        "lacking": None if not result.biases else {
            "terms_of": result.lacking, "amplitude_um": result.amplitude_um,
            "biases": [{"name": bias.name, "unit": bias.unit, "bias": bias.bias, "k_u": bias.k_u} for bias in result.biases]},
        "pilot": [{"what": item.what, "ratio": finite(item.ratio), "p": finite(item.p_value), "held": item.held,
                   "panel_ratios": finites(item.panels)} for item in result.pilot],
        "notes": list(result.notes)})


def findings(result: Verification) -> list[str]:
    """What was found, a sentence each."""
    covered = [100 * item.coverage for item in result.checked]
    held = sum(item.held for item in result.checked)
    said = [f"{held} of {len(result.checked)} claimed uncertainties within what chance allows on {result.panels:,} simulated "
            f"panels; an error of {100 * result.detectable:.0f} % in one would be found with a chance of 95 %",
            f"2u intervals held the truth in {min(covered):.1f} to {max(covered):.1f} % (95.4 % is right)"]
    said += [f"{item.claim.label}: claimed k·u {item.claim.k_u:.4g}, observed {item.observed:.4g} {item.claim.unit}, "
             f"chance allows {item.expected[0]:.4g} to {item.expected[1]:.4g} (p = {item.p_value:.2g})"
             for item in result.checked if not item.held]
    said += list(result.worse)
    if result.losses is not None:
        said.append(f"with marks lost at their rates {100 * result.losses.missed:.1f} % of panels miss a limit; each fit's own "
                    f"2u intervals held the truth in {100 * result.losses.coverage:.1f} %")
    if result.biases:
        worst = max(result.biases, key=lambda bias: bias.bias / bias.k_u)
        said.append(f"{result.lacking} terms of {result.amplitude_um:.3g} µm each, which the model lacks, would bias "
                    f"{worst.name} by {worst.bias:.3g} {worst.unit}, {worst.bias / worst.k_u:.2g} × its k·u")
    said += [f"pilot: {item.what} {item.ratio:.3g} × what is predicted (p = {item.p_value:.2g}): "
             f"{'as' if item.held else 'not as'} predicted" for item in result.pilot]
    return said

"""Fitted panels as JSON and CSV."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from sampler import __version__
from sampler.files.characterise import finite, finites
from sampler.files.output import json_text
from sampler.tasks.fit import MEETS, FitResult

SIGN = "# corrections to enter: the NEGATED fitted terms; entering them as they stand takes the fitted distortion away"


def fit_json(result: FitResult) -> str:
    """Fitted panels as JSON, format 1. `terms` are what was fitted, `corrections` the negated terms."""
    study, names = result.study, result.study.model.names
    return json_text({
        "format": 1, "version": __version__, "study": {"path": study.source.path, "sha256": study.source.sha256},
        "coverage_factor": study.coverage_factor, "terms": list(names), "units": list(study.model.units),
        "corrections_are": "the negated terms", "panels_fitted": len(result.panel),
        "meets_limits": bool(result.meets_limits.all()), "holds": result.holds,
        "verdicts": [{"text": verdict.text, "holds": verdict.holds, "p": finite(verdict.p_value)} for verdict in result.verdicts],
        "limits": [{"label": label, "max": finite(maximum), "unit": unit, "worst_predicted": finite(worst)}
                   for label, maximum, unit, worst in zip(result.limit_label, result.limit_maximum, result.limit_unit,
                                                          result.predicted.max(axis=0), strict=True)],
        "panels": [_panel(result, i) for i in range(len(result.panel))],
        "charts": [{"term": name, "mean": finite(chart.mean), "sigma": finite(chart.sigma), "lower": finite(chart.lower),
                    "upper": finite(chart.upper), "outside": [result.panel[i] for i in np.flatnonzero(chart.outside)]}
                   for name, chart in result.charts.items()],
        "outliers": [{"panel": flag.panel, "id": flag.id, "axis": flag.axis, "value_um": finite(flag.value_um),
                      "studentised": finite(flag.studentised)} for flag in result.outliers],
        "skipped": [{"panel": name, "why": why} for name, why in result.skipped], "warnings": list(result.warnings)})


def _panel(result: FitResult, i: int) -> dict[str, Any]:
    return {"panel": result.panel[i], "terms": finites(result.theta[i]), "k_u": finites(result.k_u[i]),
            "chi_square": finite(result.chi_square[i]), "degrees_of_freedom": int(result.degrees_of_freedom[i]),
            "p": finite(result.p_above[i]), "read": int(result.read[i]), "lost": int(result.lost[i]),
            "missing": int(result.missing[i]), "meets_limits": bool(result.meets_limits[i])}


def _csv(heads: Sequence[str], rows: Iterable[Sequence[Any]], before: str = "") -> str:
    out = io.StringIO()
    out.write(before)
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(heads)
    writer.writerows(rows)
    return out.getvalue()


def corrections_csv(result: FitResult) -> str:
    """One row for each panel: corrections and their k·u. The sign is stated in the first line."""
    model = result.study.model
    heads = ["panel", *(f"correct_{name}_{unit}" for name, unit in zip(model.names, model.units, strict=True)),
             *(f"k_u_{name}_{unit}" for name, unit in zip(model.names, model.units, strict=True))]
    rows = ([name, *(f"{value:.6g}" for value in (*(corrections + 0.0), *k_u))]
            for name, corrections, k_u in zip(result.panel, result.corrections, result.k_u, strict=True))
    return _csv(heads, rows, f"{SIGN}; k = {result.study.coverage_factor:g}\n")


def limits_csv(result: FitResult) -> str:
    """One row for each panel and limit, with the marks that were really read."""
    ratio = result.predicted / result.limit_maximum
    return _csv(["panel", "limit", "predicted_k_u", "max", "unit", "ratio", "met"],
                ([name, label, f"{result.predicted[i, j]:.6g}", f"{result.limit_maximum[j]:.6g}", result.limit_unit[j],
                  f"{ratio[i, j]:.4g}", "yes" if ratio[i, j] <= MEETS else "no"]
                 for i, name in enumerate(result.panel) for j, label in enumerate(result.limit_label)))


def residuals_csv(result: FitResult) -> str:
    """One row for each reading that took part: residual, over its standard deviation, leverage and Cook's distance."""
    averages, readings = result.averages, result.readings
    row, axis = np.nonzero(~np.isnan(result.residual_um))
    panel = np.asarray(readings.panel_names, object)[averages.panel[row]]
    ids = readings.sites.id[averages.site[row]].tolist()
    columns = [[f"{value:.5g}" for value in values[row, axis].tolist()]
               for values in (result.residual_um, result.standardised, result.leverage, result.cook)]
    return _csv(["panel", "id", "axis", "residual_um", "standardised", "leverage", "cook"],
                zip(panel.tolist(), ids, [("dx", "dy")[a] for a in axis.tolist()], *columns, strict=True))


def predicted_csv(result: FitResult) -> str:
    """The displacement that each panel's terms predict at every mark of the layout, with k·u."""
    marks = result.study.layout.marks

    def rows() -> Iterable[Sequence[Any]]:
        for i, name in enumerate(result.panel):
            dxy, k_u = result.predicted_um(i, marks.xy_mm)
            for mark, values in zip(marks.id.tolist(), np.concatenate([dxy, k_u], axis=1).tolist(), strict=True):
                yield [name, mark, *(f"{value:.5g}" for value in values)]
    return _csv(["panel", "id", "dx_um", "dy_um", "k_u_dx_um", "k_u_dy_um"], rows())

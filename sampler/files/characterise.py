"""What pilot panels said, as JSON and CSV."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler import __version__
from sampler.estimation.flags import Flagged
from sampler.estimation.model_choice import Rung
from sampler.estimation.noise_parts import AxisNoise
from sampler.estimation.variance import Variation
from sampler.files.output import json_text
from sampler.tasks.characterise import Characterisation


def finite(value: float | None) -> float | None:
    """JSON has no NaN and no infinity; what is not known is null."""
    return None if value is None or not math.isfinite(value) else float(value)


def finites(values: Iterable[float] | None) -> list[float | None] | None:
    return None if values is None else [finite(value) for value in values]


def matrix(values: NDArray[np.float64]) -> list[list[float | None] | None]:
    return [finites(row) for row in values]


def characterise_json(result: Characterisation) -> str:
    """A characterisation as JSON, format 1; intervals are at 95 %."""
    return json_text({
        "format": 1, "version": __version__, "panels": len(result.panel), "readings": len(result.readings),
        "marks": len(result.readings.sites),
        "model": {"family": result.choice.family, "shared": list(result.choice.shared), "each": list(result.choice.each),
                  "blocks_left_out": result.choice.blocks},
        "reason": list(result.choice.reason),
        "ladder": [_rung(grid, rung) for grid, rungs in result.choice.ladders.items() for rung in rungs],
        "noise": {"mark_um": finites(result.noise.mark_um), "local_um": finites(result.noise.local_um),
                  "local_range_mm": finite(result.noise.local_range_mm)},
        "axes": [_axis(axis) for axis in result.axes],
        "priors": [{"term": name, "mean": finite(mean), "sd": finite(sd)} for name, (mean, sd) in result.priors.items()],
        "variation": _variation(result),
        "terms_by_panel": [{"panel": name, "terms": dict(zip(result.terms.names, finites(theta) or [], strict=True)),
                            "u": dict(zip(result.terms.names, finites(u) or [], strict=True))}
                           for name, theta, u in zip(result.panel, result.theta, result.u, strict=True)],
        "read_rates": [{"kind": rate.kind, "read": rate.read, "tried": rate.tried, "rate": rate.rate,
                        "interval": finites(rate.interval)} for rate in result.rates],
        "often_lost": [{"id": name, "lost": lost, "tried": tried} for name, lost, tried in result.often_lost],
        "outliers": len(result.outliers), "skipped": [{"panel": name, "why": why} for name, why in result.skipped],
        "notes": list(result.notes), "warnings": list(result.warnings)})


def outliers_csv(outliers: Sequence[Flagged]) -> str:
    """Flagged readings with their externally studentised residual, largest first."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["panel", "id", "axis", "value_um", "studentised_residual"])
    writer.writerows((flag.panel, flag.id, flag.axis, f"{flag.value_um:.6g}", f"{flag.studentised:.4g}")
                     for flag in sorted(outliers, key=lambda flag: -abs(flag.studentised)))
    return out.getvalue()


def _rung(grid: str, rung: Rung) -> dict[str, Any]:
    return {"grid": grid, "family": rung.family, "shared": rung.shared, "each": rung.each, "terms": finite(rung.terms),
            "residual_um": finites(rung.residual_um), "left_out_cells_um": finite(rung.cells_um),
            "left_out_quarters_um": finite(rung.quarters_um), "within_one_standard_error": rung.within_one,
            "f": finite(rung.f), "f_p": finite(rung.f_p), "aicc_above_best": finite(rung.aicc)}


def _axis(axis: AxisNoise) -> dict[str, Any]:
    return {"axis": axis.axis, "left_um": finite(axis.left_um), "left_interval_um": finites(axis.left_interval),
            "degrees_of_freedom": finite(axis.degrees_of_freedom), "reading_um": finite(axis.reading_um),
            "reading_interval_um": finites(axis.reading_interval), "local_um": finite(axis.local_um),
            "local_interval_um": finites(axis.local_interval), "correlated": axis.correlated,
            "repeats_share": finite(axis.repeats_share),
            "moran": None if axis.moran is None else {"i": finite(axis.moran.i), "expected": finite(axis.moran.expected),
                                                      "p": finite(axis.moran.p_value)},
            "variogram": None if axis.variogram is None else {
                "distance_mm": finites(axis.variogram.distance_mm), "gamma_um2": finites(axis.variogram.gamma_um2),
                "pairs": axis.variogram.pairs.tolist()},
            "fits": [{"correlation": fit.family, "nugget_um2": finite(fit.nugget_um2), "sill_um2": finite(fit.sill_um2),
                      "range_mm": finite(fit.range_mm), "range_interval_mm": finites(fit.range_interval),
                      "sill_interval_um2": finites(fit.sill_interval), "misfit": finite(fit.misfit),
                      "bounded": fit.bounded} for fit in axis.fits]}


def _variation(result: Characterisation) -> dict[str, Any] | None:
    found: Variation | None = result.variation
    if found is None:
        return None
    return {"terms": list(result.terms.names), "units": list(result.terms.units), "lots": found.lots,
            "mean": finites(found.mean), "panel_covariance": matrix(found.panel),
            "panel_sd_interval": matrix(found.panel_interval), "lot_covariance": matrix(found.lot),
            "lot_sd_interval": matrix(found.lot_interval)}

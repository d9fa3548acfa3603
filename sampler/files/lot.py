"""How panels vary, read from a process file, and the plan for a lot as JSON."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from sampler import __version__
from sampler.errors import InputError
from sampler.files.characterise import finite
from sampler.files.faults import Faults
from sampler.files.output import json_text
from sampler.files.source import read_toml, shown_path
from sampler.files.study import A_PROCESS
from sampler.tasks.lot import Choice, LotResult, Spread


def read_spread(path: str | Path) -> Spread:
    """The table [variation] of a process file. Raises InputError."""
    faults = Faults(shown_path(path))
    toml = read_toml(path, A_PROCESS, faults)
    faults.close()
    assert toml is not None
    said = toml[0].get("variation")
    if not isinstance(said, dict):
        raise InputError(f"{shown_path(path)}: there is no table [variation]; characterise a pilot of at least two panels "
                         "of one lot")
    terms = said.get("terms")
    if not (isinstance(terms, list) and terms and all(isinstance(name, str) for name in terms)):
        raise InputError(f"{shown_path(path)}: [variation] terms {terms!r}; give the names of the terms")
    try:
        covariance = np.array(said.get("panel_covariance"), float)
    except (TypeError, ValueError):
        covariance = np.zeros(0)
    p = len(terms)
    if (covariance.shape != (p, p) or not np.isfinite(covariance).all()
            or not np.allclose(covariance, covariance.T, rtol=1e-3, atol=1e-9)):
        raise InputError(f"{shown_path(path)}: [variation] panel_covariance is no symmetric table of {p} rows of {p} numbers, "
                         "one for each of its terms; characterise again")
    scale = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    unit = covariance / np.outer(np.where(scale > 0, scale, 1.0), np.where(scale > 0, scale, 1.0))
    if (np.diag(covariance) < 0).any() or np.linalg.eigvalsh(unit)[0] < -1e-3:
        raise InputError(f"{shown_path(path)}: [variation] panel_covariance has a negative variance; characterise again")
    return Spread(tuple(terms), (covariance + covariance.T) / 2)


def lot_json(result: LotResult) -> str:
    """The plan for a lot as JSON, format 1."""
    study = result.study
    return json_text({
        "format": 1, "version": __version__, "study": {"path": study.source.path, "sha256": study.source.sha256},
        "lot": result.lot, "coverage_factor": study.coverage_factor, "met": result.met, "answer": result.answer,
        "feedback_useless": result.feedback_useless, "best": _choice(result.best, True),
        "feed_forward": _choice(result.forward, True), "curve": [_choice(choice, False) for choice in result.curve],
        "floors": [{"label": floor.label, "unit": floor.unit, "max": floor.maximum, "k_u": finite(floor.k_u)}
                   for floor in result.floors], "notes": list(result.notes)})


def _choice(choice: Choice | None, ids: bool) -> dict[str, Any] | None:
    if choice is None:
        return None
    said: dict[str, Any] = {"sites": choice.sites, "panels": choice.panels, "site_sets": choice.groups,
                            "seconds": finite(choice.seconds), "worst_ratio": finite(choice.ratio)}
    return said | ({"ids": [list(names) for names in choice.ids]} if ids else {})

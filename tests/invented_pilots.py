"""Invented pilot and production panels with known truth."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from invented_plans import core_layout
from scipy.spatial.distance import cdist

from sampler.estimation.model_choice import SHARED, model_of
from sampler.estimation.readings import Readings
from sampler.model.basis import Model, ModelTerm, design_blocks, places

TYPICAL = {"µm": 0.8, "ppm": 3.0, "µrad": 2.0}


@dataclass(frozen=True)
class Pilot:
    """What to invent: standard deviations of what a panel's terms, cells and marks do."""

    family: str = "trapezoid"
    panels: int = 6
    repeats: int = 1
    lots: int = 1
    per_side: int = 14
    mark_um: float = 0.25
    local_um: tuple[float, float] = (0.0, 0.0)
    range_mm: float | None = None
    common: float = 0.0
    shared: float = 0.0
    each: float = 0.0
    lost: float = 0.0
    terms: float = 1.0
    lot_terms: float = 0.0

    @property
    def layout(self):
        return core_layout(self.per_side)

    def displacement(self, rng):
        """(panels, marks, 2) with the terms (panels, p) behind them."""
        layout = self.layout
        at = places(layout, layout.marks.xy_mm)
        n = len(at)
        model = model_of(self.family, layout)
        sd = np.array([TYPICAL[unit] for unit in model.units])
        lot = rng.normal(size=(self.lots, len(model))) * sd * self.lot_terms
        theta = lot[np.arange(self.panels) % self.lots] + rng.normal(size=(self.panels, len(model))) * sd * self.terms
        y = np.einsum("nap,gp->gna", design_blocks(model, at), theta)
        if self.shared:
            rows = design_blocks(Model(tuple(ModelTerm(name, "exposure") for name in SHARED)), at)
            y += np.einsum("nap,gp->gna", rows, rng.normal(size=(self.panels, len(SHARED))) * self.shared)
        if self.each:
            rows = design_blocks(model_of("similarity", layout, (), ("exposure",)), at)[:, :, 4:]
            y += np.einsum("nap,gp->gna", rows, rng.normal(size=(self.panels, rows.shape[2])) * self.each)
        alike = np.eye(n) if self.range_mm is None else np.exp(-(cdist(at.xy_mm, at.xy_mm) ** 2) / (2 * self.range_mm**2))
        root = np.linalg.cholesky(alike + 1e-9 * np.eye(n))
        for axis in (0, 1):
            own, common = rng.normal(size=(self.panels, n)), rng.normal(size=n)
            y[:, :, axis] += self.local_um[axis] * (np.sqrt(1 - self.common) * own + np.sqrt(self.common) * common) @ root.T
        return y, theta

    def readings(self, rng):
        """The readings, and the terms behind them."""
        layout = self.layout
        y, theta = self.displacement(rng)
        panels, n = y.shape[:2]
        y = np.repeat(y[:, None], self.repeats, axis=1)
        y = y + rng.normal(size=y.shape) * self.mark_um
        y[rng.random(y.shape[:3]) < self.lost] = np.nan
        each = self.repeats * n
        return Readings.of(layout, np.repeat([f"P{i:02d}" for i in range(panels)], each), y.reshape(-1, 2),
                           id=np.tile(layout.marks.id, panels * self.repeats),
                           lot=np.repeat([f"L{i % self.lots}" for i in range(panels)], each)), theta

    def but(self, **changes):
        return replace(self, **changes)

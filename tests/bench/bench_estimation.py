"""Seconds and memory of fits and characterisations.

Run by hand: OMP_NUM_THREADS=1 python tests/bench/bench_estimation.py [part of a name …]
"""

from __future__ import annotations

import resource
import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))
from invented_pilots import Pilot
from invented_plans import core_layout, study_of

from sampler.estimation.readings import Readings
from sampler.estimation.spatial import fit_variogram
from sampler.model.basis import design_blocks, places
from sampler.tasks.characterise import characterise
from sampler.tasks.fit import fit
from sampler.tasks.study import RegionLimit, TermLimit
from sampler.uncertainty.noise import Noise


def production(lost, family=("affine", "trapezoid"), noise=None):
    """1,000 panels of 60 sites with term and region limits."""
    rng = np.random.default_rng(3)
    study = study_of(core_layout(), family, (TermLimit(("scale_x", "scale_y"), 2.0), RegionLimit("panel", 1.0)))
    study = study if noise is None else replace(study, noise=noise)
    marks = study.layout.marks.take(rng.choice(324, 60, replace=False))
    blocks = design_blocks(study.model, places(study.layout, marks.xy_mm))
    y = np.einsum("nap,gp->gna", blocks, rng.normal(size=(1000, len(study.model)))) + 0.5 * rng.normal(size=(1000, 60, 2))
    y[rng.random((1000, 60)) < lost] = np.nan
    readings = Readings.of(study.layout, np.repeat(np.arange(1000), 60).astype(str), y.reshape(-1, 2), id=np.tile(marks.id, 1000))
    return lambda: fit(study, readings, marks)


def million(rng):
    """A million rows: 40 panels, 12,500 marks, 2 repeats, one in a hundred lost."""
    layout = core_layout(112)
    n = len(layout.marks)
    y = np.repeat(rng.normal(size=(40, n, 1, 2)) * 0.4, 2, axis=2) + 0.25 * rng.normal(size=(40, n, 2, 2))
    y[rng.random(y.shape[:3]) < 0.01] = np.nan
    panel, mark = np.repeat(np.arange(40), 2 * n).astype(str), np.tile(np.repeat(layout.marks.id, 2), 40)
    return lambda: characterise(layout, Readings.of(layout, panel, y.reshape(-1, 2), id=mark))


def field_coverage(rng, pilots=150):
    """How often the simulated 95 % intervals of nugget, sill and range hold the truth."""
    from sampler.estimation.spatial import Field

    pilot = Pilot("affine", panels=5, local_um=(0.5, 0.4), range_mm=60.0, per_side=14)
    marks = pilot.layout.marks
    rows = np.column_stack([np.ones(len(marks)), marks.xy_mm / 255])
    inside = np.zeros(3)
    for _ in range(pilots):
        y, _ = pilot.displacement(rng)
        found = fit_variogram([Field.fitted(marks.xy_mm, rows, y[:, :, 0] + 0.25 * rng.normal(size=y.shape[:2]))], rng)
        smooth = next(fit for fit in found if fit.family == "smooth")
        spans = ((smooth.nugget_interval, 0.0625), (smooth.sill_interval, 0.25), (smooth.range_interval, 60.0))
        inside += [low <= true <= high for (low, high), true in spans]
    print("nugget, sill, range inside their intervals:", inside / pilots)


CASES = {
    "fit 1,000 × 60": lambda rng: production(0.0),
    "fit 1,000 × 60, 2 % lost": lambda rng: production(0.02),
    "fit 1,000 × 60, order 3, 2 % lost": lambda rng: production(0.02, ("order3",)),
    "fit 1,000 × 60, local field": lambda rng: production(0.0, noise=Noise((0.25, 0.25), (0.4, 0.4), 120.0)),
    "characterise a million rows": million,
    "coverage of the field's intervals": lambda rng: lambda: field_coverage(rng),
}

if __name__ == "__main__":
    for name, make in CASES.items():
        if len(sys.argv) > 1 and not any(word in name for word in sys.argv[1:]):
            continue
        run = make(np.random.default_rng(5))
        began = time.perf_counter()
        run()
        memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
        print(f"{name}: {time.perf_counter() - began:.2f} s, {memory:.0f} MB at most so far")

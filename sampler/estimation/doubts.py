"""Signs that the columns of a readings file are not what they are taken for."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sampler.estimation.least_squares import Factored
from sampler.estimation.readings import Averages, Readings

Array = NDArray[np.float64]

TOO_SMALL, TOO_LARGE = 1 / 50, 50.0
"""Residuals this far from the assumed noise are more likely in another unit than that good or bad: units differ by
1,000."""
SHEAR_SHARE = 3.0
SURE = 5.0
LEAST_ROWS = 8
MOST_PANELS = 50


def doubts(readings: Readings, averages: Averages, mark_um: tuple[float, float] | None, where: str) -> tuple[str, ...]:
    """Warnings, one sentence each: constant columns, swapped dx and dy, another unit. `mark_um`: the assumed noise, if
    any."""
    said = []
    y = readings.dxy_um
    for axis, name in enumerate(("dx_um", "dy_um")):
        known = y[~np.isnan(y[:, axis]), axis]
        if not len(known):
            said.append(f"{where}: {name} was read nowhere; check the column")
        elif len(known) > 1 and np.ptp(known) == 0:
            said.append(f"{where}: {name} is {known[0]:g} in every row; check the column")
    if said:
        return tuple(said)
    coefficients, u, residual = _affine(readings, averages)
    if not len(residual):
        return ()
    left = np.sqrt((residual**2).mean(axis=0))
    if mark_um is not None:
        ratio = left / np.asarray(mark_um)
        found = f"{where}: what an affine fit leaves is {left.max():.3g} µm"
        if ratio.min() < TOO_SMALL:
            said.append(f"{found}, {ratio.min():.1g} × the assumed noise; are dx_um and dy_um given in mm?")
        elif ratio.max() > TOO_LARGE:
            said.append(f"{found}, {ratio.max():.0f} × the assumed noise; are dx_um and dy_um given in nm, or the "
                        "marks of another layout?")
    elif float(np.nanmedian(np.abs(y))) < 0.01:
        said.append(f"{where}: half of the displacements are below {np.nanmedian(np.abs(y)):.2g} µm; are they in mm?")
    # Panels grow alike in x and y and turn as a whole; a common shear without growth is what swapped columns make of growth.
    growth = np.abs(coefficients[:, 0, 0] + coefficients[:, 1, 1]).mean() / 2
    shear = np.abs((coefficients[:, 0, 1] + coefficients[:, 1, 0]).mean()) / 2
    if shear > SHEAR_SHARE * growth and shear > SURE * u:
        said.append(f"{where}: dx grows along y and dy along x by {1e3 * shear:.3g} ppm alike, dx along x hardly; are the "
                    "columns dx_um and dy_um (or x and y) swapped?")
    return tuple(said)


def _affine(readings: Readings, averages: Averages) -> tuple[Array, float, Array]:
    """Slopes of affine fits in µm per mm (panels, 2 [dx, dy], 2 [x, y]), their mean's standard uncertainty, and the
    residuals (n, 2)."""
    slopes, variance, left = [], [], []
    for pattern in averages.patterns()[:MOST_PANELS]:
        both = np.flatnonzero((pattern.count > 0).all(axis=1))
        if len(both) < LEAST_ROWS:
            continue
        xy = readings.sites.xy_mm[pattern.site[both]]
        design = Factored.of(np.column_stack([np.ones(len(both)), xy]))
        if design.rank < 3:
            continue
        fits = [design.solve(pattern.dxy_um[:, both, axis]) for axis in (0, 1)]
        slopes.append(np.stack([fit.theta[:, 1:] for fit in fits], axis=1))
        residual = np.stack([fit.residual for fit in fits], axis=-1)
        left.append(residual.reshape(-1, 2) * np.sqrt(len(both) / (len(both) - 3)))
        variance += [(residual**2).mean() * np.diag(design.covariance())[1:].max()] * len(pattern.panels)
    if not slopes:
        return np.zeros((0, 2, 2)), np.inf, np.zeros((0, 2))
    return np.concatenate(slopes), float(np.sqrt(np.sum(variance)) / len(variance)), np.concatenate(left)

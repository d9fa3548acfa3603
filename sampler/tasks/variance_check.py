"""Variances rounded up, for `certify`."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from sampler.errors import CertificateError
from sampler.tasks.proof_check import BLOCK_ERROR, gamma

Array = NDArray[np.float64]


class Variance:
    """cᵀM⁻¹c rounded up. With X ≈ M⁻¹ and ‖I − XM‖ ≤ ρ < 1: |M⁻¹c − Xc| ≤ ρ/(1 − ρ)·‖Xc‖, largest entries (Rump 2010)."""

    def __init__(self, rows: Array, prior: Array) -> None:
        flat = rows.reshape(-1, rows.shape[2])
        information = prior + flat.T @ flat
        doubt = (gamma(len(flat)) + 3 * BLOCK_ERROR) * (np.abs(flat).T @ np.abs(flat)) + gamma(1) * np.abs(prior)
        diagonal = np.diag(information)
        self.scale = 1 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0))
        scaled, doubt = (part * np.outer(self.scale, self.scale) for part in (information, doubt))
        try:
            self.inverse = np.linalg.inv(scaled)
        except np.linalg.LinAlgError as error:
            raise CertificateError("plan.json: its sites leave a term undetermined") from error
        p = len(scaled)
        size = np.abs(self.inverse)
        off = np.abs(np.eye(p) - self.inverse @ scaled) + size @ (doubt + gamma(p) * np.abs(scaled))
        self.rho = float(off.sum(axis=1).max())
        if not self.rho < 0.5:
            raise CertificateError("plan.json: its sites leave a term undetermined")

    def upper(self, directions: Array) -> Array:
        """(K,) of directions (K, p)."""
        c = directions * self.scale
        solved = c @ self.inverse
        error = self.rho / (1 - self.rho) + 2 * gamma(c.shape[1]) + BLOCK_ERROR
        return np.abs((c * solved).sum(axis=1)) + error * np.abs(c).sum(axis=1) * np.abs(solved).max(axis=1)

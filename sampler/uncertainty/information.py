"""What a set of readings would tell: information, covariance, standard uncertainties, log det."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

RANK_TOLERANCE = 1e-11
"""An eigenvalue of the scaled information below this share of the largest counts as no information at all."""


def whiten(blocks: Array, sigma: Array) -> Array:
    """Divides each reading's row by its standard uncertainty, in place; blocks (n, m, p), sigma (n, m)."""
    blocks /= sigma[:, :, None]
    return blocks


def information(whitened: Array, prior_precision: Array | None = None) -> Array:
    """M = P₀ + Σ BᵢᵀBᵢ, (p, p), of whitened blocks (n, m, p)."""
    rows = whitened.reshape(-1, whitened.shape[-1])
    return rows.T @ rows if prior_precision is None else prior_precision + rows.T @ rows


@dataclass(frozen=True, slots=True)
class Knowledge:
    """A factored information matrix: M = S V diag(λ) Vᵀ S with S = diag(scale), so that units do not matter.

    `known`: which eigen-directions carry information. Directions with a part outside them are undetermined.
    """

    scale: Array
    values: Array
    vectors: Array
    known: NDArray[np.bool_]

    @classmethod
    def of(cls, information: Array) -> Knowledge:
        diagonal = np.diag(information)
        scale = np.sqrt(np.where(diagonal > 0, diagonal, 1.0))
        values, vectors = np.linalg.eigh(information / np.outer(scale, scale))
        return cls(scale, values, vectors, values > RANK_TOLERANCE * max(float(values[-1]), 0.0))

    @property
    def determined(self) -> bool:
        return bool(self.known.all())

    def variance(self, directions: Array) -> Array:
        """cᵀ M⁻¹ c of each row of directions (L, p); infinite where the readings do not determine it."""
        inside = (directions / self.scale) @ self.vectors
        variance = (inside[:, self.known] ** 2 / self.values[self.known]).sum(axis=1)
        outside = (inside[:, ~self.known] ** 2).sum(axis=1)
        variance[outside > RANK_TOLERANCE * (inside**2).sum(axis=1)] = np.inf
        return variance

    def covariance(self) -> Array:
        """M⁻¹, (p, p); only for a determined model."""
        half = self.vectors / np.sqrt(self.values) / self.scale[:, None]
        return half @ half.T

    def log_det(self, interest: NDArray[np.bool_] | None = None) -> float:
        """log det of the information on the terms of interest (p,), all by default: −log det of their covariance.

        −inf when one of them is undetermined.
        """
        if interest is None or interest.all():
            if not self.determined:
                return -np.inf
            return float(np.log(self.values).sum() + 2 * np.log(self.scale).sum())
        if np.isinf(self.variance(np.eye(len(self.scale))[interest])).any():
            return -np.inf
        half = self.vectors[interest][:, self.known] / np.sqrt(self.values[self.known])
        return float(2 * np.log(self.scale[interest]).sum() - np.linalg.slogdet(half @ half.T)[1])

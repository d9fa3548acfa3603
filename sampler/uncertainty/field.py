"""Local distortion that is smooth over centimetres, as a few directions with priors.

What the model leaves at one place resembles what it leaves nearby: a Gaussian random field with correlation
exp(−d² / 2 range²) per axis. Its covariance on a raster of the panel is cut to the rank that leaves less than 1 % of the
variance at the worst point (Nyström's extension of the leading eigenvectors to any point; Williams & Seeger 2001).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

NEGLECTED_SHARE = 0.01
"""Share of the field's variance that the cut may leave out at the worst point; it joins the readings' noise."""
NODES_PER_RANGE = 2.5
"""Raster nodes per range: the correlation at half a node's distance is above 0.98."""
LEAST_NODES, MOST_NODES = 12, 32
MOST_RANK = 400
CHUNK_POINTS = 20_000


@dataclass(frozen=True, slots=True)
class LocalField:
    """`nodes_mm` (r, 2); `mix` (r, k): the field's k directions at a point are `correlation(point, nodes) @ mix`.

    Each direction has unit prior variance and stands for `sigma_um` (dx, dy) of displacement.
    """

    range_mm: float
    sigma_um: tuple[float, float]
    nodes_mm: Array
    mix: Array

    @property
    def rank(self) -> int:
        return self.mix.shape[1]

    def basis(self, xy_mm: Array) -> Array:
        """The directions at points (n, 2), per unit of sigma, (n, k)."""
        parts = [_correlation(xy_mm[start:start + CHUNK_POINTS], self.nodes_mm, self.range_mm) @ self.mix
                 for start in range(0, len(xy_mm), CHUNK_POINTS)]
        return np.concatenate(parts) if parts else np.zeros((0, self.rank))

    def neglected(self, xy_mm: Array) -> Array:
        """Share of the field's variance at points (n, 2) that its directions leave out, (n,), between 0 and 1."""
        return np.clip(1.0 - (self.basis(xy_mm) ** 2).sum(axis=1), 0.0, 1.0)


def local_field(width_mm: float, height_mm: float, range_mm: float, sigma_um: tuple[float, float]) -> LocalField:
    """The field over a panel, cut to the least rank that leaves at most NEGLECTED_SHARE at the worst raster point.

    A range so short that this needs more than MOST_RANK directions is cut there: the rest, then a larger share, is treated
    as noise of the single mark.
    """
    counts = [int(np.clip(np.ceil(NODES_PER_RANGE * size / range_mm), LEAST_NODES, MOST_NODES)) + 1
              for size in (width_mm, height_mm)]
    x, y = (np.linspace(-size / 2, size / 2, count) for size, count in zip((width_mm, height_mm), counts, strict=True))
    nodes = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    values, vectors = np.linalg.eigh(_correlation(nodes, nodes, range_mm))
    values, vectors = values[::-1], vectors[:, ::-1]
    captured = np.cumsum(vectors**2 * values, axis=1).min(axis=0)
    # A margin of a fifth, because points between the nodes are captured a little less well than the nodes.
    enough = np.flatnonzero(captured >= 1.0 - 0.8 * NEGLECTED_SHARE)
    rank = min(int(enough[0]) + 1 if len(enough) else len(values), MOST_RANK)
    return LocalField(range_mm, sigma_um, nodes, vectors[:, :rank] / np.sqrt(values[:rank]))


def _correlation(a: Array, b: Array, range_mm: float) -> Array:
    squared = (a**2).sum(axis=1)[:, None] + (b**2).sum(axis=1) - 2 * a @ b.T
    return np.exp(np.maximum(squared, 0.0) / (-2 * range_mm**2))

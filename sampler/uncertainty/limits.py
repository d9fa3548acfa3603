"""Every accuracy demand is a direction and a limit: cᵀ M⁻¹ c ≤ τ²."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Limits:
    """Demands as columns. Row l: `coverage_factor` · u(directions[l] · θ) ≤ `maximum[l]`.

    `directions` (L, p) in physical units; `maximum` (L,) in `unit[l]`; `label[l]` names the row for people; `source`
    (L,) is the study's limit the row came from (many rows of one region limit share one source). For the rows of a region
    limit `where_mm` (L, 2) is the point and `axis` (L,) 0 for dx, 1 for dy; NaN and −1 for a term's row.
    """

    directions: NDArray[np.float64]
    maximum: NDArray[np.float64]
    unit: tuple[str, ...]
    label: tuple[str, ...]
    source: NDArray[np.int64]
    where_mm: NDArray[np.float64]
    axis: NDArray[np.int64]
    coverage_factor: float = 3.0

    def __len__(self) -> int:
        return len(self.maximum)

    @property
    def tau(self) -> NDArray[np.float64]:
        """The limits as standard uncertainties, (L,)."""
        return self.maximum / self.coverage_factor


def stack(parts: list[Limits]) -> Limits:
    """Several sets of demands as one."""
    return Limits(
        np.concatenate([part.directions for part in parts]), np.concatenate([part.maximum for part in parts]),
        tuple(unit for part in parts for unit in part.unit), tuple(label for part in parts for label in part.label),
        np.concatenate([part.source for part in parts]), np.concatenate([part.where_mm for part in parts]),
        np.concatenate([part.axis for part in parts]), parts[0].coverage_factor)


def no_limits(p: int, coverage_factor: float) -> Limits:
    """No demand at all on p terms."""
    nothing = np.zeros(0)
    return Limits(np.zeros((0, p)), nothing, (), (), nothing.astype(np.int64), np.zeros((0, 2)), nothing.astype(np.int64),
                  coverage_factor)

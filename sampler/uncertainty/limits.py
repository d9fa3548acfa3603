"""Every accuracy demand is a direction and a limit: cᵀ M⁻¹ c ≤ τ²."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Limits:
    """Demands as columns. Row l: `coverage_factor` · u(directions[l] · θ) ≤ `maximum[l]`.

    `directions` (L, p) in physical units; `maximum` (L,) in `unit[l]`; `label[l]` names the row for people; `source`
    (L,) is the study's limit the row came from (many rows of one region limit share one source).
    """

    directions: NDArray[np.float64]
    maximum: NDArray[np.float64]
    unit: tuple[str, ...]
    label: tuple[str, ...]
    source: NDArray[np.int64]
    coverage_factor: float = 3.0

    def __len__(self) -> int:
        return len(self.maximum)

    @property
    def tau(self) -> NDArray[np.float64]:
        """The limits as standard uncertainties, (L,)."""
        return self.maximum / self.coverage_factor

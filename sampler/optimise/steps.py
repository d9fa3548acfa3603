"""The lines of a proof as the tree writes them down."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Multipliers:
    """Weak duality: `y` of pool rows `rows`, `budget` μ₀, `rules` (rule, μ) and `counts` (split, μ)."""

    rows: NDArray[np.int64]
    y: NDArray[np.float64]
    budget: float
    rules: tuple[tuple[int, float], ...]
    counts: tuple[tuple[int, float], ...]


@dataclass(frozen=True, slots=True)
class Step:
    """One line, in preorder: "split" (on `split`, children at most `at_most` and more), "fix" or "leaf"."""

    kind: str
    multipliers: Multipliers | None = None
    split: int = -1
    at_most: int = 0

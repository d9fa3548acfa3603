"""Which of the drawn marks may be measured, and why the others may not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.panel.layout import Layout, Sites


@dataclass(frozen=True, slots=True)
class Candidates:
    """`sites`: the marks that may be measured, in layout order. `reason` (marks,): "" for a candidate, otherwise why not,
    e.g. `outside the outline`, `inside the edge exclusion of 8 mm`, `inside keep-out "clamp left"`."""

    sites: Sites
    reason: NDArray[np.str_]

    def counts(self) -> dict[str, int]:
        """How many marks are ruled out for each reason, most first."""
        reasons, count = np.unique(self.reason[self.reason != ""], return_counts=True)
        return {str(reasons[i]): int(count[i]) for i in np.argsort(-count, kind="stable")}


def candidates(layout: Layout) -> Candidates:
    raise NotImplementedError

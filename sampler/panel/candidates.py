"""Which of the drawn marks may be measured, and why the others may not."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.panel.layout import EDGE_TOLERANCE_MM, Layout, Sites
from sampler.panel.outline import covered, inside_keep_out, shrunk


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
    """Sorts the marks of a layout into those that may be measured and the others, each with its first reason.

    A mark on the outline, on the inner edge of the edge exclusion or on the edge of a keep-out is a candidate: only
    marks strictly outside, strictly within the exclusion or strictly within the keep-out are not. "On" means within
    1e-6 mm. The exclusion is the outline moved inward with square corners, so that it never reaches less than
    `edge_exclusion_mm` from the outline.
    """
    xy = layout.marks.xy_mm
    reasons = ["", "outside the outline", f"inside the edge exclusion of {layout.edge_exclusion_mm:g} mm"]
    why = np.zeros(len(xy), np.int64)
    usable = covered(shrunk(layout.outline_mm, layout.edge_exclusion_mm - EDGE_TOLERANCE_MM), xy)
    rest = np.flatnonzero(~usable)
    why[rest] = np.where(covered(shrunk(layout.outline_mm, -EDGE_TOLERANCE_MM), xy[rest]), 2, 1)
    for keep_out in layout.keep_outs:
        free = np.flatnonzero(why == 0)
        why[free[inside_keep_out(keep_out, xy[free])]] = len(reasons)
        reasons.append(f'inside keep-out "{keep_out.name}"')
    used, place = np.unique(why, return_inverse=True)  # the width of the column is that of the longest reason that occurs
    reason = np.array([reasons[i] for i in used] or [""])[place]
    return Candidates(layout.marks.take(why == 0), reason)

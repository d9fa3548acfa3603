"""Where to write the numbers of sites so that they stay readable."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_ANGLES = np.radians([45, 135, 315, 225, 0, 90, 180, 270, 22, 68, 112, 158, 202, 248, 292, 338])
_REACH_PT = np.array([3.5, 7.0, 12.0, 18.0, 26.0])
# Written over is worst, then crossing the frame, then covering a dot; a point of distance costs one.
_COST_LABEL, _COST_FRAME, _COST_DOT = 8.0, 50.0, 3.0
_DOT_PT = 5.5
_CROWD_PT = 22.0


def _overlap(centre: Array, size: Array, other: Array, other_size: Array) -> Array:
    """Area shared by boxes (a, 2) of one size with each of the other boxes (b, 2), (a, b)."""
    reach = (size + other_size) / 2
    return np.clip(reach[None] - np.abs(centre[:, None] - other[None]), 0.0, None).prod(axis=2)


def place_labels(points: Array, sizes: Array, frame: Array) -> Array:
    """Centres (n, 2) for boxes of `sizes` (n, 2) beside `points` (n, 2) inside a `frame` (width, height); unit 1/72 in.

    Greedy, the most crowded first: each box takes the cheapest of eighty places around its point, given the boxes
    already placed and every dot.
    """
    n = len(points)
    centres = np.full((n, 2), np.inf)
    direction = np.stack([np.cos(_ANGLES), np.sin(_ANGLES)], axis=1)
    crowd = (np.linalg.norm(points[:, None] - points[None], axis=2) < _CROWD_PT).sum(axis=1)
    dots = np.full((n, 2), _DOT_PT)
    for i in np.argsort(-crowd, kind="stable"):
        # Far enough out for the box to clear its own dot in that direction.
        half = np.abs(direction) @ (sizes[i] / 2)
        offset = (direction[None] * (_REACH_PT[:, None] + half[None])[:, :, None]).reshape(-1, 2)
        trial = points[i] + offset
        out = np.clip(sizes[i] / 2 - trial, 0, None) + np.clip(trial + sizes[i] / 2 - frame, 0, None)
        placed = np.isfinite(centres[:, 0])
        cost = (np.repeat(_REACH_PT, len(_ANGLES)) + _COST_FRAME * out.sum(axis=1)
                + _COST_LABEL * _overlap(trial, sizes[i], centres[placed], sizes[placed]).sum(axis=1)
                + _COST_DOT * _overlap(trial, sizes[i], points, dots).sum(axis=1))
        centres[i] = trial[np.argmin(cost)]
    return centres

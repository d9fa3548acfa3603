"""Fewer points that look like all of them, for drawing."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


def thinned(xy: NDArray[np.float64], most: int) -> NDArray[np.int64]:
    """Rows of at most `most` points that keep the look of all of them; all rows when there are no more.

    Of each box of a lattice the point nearest to its centre.
    """
    if len(xy) <= most:
        return np.arange(len(xy))
    low = xy.min(axis=0)
    side = int(np.sqrt(most))
    place = (xy - low) / np.maximum(xy.max(axis=0) - low, 1e-9) * side
    box = np.minimum(place.astype(np.int64), side - 1)
    order = np.lexsort((((place - box - 0.5) ** 2).sum(axis=1), box[:, 0] * side + box[:, 1]))
    boxes = (box[:, 0] * side + box[:, 1])[order]
    return np.sort(order[np.concatenate([[True], boxes[1:] != boxes[:-1]])])

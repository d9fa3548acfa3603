"""Spacing: sites closer than a distance may not both be chosen.

All sites inside a disc of that diameter conflict pairwise (a clique), so at most one of them is chosen: one count row that is
worth many pair rows. The discs that weights overfill are sought where two sites with weight lie on their edge, which is where
a disc of the greatest weight can be found. Pairs are only ever formed among sites with weight, or in a pool.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.spatial import KDTree

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

CLOSE = 1.0 - 1e-12
"""Sites conflict when they are closer than this share of the spacing: two at just the spacing do not, whatever rounding."""
INSIDE = 1.0 - 1e-9
"""Discs are this much smaller than the spacing, so that all inside surely conflict."""
OVERFULL = 1.0 + 1e-6
NO_WEIGHT = 1e-9


def conflicts(xy: Array, spacing: float) -> csr_array:
    """1 where two different sites (n, 2) conflict, (n, n) sparse: for pools of a few thousand."""
    n = len(xy)
    pairs = KDTree(xy).query_pairs(spacing * CLOSE, output_type="ndarray") if n else np.zeros((0, 2), int)
    both = np.concatenate([pairs, pairs[:, ::-1]])
    return csr_array((np.ones(len(both)), (both[:, 0], both[:, 1])), shape=(n, n))


def spaced(xy: Array, spacing: float) -> bool:
    """Whether no two of the sites conflict."""
    return len(xy) < 2 or not len(KDTree(xy).query_pairs(spacing * CLOSE))


class Discs:
    """Finds overfull discs among the sites at `xy` (n, 2)."""

    def __init__(self, xy: Array, spacing: float) -> None:
        self.xy, self.radius = xy, spacing / 2.0 * INSIDE
        self.all = KDTree(xy)

    def overfull(self, sites: Indices, weights: Array, most: int) -> list[Indices]:
        """Cliques (sorted sites) that hold more than one site's weight: the most overfull, no site of weight in two of them
        for the same reason.

        `weights` of the `sites` given; of the rest they are zero. All sites of a disc are named, with weight or not.
        """
        heavy = weights > NO_WEIGHT
        sites, weights = sites[heavy], weights[heavy]
        if not len(sites):
            return []
        here = self.xy[sites]
        tree = KDTree(here)
        centres = self._centres(here, tree)
        inside = [np.array(part, np.int64) for part in tree.query_ball_point(centres, self.radius * (1.0 + 1e-12))]
        size = np.array([len(part) for part in inside])
        held = csr_array((np.ones(size.sum()), np.concatenate(inside), np.append(0, np.cumsum(size))),
                         shape=(len(centres), len(sites)))
        load = held @ weights
        found: list[Indices] = []
        taken: set[bytes] = set()
        for at in np.argsort(-load, kind="stable"):
            if load[at] <= OVERFULL or len(found) == most:
                break
            name = np.sort(held[[at], :].indices).tobytes()
            if name in taken:
                continue
            taken.add(name)
            found.append(np.sort(np.array(self.all.query_ball_point(centres[at], self.radius * (1.0 + 1e-12)), np.int64)))
        return found

    def _centres(self, here: Array, tree: KDTree) -> Array:
        """Centres of discs with two of the sites on their edge, between two of them, and on one."""
        pairs = tree.query_pairs(2.0 * self.radius, output_type="ndarray")
        if not len(pairs):
            return here
        first, second = here[pairs[:, 0]], here[pairs[:, 1]]
        middle, across = (first + second) / 2.0, second - first
        half = np.hypot(*across.T) / 2.0
        normal = np.stack([-across[:, 1], across[:, 0]], axis=1) / np.maximum(2.0 * half, 1e-300)[:, None]
        reach = np.sqrt(np.maximum(self.radius**2 - half**2, 0.0))[:, None]
        return np.concatenate([middle + normal * reach, middle - normal * reach, middle, here])

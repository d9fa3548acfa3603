"""Half-spaces of feature space whose site count a node may branch on."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.optimise.blocks import Split
from sampler.optimise.problem import SiteProblem

Array = NDArray[np.float64]
Indices = NDArray[np.int64]

SQUARE, NAMED = -1, -2
PLAIN_TRIALS, CAP_TRIALS = 4, 6
"""Splits of each kind that are tried with a linear program before one is taken; caps alone do badly on coarse grids."""
CAPS = 8
"""Sites around which caps are proposed: the most fractional ones."""
LEAST_PART, LEAST_GAP = 1e-5, 1e-7


@dataclass(frozen=True, slots=True)
class HalfSpace:
    """The sites with feature ≤ `threshold`; a set has at most `at_most` of them, or more.

    The feature of site i is B_i[axis]·vector, or with `axis` SQUARE ‖B_i·vector‖², in the problem's own terms; `axis`
    NAMED means the sites named by `keys`. `mask` (n,) in the tree's order of the sites.
    """

    axis: int
    vector: Array
    threshold: float
    at_most: int
    mask: NDArray[np.bool_]
    keys: tuple[Any, ...] = ()


class Splits:
    """Proposes half-spaces that cut the weights of a node fractionally."""

    def __init__(self, split: Split, problem: SiteProblem, order: Indices) -> None:
        self.split, self.problem, self.order = split, problem, order
        fixed: list[tuple[int, Array]] = []
        p = problem.p
        sample = problem.blocks[order[:: max(1, len(order) // 2000)]]
        seen: list[Array] = []

        def fresh(values: Array) -> bool:
            spread = values - values.mean()
            size = np.linalg.norm(spread)
            if size <= 1e-9 * np.linalg.norm(values):
                return False
            spread = spread / size
            if any(abs(spread @ other) > 1 - 1e-9 for other in seen):
                return False
            seen.append(spread)
            return True

        for axis in range(problem.blocks.shape[1]):
            for j in range(p):
                unit = np.zeros(p)
                unit[j] = 1.0
                if fresh(sample[:, axis, j]):
                    fixed.append((axis, unit))
        self.fixed = fixed

    def values(self, axis: int, vector: Array, sites: Indices | None = None) -> Array:
        """The feature of the sites (all by default)."""
        rows = self.problem.blocks[self.order if sites is None else self.order[sites]]
        return rows[:, axis] @ vector if axis >= 0 else ((rows @ vector) ** 2).sum(axis=1)

    def propose(self, sites: Indices, w: Array, worst: list[tuple[int, Array]],
                caps: list[tuple[int, Array]]) -> list[HalfSpace]:
        """Half-spaces to try at weights w on `sites`: by the terms and by `worst` (block, z), and `caps` (block, z)."""
        plain = [feature for block, z in worst for feature in self._features(block, z)]
        around = [feature for block, z in caps for feature in self._features(block, z)]
        taken: set[tuple[int, ...]] = set()
        return self._best(self.fixed + plain, sites, w, taken, 2, PLAIN_TRIALS) + \
            self._best(around, sites, w, taken, 1, CAP_TRIALS)

    def _features(self, block: int, z: Array) -> list[tuple[int, Array]]:
        lifted = self.split.blocks[block].lifts[0] @ z
        return [(axis, lifted) for axis in range(self.problem.blocks.shape[1])] + [(SQUARE, lifted)]

    def _best(self, features: list[tuple[int, Array]], sites: Indices, w: Array, taken: set[tuple[int, ...]], per: int,
              most: int) -> list[HalfSpace]:
        """The best scored splits, at most `per` of a feature: fractional part of the count × gap beside the threshold."""
        found: list[tuple[float, int, float, float, int, tuple[int, ...]]] = []
        for index, (axis, vector) in enumerate(features):
            values = self.values(axis, vector, sites)
            spread = np.ptp(values)
            if spread <= 0:
                continue
            order = np.argsort(values, kind="stable")
            values, cumulated = values[order] / spread, np.cumsum(w[order])
            gap = np.diff(values)
            part = cumulated[:-1] - np.floor(cumulated[:-1] + 1e-6)
            part = np.minimum(part, 1 - part)
            score = part * gap
            for at in np.argsort(-score, kind="stable")[:per]:
                if part[at] > LEAST_PART and gap[at] > LEAST_GAP:
                    inside = tuple(sorted(order[: at + 1].tolist()))
                    found.append((float(score[at]), index, values[at] * spread, values[at + 1] * spread,
                                  int(np.floor(cumulated[at] + 1e-6)), inside))
        found.sort(key=lambda item: -item[0])
        options: list[HalfSpace] = []
        for _, index, low, high, at_most, inside in found:
            if inside in taken:
                continue
            taken.add(inside)
            axis, vector = features[index]
            options.append(self._half(axis, vector, self.values(axis, vector), low, high, at_most))
            if len(options) == most:
                break
        return options

    def _half(self, axis: int, vector: Array, values: Array, low: float, high: float, at_most: int) -> HalfSpace:
        """The threshold in the widest gap of all sites' values in the middle third between two support points."""
        third = (high - low) / 3
        near = np.sort(values[(values > low + third) & (values < high - third)])
        edges = np.concatenate([[low + third], near, [high - third]])
        at = int(np.argmax(np.diff(edges)))
        threshold = (edges[at] + edges[at + 1]) / 2
        return HalfSpace(axis, vector, float(threshold), at_most, values <= threshold)

    def single(self, sites: Indices, w: Array) -> HalfSpace | None:
        """The most fractional site by itself: for sites that no feature tells apart."""
        part = np.minimum(w, 1 - w)
        if part.max(initial=0.0) <= 1e-6:
            return None
        mask = np.zeros(len(self.order), bool)
        mask[sites[int(np.argmax(part))]] = True
        return self.named(mask)

    def named(self, mask: NDArray[np.bool_]) -> HalfSpace:
        """The sites of a mask by their names."""
        keys = tuple(self.problem.key[self.order[mask]].tolist())
        return HalfSpace(NAMED, np.zeros(self.problem.p), 0.0, 0, mask, keys)

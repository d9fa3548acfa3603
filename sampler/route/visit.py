"""The route over chosen sites: both sides, one turning over between, every second accounted for."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from sampler.route.bound import reading_seconds, travel_lower_bound
from sampler.route.machine import SIDES, Machine, to_machine_frame, travel_seconds
from sampler.route.tour import visiting_order

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Route:
    """Sites in visiting order and where the seconds go.

    `order` (n,) rows of the sites; `machine_xy_mm` (n, 2) and `at_s` (n,), the second at which each read begins, by row.
    `travel_s` holds all moves with settling, the one from side to side too, as if it were made after turning over;
    `travel_at_least_s` is what no order of the same sites can beat (0 when not asked for).
    """

    order: NDArray[np.int64]
    machine_xy_mm: Array
    at_s: Array
    read_s: float
    travel_s: float
    flip_s: float
    handling_s: float
    travel_at_least_s: float = 0.0

    @property
    def seconds(self) -> float:
        """One panel, from loading to unloading."""
        return self.handling_s + self.travel_s + self.flip_s + self.read_s

    @property
    def within_s(self) -> float:
        """The order takes at most this much longer than the quickest one."""
        return max(0.0, self.travel_s - self.travel_at_least_s)


def follow(order: NDArray[np.int64], xy_mm: Array, machine: Machine, size_mm: tuple[float, float], *,
           side: NDArray[np.str_] | None = None, read_s: Array | None = None) -> Route:
    """The seconds of visiting sites (n, 2; panel frame) in the given order, on a panel of `size_mm` (width, height).

    `side` (n,) "front" or "back"; `read_s` (n,) seconds of each read, NaN where the machine's holds. The panel is loaded
    with the first visited side up.
    """
    far = far_side(len(xy_mm), side)
    seen = to_machine_frame(xy_mm, machine, size_mm, far)
    reads = reading_seconds(machine, len(seen), read_s)
    if not len(order):
        return Route(order, seen, np.zeros(0), 0.0, 0.0, 0.0, machine.load_s + machine.unload_s)
    along = seen[order]
    first, last = machine.start_mm or along[0], machine.end_mm or along[-1]
    moves = travel_seconds(machine, np.vstack([first, along]), np.vstack([along, last]))
    flips = machine.flip_s * np.r_[0.0, far[order[1:]] != far[order[:-1]]]
    at = np.empty(len(seen))
    at[order] = machine.load_s + np.cumsum(moves[:-1] + flips) + np.r_[0.0, np.cumsum(reads[order])[:-1]]
    return Route(order, seen, at, float(reads[order].sum()), float(moves.sum()), float(flips.sum()),
                 machine.load_s + machine.unload_s)


def plan_route(xy_mm: Array, machine: Machine, size_mm: tuple[float, float], *, side: NDArray[np.str_] | None = None,
               read_s: Array | None = None, key: NDArray | None = None, seed: int = 1, iterations: int | None = None,
               bound: bool = True) -> Route:
    """A quick route over the sites; arguments as in `follow`. One seed, one answer, whatever the order of the sites.

    Each side is visited at one go, so the panel is turned over at most once. `bound` asks for `travel_at_least_s`;
    `key`, `iterations` as in `visiting_order`.
    """
    far = far_side(len(xy_mm), side)
    late = far == (machine.first_side == "front")
    seen = to_machine_frame(xy_mm, machine, size_mm, far)
    order = visiting_order(seen, machine, seed, late=late, key=key, iterations=iterations)
    route = follow(order, xy_mm, machine, size_mm, side=side, read_s=read_s)
    if not bound:
        return route
    return replace(route, travel_at_least_s=travel_lower_bound(seen, machine, late=late, upper_s=route.travel_s))


def far_side(n: int, side: NDArray[np.str_] | None) -> NDArray[np.bool_]:
    """Which of n sites lie on the back, (n,); without `side`, none."""
    return np.zeros(n, bool) if side is None else np.asarray(side) == SIDES[1]

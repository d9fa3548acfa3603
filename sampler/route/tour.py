"""The quickest order of visits: for any symmetric cost matrix, and for places on a machine.

Every question becomes one closed tour: the ends of an open tour are joined by an edge that must stay, through an
extra node without cost where an end is free.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sampler.route.cycle import closed_tour, default_iterations
from sampler.route.machine import Machine, travel_seconds

Array = NDArray[np.float64]
Order = NDArray[np.int64]


def tour(cost: Array, *, start: int | None = None, end: int | None = None, closed: bool = False,
         rng: np.random.Generator, iterations: int | None = None) -> Order:
    """A short tour: every node of `cost` (n, n; symmetric, non-negative) once, as an order of indices (n,).

    Open by default, from `start` to `end` where given; `closed` returns to its first node, which is `start` (or 0).
    Of the two directions that cost the same, the one with the smaller index first. One `rng` state, one answer.
    """
    n = len(cost)
    check_ends(n, start, end, closed)
    if n <= 1:
        return np.arange(n)
    matrix, kept = closed_form(cost, start, end, closed)
    cycle = closed_tour(matrix, kept, rng, default_iterations(len(matrix)) if iterations is None else iterations)
    if closed:
        first = cycle.index(start or 0)
        order = cycle[first:] + cycle[:first]
        return np.array(order if order[1] <= order[-1] else order[:1] + order[:0:-1])
    if start is not None and end is not None:
        cut = cycle.index(start)
        order = cycle[cut:] + cycle[:cut]
        return np.array(order if order[-1] == end else order[:1] + order[:0:-1])
    cut = cycle.index(n)
    order = cycle[cut + 1:] + cycle[:cut]
    backwards = order[-1] == start or order[0] == end if kept else order[0] > order[-1]
    return np.array(order[::-1] if backwards else order)


def tour_cost(cost: Array, order: Order, closed: bool = False) -> float:
    """The cost along an order, back to its first node when `closed`."""
    along = cost[order[:-1], order[1:]].sum() if len(order) else 0.0
    return float(along + (cost[order[-1], order[0]] if closed and len(order) else 0.0))


def check_ends(n: int, start: int | None, end: int | None, closed: bool) -> None:
    for name, node in (("start", start), ("end", end)):
        if node is not None and not 0 <= node < n:
            raise ValueError(f"{name} is {node}; there are {n} nodes")
    if closed and end is not None:
        raise ValueError("a closed tour has no end; give its start only")
    if start is not None and start == end and n > 1:
        raise ValueError(f"start and end are both {start}; ask for a closed tour instead")


def closed_form(cost: Array, start: int | None, end: int | None, closed: bool) -> tuple[Array, tuple[int, int] | None]:
    """The closed tour that asks the same: its cost matrix, and the edge it must keep (which costs nothing).

    With a free end an extra last node, zero from every other, closes the tour; the kept edge ties it to a given end.
    """
    matrix = np.array(cost, float)
    if closed:
        return matrix, None
    if start is not None and end is not None:
        matrix[start, end] = matrix[end, start] = 0.0
        return matrix, (start, end)
    given = start if start is not None else end
    return np.pad(matrix, (0, 1)), None if given is None else (given, len(matrix))


@dataclass(frozen=True, slots=True)
class Places:
    """Different places among sites, and what moving between them costs.

    `late` (p,): on the side visited second; `place_of` (n,) each site's place. `cost` has the machine's given start and
    end position after the places, as nodes `start` and `end`; it holds `crossing` seconds for each change of side, on
    top of the move, and every short tour changes side once (0 when all is on one side).
    """

    late: NDArray[np.bool_]
    place_of: Order
    cost: Array
    start: int | None
    end: int | None
    crossing: float


def places(machine_xy_mm: Array, machine: Machine, late: NDArray[np.bool_] | None = None) -> Places:
    """The places of sites (n, 2; machine's frame), sorted by side, x and y: independent of the order of the sites.

    Undoing two changes of side replaces at most four moves, so four times the longest move makes each too dear to be
    made without need. A start belongs to the side visited first, an end to the last.
    """
    n = len(machine_xy_mm)
    rows = np.column_stack([np.zeros(n) if late is None else late, machine_xy_mm])
    different, place_of = np.unique(rows, axis=0, return_inverse=True)
    nodes, side = [different[:, 1:]], different[:, 0].astype(bool)
    start = end = None
    if machine.start_mm is not None and n:
        start = len(side)
        nodes.append(np.array([machine.start_mm]))
        side = np.append(side, side.min())
    if machine.end_mm is not None and n:
        end = len(side)
        nodes.append(np.array([machine.end_mm]))
        side = np.append(side, side.max())
    stands = np.vstack(nodes)
    cost = travel_seconds(machine, stands[:, None], stands[None])
    crossing = 4.0 * float(cost.max()) + 1.0 if side.any() and not side.all() else 0.0
    return Places(side[:len(different)], place_of.reshape(n), cost + crossing * (side[:, None] != side[None, :]), start,
                  end, crossing)


def visiting_order(machine_xy_mm: Array, machine: Machine, seed: int = 1, *, late: NDArray[np.bool_] | None = None,
                   key: NDArray | None = None, iterations: int | None = None) -> Order:
    """Rows of the sites (n, 2; machine's frame) in a quick order of visits, from the machine's start to its end position.

    `late` (n,) marks the sites of the side visited second, all of them after all others. Sites at one place follow each
    other by `key` (n,), or by row. One seed, one answer, whatever the order of the sites. `iterations`: more or fewer
    kicks than `default_iterations`.
    """
    n = len(machine_xy_mm)
    if n == 0:
        return np.zeros(0, np.int64)
    found = places(machine_xy_mm, machine, late)
    count = len(found.late)
    visits = tour(found.cost, start=found.start, end=found.end, rng=np.random.default_rng(seed), iterations=iterations)
    visits = visits[visits < count]  # the first side leads: its places have the smaller indices
    rank = np.empty(count, np.int64)
    rank[visits] = np.arange(count)
    return np.lexsort((np.arange(n) if key is None else key, rank[found.place_of]))

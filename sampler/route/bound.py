"""What no order of visits can beat: Held and Karp's bound for given stops, and seconds per site for stops not yet chosen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

from sampler.route.machine import Machine, move_time, travel_seconds
from sampler.route.tour import check_ends, closed_form, places, tour, tour_cost

Array = NDArray[np.float64]

MOMENTUM = 0.7             # part of the newest subgradient in each step; the rest is the one before (Volgenant & Jonker)
HALVE_AFTER = 12           # steps without a better bound before the step length is halved
SMALLEST_STEP = 1e-3       # the step-length factor at which the ascent ends
LOOKED_AT = 16             # neighbours weighed for the two cheapest moves of a site; see `_two_cheapest`


def tour_lower_bound(cost: Array, *, start: int | None = None, end: int | None = None, closed: bool = False,
                     upper: float | None = None, iterations: int = 300) -> float:
    """A lower bound on the cost of every tour as asked of `tour`; `upper` is the cost of a known one.

    For any π the cheapest 1-tree (a spanning tree of all nodes but one, and two edges at that one) under the costs
    cᵢⱼ + πᵢ + πⱼ costs at most 2 Σπ more than the shortest closed tour; subgradient ascent seeks the best π (Held & Karp
    1970, 1971; step length of Held, Wolfe & Crowder 1974). Valid at every π, so also when it ends early. For costs that
    obey the triangle inequality it bounds every tour of more nodes as well.
    """
    n = len(cost)
    check_ends(n, start, end, closed)
    if n <= 2:
        return float(cost[0, -1]) * (2.0 if closed else 1.0) if n == 2 else 0.0
    matrix, kept = closed_form(cost, start, end, closed)
    if upper is None:
        order = tour(cost, start=start, end=end, closed=closed, rng=np.random.default_rng(0), iterations=0)
        upper = tour_cost(cost, order, closed)
    if kept is not None:
        special = kept[0]
    elif not closed:
        special = len(matrix) - 1
    else:
        special = int(np.argmax(np.partition(matrix + np.diag(np.full(n, np.inf)), 1, axis=1)[:, 1]))
    others = np.delete(np.arange(len(matrix)), special)
    tree_cost = matrix[np.ix_(others, others)]
    special_cost = matrix[special, others].copy()
    if kept is not None:
        special_cost[others == kept[1]] = -np.inf  # always taken; it costs nothing
    weight, factor, stale, best = np.zeros(len(others)), 2.0, 0, -np.inf
    # The special node keeps weight 0: its degree is always 2.
    before = np.zeros(len(others))
    for _ in range(iterations):
        value, degree = _spanning_tree(tree_cost + weight[:, None] + weight[None, :])
        ends = np.argpartition(special_cost + weight, 1)[:2]
        taken = np.where(np.isneginf(special_cost[ends]), 0.0, special_cost[ends]) + weight[ends]
        degree[ends] += 1
        value += float(taken.sum() - 2.0 * weight.sum())
        stale += 1
        if value > best:
            best, stale = value, 0
        excess = degree - 2.0
        size = float(excess @ excess)
        if size == 0.0 or upper - value <= 0.0:
            break
        if stale >= HALVE_AFTER:
            factor, stale = factor / 2, 0
            if factor < SMALLEST_STEP:
                break
        weight += factor * (upper - value) / size * (MOMENTUM * excess + (1 - MOMENTUM) * before)
        before = excess
    return min(max(0.0, best), upper)


def travel_lower_bound(machine_xy_mm: Array, machine: Machine, *, late: NDArray[np.bool_] | None = None,
                       upper_s: float | None = None) -> float:
    """Seconds that every route over the sites (n, 2; machine's frame) travels at least, with one change of side at most.

    Arguments as in `visiting_order`; `upper_s` is the travel of a known route. Visiting more sites takes no less.
    """
    if not len(machine_xy_mm):
        return 0.0
    found = places(machine_xy_mm, machine, late)
    upper = None if upper_s is None else upper_s + found.crossing
    return max(0.0, tour_lower_bound(found.cost, start=found.start, end=found.end, upper=upper) - found.crossing)


def _spanning_tree(cost: Array) -> tuple[float, Array]:
    """Cost of the cheapest spanning tree of a complete graph and each node's degree in it (Prim 1957)."""
    n = len(cost)
    degree, link, total, node = np.zeros(n), np.zeros(n, int), 0.0, 0
    nearest = cost[0].copy()
    outside = np.zeros(n)
    outside[0] = np.inf
    for _ in range(n - 1):
        node = int((nearest + outside).argmin())
        total += float(nearest[node])
        degree[node] += 1
        degree[link[node]] += 1
        outside[node] = np.inf
        nearer = cost[node] < nearest
        link[nearer] = node
        np.minimum(nearest, cost[node], out=nearest)
    return total, degree


@dataclass(frozen=True, slots=True)
class SecondsBound:
    """constant_s + Σ site_s over the visited sites ≤ the true seconds, for every non-empty choice and every order."""

    site_s: Array
    constant_s: float


def site_seconds_lower(machine_xy_mm: Array, machine: Machine, *, far: NDArray[np.bool_] | None = None,
                       read_s: Array | None = None, spacing_mm: float = 0.0) -> SecondsBound:
    """Seconds that each candidate (n, 2; machine's frame) costs at least, whichever others are visited and in what order.

    `far` (n,) marks the candidates of the side visited second, `read_s` (n,) the time of each read (NaN: the machine's);
    chosen sites lie at least `spacing_mm` apart when a rule says so. Turning over is not counted: add it where both
    sides must be visited.

    Proof. Give half of every move to each of its two ends. A visited site is the end of two moves, to two different
    nodes (sites, start or end position), so it gets at least h = (m₁ + m₂)/2 with m₁ ≤ m₂ its two cheapest moves to any
    of them; moves between sites stay on one side, and with the spacing rule none is shorter than that. A given start or
    end position gets half of its cheapest move. What may be missing: half a move at each free end of the route, and,
    with two sides, the two halves of the move while the panel is turned over, which may take no time. A site misses
    m₂/2, or both halves, (m₁ + m₂)/2 ≤ m₂; so each missing half is at most max m₂ / 2, and the constant gives it back.
    """
    n = len(machine_xy_mm)
    reads = reading_seconds(machine, n, read_s)
    constant = machine.load_s + machine.unload_s
    if n == 0:
        return SecondsBound(reads, constant)
    far = np.zeros(n, bool) if far is None else far
    moves = np.full((n, 4), np.inf)
    for side in (far, ~far):
        moves[side, :2] = _two_cheapest(machine_xy_mm[side], machine)
    if spacing_mm > 0:
        moves = np.maximum(moves, _fastest(machine, np.array(spacing_mm / np.sqrt(2.0))))
    for column, position in ((2, machine.start_mm), (3, machine.end_mm)):
        if position is not None:
            moves[:, column] = travel_seconds(machine, machine_xy_mm, position)
            constant += 0.5 * float(moves[:, column].min())
    two = np.sort(moves, axis=1)[:, :2]
    two[np.isinf(two)] = 0.0  # nowhere to go: visited alone, with both halves missing
    missing = (machine.start_mm is None) + (machine.end_mm is None) + 2 * bool(far.any() and not far.all())
    return SecondsBound(reads + 0.5 * two.sum(axis=1), constant - 0.5 * missing * float(two[:, 1].max()))


def reading_seconds(machine: Machine, n: int, read_s: Array | None) -> Array:
    """Seconds of one read at each of n sites: `read_s` (n,), the machine's where that is NaN."""
    return np.full(n, machine.read_s) if read_s is None else np.where(np.isnan(read_s), machine.read_s, read_s)


def _fastest(machine: Machine, distance_mm: Array) -> Array:
    """Seconds that any move takes at least whose longer axis covers this distance, (n,)."""
    seconds = move_time(distance_mm, max(machine.speed_mm_s), max(machine.acceleration_mm_s2))
    return seconds + machine.settling_s * (seconds > 0)


def _two_cheapest(xy_mm: Array, machine: Machine) -> Array:
    """The two cheapest moves from each of the sites (n, 2) to another, (n, 2), infinite where there is none.

    Exact while both axes are alike; otherwise a site may be given less, namely what the faster axis would take to the
    last of the `LOOKED_AT` neighbours weighed, as all others lie farther.
    """
    n = len(xy_mm)
    count = min(n - 1, LOOKED_AT)
    if count < 1:
        return np.full((n, 2), np.inf)
    distance, near = (np.asarray(part) for part in KDTree(xy_mm).query(xy_mm, k=count + 1, p=np.inf))
    itself = near == np.arange(n)[:, None]
    itself[~itself.any(axis=1), -1] = True  # among many at one place a site may not find itself: one of them stands in
    near = near[~itself].reshape(n, count)
    cheapest = np.full((n, 2), np.inf)
    cost = np.sort(travel_seconds(machine, xy_mm[:, None], xy_mm[near]), axis=1)[:, :2]
    cheapest[:, :cost.shape[1]] = cost
    if count < n - 1:
        cheapest = np.minimum(cheapest, _fastest(machine, distance[:, -1])[:, None])
    return cheapest

"""Local search for short closed tours, restarted from kicks.

Nearest neighbour, then 2-opt and Or-opt on neighbour lists (Bentley 1992, ORSA J. Comput. 4:387), then iterated local
search: a kick exchanges two stretches that follow each other within a short part of the tour, the repair looks only at
the nodes touched, and the result stays if it is not longer (Martin, Otto & Felten 1991; Johnson & McGeoch 1997). Work is
bounded by counts, never by the clock.
"""

from __future__ import annotations

from itertools import permutations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

NEIGHBOURS = 8
LONGEST_MOVED = 3          # Or-opt moves up to this many neighbouring stops at once
KICK_STRETCH = 50          # a kick reorders within this many positions, so that its repair stays local
ENUMERATED = 7             # closed tours of so few nodes are enumerated
RELATIVE_GAIN = 1e-10      # smaller gains, as a part of the largest cost, are rounding: equal tours would alternate


def default_iterations(nodes: int) -> int:
    """Kicks for that many nodes: chosen so that 150 nodes take about half a second."""
    return min(4000, 100 + 25 * nodes)


def closed_tour(matrix: Array, kept: tuple[int, int] | None, rng: np.random.Generator, iterations: int) -> list[int]:
    """A short closed tour over all nodes of `matrix` (n, n; symmetric, non-negative) that keeps the edge `kept`."""
    n, largest = len(matrix), float(matrix.max())
    if kept is not None:  # no move of three edges can afford to lose this one
        matrix = matrix.copy()
        matrix[kept] = matrix[kept[::-1]] = -4.0 * largest - 1.0
    if n <= ENUMERATED:
        return _enumerated(matrix)
    apart = matrix + np.where(np.eye(n, dtype=bool), np.inf, 0.0)
    near = np.argsort(apart, axis=1, kind="stable")[:, :min(NEIGHBOURS, n - 1)].tolist()
    rows = matrix.tolist()
    least = RELATIVE_GAIN * largest
    order = _nearest_neighbour(apart)
    place = [0] * n
    for k, node in enumerate(order):
        place[node] = k
    _improve(order, place, rows, near, order[::-1], least)
    stretch = min(KICK_STRETCH, n - 2)
    for first, *cuts in rng.random((iterations, 4)).tolist():
        begin = int(first * (n - 1 - stretch))
        i, j, k = sorted(begin + 1 + int(cut * stretch) for cut in cuts)
        if i == j or j == k:
            continue
        edges = ((order[i - 1], order[i]), (order[j - 1], order[j]), (order[k - 1], order[k]))
        if kept is not None and any(kept in (edge, edge[::-1]) for edge in edges):
            continue
        (a, b), (c, d), (e, f) = edges
        change = rows[a][d] + rows[e][b] + rows[c][f] - rows[a][b] - rows[c][d] - rows[e][f]
        order_before, place_before = order[:], place[:]
        order[i:k] = order[j:k] + order[i:j]
        for position in range(i, k):
            place[order[position]] = position
        change -= _improve(order, place, rows, near, [a, b, c, d, e, f], least)
        if change > least:
            order, place = order_before, place_before
    return order


def _enumerated(matrix: Array) -> list[int]:
    orders = np.array([(0, *rest) for rest in permutations(range(1, len(matrix)))])
    return orders[np.argmin(matrix[orders, np.roll(orders, -1, axis=1)].sum(axis=1))].tolist()


def _nearest_neighbour(apart: Array) -> list[int]:
    left = np.zeros(len(apart))
    order = [0]
    for _ in range(len(apart) - 1):
        left[order[-1]] = np.inf
        order.append(int(np.argmin(apart[order[-1]] + left)))
    return order


def _improve(order: list[int], place: list[int], cost: list[list[float]], near: list[list[int]], waiting: list[int],
             least: float) -> float:
    """Best moves at each waiting node until none gains more than `least`; changes `order`, `place`; returns the gain.

    At node a with tour neighbour b and a nearer node c, two moves are weighed: replace (a,b), (c,d) by (a,c), (b,d); or
    take the short stretch e…a away from between `before` and b and put it between c and one of its neighbours f.
    """
    n, total = len(order), 0.0
    queued = set(waiting)
    while waiting:
        a = waiting.pop()
        queued.discard(a)
        row, here = cost[a], place[a]
        best, move = least, None
        for way in (1, -1):
            b = order[(here + way) % n]
            edge = row[b]
            stretches = []
            for length in range(1, LONGEST_MOVED + 1):
                e, before = order[(here - way * (length - 1)) % n], order[(here - way * length) % n]
                stretches.append((cost[before][e] + edge - cost[before][b], length, cost[e]))
            for c in near[a]:
                gain = edge - row[c]
                if gain <= least:
                    break
                there = place[c]
                ahead, behind = order[(there + way) % n], order[(there - way) % n]
                edge_ahead, edge_behind = cost[c][ahead], cost[c][behind]
                two = gain + edge_ahead - cost[b][ahead]
                if two > best:
                    best, move = two, (0, way, there, 0)
                back = (here - there) * way % n  # how far c lies behind a
                for taken, length, far in stretches:
                    if back < length:  # c is in the stretch, and in every longer one
                        break
                    taken -= row[c]
                    if back != length and taken + edge_ahead - far[ahead] > best:
                        best, move = taken + edge_ahead - far[ahead], (length, way, there, 1)
                    if taken + edge_behind - far[behind] > best:
                        best, move = taken + edge_behind - far[behind], (length, way, there, -1)
        if move is None:
            continue
        total += best
        for node in _apply(order, place, here, *move):
            if node not in queued:
                queued.add(node)
                waiting.append(node)
    return total


def _apply(order: list[int], place: list[int], here: int, length: int, way: int, there: int,
           beside: int) -> tuple[int, ...]:
    """Make the move of `_improve`; returns the nodes whose neighbours changed. `length` 0 is the exchange of two edges;
    otherwise the stretch of that length that ends at `here` goes between `there` and its neighbour on side `beside`."""
    n = len(order)
    a, b, c, f = order[here], order[(here + way) % n], order[there], order[(there + way * (beside or 1)) % n]
    if not length:
        begin, stop = (here + 1, there) if way == 1 else (here, there - 1)
        _reverse(order, place, begin % n, stop % n)
        return a, b, c, f
    e, before = order[(here - way * (length - 1)) % n], order[(here - way * length) % n]
    begin = min(here, here - way * (length - 1)) % n
    if begin + length > n:
        order[:] = order[begin:] + order[:begin]
        there, begin = (there - begin) % n, 0
        for position, node in enumerate(order):
            place[node] = position
    stretch = order[begin:begin + length]
    after_c = way * beside == 1
    if after_c == (way == 1):  # a lies next to c: first in the stretch when c comes before it
        stretch.reverse()
    gap = (there if after_c else there - 1) % n
    if gap >= begin + length:
        low, high = begin, gap + 1
        order[low:high] = order[begin + length:high] + stretch
    else:
        low, high = gap + 1, begin + length
        order[low:high] = stretch + order[low:begin]
    for position in range(low, high):
        place[order[position]] = position
    return a, b, c, f, e, before


def _reverse(order: list[int], place: list[int], i: int, j: int) -> None:
    """Reverse positions i…j of the closed tour, or all the others, whichever is shorter: the same tour."""
    n = len(order)
    if 2 * ((j - i) % n + 1) > n:
        i, j = (j + 1) % n, (i - 1) % n
    for _ in range(((j - i) % n + 1) // 2):
        left, right = order[i], order[j]
        order[i], order[j] = right, left
        place[right], place[left] = i, j
        i, j = (i + 1) % n, (j - 1) % n

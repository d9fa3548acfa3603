"""Grids of equal cells recognised from where marks repeat.

Each axis on its own: displacements along the axis between marks of a sample vote for a pitch; the smallest pitch that nearly as
many marks follow as follow the best one is the period. Where the marks then fall within one period, the cut between two
cells is the one that leaves the fewest columns: marks in the corners of cells leave their widest gap inside the cell.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import KDTree

from sampler.panel.layout import Grid

Array = NDArray[np.float64]

REPEAT_TOLERANCE_MM = 0.012
"""Marks repeat to far better as drawn; measured ones, and those rounded to 0.01 mm, to this."""
FOLLOW_LEAST = 0.25
"""A pitch that fewer of the marks follow is not a grid; of marks at random practically none do."""
FOLLOW_MARGIN = 0.03
"""A shorter pitch wins over a longer one that only this much more marks follow: multiples of a period are followed too."""
CHANCE = 2.0
"""Standard deviations by which missing marks may make a period look worse than its multiples."""
FEWEST_CELLS = 4
"""Two or three like groups of marks may be chance or a symmetric drawing."""
MOST_MISSING = 0.4
"""Of the places that a pattern makes in all cells, the share that may lack their mark."""
THINNEST_CELL = 0.3
"""Without a pattern of its own along one axis, a cell is not thinner than this share of its other side."""
MOST_GRIDS = 4
_VOTERS, _JUDGES, _MOST_PITCHES = 256, 4096, 24
_MOST_CUTS, _MOST_ROUNDS = 60, 12


@dataclass(frozen=True, slots=True)
class Repetition:
    """A grid with the marks that repeat in it. `pattern_mm` (k, 2) are their places from the cell's centre; `member` says
    which of the marks belong to it; `missing` counts places of cells without their mark."""

    grid: Grid
    pattern_mm: Array
    member: NDArray[np.bool_]
    missing: int


@dataclass(frozen=True, slots=True)
class Lattice:
    """Evenly spaced marks: a pitch along each axis, but no cells to be seen in it."""

    columns: int
    rows: int
    pitch_mm: tuple[float, float]


def repetitions(xy_mm: Array) -> tuple[list[Repetition], Lattice | None]:
    """The grids that marks (n, 2) repeat in, that with most marks first, or the even lattice they stand on.

    Marks of one grid are set aside before the next is looked for. The order of the marks does not matter.
    """
    order = np.lexsort((xy_mm[:, 1], xy_mm[:, 0]))
    left = np.zeros(len(xy_mm), bool)
    left[order] = True
    found: list[Repetition] = []
    lattice = None
    while len(found) < MOST_GRIDS and left.sum() >= 2 * FEWEST_CELLS:
        rows = order[left[order]]
        grid, even = _grid(xy_mm[rows])
        if grid is None:
            lattice = even if not found and even is not None and even.columns * even.rows <= 2 * len(rows) else None
            break
        pattern, member, missing = _pattern(xy_mm[rows], grid)
        if len(pattern) < 2 or grid.cells < FEWEST_CELLS or missing > MOST_MISSING * grid.cells * len(pattern):
            break
        members = np.zeros(len(xy_mm), bool)
        members[rows[member]] = True
        left &= ~members
        found.append(Repetition(grid, pattern, members, missing))
    return sorted(found, key=lambda one: -int(one.member.sum())), lattice


@dataclass(frozen=True, slots=True)
class _Axis:
    """Cells along one axis: their number, pitch and common centre; `width_mm`: from the first to the last mark of a cell."""

    count: int
    pitch_mm: float
    centre_mm: float
    width_mm: float


def _grid(xy_mm: Array) -> tuple[Grid | None, Lattice | None]:
    periods = [_period(xy_mm, axis) for axis in (0, 1)]
    follows = np.zeros(len(xy_mm), bool)
    tree = KDTree(xy_mm)
    for axis, pitch in enumerate(periods):
        if pitch is not None:
            for sign in (-1, 1):
                follows |= _followed(tree, xy_mm, axis, sign * pitch)
    if not follows.any():
        return None, None
    axes = [_cells(xy_mm[follows, axis], pitch) for axis, pitch in enumerate(periods)]
    even = [axis.count > 1 and axis.width_mm < REPEAT_TOLERANCE_MM * 2 for axis in axes]
    if even[0] and even[1]:
        return None, Lattice(axes[0].count, axes[1].count, (axes[0].pitch_mm, axes[1].pitch_mm))
    for axis in (0, 1):
        other = axes[1 - axis]
        if even[axis] and axes[axis].pitch_mm < THINNEST_CELL * other.pitch_mm:
            axes[axis] = _cells(xy_mm[follows, axis], None)
    if axes[0].count * axes[1].count < 2:
        return None, None
    step = (axes[0].pitch_mm, axes[1].pitch_mm)
    return Grid("", axes[0].count, axes[1].count, step, step, (axes[0].centre_mm, axes[1].centre_mm)), None


def _period(xy_mm: Array, axis: int) -> float | None:
    """The pitch along one axis at which marks repeat, None without one."""
    along, across = xy_mm[:, axis], xy_mm[:, 1 - axis]
    order = np.argsort(across, kind="stable")
    level = across[order]
    voters = np.unique(np.linspace(0, len(xy_mm) - 1, _VOTERS).astype(np.int64))
    first = np.searchsorted(level, across[voters] - REPEAT_TOLERANCE_MM)
    last = np.searchsorted(level, across[voters] + REPEAT_TOLERANCE_MM, side="right")
    shifts = np.concatenate([along[order[begin:end]] - along[voter]
                             for voter, begin, end in zip(voters, first, last, strict=True)])
    shifts = np.sort(shifts[shifts > 4 * REPEAT_TOLERANCE_MM])
    if not len(shifts):
        return None
    votes = np.searchsorted(shifts, shifts + 2 * REPEAT_TOLERANCE_MM, side="right") - np.arange(len(shifts))
    reach = along.max() + REPEAT_TOLERANCE_MM
    could = np.searchsorted(np.sort(along[voters]), reach - shifts, side="right")
    pitches: list[float] = []
    for i in np.flatnonzero(_as_good_as_any(votes, could)):
        pitch = float(np.median(shifts[i:i + votes[i]]))
        if not pitches or pitch - pitches[-1] > 4 * REPEAT_TOLERANCE_MM:
            pitches.append(pitch)
        if len(pitches) == _MOST_PITCHES:
            break
    if not pitches:
        return None
    tree = KDTree(xy_mm)
    judges = xy_mm[np.unique(np.linspace(0, len(xy_mm) - 1, _JUDGES).astype(np.int64))]
    eligible = [judges[judges[:, axis] + pitch <= reach] for pitch in pitches]
    followed = [int(_followed(tree, one, axis, pitch).sum()) for one, pitch in zip(eligible, pitches, strict=True)]
    good = np.flatnonzero(_as_good_as_any(np.array(followed), np.array([len(one) for one in eligible])))
    return _refined(tree, xy_mm, axis, pitches[good[0]]) if len(good) else None


def _as_good_as_any(followed: NDArray[np.int64], could: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Which pitches are followed by a share of the marks that could, that is as high as any up to chance and the margin.

    Shares are (followed + 1)/(could + 2), so that few marks alike do not beat many nearly alike.
    """
    share = (np.minimum(followed, could) + 1) / (could + 2)
    deviation = np.sqrt(share * (1 - share) / (could + 2))
    best = int(np.argmax(share - deviation))
    chance = np.sqrt(share[best] * (1 - share[best]) * (1 / (could + 2) + 1 / (could[best] + 2)))
    return (could >= 2) & (share >= FOLLOW_LEAST) & (share >= share[best] - FOLLOW_MARGIN - CHANCE * chance)


def _followed(tree: KDTree, xy_mm: Array, axis: int, shift_mm: float) -> NDArray[np.bool_]:
    """Which points have a mark at the given shift along an axis."""
    return _nearest(tree, xy_mm + np.eye(2)[axis] * shift_mm, REPEAT_TOLERANCE_MM)[0]


def _nearest(tree: KDTree, xy_mm: Array, within_mm: float) -> tuple[NDArray[np.bool_], NDArray[np.int64]]:
    """Which points (n, 2) have a point of the tree this near on each axis, and for those which it is."""
    distance, nearest = tree.query(xy_mm, p=np.inf, distance_upper_bound=within_mm)
    near = np.isfinite(distance)
    return near, np.asarray(nearest, np.int64)[near]


def _refined(tree: KDTree, xy_mm: Array, axis: int, pitch: float) -> float:
    """The mean shift of all pairs at a pitch, as the shortest decimal number that is within its standard uncertainty."""
    paired, other = _nearest(tree, xy_mm + np.eye(2)[axis] * pitch, REPEAT_TOLERANCE_MM)
    shifts = xy_mm[other, axis] - xy_mm[paired, axis]
    return short(float(shifts.mean()), 3 * float(shifts.std()) / math.sqrt(len(shifts)))


def short(value: float, within: float) -> float:
    """The value with the fewest decimals that stay within a tolerance (at least a nanometre in mm).

    >>> short(122.00031, 0.0005), short(40.666666667, 0.0)
    (122.0, 40.666667)
    """
    return next((round(value, places) + 0.0 for places in range(7)
                 if abs(round(value, places) - value) <= max(within, 1e-6)), value)


def _cells(along: Array, pitch: float | None) -> _Axis:
    """Cells of a pitch along one axis from the coordinates of the marks that repeat; one cell for all without a pitch."""
    if pitch is None:
        low, high = float(along.min()), float(along.max())
        return _Axis(1, max(high - low, 1.0), (low + high) / 2, high - low)
    place = np.sort(along % pitch)
    # Places of one mark in all cells are runs; cuts lie in the gaps between runs, the last one across the period's end.
    gaps = np.diff(np.append(place, place[0] + pitch))
    widest = [i for i in np.argsort(-gaps, kind="stable")[:_MOST_CUTS] if gaps[i] > 2 * REPEAT_TOLERANCE_MM]
    best = None
    for i in widest or [int(np.argmax(gaps))]:
        cut = place[i] + gaps[i] / 2
        cell = np.floor((along - cut) / pitch)
        count = int(cell.max() - cell.min()) + 1
        if best is None or count < best.count:
            centre = cut + (cell.min() + count / 2) * pitch
            best = _Axis(count, pitch, short(float(centre), 5e-4), float(pitch - gaps[i]))
    assert best is not None
    return best


def _pattern(xy_mm: Array, grid: Grid) -> tuple[Array, NDArray[np.bool_], int]:
    """Places that occur in at least half of the cells (k, 2), from the cell's centre; the marks on them; how many lack.

    Gathered from the fullest cell, then from that with most marks on other places, and so on.
    """
    cell = grid.locate(xy_mm)
    inside = np.flatnonzero(cell >= 0)
    local = xy_mm[inside] - grid.cell_centres_mm[cell[inside]]
    cell = cell[inside]
    place = np.full(len(inside), -1)
    places = np.zeros((0, 2))
    for _ in range(_MOST_ROUNDS):
        free = place < 0
        if not free.any():
            break
        fullest = np.bincount(cell[free], minlength=grid.cells).argmax()
        begin = len(places)
        places = np.concatenate([places, local[free & (cell == fullest)]])
        near, nearest = _nearest(KDTree(places[begin:]), local[free], 2 * REPEAT_TOLERANCE_MM)
        place[np.flatnonzero(free)[near]] = nearest + begin
    on = place >= 0
    count = np.bincount(place[on], minlength=len(places))
    kept = count >= grid.cells / 2
    member = np.zeros(len(xy_mm), bool)
    member[inside[on]] = kept[place[on]]
    mean = np.stack([np.bincount(place[on], local[on, axis], len(places)) for axis in (0, 1)], axis=1)
    pattern = mean[kept] / count[kept, None]
    missing = int(np.maximum(grid.cells - count[kept], 0).sum())
    return pattern[np.lexsort((pattern[:, 0], pattern[:, 1]))], member, missing

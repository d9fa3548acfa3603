"""The measuring machine: how long its moves take and how it sees the panel.

Machine frame: the panel corner `origin` (named as the panel is drawn) is zero; the panel frame is mirrored first
(x changes sign) when `mirrored`, then turned by `rotation` degrees counter-clockwise:

    machine = R(rotation) · diag(-1 or 1, 1) · (turned over (xy) - corner)

A machine with zero at the upper left corner, x to the right and y down is `origin="upper-left"`, `mirrored=True`,
`rotation=180`. Marks of the far side are drawn as seen through the panel from the front; once the panel is turned over
about `flip_axis` they appear mirrored: about "y", x changes sign; about "x", y does.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from sampler.errors import InputError

Array = NDArray[np.float64]

CORNERS = {"centre": (0.0, 0.0), "lower-left": (-0.5, -0.5), "lower-right": (0.5, -0.5), "upper-left": (-0.5, 0.5),
           "upper-right": (0.5, 0.5)}
TURNED_OVER = {"x": (1.0, -1.0), "y": (-1.0, 1.0)}
QUARTER_TURNS = {0: (1.0, 0.0), 90: (0.0, 1.0), 180: (-1.0, 0.0), 270: (0.0, -1.0)}
SIDES = ("front", "back")


@dataclass(frozen=True, slots=True)
class Machine:
    """Speeds, times and frame of a measuring machine; the defaults are round numbers, not those of any machine.

    `speed_mm_s` and `acceleration_mm_s2` are those of the machine's own x and y axes, which move at once. `settling_s`
    follows every move, `read_s` is one read, `flip_s` turning the panel over, once, when both sides are visited; the
    side `first_side` is visited first. `start_mm` and `end_mm`, in the machine's frame, are where the axes stand after
    loading and must stand before unloading; None: they start at the first site, stay at the last.
    """

    speed_mm_s: tuple[float, float] = (500.0, 500.0)
    acceleration_mm_s2: tuple[float, float] = (5000.0, 5000.0)
    settling_s: float = 0.05
    read_s: float = 0.5
    flip_s: float = 20.0
    load_s: float = 10.0
    unload_s: float = 10.0
    start_mm: tuple[float, float] | None = None
    end_mm: tuple[float, float] | None = None
    origin: str = "centre"
    rotation: int = 0
    mirrored: bool = False
    flip_axis: str = "y"
    first_side: str = "front"

    def __post_init__(self) -> None:
        """Raises `InputError` with every fault found."""
        faults = []
        for name in ("speed_mm_s", "acceleration_mm_s2"):
            value = getattr(self, name)
            if len(value) != 2 or not all(math.isfinite(part) and part > 0 for part in value):
                faults.append(f"machine: {name} is {value}; two positive numbers are needed, x and y")
        for name in ("settling_s", "read_s", "flip_s", "load_s", "unload_s"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value >= 0):
                faults.append(f"machine: {name} is {value}; give seconds, zero or more")
        for name in ("start_mm", "end_mm"):
            value = getattr(self, name)
            if value is not None and (len(value) != 2 or not all(map(math.isfinite, value))):
                faults.append(f"machine: {name} is {value}; give [x, y] in the machine's frame, or leave it out")
        for name, allowed in (("origin", CORNERS), ("rotation", QUARTER_TURNS), ("flip_axis", TURNED_OVER),
                              ("first_side", SIDES)):
            value = getattr(self, name)
            if value not in allowed:
                faults.append(f"machine: {name} is {value!r}; allowed are {', '.join(map(str, allowed))}")
        if faults:
            raise InputError(faults)


def move_time(distance_mm: ArrayLike, speed_mm_s: float, acceleration_mm_s2: float) -> Array:
    """Seconds of one axis over a distance, with trapezoidal velocity from rest to rest; shape of `distance_mm`.

    2 √(d/a) while the top speed v is not reached (d < v²/a), otherwise d/v + v/a (Newton's laws).
    """
    distance = np.abs(np.asarray(distance_mm, float))
    ramps = speed_mm_s**2 / acceleration_mm_s2
    return np.where(distance < ramps, 2 * np.sqrt(distance / acceleration_mm_s2),
                    distance / speed_mm_s + speed_mm_s / acceleration_mm_s2)


def travel_seconds(machine: Machine, a_mm: ArrayLike, b_mm: ArrayLike) -> Array:
    """Seconds from a to b, both (…, 2) in the machine's frame, broadcast: the slower axis, and settling when it moved.

    A metric: the time of an axis is concave in the distance and zero at zero, so it obeys the triangle inequality; the
    larger of two metrics is one, and settling keeps it because a stop on the way never removes a move.
    """
    step = np.asarray(a_mm, float) - np.asarray(b_mm, float)
    x, y = (move_time(step[..., axis], machine.speed_mm_s[axis], machine.acceleration_mm_s2[axis]) for axis in (0, 1))
    slower = np.maximum(x, y)
    return slower + machine.settling_s * (slower > 0)


def to_machine_frame(xy_mm: ArrayLike, machine: Machine, size_mm: tuple[float, float],
                     far: NDArray[np.bool_] | bool = False) -> Array:
    """Positions (n, 2) of the centred panel frame as the machine sees them; `size_mm` is the panel's width and height.

    `far` (n,): the site lies on the far side (back), so the panel is turned over when it is read.
    """
    matrix, corner = _frame(machine, size_mm)
    return (_turn_over(np.asarray(xy_mm, float), machine, far) - corner) @ matrix.T + 0.0  # + 0.0: never write -0.0


def to_panel_frame(machine_xy_mm: ArrayLike, machine: Machine, size_mm: tuple[float, float],
                   far: NDArray[np.bool_] | bool = False) -> Array:
    """The inverse of `to_machine_frame`."""
    matrix, corner = _frame(machine, size_mm)
    return _turn_over(np.asarray(machine_xy_mm, float) @ matrix + corner, machine, far) + 0.0


def _frame(machine: Machine, size_mm: tuple[float, float]) -> tuple[Array, Array]:
    cosine, sine = QUARTER_TURNS[machine.rotation]
    rotation = np.array([[cosine, -sine], [sine, cosine]])
    return rotation * [-1.0 if machine.mirrored else 1.0, 1.0], np.multiply(CORNERS[machine.origin], size_mm)


def _turn_over(xy_mm: Array, machine: Machine, far: NDArray[np.bool_] | bool) -> Array:
    return np.where(np.asarray(far, bool)[..., None], xy_mm * TURNED_OVER[machine.flip_axis], xy_mm)

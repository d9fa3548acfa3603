"""Every distortion term, once: what it adds to dx and dy in µm per unit of the term.

Panel frame or cell frame: x, y in mm from the frame's centre, u = x / half width, v = y / half height.
Displacement = measured − designed, µm; 1 ppm of x mm is x/1000 µm; rotations positive counter-clockwise.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Response = Callable[[Array, Array, Array, Array], Array]  # (x_mm, y_mm, u, v) -> (n,)

UM_PER_PPM_MM = 1e-3
HIGHEST_ORDER = 5


@dataclass(frozen=True, slots=True)
class Term:
    """One term: its unit and its response in dx and in dy (None: no response)."""

    name: str
    unit: str
    dx: Response | None
    dy: Response | None


def _monomial(i: int, j: int) -> Response:
    return lambda x, y, u, v: u**i * v**j


def _monomial_name(i: int, j: int) -> str:
    return "".join(letter if power == 1 else f"{letter}{power}" for letter, power in (("x", i), ("y", j)) if power)


def _one(x: Array, y: Array, u: Array, v: Array) -> Array:
    return np.ones_like(x)


def _x(x: Array, y: Array, u: Array, v: Array) -> Array:
    return x * UM_PER_PPM_MM


def _y(x: Array, y: Array, u: Array, v: Array) -> Array:
    return y * UM_PER_PPM_MM


def _minus_y(x: Array, y: Array, u: Array, v: Array) -> Array:
    return y * -UM_PER_PPM_MM


def _table() -> dict[str, Term]:
    terms = [
        Term("translation_x", "µm", _one, None),
        Term("translation_y", "µm", None, _one),
        Term("scale_x", "ppm", _x, None),
        Term("scale_y", "ppm", None, _y),
        Term("magnification", "ppm", _x, _y),
        Term("rotation", "µrad", _minus_y, _x),
        Term("orthogonality", "µrad", _minus_y, None),
    ]
    for order in range(2, HIGHEST_ORDER + 1):
        powers = [(order - j, j) for j in range(order + 1)]
        terms += [Term(f"dx_{_monomial_name(*power)}", "µm", _monomial(*power), None) for power in powers]
        terms += [Term(f"dy_{_monomial_name(*power)}", "µm", None, _monomial(*power)) for power in powers]
    return {term.name: term for term in terms}


TERMS: dict[str, Term] = _table()


def _families() -> dict[str, tuple[str, ...]]:
    affine: tuple[str, ...] = ("translation_x", "translation_y", "scale_x", "scale_y", "rotation", "orthogonality")
    families: dict[str, tuple[str, ...]] = {
        "similarity": ("translation_x", "translation_y", "magnification", "rotation"),
        "affine": affine,
        "translation": ("translation_x", "translation_y"),
        "scale": ("scale_x", "scale_y"),
        "trapezoid": ("dx_xy", "dy_xy"),
    }
    names = affine
    for order in range(2, HIGHEST_ORDER + 1):
        monomials = [_monomial_name(order - j, j) for j in range(order + 1)]
        names = names + tuple(f"{axis}_{monomial}" for axis in ("dx", "dy") for monomial in monomials)
        families[f"order{order}"] = names
    return families


FAMILIES: dict[str, tuple[str, ...]] = _families()

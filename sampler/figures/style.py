"""What all figures share: palette, sizes, and how a figure becomes bytes that are the same every time."""

from __future__ import annotations

import io
import warnings
from collections.abc import Callable
from typing import Any

import matplotlib
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure

INK = "#1c1f24"
SOFT = "#5d646e"
FAINT = "#a3a9b1"
HAIR = "#d4d7db"
PAPER = "#ffffff"
TROUGH = "#eef0f2"
FILL = "#6f97a6"
ALARM = "#c8643c"
ALARM_INK = "#96400f"

TITLE_PT = 12.5
TEXT_PT = 8.5
SMALL_PT = 7.0
DPI = 160

# OKLab: B. Ottosson (2020), "A perceptual color space for image processing", the published matrices.
_OKLAB_TO_LMS = np.array([[1.0, 0.3963377774, 0.2158037573],
                          [1.0, -0.1055613458, -0.0638541728],
                          [1.0, -0.0894841775, -1.2914855480]])
_LMS_TO_RGB = np.array([[4.0767416621, -3.3077115913, 0.2309699292],
                        [-1.2684380046, 2.6097574011, -0.3413193965],
                        [-0.0041960863, -0.7034186147, 1.7076147010]])


def ramp(steps: int = 256) -> ListedColormap:
    """Uncertainty from small (pale sand) to large (slate blue): equal steps look equal, and darken steadily in grey.

    A path through OKLab, evenly spaced by its own length; light enough throughout for dark marks to stand on it.
    """
    t = np.linspace(0.0, 1.0, 2001)
    hue = np.radians(95.0 + 155.0 * t)
    chroma = 0.030 + 0.062 * np.sin(np.pi * np.clip(t, 0.0, 0.75) / 1.5)
    path = np.stack([0.972 - 0.47 * t, chroma * np.cos(hue), chroma * np.sin(hue)], axis=1)
    length = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(path, axis=0), axis=1))])
    even = np.linspace(0.0, length[-1], steps)
    lab = np.stack([np.interp(even, length, path[:, k]) for k in range(3)], axis=1)
    linear = np.clip((lab @ _OKLAB_TO_LMS.T) ** 3 @ _LMS_TO_RGB.T, 0.0, 1.0)
    srgb = np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)
    return ListedColormap(srgb, name="uncertainty")


RAMP = ramp()

# Texts stay texts in the SVG; names with "$" or "_" are not mathematics; the id salt makes the SVG repeatable.
_RC: dict[str, Any] = {
    "font.family": ["DejaVu Sans"], "font.size": TEXT_PT, "text.parse_math": False, "svg.fonttype": "none",
    "svg.hashsalt": "sampler", "axes.linewidth": 0.6, "axes.edgecolor": SOFT, "axes.labelcolor": INK,
    "xtick.color": SOFT, "ytick.color": SOFT, "xtick.labelcolor": INK, "ytick.labelcolor": INK,
    "xtick.major.width": 0.6, "ytick.major.width": 0.6, "xtick.major.size": 3.0, "ytick.major.size": 3.0,
    "xtick.labelsize": SMALL_PT + 0.5, "ytick.labelsize": SMALL_PT + 0.5, "hatch.linewidth": 0.6, "text.color": INK,
}


def figure(width_in: float, height_in: float) -> Figure:
    return Figure(figsize=(width_in, height_in), dpi=DPI, facecolor=PAPER)


def to_png(drawn: Figure) -> bytes:
    buffer = io.BytesIO()
    FigureCanvasAgg(drawn).print_png(buffer, metadata={"Software": None})
    return buffer.getvalue()


def to_svg(drawn: Figure) -> bytes:
    """SVG without date or version, so that the same plan gives the same file."""
    buffer = io.BytesIO()
    FigureCanvasSVG(drawn).print_svg(buffer, metadata={"Date": None, "Creator": None})
    return buffer.getvalue()


def pictures(name: str, draw: Callable[[], Figure]) -> dict[str, bytes]:
    """`name`.png and `name`.svg of one figure, whatever the user's own matplotlib settings are."""
    with matplotlib.rc_context(), warnings.catch_warnings():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_RC)
        # A title in a script the font lacks is drawn as boxes in the PNG; the SVG still carries its text.
        warnings.filterwarnings("ignore", message="Glyph .* missing")
        drawn = draw()
        return {f"{name}.png": to_png(drawn), f"{name}.svg": to_svg(drawn)}

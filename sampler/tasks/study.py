"""What the engineer asks, as one value: layout, model, noise, limits, rules and search options."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from sampler.model.basis import Model
from sampler.panel.layout import Layout
from sampler.route.machine import Machine
from sampler.uncertainty.noise import Noise


@dataclass(frozen=True, slots=True)
class TermLimit:
    """k·u of each named term of the model at most `maximum`, in the term's unit."""

    terms: tuple[str, ...]
    maximum: float


@dataclass(frozen=True, slots=True)
class RegionLimit:
    """k·u of dx and of dy at most `position_um` everywhere in the region.

    `region` is "panel", "cells:GRID", "marks" or "polygon" with `polygon_mm` (k, 2) in the centred panel frame. `of`:
    "correction", what the corrected terms say of the place, or "displacement", the whole predicted displacement there,
    potential terms and local distortion included.
    """

    region: str
    position_um: float
    polygon_mm: NDArray[np.float64] | None = None
    of: str = "correction"


@dataclass(frozen=True, slots=True)
class TermPrior:
    """Prior standard deviation of each named corrected term about its prior mean, in the term's unit.

    A plan needs the deviation only; the mean is for fits.
    """

    terms: tuple[str, ...]
    sd: float
    mean: float = 0.0


@dataclass(frozen=True, slots=True)
class Potential:
    """Terms that are not corrected but perhaps present, each with a standard deviation of `sd_um` (or its unit)."""

    terms: Model
    sd_um: float


@dataclass(frozen=True, slots=True)
class Measure:
    """How marks are read.

    `side`: "front", "back" or "both". With `field_of_view_mm` (width, height) a stop at one stage position reads all marks
    inside, and the search counts stops. Shared errors, standard uncertainties in µm of dx and dy: `stop_um` of all marks
    read in one stop, `side_um` of all marks of one side, `flip_um` of all marks read after turning the panel over.
    `read_rate`: the chance that a mark of a kind reads, (kind, rate), where the mark has none of its own.
    """

    side: str = "both"
    field_of_view_mm: tuple[float, float] | None = None
    stop_um: tuple[float, float] = (0.0, 0.0)
    side_um: tuple[float, float] = (0.0, 0.0)
    flip_um: tuple[float, float] = (0.0, 0.0)
    read_rate: tuple[tuple[str, float], ...] = ()


@dataclass(frozen=True, slots=True)
class CellRule:
    """At least `least` and at most `most` sites in every cell of a grid that has candidates."""

    grid: str
    least: int = 0
    most: int | None = None


@dataclass(frozen=True, slots=True)
class ZoneRule:
    """At least `least` and at most `most` sites in a polygon (k, 2), centred panel frame; `most` 0 forbids it.

    With `circle_mm` (x, y, radius) the zone is that circle, and the polygon is only to draw.
    """

    name: str
    polygon_mm: NDArray[np.float64]
    least: int = 0
    most: int | None = None
    circle_mm: tuple[float, float, float] | None = None


@dataclass(frozen=True, slots=True)
class Rules:
    """Rules on the choice. `required` and `forbidden` name marks by id, `…_kinds` every mark of a kind.

    `lost`: every limit holds after the loss of any so many sites. `min_spacing_mm`: no two sites closer.
    """

    required: tuple[str, ...] = ()
    forbidden: tuple[str, ...] = ()
    required_kinds: tuple[str, ...] = ()
    forbidden_kinds: tuple[str, ...] = ()
    max_sites: int | None = None
    max_seconds: float | None = None
    min_spacing_mm: float | None = None
    lost: int = 0
    per_cell: tuple[CellRule, ...] = ()
    per_zone: tuple[ZoneRule, ...] = ()


@dataclass(frozen=True, slots=True)
class SearchOptions:
    """`objective`: "sites" or "seconds". `sites`: a fixed number to choose, D-optimal among them; None for the fewest.

    Among plans of equal count `prefer` "information" takes the largest log det; "time" the quickest route that loses at
    most the share `information_loss` of D-efficiency.
    """

    seconds: float = 60.0
    seed: int = 1
    objective: str = "sites"
    sites: int | None = None
    prefer: str = "information"
    information_loss: float = 0.02


@dataclass(frozen=True, slots=True)
class Source:
    """An input file: its path as given and the SHA-256 of its bytes."""

    path: str
    sha256: str


@dataclass(frozen=True, slots=True)
class Study:
    """A study with its layout read in. `limits` in the order of the file.

    `machine_stated`: the machine is the study's own, so that its seconds mean something.
    """

    title: str
    layout: Layout
    model: Model
    noise: Noise
    limits: tuple[TermLimit | RegionLimit, ...]
    coverage_factor: float = 3.0
    rules: Rules = field(default_factory=Rules)
    search: SearchOptions = field(default_factory=SearchOptions)
    priors: tuple[TermPrior, ...] = ()
    potential: Potential | None = None
    measure: Measure = field(default_factory=Measure)
    machine: Machine = field(default_factory=Machine)
    machine_stated: bool = False
    source: Source = Source("", "")
    layout_source: Source = Source("", "")
    warnings: tuple[str, ...] = ()

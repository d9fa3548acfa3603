"""What the engineer asks, as one value: layout, model, noise, limits, rules and search options."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from sampler.model.basis import Model
from sampler.panel.layout import Layout
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
    """Prior standard deviation of each named corrected term, in the term's unit."""

    terms: tuple[str, ...]
    sd: float


@dataclass(frozen=True, slots=True)
class Potential:
    """Terms that are not corrected but perhaps present, each with a standard deviation of `sd_um` (or its unit)."""

    terms: Model
    sd_um: float


@dataclass(frozen=True, slots=True)
class Rules:
    """Rules on the choice; sites are named by id."""

    required: tuple[str, ...] = ()
    forbidden: tuple[str, ...] = ()
    max_sites: int | None = None


@dataclass(frozen=True, slots=True)
class SearchOptions:
    seconds: float = 60.0
    seed: int = 1


@dataclass(frozen=True, slots=True)
class Source:
    """An input file: its path as given and the SHA-256 of its bytes."""

    path: str
    sha256: str


@dataclass(frozen=True, slots=True)
class Study:
    """A study with its layout read in. `limits` in the order of the file."""

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
    source: Source = Source("", "")
    layout_source: Source = Source("", "")
    warnings: tuple[str, ...] = ()

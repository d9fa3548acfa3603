"""From pad and via to the position limit for a study, and from a plan's position back to the smallest pad.

Everything is per axis, in µm. The overlay tolerance T = (pad − via)/2 − required ring. Contributors are independent: means
m add in absolute value, standard deviations s in quadrature, and the budget quotes Σ|m| + k·√Σs² (common practice). A
sampling uncertainty u adds as one more standard deviation without a mean; it fits while

    Σ|m| + k·√(Σs² + u²) ≤ T        so        k·u ≤ √((T − Σ|m|)² − k²Σs²).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.tasks.study import Source
from sampler.tasks.wording import against, significant

LENGTH_TOLERANCE_UM = 1e-6
"""A line that lacks no more than this to fit lacks it by the rounding of decimals, not by design."""

Values = float | NDArray[np.float64]


def rounded(value: float, digits: int, *, up: bool) -> float:
    """A length to significant digits, always up or always down, so that what is true of it stays true.

    >>> rounded(57.0111, 4, up=True), rounded(2.5841, 3, up=False), rounded(0.3, 3, up=False)
    (57.02, 2.58, 0.3)
    """
    if not math.isfinite(value) or value == 0:
        return value
    scale = 10.0 ** (digits - 1 - math.floor(math.log10(abs(value))))
    # The binary value of 0.3 lies below 0.3: a billionth of the last digit is rounding, not length.
    steps = math.ceil(value * scale - 1e-9) if up else math.floor(value * scale + 1e-9)
    return float(f"{steps / scale:.{digits}g}")


def counted_lines(count: int) -> str:
    return "no line" if count == 0 else f"{count} line" if count == 1 else f"{count} lines"


@dataclass(frozen=True, slots=True)
class Contributor:
    """One independent cause of overlay error: its mean, of either sign, and its standard deviation."""

    name: str
    mean_um: float = 0.0
    sigma_um: float = 0.0


@dataclass(frozen=True, slots=True)
class Channel:
    """Lines routed between two neighbouring pads `pitch_um` apart."""

    pitch_um: float
    line_um: float
    space_um: float

    def lines(self, pad_um: Values) -> NDArray[np.int64]:
        """How many lines fit between pads of this diameter: n lines need n·line + (n + 1)·space. 0 when none does."""
        room = self.pitch_um - np.asarray(pad_um, float) - self.space_um + LENGTH_TOLERANCE_UM
        return np.floor(np.maximum(room, 0.0) / (self.line_um + self.space_um)).astype(np.int64)

    def largest_pad_um(self, lines: int) -> float:
        """The largest pad between which so many lines fit; not positive when the pitch has no room for them."""
        return self.pitch_um - self.space_um - lines * (self.line_um + self.space_um)


@dataclass(frozen=True, slots=True)
class Budget:
    """What is asked: a via on its pad, the ring that must remain all around it, and who uses the rest."""

    name: str
    via_um: float
    pad_um: float
    ring_um: float
    contributors: tuple[Contributor, ...]
    coverage_factor: float = 3.0
    channel: Channel | None = None
    source: Source = field(default_factory=lambda: Source("", ""))
    warnings: tuple[str, ...] = ()

    @property
    def tolerance_um(self) -> float:
        return (self.pad_um - self.via_um) / 2 - self.ring_um

    @property
    def mean_um(self) -> float:
        """Σ|m|."""
        return math.fsum(abs(item.mean_um) for item in self.contributors)

    @property
    def sigma_um(self) -> float:
        """√Σs²."""
        return math.hypot(*(item.sigma_um for item in self.contributors))

    def spent_um(self, u_um: Values = 0.0) -> Any:
        """Σ|m| + k·√(Σs² + u²) for a sampling uncertainty u or many, of the same shape."""
        return self.mean_um + self.coverage_factor * np.hypot(self.sigma_um, u_um)

    def smallest_pad_um(self, u_um: Values = 0.0) -> Any:
        """The smallest pad that holds the ring with a sampling uncertainty u, of the same shape."""
        return self.via_um + 2 * (self.ring_um + self.spent_um(u_um))

    def position_limit_um(self, pad_um: float | None = None) -> float:
        """The largest k·u that sampling may have on this pad (default the budget's own); NaN when nothing is left."""
        pad = self.pad_um if pad_um is None else pad_um
        room = (pad - self.via_um) / 2 - self.ring_um - self.mean_um
        others = self.coverage_factor * self.sigma_um
        return math.sqrt((room - others) * (room + others)) if room > others else math.nan


@dataclass(frozen=True, slots=True)
class Eater:
    """What one contributor takes. `quoted_um` = |mean| + k·sigma; `mean_share` its part of Σ|m| and `variance_share` of Σs²
    (0 when there is none); `saves_um`: how much less would be spent without it."""

    name: str
    mean_um: float
    k_sigma_um: float
    mean_share: float
    variance_share: float
    saves_um: float

    @property
    def quoted_um(self) -> float:
        return abs(self.mean_um) + self.k_sigma_um


@dataclass(frozen=True, slots=True)
class Blame:
    """Who must give way when too much is spent: the contributor whose absence saves most.

    `factor`: its mean and sigma, both multiplied by it, would just fit; NaN when the rest is too much even without it,
    then `over_um` is what would still be too much.
    """

    name: str
    factor: float
    over_um: float

    def __str__(self) -> str:
        if math.isnan(self.factor):
            return f"even without the largest, {self.name}, {significant(self.over_um)} µm too much"
        return f"the largest is {self.name}, which would have to shrink to less than {math.floor(100 * self.factor)} % of itself"


@dataclass(frozen=True, slots=True)
class Supported:
    """What a plan's worst position k·u, restated with the budget's coverage factor, supports."""

    k_u_um: float
    spent_um: float
    smallest_pad_um: float
    lines: int | None
    fits: bool
    """Whether the plan fits the budget's own pad."""
    blame: Blame | None


@dataclass(frozen=True, slots=True)
class NextLine:
    """One line more than the budget's pad allows: the pad it takes, and the k·u that sampling may then have (NaN: none)."""

    lines: int
    pad_um: float
    position_limit_um: float


@dataclass(frozen=True, slots=True)
class BudgetResult:
    """The budget worked out. `eaters` in the order of the file; `position_limit_um` is NaN when nothing is left for sampling,
    and `blame` then says who is in the way; it is None too when there are no contributors at all."""

    budget: Budget
    eaters: tuple[Eater, ...]
    position_limit_um: float
    blame: Blame | None
    lines: int | None
    next_line: NextLine | None
    supported: Supported | None

    @property
    def spent(self) -> bool:
        """Nothing is left for sampling."""
        return math.isnan(self.position_limit_um)

    @property
    def fits(self) -> bool:
        """Whether the plan, or without a plan any sampling at all, fits the budget's pad."""
        return not self.spent if self.supported is None else self.supported.fits

    @property
    def position_to_enter_um(self) -> float:
        """The position limit rounded down to three significant digits, so that what is typed into a study still fits."""
        return rounded(self.position_limit_um, 3, up=False)

    @property
    def answer(self) -> str:
        """What is left for sampling, or who is in the way, in one sentence."""
        asked = self.budget
        if asked.tolerance_um <= 0:
            return f"nothing to spend: pad, via and ring leave a tolerance of {significant(asked.tolerance_um)} µm"
        if self.spent:
            spent, tolerance = against(float(asked.spent_um()), asked.tolerance_um)
            return f"spent without any sampling: {spent} of {tolerance} µm; {self.blame}"
        return f"left for sampling: k·u of up to {self.position_to_enter_um:g} µm (k = {asked.coverage_factor:g})"

    @property
    def plan_answer(self) -> str:
        """What the plan supports, in one sentence; empty without a plan."""
        plan = self.supported
        if plan is None:
            return ""
        if not math.isfinite(plan.k_u_um):
            return "the plan does not determine the position everywhere, so that it supports no pad"
        k_u, _ = against(plan.k_u_um, self.position_limit_um)
        left = "" if self.spent else f", {self.position_to_enter_um:g} µm is left"
        fits = "fits" if self.fits else f"does not fit{left}"
        lines = "" if plan.lines is None else f", room for {counted_lines(plan.lines)}"
        return (f"the plan's k·u of {k_u} µm {fits}; it supports a pad of {rounded(plan.smallest_pad_um, 4, up=True):g} µm "
                f"and larger{lines}")

    @property
    def by_size(self) -> tuple[Eater, ...]:
        """The contributors, those whose absence would save most first."""
        return tuple(sorted(self.eaters, key=lambda eater: -eater.saves_um))


def budget(asked: Budget, k_u_um: float | None = None, coverage_factor: float | None = None) -> BudgetResult:
    """Works out what is left for sampling, and what a plan supports.

    `k_u_um` is a plan's worst predicted position with that plan's `coverage_factor` (default the budget's); infinite when
    the plan does not determine it.
    """
    k = asked.coverage_factor
    mean, sigma = asked.mean_um, asked.sigma_um
    eaters = tuple(Eater(item.name, item.mean_um, k * item.sigma_um,
                         abs(item.mean_um) / mean if mean else 0.0, (item.sigma_um / sigma) ** 2 if sigma else 0.0,
                         float(asked.spent_um() - _without(asked, i).spent_um()))
                   for i, item in enumerate(asked.contributors))
    limit = asked.position_limit_um()
    lines = None if asked.channel is None else int(asked.channel.lines(asked.pad_um))
    following = None
    if asked.channel is not None and lines is not None:
        pad = asked.channel.largest_pad_um(lines + 1)
        following = NextLine(lines + 1, pad, asked.position_limit_um(pad))
    supported = None if k_u_um is None else _supported(asked, k_u_um / (coverage_factor or k))
    return BudgetResult(asked, eaters, limit, _blame(asked, 0.0) if math.isnan(limit) else None, lines, following, supported)


def _without(asked: Budget, index: int) -> Budget:
    kept = asked.contributors[:index] + asked.contributors[index + 1:]
    return Budget(asked.name, asked.via_um, asked.pad_um, asked.ring_um, kept, asked.coverage_factor)


def _supported(asked: Budget, u_um: float) -> Supported:
    spent, pad = float(asked.spent_um(u_um)), float(asked.smallest_pad_um(u_um))
    lines = None if asked.channel is None else int(asked.channel.lines(pad))
    fits = spent <= asked.tolerance_um + LENGTH_TOLERANCE_UM
    return Supported(asked.coverage_factor * u_um, spent, pad, lines, fits, None if fits else _blame(asked, u_um))


def _blame(asked: Budget, u_um: float) -> Blame | None:
    """The contributor, sampling with uncertainty u included among the others, that must shrink for the rest to fit.

    With mean m and sigma s multiplied by f, and M, S of all others, M + f·|m| + k·√(S² + f²s²) = T is a quadratic in f.
    """
    if not asked.contributors or math.isinf(u_um):
        return None
    rests = [_without(asked, i) for i in range(len(asked.contributors))]
    index = int(np.argmin([rest.spent_um(u_um) for rest in rests]))
    rest, item, k = rests[index], asked.contributors[index], asked.coverage_factor
    over = float(rest.spent_um(u_um)) - asked.tolerance_um
    if over >= 0:
        return Blame(item.name, math.nan, over)
    room, others = asked.tolerance_um - rest.mean_um, k * math.hypot(rest.sigma_um, u_um)
    mean, spread = abs(item.mean_um), k * item.sigma_um
    # (room − f·mean)² = others² + f²·spread², the root where room − f·mean ≥ 0, in the form that does not cancel.
    constant = (room - others) * (room + others)
    root = math.hypot(mean * others, spread * math.sqrt(constant))
    return Blame(item.name, constant / (room * mean + root), 0.0)

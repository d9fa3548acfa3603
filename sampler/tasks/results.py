"""What the tasks give back: audits and plans, ready for files, figures and reports."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.panel.candidates import Candidates
from sampler.panel.layout import Sites
from sampler.route.visit import Route
from sampler.tasks.study import Study

# A bound this little above a whole number does not exclude it: solvers and the sum of many rows round.
BOUND_TOLERANCE = 1e-6


def whole_sites(bound: float) -> int:
    """The fewest sites that a lower bound on their number leaves possible; 0 while nothing is known."""
    return max(0, math.ceil(bound - BOUND_TOLERANCE)) if math.isfinite(bound) else 0


MEETS = 1.0 + 1e-9
"""A ratio to the limit up to this meets it: rounding of the variances, far below any digit shown."""


@dataclass(frozen=True, slots=True)
class AuditedLimit:
    """One limit: `predicted` and `maximum` are k·u in `unit`; `where_mm` is the worst place of a region limit.

    `predicted` is infinite when the sites do not determine the direction at all. `floor`: what it would be with every
    candidate measured, NaN when not computed; no plan beats it. `after_loss`: what it is after the worst loss of as many
    sites (or stops) as the rules say, NaN when they say none.
    """

    label: str
    maximum: float
    predicted: float
    unit: str
    where_mm: tuple[float, float] | None = None
    axis: str = ""
    floor: float = math.nan
    after_loss: float = math.nan

    @property
    def ratio(self) -> float:
        return self.predicted / self.maximum

    @property
    def worst_ratio(self) -> float:
        """The ratio after the losses that must be borne, if any: it decides whether the limit is met."""
        return self.ratio if math.isnan(self.after_loss) else max(self.predicted, self.after_loss) / self.maximum


@dataclass(frozen=True, slots=True)
class AuditedTerm:
    """k·u of one term in its unit; `maximum` is NaN when no limit holds it.

    `bias`: one standard deviation of what potential terms, ignored by the fit, would put on it; 0 without any.
    """

    name: str
    unit: str
    k_u: float
    maximum: float
    bias: float = 0.0


@dataclass(frozen=True, slots=True)
class PositionMap:
    """k·u in µm of the predicted position on a raster: `x_mm` (c,), `y_mm` (r,), `k_u_um` (r, c, 2).

    NaN off the panel, infinite where the sites do not determine the position.
    """

    x_mm: NDArray[np.float64]
    y_mm: NDArray[np.float64]
    k_u_um: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Audit:
    """What a set of sites would achieve, computed from the sites alone. `lost`: the losses that its limits must bear."""

    sites: Sites
    limits: tuple[AuditedLimit, ...]
    terms: tuple[AuditedTerm, ...]
    log_det: float
    position: PositionMap
    worst_position: AuditedLimit
    """The worst predicted position over the panel less its edge exclusion; `maximum` is NaN."""
    lost: int = 0

    @property
    def meets_limits(self) -> bool:
        return all(limit.worst_ratio <= MEETS for limit in self.limits)

    @property
    def worst(self) -> AuditedLimit:
        return max(self.limits, key=lambda limit: limit.worst_ratio)


@dataclass(frozen=True, slots=True)
class MissChance:
    """The chance that a panel misses a limit because marks do not read: it lies between `least` and `most`.

    The patterns of lost marks that were worked out one by one cover all but `most` − `least` of the chance. `panels` > 0: by
    that many simulated panels instead, and the two are a 95 % interval.
    """

    least: float
    most: float
    panels: int = 0


@dataclass(frozen=True, slots=True)
class Plan:
    """The answer to a study: sites in visiting order with their audit and the proof.

    `status` is "proven", "interval" or "cannot" (then the audit is of all candidates, `advice` says what would help and
    `audit.sites` holds every candidate). `lower_bound` is on the number of sites; of stops, when a stop reads several
    marks: `stop` (n,) is the stop of each site, from 1, and `stop_xy_mm` (stops, 2) where it stands. `route` accounts for
    the seconds, with `seconds_at_least` when the objective is seconds (NaN otherwise). `chance`: what lost marks do.
    """

    study: Study
    candidates: Candidates
    audit: Audit
    status: str
    lower_bound: float
    certificate: dict[str, Any]
    d_efficiency_at_least: float
    advice: tuple[str, ...]
    warnings: tuple[str, ...]
    seconds: float
    interrupted: bool = False
    route: Route | None = None
    stop: NDArray[np.int64] | None = None
    stop_xy_mm: NDArray[np.float64] | None = None
    seconds_at_least: float = math.nan
    chance: MissChance | None = None
    excluded: bool = False
    """With status "cannot" though all candidates together would do: that no set obeys the rules is proven."""

    @property
    def sites(self) -> Sites:
        return self.audit.sites

    @property
    def units(self) -> int:
        """What the search counted: stops when a stop reads several marks, sites otherwise."""
        return len(self.sites) if self.stop_xy_mm is None else len(self.stop_xy_mm)

    @property
    def counts(self) -> bool:
        """Whether the fewest were sought: not the quickest panel, nor the best choice of a given number."""
        return self.study.search.objective == "sites" and self.study.search.sites is None

    @property
    def fewest_proven(self) -> bool:
        return self.status == "proven" and self.counts

    @property
    def at_s(self) -> NDArray[np.float64] | None:
        """The second at which each site is read, (n,); None without a route."""
        if self.route is None:
            return None
        begins = self.route.at_s[self.route.order]
        return begins if self.stop is None else begins[self.stop - 1]

    @property
    def at_least(self) -> int:
        """The fewest sites that the bound leaves possible; 0 while nothing is known."""
        return whole_sites(self.lower_bound)

    @property
    def answer(self) -> str:
        """Count and proof in a few words; never "fewest" or "optimal" for more than was proven."""
        count, noun = self.units, "site" if self.stop_xy_mm is None else "stop"
        found = f"{count} {noun}" if count == 1 else f"{count} {noun}s"
        if self.status == "cannot":
            return "cannot be met"
        if not self.audit.meets_limits:
            return f"at least {self.at_least} needed; no set found that meets every limit"
        if self.study.search.sites is not None:
            return f"{found}, as asked"
        if not self.counts and self.route is not None:
            proof = "quickest proven" if self.status == "proven" else f"no plan takes less than {self.seconds_at_least:.1f} s"
            return f"{found} in {self.route.seconds:.1f} s, {proof}"
        if self.fewest_proven:
            return f"{found}, fewest proven"
        if self.at_least < count:
            return f"between {self.at_least} and {found}; best found {count}"
        return f"{found}, fewest not proven"


@dataclass(frozen=True, slots=True)
class SiteAudit:
    """A given site list against its study, and against the fewest plan.

    `droppable`: ids each of which alone could be dropped with every limit still met. `best_to_add`: the id that would
    lower the worst ratio most, and that ratio, when a limit is missed. `fewest`: the plan that `plan` would give. `route`:
    over the sites as listed, and `quickest` in the best order found. `chance`: what lost marks do.
    """

    study: Study
    candidates: Candidates
    audit: Audit
    droppable: tuple[str, ...]
    best_to_add: tuple[str, float] | None
    fewest: Plan | None
    d_efficiency: float
    warnings: tuple[str, ...]
    route: Route | None = None
    quickest: Route | None = None
    chance: MissChance | None = None

    @property
    def at_s(self) -> NDArray[np.float64] | None:
        """The second at which each site is read in the order listed, (n,)."""
        return None if self.route is None else self.route.at_s

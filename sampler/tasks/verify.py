"""The independent witness: simulated and pilot panels, measured at a plan's sites and fitted, against what the plan claims.

Nothing of the search and nothing of the information code takes part: panels are drawn from the assumptions themselves (a
local field from its exact correlation, not from the few directions that a plan works with), fitted by least squares.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtr, chdtrc, chdtri

from sampler.errors import InputError
from sampler.estimation.charts import likeness, pooled
from sampler.estimation.least_squares import Factored, in_words
from sampler.estimation.model_choice import LADDER, panel_terms
from sampler.estimation.readings import Averages, Pattern, Readings
from sampler.estimation.robust import outliers
from sampler.model.basis import Model, ModelTerm, Places, design_blocks, places
from sampler.panel.layout import Sites
from sampler.panel.region import region_points
from sampler.tasks.study import RegionLimit, Study
from sampler.uncertainty.assumed import NO_TERMS, Assumed, SharedErrors
from sampler.uncertainty.field import local_field

Array = NDArray[np.float64]
Progress = Callable[[str], None]

FALSE_ALARM = 0.01
"""Chance that a right plan fails any of the checks; claims get half of it, lost marks and the pilot a quarter each."""
COVERAGE_FACTOR = 2.0
COVERED = math.erf(COVERAGE_FACTOR / math.sqrt(2))
MATERIAL = 1.1
"""Pilot residuals up to this many times what is predicted are as predicted: no pilot knows its noise better."""
RASTER_STEPS = 30
WORSE = 1.002
"""A place is worse than the claimed worst from this ratio of k·u on; rounding in the plan is far below."""
DRAWN_SD = 10.0
"""Terms without prior are drawn this wide, in their unit; least squares does not feel how wide."""
MOST_PATTERNS = 200
MOST_UNVISITED = 300
JITTER = 1e-9
"""Share of the variance added to a field's covariance so that it can be factored; a plan's cut leaves out far more."""
EDGE_MM = 1e-4


@dataclass(frozen=True, slots=True)
class Claim:
    """What the plan says: k·u of a term, or of the position at `where_mm` (centred panel frame) along `axis`."""

    label: str
    unit: str
    k_u: float
    maximum: float = math.nan
    where_mm: tuple[float, float] | None = None
    axis: int = -1


@dataclass(frozen=True, slots=True)
class Checked:
    """A claim against simulation: observed k·u, between which it lies by chance when the claim is right, the chance of
    a difference at least as large, and how often 2u of the claim held the truth."""

    claim: Claim
    observed: float
    expected: tuple[float, float]
    p_value: float
    coverage: float
    held: bool


@dataclass(frozen=True, slots=True)
class LossCheck:
    """Panels with marks lost at their rates: how many panels lost any, the coverage of each fit's own 2u over all terms,
    the share of panels that missed a limit, and of those without a fit."""

    panels: int
    lost_any: float
    coverage: float
    ratio: float
    p_value: float
    missed: float
    unfitted: int
    held: bool


@dataclass(frozen=True, slots=True)
class Bias:
    """What terms that the model lacks put on a correction, all of them with `amplitude_um` in quadrature."""

    name: str
    unit: str
    bias: float
    k_u: float


@dataclass(frozen=True, slots=True)
class PilotCheck:
    """Pilot panels. `what`: what was compared; `ratio`: its root mean square over what is predicted, with the chance of
    one at least as large; `panels` (P,) ratios panel by panel."""

    what: str
    ratio: float
    p_value: float
    panels: Array
    held: bool


@dataclass(frozen=True, slots=True)
class Verification:
    """`checked`: every claim by simulation of `panels`; `worse`: places of regions that are worse than claimed, in words."""

    study: Study
    sites: Sites
    panels: int
    checked: tuple[Checked, ...]
    worse: tuple[str, ...]
    losses: LossCheck | None
    lacking: str
    amplitude_um: float
    biases: tuple[Bias, ...]
    pilot: tuple[PilotCheck, ...]
    pilot_panels: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def held(self) -> bool:
        return (all(item.held for item in self.checked) and all(item.held for item in self.pilot) and not self.worse
                and (self.losses is None or self.losses.held))

    @property
    def detectable(self) -> float:
        """The relative error of one claimed uncertainty that the simulation finds with a chance of 95 %."""
        tests = max(len(self.checked), 1)
        return (_quantiles(self.panels, tests)[1] / math.sqrt(chdtri(self.panels, 0.95) / self.panels)) - 1

    @property
    def summary(self) -> str:
        failed = [item.claim.label for item in self.checked if not item.held]
        if self.held:
            on = f" and on {len(self.pilot_panels)} pilot panels" if self.pilot else ""
            return (f"the plan held: {len(self.checked)} claimed uncertainties agree with {self.panels:,} simulated panels{on}; "
                    f"a right plan fails with a chance of at most {100 * FALSE_ALARM:g} %")
        why = [f"{len(failed)} claimed uncertainties differ from simulation ({', '.join(failed[:3])})"] if failed else []
        why += [f"{item.what} {item.ratio:.3g} × what is predicted, p = {item.p_value:.2g}"
                for item in self.pilot if not item.held]
        why += list(self.worse[:1])
        if self.losses is not None and not self.losses.held:
            why.append("with lost marks, errors are not as the fits say")
        return "the plan failed: " + "; ".join(why)


def verify(study: Study, sites: Sites, claims: tuple[Claim, ...], *, panels: int = 2000, seed: int = 1,
           lacks_um: float | None = None, pilot: Readings | None = None, stop: NDArray[np.int64] | None = None,
           progress: Progress | None = None) -> Verification:
    """Checks a plan's claims by simulation, and on pilot panels when there are any.

    `lacks_um`: amplitude of each term of the next order, for the bias that it would put on the corrections; by default
    from the pilot. `stop` (n,): which stop reads each site, for errors that a stop's marks share. Raises InputError when the
    sites do not determine the model.
    """
    tell = progress or (lambda text: None)
    rng = np.random.default_rng(seed)
    world = _World.of(study, sites, stop)
    tell("simulating panels")
    checked = _simulated(world, claims, panels, rng)
    tell("looking for worse places")
    worse = _worse(world, claims)
    tell("losing marks")
    losses = _with_losses(world, panels, rng)
    family, lacking = _next(study.model)
    notes: list[str] = []
    checks: tuple[PilotCheck, ...] = ()
    if pilot is not None:
        tell("fitting the pilot")
        checks, found_um, said = _on_pilot(world, pilot, lacking)
        notes += said
        lacks_um = found_um if lacks_um is None else lacks_um
    biases = _biases(world, lacking, lacks_um) if lacks_um and len(lacking) else ()
    return Verification(study, sites, panels, checked, worse, losses, family, lacks_um or 0.0, biases, checks,
                        pilot.panel_names if pilot is not None else (), tuple(notes))


@dataclass(frozen=True, slots=True)
class _World:
    """What is assumed. `rows` (n, 2, size): what each site reads per unit of everything; `prior_sd`, `prior_mean` (size,);
    `reading_um`, `white_um` (n, 2): noise of a reading, and displacement of the single mark; `sigma_um`: what a fit takes
    for both, with the share of the field that the fit's directions leave out."""

    study: Study
    sites: Sites
    assumed: Assumed
    rows: Array
    prior_sd: Array
    prior_mean: Array
    reading_um: Array
    white_um: Array
    sigma_um: Array

    @classmethod
    def of(cls, study: Study, sites: Sites, stop: NDArray[np.int64] | None) -> _World:
        assumed = _assumed(study, sites)
        rows = assumed.readings(places(study.layout, sites.xy_mm), sites.side)
        sd = _prior_sd(assumed)
        mean = np.zeros(assumed.size)
        for prior in study.priors:
            mean[[study.model.names.index(name) for name in prior.terms]] = prior.mean
        reading, white = _noise(study, sites)
        if stop is not None and study.measure.field_of_view_mm and max(study.measure.stop_um) > 0:
            own = (stop[:, None] == np.unique(stop)).astype(float)
            shared = np.zeros((len(sites), 2, 2 * own.shape[1]))
            shared[:, 0, 0::2] = shared[:, 1, 1::2] = own
            rows = np.concatenate([rows, shared], axis=2)
            sd = np.concatenate([sd, np.tile(study.measure.stop_um, own.shape[1])])
            sd[sd == 0] = 1e-9
            mean = np.concatenate([mean, np.zeros(shared.shape[2])])
        else:
            reading = np.hypot(reading, study.measure.stop_um)
        cut = assumed.fixed_um(sites.xy_mm, "displacement")
        sigma = np.sqrt(reading**2 + white**2 + cut**2)
        design = Factored.of((rows / sigma[:, :, None]).reshape(-1, rows.shape[2]), sd)
        if design.rank < design.terms:
            why = in_words(design.inseparable(), (*study.model.names, *assumed.potential.names))
            raise InputError(f"the plan's {len(sites)} sites do not determine its model: {why}; plan again")
        return cls(study, sites, assumed, rows, sd, mean, reading, white, sigma)

    def design(self, seen: NDArray[np.bool_] | None = None) -> Factored:
        whole = (self.rows / self.sigma_um[:, :, None]).reshape(-1, self.rows.shape[2])
        return Factored.of(whole if seen is None else whole[seen], self.prior_sd)

    def direction(self, at: Places, of: str) -> Array:
        """Rows (k, 2, size) of a predicted position."""
        part = self.assumed.position(at, of)
        return np.concatenate([part, np.zeros((len(at), 2, self.rows.shape[2] - part.shape[2]))], axis=2)

    def draw(self, panels: int, beside_mm: Array, rng: np.random.Generator) -> tuple[Array, Array, Array]:
        """Everything of each panel but the field (panels, size), readings (panels, n, 2), and the field at other points
        (panels, k, 2)."""
        p = self.assumed.corrected
        wide = np.where(np.isfinite(self.prior_sd), self.prior_sd, DRAWN_SD)
        theta = self.prior_mean + wide * rng.normal(size=(panels, len(wide)))
        n = len(self.sites)
        elsewhere = np.zeros((panels, len(beside_mm), 2))
        first = p + len(self.assumed.potential)
        if self.assumed.field is not None:
            theta[:, first:first + 2 * self.assumed.field.rank] = 0.0
        y = np.einsum("nap,gp->gna", self.rows, theta)
        if self.assumed.field is not None:
            xy = np.concatenate([self.sites.xy_mm, beside_mm])
            apart = ((xy[:, None] - xy[None]) ** 2).sum(axis=2)
            alike = np.exp(-apart / (2 * self.assumed.field.range_mm**2))
            root = np.linalg.cholesky(alike + JITTER * np.eye(len(xy)))
            for axis, size in enumerate(self.assumed.field.sigma_um):
                field = size * rng.normal(size=(panels, len(xy))) @ root.T
                y[:, :, axis] += field[:, :n]
                elsewhere[:, :, axis] = field[:, n:]
        return theta, y + rng.normal(size=y.shape) * np.hypot(self.reading_um, self.white_um), elsewhere


def _assumed(study: Study, sites: Sites) -> Assumed:
    sd = np.full(len(study.model), np.inf)
    for prior in study.priors:
        sd[[study.model.names.index(name) for name in prior.terms]] = prior.sd
    field = None
    if study.noise.local_range_mm and max(study.noise.local_um) > 0:
        field = local_field(study.layout.width_mm, study.layout.height_mm, study.noise.local_range_mm, study.noise.local_um)
    potential, wide = NO_TERMS, None
    if study.potential is not None:
        potential, wide = study.potential.terms, np.full(len(study.potential.terms), study.potential.sd_um)
    measure = study.measure
    drawn = {side for side in np.unique(study.layout.marks.side).tolist() if measure.side in ("both", side)}
    errors = [((side,), measure.side_um) for side in ("front", "back") if side in drawn and max(measure.side_um) > 0]
    second = tuple(sorted(drawn - {study.machine.first_side}))
    if len(drawn) > 1 and second and max(measure.flip_um) > 0:
        errors.append((second, measure.flip_um))
    return Assumed(study.model, sd, potential, wide, field,
                   SharedErrors(tuple(on for on, _ in errors), tuple(size for _, size in errors)))


def _prior_sd(assumed: Assumed) -> Array:
    precision = np.diag(assumed.prior_precision)
    return np.divide(1.0, np.sqrt(precision), out=np.full(len(precision), np.inf), where=precision > 0)


def _noise(study: Study, sites: Sites) -> tuple[Array, Array]:
    """Standard deviation of reading a mark once, and of the mark's own displacement, (n, 2) each."""
    reading = np.where(np.isnan(sites.sigma_um), np.asarray(study.noise.mark_um), sites.sigma_um)
    local = np.zeros(2) if study.noise.local_range_mm else np.asarray(study.noise.local_um)
    return reading, np.broadcast_to(local, reading.shape)


def _quantiles(panels: int, tests: int) -> tuple[float, float]:
    """Between which observed over claimed uncertainty lies by chance when the claim is right."""
    tail = FALSE_ALARM / 2 / tests / 2
    return math.sqrt(chdtri(panels, 1 - tail) / panels), math.sqrt(chdtri(panels, tail) / panels)


def _of(study: Study, claim: Claim) -> str:
    return "displacement" if claim.label.startswith("displacement") else "correction"


def _beside(world: _World, claim: Claim, covariance: Array) -> Array:
    """The direction (size,) of a claim; on a cell's edge of the side where the position is less certain."""
    if claim.where_mm is None:
        return np.eye(world.rows.shape[2])[world.study.model.names.index(claim.label)]
    around = np.asarray(claim.where_mm) + EDGE_MM * np.array([[0, 0], [-1, -1], [1, -1], [1, 1], [-1, 1]])
    layout = world.study.layout
    cells = {grid.name: grid.locate(around) for grid in layout.grids}
    rows = world.direction(places(layout, np.tile(claim.where_mm, (5, 1)), cells), _of(world.study, claim))[:, claim.axis]
    best: Array = rows[np.einsum("kp,pq,kq->k", rows, covariance, rows).argmax()]
    return best


def _simulated(world: _World, claims: tuple[Claim, ...], panels: int, rng: np.random.Generator) -> tuple[Checked, ...]:
    design = world.design()
    covariance = design.covariance()
    placed = [claim for claim in claims if claim.where_mm is not None]
    beside = np.array([claim.where_mm for claim in placed]).reshape(-1, 2)
    theta, y, field = world.draw(panels, beside, rng)
    fitted = design.solve((y / world.sigma_um).reshape(panels, -1), world.prior_mean).theta
    low, high = _quantiles(panels, len(claims))
    factor, checked, number = world.study.coverage_factor, [], 0
    for claim in claims:
        row = _beside(world, claim, covariance)
        error = (fitted - theta) @ row
        if claim.where_mm is not None:
            if _of(world.study, claim) == "displacement":
                error = error - field[:, number, claim.axis]
            number += 1
        u = claim.k_u / factor
        mean_square = float((error**2).mean())
        chi = panels * mean_square / u**2
        p = min(1.0, 2 * float(min(chdtr(panels, chi), chdtrc(panels, chi))))
        observed = factor * math.sqrt(mean_square)
        checked.append(Checked(claim, observed, (low * claim.k_u, high * claim.k_u), p,
                               float((np.abs(error) <= COVERAGE_FACTOR * u).mean()),
                               bool(low * claim.k_u <= observed <= high * claim.k_u)))
    return tuple(checked)


def _worse(world: _World, claims: tuple[Claim, ...]) -> tuple[str, ...]:
    """Places of limited regions on a raster of its own where k·u is larger than the largest that the plan claims."""
    study = world.study
    covariance = world.design().covariance()
    claimed = iter([claim for claim in claims if claim.where_mm is not None])
    found = []
    for limit in study.limits:
        if not isinstance(limit, RegionLimit):
            continue
        claim = next(claimed, None)
        if claim is None:
            found.append(f"the plan says nothing of the limit on region {limit.region}")
            continue
        xy_mm, rows, fixed = _raster(world, limit)
        variance = ((rows @ covariance) * rows).sum(axis=2) + fixed
        k_u = study.coverage_factor * np.sqrt(variance)
        worst = np.unravel_index(int(k_u.argmax()), k_u.shape)
        if k_u[worst] > WORSE * claim.k_u:
            x, y = xy_mm[worst[0]] - np.asarray(study.layout.origin_mm)
            found.append(f"{claim.label}: k·u {k_u[worst]:.4g} µm at ({x:.1f}, {y:.1f}) mm, claimed at most {claim.k_u:.4g}")
    return tuple(found)


def _raster(world: _World, limit: RegionLimit) -> tuple[Array, Array, Array]:
    """Points (n, 2) of a region, the directions of the position there (n, 2, size), and what no reading lowers (n, 2)."""
    layout = world.study.layout
    outline = layout.outline_mm if limit.polygon_mm is None else limit.polygon_mm
    extent = float(np.ptp(outline, axis=0).max())
    if limit.region.startswith("cells:"):
        extent = 4 * max(layout.grid(limit.region.removeprefix("cells:")).cell_mm)
    points = region_points(layout, limit.region, limit.polygon_mm, extent / RASTER_STEPS)
    return (points.xy_mm, world.direction(places(layout, points.xy_mm, points.cell), limit.of),
            world.assumed.fixed_um(points.xy_mm, limit.of) ** 2)


def _demands(world: _World) -> tuple[Array, Array, Array]:
    """Rows (k, size) of all limits, regions on their raster, with the largest variance that each may have, (k,), and the
    part of the variance that no reading lowers, (k,)."""
    study, size = world.study, world.rows.shape[2]
    rows, most, fixed = [np.zeros((0, size))], [np.zeros(0)], [np.zeros(0)]
    for limit in study.limits:
        if isinstance(limit, RegionLimit):
            _, part, beyond = _raster(world, limit)
            maximum = limit.position_um
        else:
            part, maximum = np.eye(size)[[study.model.names.index(name) for name in limit.terms]], limit.maximum
            beyond = np.zeros(len(part))
        rows.append(part.reshape(-1, size))
        fixed.append(beyond.ravel())
        most.append(np.full(len(rows[-1]), (maximum / study.coverage_factor) ** 2))
    return np.concatenate(rows), np.concatenate(most), np.concatenate(fixed)


def _with_losses(world: _World, panels: int, rng: np.random.Generator) -> LossCheck | None:
    """Panels with marks lost at their rates; None when every mark always reads."""
    rate = world.sites.read_rate.copy()
    for kind, given in world.study.measure.read_rate:
        rate[(world.sites.kind == kind) & (rate == 1.0)] = given
    if (rate >= 1.0).all():
        return None
    p = world.assumed.corrected
    read = rng.random((panels, len(rate))) < rate
    patterns, which = np.unique(read, axis=0, return_inverse=True)
    which = which.ravel()
    if len(patterns) > MOST_PATTERNS:  # fewer panels then, those of the first patterns to come up
        order = np.unique(which, return_index=True)[1]
        until = int(np.sort(order)[MOST_PATTERNS])
        read, which = read[:until], which[:until]
    panels = len(read)
    theta, y, _ = world.draw(panels, np.zeros((0, 2)), rng)
    rows, most, fixed = _demands(world)
    used = np.flatnonzero((rows != 0).any(axis=0))
    rows = rows[:, used]
    squares, inside, total, missed, unfitted = np.zeros(panels), 0, 0, 0, 0
    for number in np.unique(which):
        mine = np.flatnonzero(which == number)
        seen = np.repeat(patterns[number], 2)
        design = world.design(seen)
        if design.rank < design.terms:
            unfitted, missed = unfitted + len(mine), missed + len(mine)
            continue
        covariance = design.covariance()
        error = design.solve((y[mine] / world.sigma_um).reshape(len(mine), -1)[:, seen], world.prior_mean).theta - theta[mine]
        error, own = error[:, :p], covariance[:p, :p]
        squares[mine] = (error * np.linalg.solve(own, error.T).T).sum(axis=1)
        inside += int((np.abs(error) <= COVERAGE_FACTOR * np.sqrt(np.diag(own))).sum())
        total += error.size
        variance = ((rows @ covariance[np.ix_(used, used)]) * rows).sum(axis=1) + fixed
        missed += len(mine) * bool((variance > most * WORSE**2).any())
    freedom = p * (panels - unfitted)
    p_value = min(1.0, 2 * float(min(chdtr(freedom, squares.sum()), chdtrc(freedom, squares.sum())))) if freedom else 1.0
    return LossCheck(panels, float((~read.all(axis=1)).mean()), inside / max(total, 1),
                     math.sqrt(squares.sum() / freedom) if freedom else math.nan, p_value, missed / panels, unfitted,
                     p_value >= FALSE_ALARM / 4)


def _next(model: Model) -> tuple[str, Model]:
    """The lowest rung of the ladder with panel terms that the model lacks, and those terms."""
    has = {term.term for term in model.terms if term.grid is None}
    if "magnification" in has:
        has |= {"scale_x", "scale_y"} if "scale_x" in has or "scale_y" in has else {"scale_x"}
    for family in LADDER:
        lacks = [name for name in panel_terms(family) if name not in has and name != "magnification"]
        if family != "similarity" and lacks:
            return family, Model(tuple(ModelTerm(name) for name in lacks))
    return "", NO_TERMS


def _scaled(world: _World, lacking: Model, xy_mm: Array) -> Array:
    """What the lacking terms move, per µm at the place where each moves most, (n, 2, k)."""
    layout = world.study.layout
    corners = np.asarray(layout.half_mm) * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    most = np.abs(design_blocks(lacking, places(layout, corners))).max(axis=(0, 1))
    return design_blocks(lacking, places(layout, xy_mm)) / most


def _biases(world: _World, lacking: Model, amplitude_um: float) -> tuple[Bias, ...]:
    """The alias of the lacking terms on the corrections (Box & Draper 1959), each with the amplitude, in quadrature."""
    design = world.design()
    extra = (_scaled(world, lacking, world.sites.xy_mm) / world.sigma_um[:, :, None]).reshape(-1, len(lacking))
    alias = design.estimator() @ extra * amplitude_um
    u = np.sqrt(np.diag(design.covariance()))
    return tuple(Bias(name, unit, float(np.sqrt((alias[j] ** 2).sum())), float(world.study.coverage_factor * u[j]))
                 for j, (name, unit) in enumerate(zip(world.study.model.names, world.study.model.units, strict=True)))


def _on_pilot(world: _World, pilot: Readings, lacking: Model) -> tuple[tuple[PilotCheck, ...], float | None, list[str]]:
    """Pilot panels: the fit from the plan's sites against the fit from all marks, and marks that the plan does not visit
    against what its sites predict; with the root mean square amplitude of the lacking terms."""
    study = world.study
    rows = world.assumed.readings(places(study.layout, pilot.sites.xy_mm), pilot.sites.side)
    sd, mean = world.prior_sd[:world.assumed.size], world.prior_mean[:world.assumed.size]
    reading, white = _noise(study, pilot.sites)
    other = np.hypot(white, world.assumed.fixed_um(pilot.sites.xy_mm, "displacement"))
    extra = _scaled(world, lacking, pilot.sites.xy_mm)
    averages = pilot.averaged()
    visited = np.isin(pilot.sites.id, world.sites.id)
    if visited.sum() < len(world.sites):
        raise InputError(f"the pilot has rows of {int(visited.sum())} of the plan's {len(world.sites)} sites; verify on panels "
                         "of this layout that were measured at all of them")
    if visited.all():
        raise InputError("the pilot has only the plan's own sites; give panels that were measured at other marks too")
    p = world.assumed.corrected
    terms: list[tuple[int, float, int]] = []
    unseen: list[tuple[int, float, int]] = []
    standardised = np.full((len(averages), 2), np.nan)
    amplitude: list[Array] = []
    notes: list[str] = []
    averages = averages.without(_flagged(averages, rows[:, :, :p]))
    for pattern in averages.patterns():
        sigma = _sigma(pattern, reading, other)
        whitened = pattern.of(rows) / sigma[:, None]
        y = pattern.y / sigma
        mine = visited[pattern.site][pattern.mark]
        whole, part = Factored.of(whitened, sd), Factored.of(whitened[mine], sd)
        if part.rank < part.terms or mine.all():
            notes += [f"panel {pilot.panel_names[i]}: too few of the plan's sites read to compare" for i in pattern.panels]
            continue
        fit_all, fit_part = whole.solve(y, mean), part.solve(y[:, mine], mean)
        covariance = part.covariance()
        # Shared readings: the difference of an estimate from all and one from some of them has the difference of covariances.
        values, vectors = np.linalg.eigh(_unit(covariance[:p, :p] - whole.covariance()[:p, :p], covariance[:p, :p]))
        kept = values > 1e-8
        scaled = (fit_part.theta - fit_all.theta)[:, :p] / np.sqrt(np.diag(covariance)[:p])
        squares = ((scaled @ vectors[:, kept]) ** 2 / values[kept]).sum(axis=1)
        terms += [(int(i), float(s), int(kept.sum())) for i, s in zip(pattern.panels, squares, strict=True)]
        rest = np.flatnonzero(~mine)
        rest = rest[np.linspace(0, len(rest) - 1, min(len(rest), 2 * MOST_UNVISITED)).astype(int)]
        off = y[:, rest] - fit_part.theta @ whitened[rest].T
        root = np.linalg.cholesky(np.eye(len(rest)) + whitened[rest] @ covariance @ whitened[rest].T)
        white_off = np.linalg.solve(root, off.T).T
        unseen += [(int(i), float(s), len(rest)) for i, s in zip(pattern.panels, (white_off**2).sum(axis=1), strict=True)]
        at = pattern.rows[:, pattern.mark[rest]], np.broadcast_to(pattern.axis[rest], white_off.shape)
        standardised[at] = white_off
        if len(lacking):
            more = Factored.of(np.concatenate([whitened, pattern.of(extra) / sigma[:, None]], axis=1),
                               np.concatenate([sd, np.full(len(lacking), np.inf)]))
            if more.rank == more.terms:
                found = more.solve(y, np.concatenate([mean, np.zeros(len(lacking))])).theta[:, -len(lacking):]
                amplitude.append(found**2 - np.diag(more.covariance())[-len(lacking):])
    if not terms:
        raise InputError("no pilot panel could be compared: too few of the plan's sites read; plan again, or measure again")
    alike = likeness(averages.site, standardised)
    checks = (_pilot_check("corrections from the plan's sites differ from those of all marks by", terms, alike),
              _pilot_check("marks that the plan does not visit lie off its prediction by", unseen, alike))
    size = float(np.sqrt(max(float(np.mean(np.concatenate(amplitude))), 0.0))) if amplitude else None
    return checks, size, notes


def _unit(difference: Array, covariance: Array) -> Array:
    scale = np.sqrt(np.diag(covariance))
    return difference / np.outer(scale, scale)


def _sigma(pattern: Pattern, reading: Array, other: Array) -> Array:
    return np.hypot(pattern.of(reading) / np.sqrt(pattern.count.ravel()[pattern.seen]), pattern.of(other))


def _flagged(averages: Averages, rows: Array) -> NDArray[np.bool_]:
    flagged = np.zeros((len(averages), 2), bool)
    for pattern in averages.patterns():
        design = Factored.of(pattern.of(rows))
        if design.degrees_of_freedom > 3:
            at = pattern.rows[:, pattern.mark], np.broadcast_to(pattern.axis, pattern.y.shape)
            flagged[at] = outliers(design.q, pattern.y, pattern.axis).flagged
    return flagged


def _pilot_check(what: str, found: list[tuple[int, float, int]], alike: float) -> PilotCheck:
    found = sorted(found)
    squares = np.array([square for _, square, _ in found])
    freedom = np.array([dof for _, _, dof in found])
    total = pooled(squares, freedom, alike)
    return PilotCheck(what, total.ratio, total.p_value, np.sqrt(squares / np.maximum(freedom, 1)),
                      bool(total.p_value >= FALSE_ALARM / 8 or total.ratio <= MATERIAL))

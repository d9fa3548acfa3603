"""Certify: re-reads what a plan claims and proves it again from study and layout, without the rooms that made it.

Readings and directions are rebuilt here from the contract's table of terms, the audit is recomputed with verified bounds, and
the proof is walked by `proof_check`. Shared with the planner are only the values read from the files, which marks the panel
leaves as candidates and what lies in a region (`panel`), and the local field's directions (`uncertainty.field`).
"""

from __future__ import annotations

import hashlib
import math
import re
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.distance import pdist

from sampler.errors import CertificateError
from sampler.panel.candidates import candidates
from sampler.panel.layout import Layout, Sites
from sampler.panel.region import QUADRANTS, SIDE_STEP_MM, inside_region, region_points
from sampler.tasks.certify_stops import all_stops, stop_readings
from sampler.tasks.proof_check import Evidence, Proven, check_proof
from sampler.tasks.study import RegionLimit, Study, TermLimit
from sampler.tasks.variance_check import Variance
from sampler.uncertainty.field import LocalField, local_field

Array = NDArray[np.float64]

MEETS = 1.0 + 1e-6
"""A recomputed ratio up to this meets its limit: the error bound of the recomputation is of this size."""
SAME = 1e-6
REGION_SAME = 2e-3
"""Relative difference up to which a written value agrees with the recomputed one; a region's worst place, found on another
raster, is promised to 0.1 %."""
AUDIT_STEPS = 50
MONOMIAL = re.compile(r"(dx|dy)_(?:x(\d?))?(?:y(\d?))?")


@dataclass(frozen=True, slots=True)
class Certified:
    """`sentence` says what is proven and how; `lower_bound` is the proven one."""

    sentence: str
    n_sites: int
    lower_bound: float
    fewest_proven: bool


def digest(certificate: dict[str, Any]) -> str:
    """SHA-256 of everything in a certificate but its own digest, whatever way it was written."""
    found = hashlib.sha256()

    def feed(value: Any) -> None:
        if isinstance(value, dict):
            for name in sorted(value):
                found.update(f"{{{name}:".encode())
                feed(value[name])
            found.update(b"}")
        elif isinstance(value, np.ndarray) and value.dtype.kind in "fiu":
            kind = "<f8" if value.dtype.kind == "f" else "<i8"
            found.update(f"{kind}{value.shape}".encode() + np.ascontiguousarray(value, kind).tobytes())
        elif isinstance(value, list | tuple):
            found.update(f"[{len(value)}".encode())
            for item in value:
                feed(item)
        else:
            found.update(f"{type(value).__name__}{value!r};".encode())

    feed({name: value for name, value in certificate.items() if name != "sha256"})
    return found.hexdigest()


def certify(study: Study, plan: dict[str, Any], certificate: dict[str, Any]) -> Certified:
    """Proves again what plan.json (`plan`) claims, by certificate.json. Raises CertificateError naming what does not hold."""
    try:
        return _certify(study, plan, certificate)
    except (KeyError, IndexError, TypeError, ValueError, AttributeError) as error:
        raise CertificateError(f"plan.json or certificate.json: damaged, {type(error).__name__}: {error}") from error


def _certify(study: Study, plan: dict[str, Any], certificate: dict[str, Any]) -> Certified:
    for name, source in (("study", study.source), ("layout", study.layout_source)):
        for where, said in (("plan.json", plan[name]["sha256"]), ("certificate.json", certificate[name]["sha256"])):
            if said != source.sha256:
                raise CertificateError(f"{where}: made from another {name} than {source.path} as it is now; plan again")
    if digest(certificate) != certificate["sha256"] or plan["certificate"]["sha256"] != certificate["sha256"]:
        raise CertificateError("certificate.json: altered since it was written, or not the one of this plan.json")
    if study.search.objective != "sites" or study.search.sites is not None:
        raise CertificateError("study: seeks the quickest panel or a given number of sites; only plans of the fewest are "
                               "certified")
    built = _Built(study)
    units = _chosen(built, plan)
    _check_audit(built, plan, units)
    proven = check_proof(_evidence(built), certificate)
    count, least = len(units), math.ceil(proven.lower_bound)
    if plan["lower_bound"] > least + SAME:
        raise CertificateError(f"plan.json: lower_bound is {plan['lower_bound']:g}; the certificate proves {least}")
    fewest = bool(plan["fewest_proven"])
    if fewest and least < count:
        raise CertificateError(f"plan.json: fewest_proven, with {count} {built.noun}s; the certificate proves only {least}")
    return Certified(_sentence(count, built.noun, least, fewest, proven), count, proven.lower_bound, fewest)


def _sentence(count: int, noun: str, least: int, fewest: bool, proven: Proven) -> str:
    sites = f"1 {noun} meets" if count == 1 else f"{count} {noun}s meet"
    between = f"{least}" if least == count - 1 else f"{least} to {count - 1}"
    rest = f"no set of fewer does ({proven.how})" if fewest or least >= count else \
        f"no set of fewer than {least} does ({proven.how}); whether {between} can is open"
    return f"{sites} every limit, and {rest}."


# -- what the plan says of its own sites ------------------------------------------------------------------------------


def _chosen(built: _Built, plan: dict[str, Any]) -> NDArray[np.int64]:
    """What the plan chose, sites or stops, in its order."""
    study, sites = built.study, built.sites
    place = {str(name): row for row, name in enumerate(sites.id)}
    names = [site["id"] for site in plan["sites"]]
    unknown = [name for name in names if name not in place]
    if unknown:
        raise CertificateError(f'plan.json: site "{unknown[0]}" is not a candidate of this study')
    if len(set(names)) != len(names) or plan["n_sites"] != len(names) or plan["candidates"] != len(sites):
        raise CertificateError("plan.json: n_sites, candidates and the list of sites do not agree")
    rows = np.array([place[name] for name in names], np.int64)
    for site, row in zip(plan["sites"], rows, strict=True):
        written = np.array([site["x_mm"], site["y_mm"]], float) + study.layout.origin_mm
        if not np.abs(written - sites.xy_mm[row]).max() <= 1e-6:
            raise CertificateError(f'plan.json: site "{site["id"]}" is written at another place than the layout\'s')
    missing = _required(study, sites)
    missing[rows] = False
    if missing.any():
        raise CertificateError(f'plan.json: required site "{sites.id[np.flatnonzero(missing)[0]]}" is missing')
    units = rows if built.stops is None else built.stops.stated(plan, rows, study.layout.origin_mm)
    chosen = np.zeros(len(built.expected), bool)
    chosen[units] = True
    for label, mask, least, most in _counts(built):
        if not least <= (mask & chosen).sum() <= most:
            raise CertificateError(f"plan.json: {(mask & chosen).sum()} {built.noun}s where rule {label} allows {least:g} to "
                                   f"{most:g}")
    spacing = study.rules.min_spacing_mm
    if spacing is not None and len(units) > 1 and pdist(built.xy[units]).min() < spacing * (1 - 1e-9):
        raise CertificateError(f"plan.json: two {built.noun}s are closer than min_spacing_mm {spacing:g}")
    return units


def _required(study: Study, sites: Sites) -> NDArray[np.bool_]:
    return np.isin(sites.id, study.rules.required) | np.isin(sites.kind, study.rules.required_kinds)


def _counts(built: _Built) -> list[tuple[str, NDArray[np.bool_], float, float]]:
    """(label, units, least, most) of the rules on marks that stops must see, per cell with candidates, per zone, and on all,
    in this order."""
    study, sites, stops = built.study, built.sites, built.stops
    rules, found = study.rules, []
    if stops is not None:
        found += [(f'required "{sites.id[mark]}"', np.arange(len(sites)) == mark, 1.0, math.inf)
                  for mark in np.flatnonzero(_required(study, sites))]
    for rule in rules.per_cell:
        grid = study.layout.grid(rule.grid)
        cell = grid.locate(sites.xy_mm)
        found += [(f"per_cell {rule.grid}, {grid.cell_label(number)}", cell == number, float(rule.least),
                   math.inf if rule.most is None else float(rule.most)) for number in range(grid.cells)
                  if (cell == number).any()]
    for zone in rules.per_zone:
        inside = inside_region(study.layout, "polygon", zone.polygon_mm, sites.xy_mm)
        if zone.circle_mm is not None:
            x, y, radius = zone.circle_mm
            inside = np.hypot(sites.xy_mm[:, 0] - x, sites.xy_mm[:, 1] - y) <= radius + 1e-6
        found.append((f'per_zone "{zone.name}"', inside, float(zone.least), math.inf if zone.most is None else float(zone.most)))
    if stops is not None:
        found = [(label, stops.any_of(mask), least, most) for label, mask, least, most in found]
    if rules.max_sites is not None:
        found.append(("max_sites", np.ones(len(built.expected), bool), 0.0, float(rules.max_sites)))
    return found


def _check_audit(built: _Built, plan: dict[str, Any], units: NDArray[np.int64]) -> None:
    """Recomputes every term and limit that plan.json states."""
    study, factor = built.study, built.study.coverage_factor
    for lost in combinations(range(len(units)), study.rules.lost) if study.rules.lost else ():
        rest = Variance(built.readings(np.delete(units, lost)), built.prior)
        for limit in study.limits:
            if not built.reached(limit, rest) <= _allowed(limit) * (MEETS if isinstance(limit, TermLimit) else 1 + REGION_SAME):
                names = " and ".join(str(built.key[units[unit]]) for unit in lost)
                raise CertificateError(f"plan.json: a limit fails when {built.noun} {names} is lost")
    variance = Variance(built.readings(units), built.prior)
    terms = factor * np.sqrt(variance.upper(np.eye(built.size)[:len(study.model)]))
    for value, written, name in zip(terms, plan["terms"], study.model.names, strict=True):
        _same(f"plan.json: terms, {name}: k_u", written["k_u"], float(value), SAME)
    place = 0
    for limit in study.limits:
        if isinstance(limit, TermLimit):
            achieved = [(float(terms[study.model.names.index(name)]), limit.maximum, SAME) for name in limit.terms]
        else:
            achieved = [(built.reached(limit, variance), limit.position_um, REGION_SAME)]
        for value, maximum, tolerance in achieved:
            written = plan["limits"][place]
            place += 1
            _same(f"plan.json: limits, {written['label']}: max", written["max"], maximum, SAME)
            _same(f"plan.json: limits, {written['label']}: predicted", written["predicted"], value, tolerance)
            if plan["meets_limits"] and not value <= maximum * MEETS:
                raise CertificateError(f"plan.json: limits, {written['label']}: {value:.6g} is above {maximum:g}")
    if place != len(plan["limits"]) or not plan["meets_limits"]:
        raise CertificateError("plan.json: its limits are not those of the study, or it does not claim to meet them")


def _allowed(limit: TermLimit | RegionLimit) -> float:
    return limit.maximum if isinstance(limit, TermLimit) else limit.position_um


def _same(where: str, written: float, value: float, tolerance: float) -> None:
    if not abs(written - value) <= tolerance * abs(value):
        raise CertificateError(f"{where} is {written!r}; recomputed {value:.9g}")


# -- the question, rebuilt --------------------------------------------------------------------------------------------


class _Built:
    """Candidates, whitened readings and prior of a study, from its values and the contract's table of terms."""

    def __init__(self, study: Study) -> None:
        self.study = study
        self.rasters: dict[int, tuple[Array, Array]] = {}  # by limit: directions and fixed part at a region's points
        found, measure = candidates(study.layout).sites, study.measure
        allowed = ~np.isin(found.id, study.rules.forbidden) & ~np.isin(found.kind, study.rules.forbidden_kinds)
        self.sites = found.take(np.flatnonzero(allowed & ((measure.side == "both") | (found.side == measure.side))))
        noise, xy = study.noise, self.sites.xy_mm
        self.field: LocalField | None = None
        if noise.local_range_mm and max(noise.local_um) > 0:
            self.field = local_field(study.layout.width_mm, study.layout.height_mm, noise.local_range_mm, noise.local_um)
        reading = np.where(np.isnan(self.sites.sigma_um), np.asarray(noise.mark_um), self.sites.sigma_um)
        if self.field is not None:
            local = np.sqrt(self.field.neglected(xy))[:, None] * np.asarray(noise.local_um)
        else:
            local = np.zeros(2) if noise.local_range_mm else np.asarray(noise.local_um)
        grouped = measure.field_of_view_mm
        self.sigma = np.sqrt(reading**2 + local**2 + (np.square(measure.stop_um) if grouped is None else 0.0))
        self.shared = self._shared()
        deviation = [np.full(len(study.model), np.inf)]
        for prior in study.priors:
            deviation[0][[study.model.names.index(name) for name in prior.terms]] = prior.sd
        if study.potential is not None:
            deviation.append(np.full(len(study.potential.terms), study.potential.sd_um))
        if self.field is not None:
            deviation.append(np.ones(2 * self.field.rank))
        deviation += [np.array(pair) for _, pair in self.shared]
        self.prior = np.diag(1 / np.concatenate(deviation) ** 2)
        readings = self.response(xy, _located(study.layout, xy))
        for number, (sides, _) in enumerate(self.shared):
            at = self.size - 2 * (len(self.shared) - number)
            readings[:, [0, 1], [at, at + 1]] = np.isin(self.sites.side, sides)[:, None]
        self.whitened = readings / self.sigma[:, :, None]
        rate = self.sites.read_rate.copy()
        for kind, given in measure.read_rate:
            rate[(self.sites.kind == kind) & (rate == 1.0)] = given
        self.expected = self.whitened * np.sqrt(rate)[:, None, None]
        self.stops = None if grouped is None else all_stops(self.sites, grouped)
        self.noun, self.xy, self.key = "site", xy, self.sites.id
        if self.stops is not None:
            self.noun, self.xy, self.key = "stop", self.stops.xy_mm, self.stops.key
            self.expected = stop_readings(self.stops.marks, self.expected, self.sigma, measure.stop_um)

    def readings(self, units: NDArray[np.int64]) -> Array:
        """What sites or stops read, whitened, (k, m, p); a mark that two stops see counts once."""
        if self.stops is None:
            return self.whitened[units]
        return stop_readings(self.stops.read(units), self.whitened, self.sigma, self.study.measure.stop_um)

    def _shared(self) -> list[tuple[tuple[str, ...], tuple[float, float]]]:
        """Errors common to all marks of one side, or to all read after turning over: (sides, deviations of dx and dy)."""
        measure, drawn = self.study.measure, self.study.layout.marks.side
        sides = [side for side in ("front", "back") if measure.side in ("both", side) and (drawn == side).any()]
        shared: list[tuple[tuple[str, ...], tuple[float, float]]] = [((side,), measure.side_um) for side in sides
                                                                     if max(measure.side_um) > 0]
        second = tuple(side for side in sides if side != self.study.machine.first_side)
        if len(sides) > 1 and second and max(measure.flip_um) > 0:
            shared.append((second, measure.flip_um))
        return shared

    @property
    def size(self) -> int:
        return len(self.prior)

    def response(self, xy: Array, cell: dict[str, NDArray[np.int64]], correction_only: bool = False) -> Array:
        """dx and dy in µm per unit of each term at points, (n, 2, p); with `correction_only` the others are zero."""
        study, layout = self.study, self.study.layout
        columns = []
        terms = [*study.model.terms, *(study.potential.terms.terms if study.potential is not None else ())]
        for number, item in enumerate(terms):
            local, half, present = xy, np.asarray(layout.half_mm), np.ones(len(xy), bool)
            if item.grid is not None:
                grid = layout.grid(item.grid)
                index = cell[item.grid]
                local, half = xy - grid.cell_centres_mm[index], np.asarray(grid.cell_mm) / 2
                present = index >= 0 if item.cell is None else index == item.cell
            if correction_only and number >= len(study.model):
                present = np.zeros(len(xy), bool)
            columns.append(_term(item.term, local, half) * present[:, None])
        if self.field is not None:
            basis = self.field.basis(xy) * (0.0 if correction_only else 1.0)
            for axis in (0, 1):
                columns += [np.outer(direction, np.eye(2)[axis] * self.field.sigma_um[axis]) for direction in basis.T]
        columns += [np.zeros((len(xy), 2))] * (2 * len(self.shared))
        return np.stack(columns, axis=2)

    def fixed(self, xy: Array, limit: RegionLimit) -> Array:
        """Standard uncertainty that no reading lowers, (n, 2): what the field's directions leave out."""
        if limit.of != "displacement" or self.field is None:
            return np.zeros((len(xy), 2))
        return np.sqrt(self.field.neglected(xy))[:, None] * np.asarray(self.field.sigma_um)

    def reached(self, limit: TermLimit | RegionLimit, variance: Variance) -> float:
        """k·u of a limit at its worst."""
        if isinstance(limit, RegionLimit):
            return self.study.coverage_factor * self.worst(limit, variance)
        held = np.eye(self.size)[[self.study.model.names.index(name) for name in limit.terms]]
        return float(self.study.coverage_factor * np.sqrt(variance.upper(held).max()))

    def worst(self, limit: RegionLimit, variance: Variance) -> float:
        """The largest standard uncertainty of dx or dy on a raster of the region."""
        if id(limit) not in self.rasters:
            layout = self.study.layout
            outline = layout.outline_mm if limit.polygon_mm is None else limit.polygon_mm
            spacing = np.ptp(outline, axis=0).max() / AUDIT_STEPS
            if limit.region.startswith("cells:"):
                spacing = max(layout.grid(limit.region.removeprefix("cells:")).cell_mm) * 5 / AUDIT_STEPS
            points = region_points(layout, limit.region, limit.polygon_mm, spacing)
            self.rasters[id(limit)] = (self.response(points.xy_mm, points.cell, limit.of == "correction"),
                                       self.fixed(points.xy_mm, limit))
        rows, fixed = self.rasters[id(limit)]
        return float(np.sqrt((variance.upper(rows.reshape(-1, self.size)) + fixed.ravel() ** 2).max()))

    def direction(self, source: int, name: str, xy: Array, axis: int, z: Array) -> Array:
        """c/τ of one row: a term limit's, or a region limit's at a point that must lie in the region.

        On the edge between cells either side belongs to the limit: the one of which z says most.
        """
        if not 0 <= source < len(self.study.limits):
            raise CertificateError(f"certificate.json: rows: the study has no limit number {source + 1}")
        limit, factor = self.study.limits[source], self.study.coverage_factor
        if isinstance(limit, TermLimit):
            if name not in limit.terms:
                raise CertificateError(f'certificate.json: rows: limit number {source + 1} is not on "{name}"')
            return np.eye(self.size)[self.study.model.names.index(name)] * factor / limit.maximum
        if axis not in (0, 1) or not inside_region(self.study.layout, limit.region, limit.polygon_mm, xy[None])[0]:
            raise CertificateError(f"certificate.json: rows: ({xy[0]:g}, {xy[1]:g}) mm, axis {axis}, is not in the region "
                                   f"of limit number {source + 1}")
        beside = np.concatenate([xy[None], xy + SIDE_STEP_MM * QUADRANTS])
        beside = beside[inside_region(self.study.layout, limit.region, limit.polygon_mm, beside)]
        sides = self.response(np.repeat(xy[None], len(beside), axis=0), _located(self.study.layout, beside),
                              limit.of == "correction")[:, axis]
        allowed = (limit.position_um / factor) ** 2 - self.fixed(xy[None], limit)[0, axis] ** 2
        if allowed <= 0:
            raise CertificateError(f"certificate.json: rows: limit number {source + 1} lies below what no reading lowers")
        return np.asarray(sides[int(np.argmax(np.abs(sides @ z)))] / math.sqrt(allowed))


def _evidence(built: _Built) -> Evidence:
    rules, n = built.study.rules, len(built.expected)
    required = _required(built.study, built.sites) if built.stops is None else np.zeros(n, bool)

    def directions(rows: dict[str, Any]) -> Array:
        source, axis = np.asarray(rows["source"]).astype(int), np.asarray(rows["axis"]).astype(int)
        xy = np.asarray(rows["where_mm"], float).reshape(-1, 2)
        z = np.asarray(rows["z"], float) if "z" in rows else np.ones((len(source), built.size))
        found = [built.direction(int(s), name, at, int(a), vector)
                 for s, name, at, a, vector in zip(source, rows["term"], xy, axis, z, strict=True)]
        return np.array(found).reshape(-1, built.size)

    spacing = rules.min_spacing_mm or 0.0
    return Evidence(built.expected, built.prior, np.ones(n), required, np.zeros(n, bool),
                    tuple(rule[1:] for rule in _counts(built)), built.key, directions, rules.lost,
                    built.xy if spacing else None, spacing)


def _located(layout: Layout, xy: Array) -> dict[str, NDArray[np.int64]]:
    return {grid.name: grid.locate(xy) for grid in layout.grids}


def _term(name: str, xy: Array, half: Array) -> Array:
    """dx and dy of one term in µm per unit of it, (n, 2): the contract's table."""
    x, y = xy.T / 1e3  # 1 µm per m: x mm is x/1000 µm per ppm
    one, nothing = np.ones(len(xy)), np.zeros(len(xy))
    plain = {"translation_x": (one, nothing), "translation_y": (nothing, one), "scale_x": (x, nothing),
             "scale_y": (nothing, y), "magnification": (x, y), "rotation": (-y, x), "orthogonality": (-y, nothing)}
    if name in plain:
        return np.stack(plain[name], axis=1)
    found = MONOMIAL.fullmatch(name)
    if found is None:
        raise CertificateError(f'study: the contract has no term "{name}"')
    axis, *powers = found.groups()
    u, v = (xy / half).T
    value = one
    for base, power in zip((u, v), powers, strict=True):
        value = value * base ** (0 if power is None else int(power or 1))
    return np.stack((value, nothing) if axis == "dx" else (nothing, value), axis=1)

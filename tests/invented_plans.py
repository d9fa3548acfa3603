"""Invented plans with true uncertainties for the tests of figures and reports, built without the tasks."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.model.terms import FAMILIES
from sampler.panel.candidates import Candidates
from sampler.panel.layout import Grid, KeepOut, Layout, Sites
from sampler.tasks.results import Audit, AuditedLimit, AuditedTerm, Plan, PositionMap, SiteAudit
from sampler.tasks.study import RegionLimit, Study, TermLimit
from sampler.uncertainty.noise import Noise

K = 3.0
NOTCHED = np.array([[-228.5, -305.0], [228.5, -305.0], [228.5, 305.0], [60.0, 305.0], [60.0, 270.0], [-60.0, 270.0],
                    [-60.0, 305.0], [-228.5, 305.0]])


def lattice(columns, rows, width, height):
    x, y = np.meshgrid(np.linspace(-width / 2, width / 2, columns), np.linspace(-height / 2, height / 2, rows))
    return np.stack([x.ravel(), y.ravel()], axis=1)


def core_layout(per_side=18, **changes):
    """510×515 mm with a 4×4 exposure grid; `per_side`² marks, all candidates but those in the corner keep-outs."""
    xy = lattice(per_side, per_side, 484.0, 489.0)
    layout = Layout("invented organic core", 510.0, 515.0, lattice(2, 2, 510, 515)[[0, 1, 3, 2]], 8.0,
                    (Grid("exposure", 4, 4, (118.0, 119.0), (122.0, 123.0)),), (),
                    Sites.at(np.array([f"E-{i}" for i in range(len(xy))]), xy))
    return replace(layout, **changes)


def notched_layout(count=3000):
    """457×610 mm, notched, with a circular and two rectangular keep-outs and marks at invented places."""
    rng = np.random.default_rng(5)
    xy = rng.uniform([-228, -304], [228, 304], (count, 2))
    return core_layout(
        name="invented notched panel", width_mm=457.0, height_mm=610.0, outline_mm=NOTCHED, edge_exclusion_mm=6.0,
        grids=(Grid("exposure", 3, 4, (140.0, 140.0), (146.0, 146.0)),
               Grid("drill", 9, 12, (46.0, 46.0), (48.0, 48.0))),
        keep_outs=(KeepOut("clamp left", np.array([[-228.5, -40], [-205, -40], [-205, 40], [-228.5, 40]])),
                   KeepOut("clamp right", np.array([[205, -40], [228.5, -40], [228.5, 40], [205, 40]])),
                   KeepOut("vacuum port", None, (40.0, -90.0, 28.0))),
        marks=Sites.at(np.array([f"M{i}" for i in range(count)]), xy), origin_mm=(-228.5, -305.0))


def study_of(layout, family=("affine", "dx_xy", "dy_xy"), limits=(), title="An invented study"):
    names = [name for item in family for name in FAMILIES.get(item, (item,))]
    return Study(title, layout, Model(tuple(ModelTerm(name) for name in names)), Noise((0.25, 0.25), (0.4, 0.5)),
                 tuple(limits))


def candidates_of(layout):
    """A plain stand-in for the real rule: rectangles and circles only."""
    xy = layout.marks.xy_mm
    reason = np.full(len(xy), "", dtype="U60")
    for keep_out in layout.keep_outs:
        edge = keep_out.boundary_mm()
        inside = ((xy >= edge.min(0)) & (xy <= edge.max(0))).all(1)
        reason[inside] = f'inside keep-out "{keep_out.name}"'
    near = (np.abs(xy) > np.array(layout.half_mm) - layout.edge_exclusion_mm).any(1)
    reason[near] = f"inside the edge exclusion of {layout.edge_exclusion_mm:g} mm"
    if len(layout.outline_mm) > 4:
        reason[(np.abs(xy[:, 0]) < 66) & (xy[:, 1] > 264)] = "outside the outline"
    return Candidates(layout.marks.take(reason == ""), reason)


def pick(study, sites, count, seed=0):
    """Greedy D-optimal choice of `count` sites, then ordered by angle; good enough to look at."""
    blocks = design_blocks(study.model, places(study.layout, sites.xy_mm)) / study.noise.sigma_um(sites)[:, :, None]
    inverse = np.eye(blocks.shape[2]) * 1e4
    free = np.ones(len(sites), bool)
    chosen = []
    for _ in range(min(count, len(sites))):
        gain = np.einsum("nap,pq,naq->n", blocks, inverse, blocks)
        i = int(np.argmax(np.where(free, gain, -1.0)))
        free[i] = False
        chosen.append(i)
        inverse = np.linalg.inv(np.linalg.inv(inverse) + blocks[i].T @ blocks[i])
    xy = sites.xy_mm[chosen]
    return sites.take(np.array(chosen)[np.argsort(np.arctan2(xy[:, 1], xy[:, 0]))])


def audit_of(study, sites, term_limits, region_um=None, raster=60):
    """The audit of `sites`: `term_limits` {name: max}; a position limit over the panel when `region_um` is given."""
    layout = study.layout
    blocks = design_blocks(study.model, places(layout, sites.xy_mm)) / study.noise.sigma_um(sites)[:, :, None]
    covariance = np.linalg.pinv(np.einsum("nap,naq->pq", blocks, blocks))
    k_u = K * np.sqrt(np.diag(covariance))
    by_name = dict(zip(study.model.names, zip(k_u, study.model.units, strict=True), strict=True))
    x, y = (np.linspace(-half, half, raster) for half in layout.half_mm)
    grid = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    rows = design_blocks(study.model, places(layout, grid))
    position = (K * np.sqrt(np.einsum("nap,pq,naq->na", rows, covariance, rows))).reshape(raster, raster, 2)
    if len(layout.outline_mm) > 4:
        position[(np.abs(x)[None] < 60) & (y[:, None] > 270)] = np.nan
    within = (np.abs(grid) <= np.array(layout.half_mm) - layout.edge_exclusion_mm).all(1)
    inner = np.where(within.reshape(raster, raster, 1), position, np.nan)
    r, c, axis = np.unravel_index(np.nanargmax(inner), inner.shape)
    worst = AuditedLimit("position", np.nan, float(inner[r, c, axis]), "µm", (float(x[c]), float(y[r])),
                         ("dx", "dy")[axis])
    limits = [AuditedLimit(name, maximum, float(by_name[name][0]), by_name[name][1])
              for name, maximum in term_limits.items()]
    if region_um is not None:
        limits += [replace(worst, label="position over panel", maximum=region_um)]
    terms = tuple(AuditedTerm(name, unit, float(value), term_limits.get(name, np.nan))
                  for name, (value, unit) in by_name.items())
    return Audit(sites, tuple(limits), terms, float(-np.linalg.slogdet(covariance)[1]), PositionMap(x, y, position),
                 worst)


def plan_of(study, count, term_limits, region_um=None, **changes):
    """A plan of `count` greedily chosen sites; pass `status`, `lower_bound`, … to change it."""
    found = candidates_of(study.layout)
    sites = pick(study, found.sites, count)
    plan = Plan(study, found, audit_of(study, sites, term_limits, region_um), "proven", count - 0.4, {},
                0.98765, (), (), 1.94)
    return replace(plan, **changes)


AFFINE_LIMITS = {"translation_x": 0.35, "translation_y": 0.45, "scale_x": 2.4, "scale_y": 2.7, "rotation": 2.4,
                 "orthogonality": 3.6, "dx_xy": 0.45, "dy_xy": 0.60}


def first_plan(**changes):
    study = study_of(core_layout(), limits=(TermLimit(tuple(AFFINE_LIMITS), 1.0),),
                     title="First plan: invented organic core")
    return plan_of(study, 24, AFFINE_LIMITS, **changes)


def region_plan(region_um=1.2, **changes):
    study = study_of(core_layout(), ("order3",), (RegionLimit("panel", region_um),), "Position limit over the panel")
    return plan_of(study, 36, {}, region_um, **changes)


def notched_plan(**changes):
    study = study_of(notched_layout(), ("order2",), (RegionLimit("panel", 0.9), TermLimit(("scale_x", "scale_y"), 2.5)),
                     "Notched panel, three thousand invented marks")
    return plan_of(study, 30, {"scale_x": 2.5, "scale_y": 2.5}, 0.9, **changes)


def impossible_plan(**changes):
    study = study_of(core_layout(), limits=(TermLimit(("scale_x",), 0.3), RegionLimit("panel", 0.2)),
                     title="Cannot be met")
    found = candidates_of(study.layout)
    audit = audit_of(study, found.sites, {"translation_x": 0.2, "scale_x": 0.3, "scale_y": 0.8, "rotation": 0.5}, 0.2)
    advice = ("loosen the limit on scale_x from 0.3 to 0.573 ppm",
              "or lower the reading noise mark_um in x from 0.25 to 0.11 µm",
              "or add candidate marks near (247.0, 249.5) mm, where the worst position is")
    plan = Plan(study, found, audit, "cannot", np.inf, {}, np.nan, advice, (), 0.12)
    return replace(plan, **changes)


def listed_audit(scale=1.0, **changes):
    """A list of 28 sites with a fewest plan of 24; `scale` tightens the limits."""
    fewest = first_plan()
    study = fewest.study
    limits = {name: maximum * scale for name, maximum in AFFINE_LIMITS.items()}
    sites = fewest.candidates.sites.take(np.linspace(0, 323, 28).astype(int))
    result = SiteAudit(study, fewest.candidates, audit_of(study, sites, limits), ("E-12", "E-107"), None,
                       fewest, 0.871, ())
    return replace(result, **changes)

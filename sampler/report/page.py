"""The report page: one HTML file that needs nothing else, opened from disk."""

from __future__ import annotations

import base64
import hashlib
import math
from typing import Any

import numpy as np
from jinja2 import Environment, PackageLoader, StrictUndefined
from numpy.typing import NDArray

from sampler.panel.layout import Layout
from sampler.report.page_data import (
    MOST_CANDIDATES,
    NAME,
    chart,
    coordinate,
    loss_texts,
    own_frame,
    page_data,
)
from sampler.report.summary import CAUTION, counted
from sampler.tasks.results import Plan
from sampler.tasks.review import Page
from sampler.tasks.study import RegionLimit, Source
from sampler.tasks.wording import plain, significant

Array = NDArray[np.float64]

MOST_CELLS = 2500
CHART_SIZE = (380, 190)
CHART_MARGIN = (18, 14, 34, 46)
MAP_MARGIN = 0.04
AXIS_MARGIN = 0.07

_ENVIRONMENT = Environment(loader=PackageLoader("sampler.report", ""), autoescape=True, undefined=StrictUndefined,
                           trim_blocks=True, lstrip_blocks=True)
_ENVIRONMENT.policies["json.dumps_kwargs"] = {"separators": (",", ":"), "allow_nan": False, "ensure_ascii": False}


def page_html(page: Page) -> str:
    """The page as HTML: every table written out, the map and the changes drawn by its own script.

    Its security policy lets it load nothing and run no script but that one.
    """
    plan = page.plan
    data = page_data(page)
    curve = chart(data["states"], CHART_SIZE, CHART_MARGIN) if page.others else None
    here = next(k for k, state in enumerate(data["states"]) if state["plan"])
    script, style = _asset("page.js"), _asset("page.css")
    return _ENVIRONMENT.get_template("page.html.j2").render(
        title=plain(plan.study.title, NAME) or "Untitled study", panel=plain(plan.study.layout.name, NAME),
        cannot=page.chosen is None, plan=plan, state=data["states"][here], here=here, data=data, curve=curve,
        curve_size=CHART_SIZE, headline=_headline(page), advice=plan.advice, notes=_notes(page),
        panel_svg=_panel(plan.study.layout), regions=_regions(plan), view=_view(plan.study.layout),
        limits=_limits(plan), terms=_terms(plan), sites=_sites(page), verdict=page.verdict, facts=_facts(page),
        command=page.command, caution=" ".join(CAUTION), factor=f"{plan.study.coverage_factor:g}",
        drawn=_drawn(plan, len(data["candidates"]), len(data["others"]["x"])),
        script=script, style=style, script_hash=_hash(script), style_hash=_hash(style))


def _asset(name: str) -> str:
    assert _ENVIRONMENT.loader is not None
    return _ENVIRONMENT.loader.get_source(_ENVIRONMENT, name)[0].strip()


def _hash(text: str) -> str:
    """As a content security policy names an inline script: SHA-256 in base64."""
    return "sha256-" + base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()


def _headline(page: Page) -> str:
    plan = page.plan
    if page.chosen is not None:
        return ""
    missed = sum(not limit.ratio <= 1.0 for limit in plan.audit.limits)
    everything = f"all {counted(len(plan.candidates.sites), 'candidate')} measured"
    if missed:
        return f"with {everything}, {missed} of {counted(len(plan.audit.limits), 'limit')} still missed"
    return f"with {everything} every limit is met, but no set within the study's rules was found"


def _notes(page: Page) -> list[str]:
    """Warnings, and what the page leaves out."""
    plan = page.plan
    notes = list(plan.warnings)
    if plan.chance is not None:
        least, most = (f"{100 * part:.2g}" for part in (plan.chance.least, plan.chance.most))
        notes.append(f"Marks do not always read: a panel misses a limit with a chance between {least} and {most} %.")
    if plan.interrupted:
        notes.append("The search was interrupted: fewer sites may be possible.")
    count = len(plan.candidates.sites)
    if count > MOST_CANDIDATES:
        notes.append(f"The map shows at most {MOST_CANDIDATES:,} of {count:,} candidates, thinned evenly; every chosen site "
                     "is shown.")
    return [plain(note, 600) for note in notes]


def _drawn(plan: Plan, shown: int, others: int) -> dict[str, str]:
    """How many candidates and other marks the map shows of how many."""
    count, rest = len(plan.candidates.sites), int((plan.candidates.reason != "").sum())

    def words(all_of: int, one: str, many: str, some: int) -> str:
        return f"{all_of:,} {one if all_of == 1 else many}" + (f", {some:,} of them drawn" if some < all_of else "")

    return {"candidates": words(count, "candidate", "candidates", shown),
            "others": words(rest, "mark that is no candidate", "marks that are no candidates", others) if rest else ""}


def _number(value: float) -> str:
    return f"{round(float(value), 3) + 0.0:.7g}"


def _path(vertices: Array) -> str:
    """A closed SVG path; y points down there."""
    return "M" + "L".join(f"{_number(x)} {_number(-y)}" for x, y in vertices) + "Z"


def _view(layout: Layout) -> str:
    """The part of the SVG plane that holds the panel with a margin for the numbers of its axes, as a viewBox."""
    edge = own_frame(layout, layout.outline_mm) * [1, -1]
    low, high = edge.min(axis=0), edge.max(axis=0)
    size = (high - low).max()
    low, high = low - size * np.array([AXIS_MARGIN, MAP_MARGIN]), high + size * np.array([MAP_MARGIN, AXIS_MARGIN / 2])
    return " ".join(_number(part) for part in (*low, *(high - low)))


def _panel(layout: Layout) -> dict[str, Any]:
    """Outline, cells and keep-outs as SVG paths."""
    grids = []
    for grid in layout.grids:
        name = f"cells of grid {plain(grid.name, 40)}"
        if grid.cells > MOST_CELLS:
            grids.append({"name": f"{name}: {grid.cells:,}, not drawn", "path": ""})
            continue
        wide, high = grid.cell_mm
        corners = own_frame(layout, grid.cell_centres_mm) + [-wide / 2, high / 2]
        grids.append({"name": name, "path": "".join(
            f"M{_number(x)} {_number(-y)}h{_number(wide)}v{_number(high)}h{_number(-wide)}z" for x, y in corners)})
    keep_outs = []
    for keep_out in layout.keep_outs:
        edge = own_frame(layout, keep_out.boundary_mm())
        x, y = (edge.min(axis=0) + edge.max(axis=0)) / 2
        keep_outs.append({"name": plain(keep_out.name, 60), "path": _path(edge), "x": _number(x), "y": _number(-y),
                          "upright": bool(np.ptp(edge[:, 0]) < np.ptp(edge[:, 1]))})
    return {"outline": _path(own_frame(layout, layout.outline_mm)), "grids": grids, "keep_outs": keep_outs,
            "edge": _number(2 * layout.edge_exclusion_mm) if layout.edge_exclusion_mm > 0 else "",
            "edge_mm": f"{layout.edge_exclusion_mm:g}"}


def _regions(plan: Plan) -> list[str]:
    """Where position limits hold, as paths, for cutting the map of ratios to them."""
    layout, paths = plan.study.layout, []
    for limit in plan.study.limits:
        if not isinstance(limit, RegionLimit):
            continue
        if limit.region == "panel":
            paths.append(_path(own_frame(layout, layout.outline_mm)))
        elif limit.polygon_mm is not None:
            paths.append(_path(own_frame(layout, limit.polygon_mm)))
        elif limit.region.startswith("cells:"):
            grid = layout.grid(limit.region.removeprefix("cells:"))
            half = np.asarray(grid.cell_mm) / 2 * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
            paths.append("".join(_path(cell) for cell in own_frame(layout, grid.cell_centres_mm[:, None] + half)))
    return paths


def _limits(plan: Plan) -> list[dict[str, str]]:
    """What stays the same in the table of limits, whatever sites are shown."""
    return [{"label": plain(limit.label, NAME), "max": f"{limit.maximum:.6g}", "unit": limit.unit,
             "floor": significant(limit.floor) if math.isfinite(limit.floor) else ""} for limit in plan.audit.limits]


def _terms(plan: Plan) -> list[dict[str, str]]:
    biased = any(term.bias > 0 for term in plan.audit.terms)
    return [{"name": plain(term.name, NAME), "unit": term.unit, "max": f"{term.maximum:.6g}" if term.maximum > 0 else "",
             "bias": significant(term.bias) if biased else ""} for term in plan.audit.terms]


def _sites(page: Page) -> list[dict[str, str]]:
    if page.chosen is None:
        return []
    sites = page.chosen.audit.sites
    xy = own_frame(page.plan.study.layout, sites.xy_mm)
    losses = loss_texts(page.chosen) or [""] * len(sites)
    return [{"id": plain(str(name), NAME), "x": coordinate(x), "y": coordinate(y), "side": str(side), "loss": loss}
            for name, (x, y), side, loss in zip(sites.id, xy.tolist(), sites.side, losses, strict=True)]


def _facts(page: Page) -> list[tuple[str, str]]:
    """Provenance, line by line."""
    plan = page.plan
    marks = len(plan.candidates.reason)
    ruled_out = "; ".join(f"{count:,} {plain(reason, 100)}" for reason, count in plan.candidates.counts().items())
    facts = [("sampler version", page.version), *_source("study", plan.study.source),
             *_source("layout", plan.study.layout_source), ("seed", str(plan.study.search.seed)),
             ("search took", f"{significant(plan.seconds, 2)} s"), ("coverage factor k", f"{plan.study.coverage_factor:g}"),
             ("candidates", f"{len(plan.candidates.sites):,} of {marks:,} marks" + (f"; not: {ruled_out}" if ruled_out else ""))]
    if math.isfinite(plan.d_efficiency_at_least):
        # Rounded down: "at least" must stay true.
        facts.append(("D-efficiency", f"at least {math.floor(1000 * plan.d_efficiency_at_least) / 1000:.3f}"))
    return [(name, value) for name, value in facts if value]


def _source(name: str, source: Source) -> list[tuple[str, str]]:
    return [(name, plain(source.path, 300)), (f"{name} SHA-256", source.sha256)]

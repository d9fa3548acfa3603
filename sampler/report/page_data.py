"""Numbers for the page's script: marks, rasters as compact text, and one state of the page for each choice of sites."""

from __future__ import annotations

import base64
import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sampler.panel.layout import Layout
from sampler.panel.thinning import thinned
from sampler.report.summary import bound_text, counted
from sampler.tasks.results import Audit, PositionMap
from sampler.tasks.review import Choice, Page
from sampler.tasks.wording import against, plain, share, significant

Array = NDArray[np.float64]

MOST_CANDIDATES = 3000
MOST_OTHER_MARKS = 800
OTHER_STEPS = 41
"""Raster steps along the longer side for the choices of a trade-off; the plan itself keeps its audit's raster."""
MOST_LEVELS = 8
REACH_TO_LIMIT = 1.5
"""A limit this much above the largest value still stretches the scale up to itself."""
FLAT = 1e-3
MOST_CODE, NOTHING, NOT_DETERMINED = 60_000, 65_534, 65_535
SCALE_REACH = 8.0
"""Values up to so many times the highest level keep their number; the page says "more than" beyond."""
NAME = 120
TICK_ROOM = 14

# From pale sand to slate blue in equal steps of lightness, so that it darkens as steadily in grey; light enough for ink.
COLOURS = ("#fcf6e0", "#e4e8c6", "#c6dbb3", "#a2cea8", "#7ec1a4", "#5ab2a5", "#3ea2a6", "#308ea5", "#317b9f", "#376796")


def own_frame(layout: Layout, xy_mm: Array) -> Array:
    """Coordinates as the layout file gives them."""
    return np.round(np.asarray(xy_mm, float) - layout.origin_mm, 6) + 0.0


def coordinate(value: float) -> str:
    """Millimetres as text, to the micrometre, without idle zeros.

    >>> coordinate(-242.0), coordinate(12.3456)
    ('-242', '12.346')
    """
    return f"{round(value, 3) + 0.0:.3f}".rstrip("0").rstrip(".")


def levels(low: float, high: float) -> list[float]:
    """At most eight round numbers between `low` and `high`, at least one.

    >>> levels(0.41, 0.78)
    [0.45, 0.5, 0.55, 0.6, 0.65, 0.7, 0.75]
    """
    if high - low <= FLAT * high:
        low, high = 0.9 * low, 1.1 * high
    tens = 10.0 ** math.floor(math.log10((high - low) / MOST_LEVELS))
    for step in (tens * nice for nice in (1, 2, 2.5, 5, 10, 20)):
        first, last = math.floor(low / step + 1e-9) + 1, math.ceil(high / step - 1e-9) - 1
        if last - first < MOST_LEVELS:
            break
    return [float(f"{k * step:.6g}") for k in range(first, last + 1)]


def colours(count: int) -> list[str]:
    """`count` colours of the scale, from its pale to its dark end."""
    table = np.array([[int(colour[k:k + 2], 16) for k in (1, 3, 5)] for colour in COLOURS], float)
    at = np.linspace(0, len(table) - 1, count)
    mixed = np.stack([np.interp(at, np.arange(len(table)), table[:, k]) for k in range(3)], axis=1)
    return ["#" + "".join(f"{round(part):02x}" for part in colour) for colour in mixed]


def page_data(page: Page) -> dict[str, Any]:
    """Everything that the script draws and says; texts are escaped where they are written."""
    plan, layout = page.plan, page.plan.study.layout
    choices = ([] if page.chosen is None else [page.chosen]) + list(page.others)
    sites = plan.candidates.sites
    shown = thinned(sites.xy_mm, MOST_CANDIDATES)
    used = np.isin(sites.id, np.concatenate([np.zeros(0, sites.id.dtype), *(choice.audit.sites.id for choice in choices)]))
    rows = np.union1d(shown, np.flatnonzero(used))
    row_of = {str(name): k for k, name in enumerate(sites.id[rows])}
    others = own_frame(layout, layout.marks.xy_mm[plan.candidates.reason != ""])
    scales = _scales(plan.audit.position, page.limit_ratio, sorted({limit.maximum for limit in plan.audit.limits
                                                             if limit.where_mm is not None}))
    return {
        "marks": {"id": [plain(str(name), NAME) for name in sites.id[rows]], **_columns(own_frame(layout, sites.xy_mm[rows])),
                  "back": np.flatnonzero(sites.side[rows] == "back").tolist(),
                  "required": [row_of[name] for name in plan.study.rules.required if name in row_of]},
        "candidates": np.searchsorted(rows, shown).tolist(),
        "others": _columns(others[thinned(others, MOST_OTHER_MARKS)]),
        "frame": np.round([own_frame(layout, layout.outline_mm).min(axis=0),
                           own_frame(layout, layout.outline_mm).max(axis=0)], 3).ravel().tolist(),
        "scales": scales,
        "states": states(page, row_of, scales),
    }


def _columns(xy: Array) -> dict[str, list[float]]:
    return {"x": np.round(xy[:, 0], 3).tolist(), "y": np.round(xy[:, 1], 3).tolist()}


def _scales(position: PositionMap, limit_ratio: Array, limits: list[float]) -> dict[str, Any]:
    """Levels, their colours and the limits to draw: `um` for k·u, `ratio` for its share of the limit, null without one."""
    known = position.k_u_um[np.isfinite(position.k_u_um)]
    scales: dict[str, Any] = {"um": None, "ratio": None}
    if known.size:
        high = float(known.max())
        # A hair beyond a limit, so that the limit itself may be a level.
        scales["um"] = _scale(levels(float(known.min()), max([high, *(1.001 * x for x in limits if x <= REACH_TO_LIMIT * high)])),
                              limits)
    ratio = limit_ratio[np.isfinite(limit_ratio)]
    if ratio.size:
        scales["ratio"] = _scale(levels(min(float(ratio.min()), 0.9), max(float(ratio.max()), 1.001)), [1.0])
    return scales


def _scale(steps: list[float], limits: list[float]) -> dict[str, Any]:
    return {"levels": steps, "colours": colours(len(steps) + 1), "limits": limits, "unit": SCALE_REACH * steps[-1] / MOST_CODE}


def coded(values: Array, unit: float) -> str:
    """An array as base64 of little-endian 16-bit whole numbers of `unit`, row by row."""
    code = np.clip(np.rint(np.nan_to_num(values, posinf=0.0) / unit), 0, MOST_CODE)
    code = np.where(np.isnan(values), NOTHING, np.where(np.isinf(values), NOT_DETERMINED, code))
    return base64.b64encode(code.astype("<u2").tobytes()).decode()


def _raster(layout: Layout, audit: Audit, ratio: Array | None, scales: dict[str, Any],
            steps: int | None) -> dict[str, Any] | None:
    if scales["um"] is None:
        return None
    position = audit.position
    longest = max(len(position.x_mm), len(position.y_mm))
    columns, rows = (np.unique(np.rint(np.linspace(0, n - 1, n if steps is None else max(2, round(steps * n / longest))))
                               .astype(int)) for n in (len(position.x_mm), len(position.y_mm)))
    at = np.ix_(rows, columns)
    return {"x": np.round(position.x_mm[columns] - layout.origin_mm[0], 3).tolist(),
            "y": np.round(position.y_mm[rows] - layout.origin_mm[1], 3).tolist(),
            "dx": coded(position.k_u_um[..., 0][at], scales["um"]["unit"]),
            "dy": coded(position.k_u_um[..., 1][at], scales["um"]["unit"]),
            "ratio": None if ratio is None or scales["ratio"] is None else coded(ratio[at], scales["ratio"]["unit"])}


def states(page: Page, row_of: dict[str, int], scales: dict[str, Any]) -> list[dict[str, Any]]:
    """What the page can show: the choices by rising count with the plan among them, in place of an equal one."""
    layout = page.plan.study.layout
    if page.chosen is None:
        return [{"plan": True, "name": "every candidate measured", "rows": [], "path": None, "loss": [],
                 **_said(page.plan.audit, layout), "answer": {"worst": _worst(page.plan.audit, layout)},
                 "raster": _raster(layout, page.plan.audit, page.limit_ratio, scales, None)}]
    mine = set(page.chosen.audit.sites.id.tolist())
    found = [(choice, False) for choice in page.others if set(choice.audit.sites.id.tolist()) != mine]
    same = [choice.ratio_at_least for choice in page.others if set(choice.audit.sites.id.tolist()) == mine]
    found.append((page.chosen, True))
    found.sort(key=lambda item: (item[0].count, item[1]))
    return [_state(page, choice, is_plan, row_of, scales, same[0] if is_plan and same else choice.ratio_at_least)
            for choice, is_plan in found]


def _state(page: Page, choice: Choice, is_plan: bool, row_of: dict[str, int], scales: dict[str, Any],
           at_least: float) -> dict[str, Any]:
    layout, audit = page.plan.study.layout, choice.audit
    path = own_frame(layout, choice.path_mm)
    noun = "site" if page.plan.stop_xy_mm is None else "stop"
    name = counted(choice.count, noun)
    return {"plan": is_plan, "count": choice.count, "name": f"{name}, the plan" if is_plan else name,
            "rows": [row_of[str(site)] for site in audit.sites.id], "path": _columns(path), "loss": loss_texts(choice),
            "ratio": _number(audit.worst.ratio if audit.limits else math.nan), "at_least": _number(at_least),
            **_said(audit, layout), "answer": _answer(page, choice, is_plan, name, at_least),
            "raster": _raster(layout, audit, choice.limit_ratio, scales, None if is_plan else OTHER_STEPS)}


def _number(value: float) -> float | None:
    return round(float(value), 5) if math.isfinite(value) else None


def _said(audit: Audit, layout: Layout) -> dict[str, Any]:
    """Cells of the tables of limits and terms, and where the worst position is."""
    worst = audit.worst_position
    where = None if worst.where_mm is None or not math.isfinite(worst.predicted) else own_frame(
        layout, np.array([worst.where_mm]))[0].tolist()
    return {"limits": [limit_cells(limit.predicted, limit.maximum) + [_place(limit.where_mm, limit.axis, layout)]
                       for limit in audit.limits],
            "terms": [[significant(term.k_u), bool(term.k_u > term.maximum)] for term in audit.terms], "worst_at": where}


def limit_cells(predicted: float, maximum: float) -> list[Any]:
    """k·u, share of the limit, verdict and the length of its bar in per cent of the limit, at most 130."""
    ratio = predicted / maximum
    return [against(predicted, maximum)[0], share(ratio), "met" if ratio <= 1 else "MISSED",
            round(min(130.0, 100 * ratio), 1) if math.isfinite(ratio) else 130.0]


def _place(where_mm: tuple[float, float] | None, axis: str, layout: Layout) -> str:
    if where_mm is None:
        return ""
    x, y = own_frame(layout, np.array([where_mm]))[0]
    return f"{axis} at ({x:.1f}, {y:.1f})"


def _worst(audit: Audit, layout: Layout) -> list[str]:
    worst = audit.worst_position
    if not math.isfinite(worst.predicted):
        return ["not determined", "by these sites"]
    return [f"{significant(worst.predicted)} µm", f"{_place(worst.where_mm, worst.axis, layout)} mm"]


def _answer(page: Page, choice: Choice, is_plan: bool, name: str, at_least: float) -> dict[str, list[str]]:
    """The four figures at the top of the page: each a few large words and a line below."""
    plan, audit, route = page.plan, choice.audit, choice.route
    missed = sum(not limit.ratio <= 1.0 for limit in audit.limits)
    if is_plan:
        bound = f"lower bound {bound_text(plan.lower_bound)}" if math.isfinite(plan.lower_bound) else "no lower bound"
        proof = [name, f"{proof_words(page)}; {bound}"]
    elif math.isfinite(at_least):
        proof = [name, f"another choice; no set of {name} gets below {share(at_least)}"]
    else:
        proof = [name, "another choice; what as many could reach is not known"]
    tightest = ["no limits", "the study sets none"]
    if audit.limits:
        worst = audit.worst
        told = f"{counted(missed, 'limit')} missed{', most' if missed > 1 else ''}: " if missed else "every limit met, tightest: "
        size, maximum = against(worst.predicted, worst.maximum)
        tightest = [share(worst.ratio) if math.isfinite(worst.ratio) else "not determined",
                    f"{told}{plain(worst.label, 60)}, {size} of {maximum} {worst.unit}"]
    spent = [f"{route.read_s:.1f} reading", f"{route.travel_s:.1f} moving", f"{route.handling_s:.1f} handling"]
    if route.flip_s:
        spent.append(f"{route.flip_s:.1f} turning over")
    said = {"proof": proof, "tightest": tightest, "seconds": [f"{route.seconds:.1f} s", ", ".join(spent)],
            "worst": _worst(audit, plan.study.layout)}
    return {key: [text.replace(" %", "\u00a0%") for text in texts] for key, texts in said.items()}


def proof_words(page: Page) -> str:
    """What was proven of the plan, in few words, never more than was."""
    plan = page.plan
    if plan.fewest_proven and plan.study.search.objective != "seconds":
        return "fewest proven"
    words = f"at least {plan.at_least} needed" if 0 < plan.at_least < plan.units else "fewest not proven"
    return f"{words}, search interrupted" if plan.interrupted else words


def loss_texts(choice: Choice) -> list[str]:
    """What the loss of each site would cost, in words."""
    labels = [plain(limit.label, 60) for limit in choice.audit.limits]
    return [_loss(float(ratio), labels[limit]) for ratio, limit in
            zip(choice.losses.ratio, choice.losses.limit, strict=True)]


def _loss(ratio: float, label: str) -> str:
    if math.isinf(ratio):
        return f"{label} not determined"
    return f"still met, {label} at {share(ratio)}" if ratio <= 1 else f"MISSED, {label} at {share(ratio)}"


def chart(found: Sequence[dict[str, Any]], size: tuple[int, int], margin: tuple[int, int, int, int]) -> dict[str, Any] | None:
    """The trade-off as points of a picture: count to the right, worst ratio upwards, on a log scale when it spans a decade.

    Gives each state of `found` its place as `chart`, null where the ratio is unknown; `margin` top, right, bottom, left.
    """
    known = [state for state in found if state["ratio"] is not None]
    if len(known) < 2:
        return None
    counts = [state["count"] for state in found]
    ratios = [state["ratio"] for state in known] + [state["at_least"] for state in found if state["at_least"]]
    low, high = min([*ratios, 0.95]), max([*ratios, 1.05])
    log = high > 5 * low
    top, right, bottom, left = margin

    def x(count: float) -> float:
        return round(left + (count - min(counts)) / max(1, max(counts) - min(counts)) * (size[0] - left - right), 1)

    def y(ratio: float) -> float:
        part = math.log(ratio / low) / math.log(high / low) if log else (ratio - low) / (high - low)
        return round(size[1] - bottom - part * (size[1] - top - bottom), 1)

    for state in found:
        state["chart"] = [x(state["count"]), y(state["ratio"])] if state["ratio"] is not None else None
    bound = sorted({(x(state["count"]), y(state["at_least"])) for state in found if state["at_least"]})
    ticks = [1.0]
    for tick in (0.8, 1.2, 0.5, 1.5, 2, 0.2, 3, 5, 10, 0.1, 20, 50, 100, 1000):
        if low <= tick <= high and min(abs(y(tick) - y(other)) for other in ticks) >= TICK_ROOM:
            ticks.append(tick)
    step = next(step for step in (1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 10**6) if (max(counts) - min(counts)) / step <= 6)
    return {"found": [state["chart"] for state in known], "bound": bound, "one": y(1.0), "floor": size[1] - bottom,
            "y": [(y(t), share(t)) for t in ticks],
            "x": [(x(n), n) for n in range(-(-min(counts) // step) * step, max(counts) + 1, step)]}

"""What sites that the engineer chose achieve, and how far they are from the fewest."""

from __future__ import annotations

import difflib
import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from sampler.errors import InputError
from sampler.tasks.chance import miss_chance
from sampler.tasks.loss import with_losses
from sampler.tasks.plan import plan, with_floors
from sampler.tasks.question import Question, achieved, everything, knowledge_of, limits_achieved, question
from sampler.tasks.results import MEETS, SiteAudit
from sampler.tasks.study import Study
from sampler.tasks.units import one_by_one
from sampler.tasks.visiting import best_route, held, listed_route
from sampler.uncertainty.information import information

START_RIDGE = 1e-6
"""Prior information, as a share of what all candidates tell, lent to sites that leave a term undetermined so that the
site that helps most can be named; the figures shown never contain it."""
CHUNK_NUMBERS = 20_000_000
MOST_ROWS = 400
"""Limit rows for naming the best site to add: those closest to or over their limits."""


def audit(study: Study, ids: Sequence[str], *, search_fewest: bool = True,
          progress: Callable[[float, float], None] | None = None, stop: Callable[[], bool] | None = None) -> SiteAudit:
    """Audits the sites named by `ids`; with `search_fewest` also finds the plan of fewest sites to compare with.

    Raises InputError for ids that are unknown, repeated or not candidates, all together.
    """
    asked = question(study)
    rows = _rows(asked, ids)
    visits = one_by_one(rows)
    found = with_floors(with_losses(achieved(asked, visits), asked, visits), achieved(asked, everything(asked)))
    fewest = plan(study, progress=progress, stop=stop, asked=asked) if search_fewest else None
    met = found.meets_limits
    droppable = tuple(str(asked.candidates.sites.id[row]) for row in rows if met and _meets_without(asked, rows, row))
    efficiency = math.nan
    if fewest is not None and fewest.status != "cannot":
        # D-efficiency per site: information of equal numbers of sites is compared (Atkinson & Donev 1992).
        per_site = (found.log_det - fewest.audit.log_det) / len(study.model) - math.log(len(rows) / len(fewest.sites))
        efficiency = math.exp(per_site)
    return SiteAudit(study, asked.candidates, found, droppable, None if met else _best_to_add(asked, rows), fewest,
                     efficiency, study.warnings, listed_route(asked, rows), best_route(asked, rows), miss_chance(asked, visits))


def _rows(asked: Question, ids: Sequence[str]) -> NDArray[np.int64]:
    place = {str(name): row for row, name in enumerate(asked.candidates.sites.id)}
    marks = {str(name): row for row, name in enumerate(asked.study.layout.marks.id)}
    faults, seen = [], set()
    for name in ids:
        if name in seen:
            faults.append(f'site "{name}" is listed twice; list it once')
        elif name in marks and name not in place:
            faults.append(f'site "{name}" may not be measured: {asked.candidates.reason[marks[name]]}; drop it from the list')
        elif name not in place:
            near = difflib.get_close_matches(name, list(place)[:50_000], 1)
            faults.append(f'site "{name}" is not a mark of the layout' + (f'; did you mean "{near[0]}"?' if near else ""))
        seen.add(name)
    if not ids:
        faults.append("the site list is empty; list at least one id")
    if faults:
        raise InputError(faults)
    return np.array([place[name] for name in ids])


def _meets_without(asked: Question, rows: NDArray[np.int64], row: int) -> bool:
    """Whether the limits hold without one site: the rows first, the regions' worst places only when these hold."""
    visits = one_by_one(rows[rows != row])
    variance = knowledge_of(asked, visits).variance(asked.limits.directions)
    return not np.any(variance > asked.limits.tau**2 * MEETS**2) and held(asked, visits)


def _best_to_add(asked: Question, rows: NDArray[np.int64]) -> tuple[str, float] | None:
    """The candidate that lowers the worst ratio most, and that ratio.

    After adding site i, v_l becomes v_l − g_lᵀ (I + Bᵢ M⁻¹ Bᵢᵀ)⁻¹ g_l with g_l = Bᵢ M⁻¹ c_l, for all i and l at once.
    """
    free = np.setdiff1d(np.arange(len(asked.candidates.sites)), rows)
    if not len(free):
        return None
    total = information(asked.whitened)
    inverse = np.linalg.inv(information(asked.whitened[rows], asked.assumed.prior_precision) + START_RIDGE * total)
    columns = asked.limits.directions.T / asked.limits.tau
    g = inverse @ columns
    variance = (columns * g).sum(axis=0)
    hardest = np.argsort(-variance, kind="stable")[:MOST_ROWS]
    g, variance = g[:, hardest], variance[hardest]
    worst = np.empty(len(free))
    step = max(1, CHUNK_NUMBERS // (2 * len(hardest)))
    for start in range(0, len(free), step):
        blocks = asked.whitened[free[start:start + step]]
        gain = np.linalg.inv(np.eye(2) + blocks @ inverse @ blocks.transpose(0, 2, 1))
        response = blocks @ g
        worst[start:start + step] = (variance - np.einsum("ial,iab,ibl->il", response, gain, response)).max(axis=1)
    order = np.argsort(worst, kind="stable")[:5]
    ratio = [max(limit.ratio for limit in limits_achieved(asked, knowledge_of(asked, one_by_one(np.append(rows, free[i])))))
             for i in order]
    best = int(np.argmin(ratio))
    return str(asked.candidates.sites.id[free[order[best]]]), float(ratio[best])

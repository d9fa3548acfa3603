"""The worked-out overlay budget as text: what is left for sampling, who uses the rest, what a plan supports."""

from __future__ import annotations

import math
import textwrap

from sampler.tasks.budget import BudgetResult, Eater, counted_lines, rounded
from sampler.tasks.wording import columns, plain, significant

WIDTH = 80
MOST_ROWS = 12
_NAME = 34


def budget_summary(result: BudgetResult) -> str:
    """The answer first, then the table of contributors, largest first, then pads and lines."""
    asked = result.budget
    lines = [*_sentence(f"{plain(asked.name, 40)}: {result.answer}"),
             *_sentence(f"Overlay tolerance ({asked.pad_um:g} - {asked.via_um:g})/2 - {asked.ring_um:g} = "
                        f"{asked.tolerance_um:.6g} µm per axis"), ""]
    lines += _table(result)
    lines.append("")
    pads = f"Smallest pad with perfect sampling {rounded(float(asked.smallest_pad_um()), 4, up=True):g} µm"
    if result.lines is not None:
        pads += f"; this pad of {asked.pad_um:g} µm leaves room for {counted_lines(result.lines)}"
    lines += _sentence(pads)
    if result.next_line is not None:
        lines += _sentence(_next(result))
    if result.supported is not None:
        plan = result.plan_answer[0].upper() + result.plan_answer[1:]
        lines += _sentence(plan)
    if not result.spent:
        lines += ["For the study:", f"  coverage_factor = {asked.coverage_factor:g}", "  [[limit]]", '  region = "panel"',
                  f"  position_um = {result.position_to_enter_um:g}"]
    for warning in asked.warnings:
        lines += _sentence(f"Warning: {warning}")
    return "\n".join(lines)


def _sentence(text: str) -> list[str]:
    return textwrap.wrap(plain(text, 6 * WIDTH) + ".", WIDTH, subsequent_indent="  ", break_long_words=True,
                         break_on_hyphens=False)


def _next(result: BudgetResult) -> str:
    following = result.next_line
    assert following is not None
    more = "1 line" if following.lines == 1 else f"{following.lines} lines"
    if following.pad_um <= result.budget.via_um:
        return f"No pad leaves room for {more} at this pitch"
    needs = ("other contributors to shrink first" if math.isnan(following.position_limit_um) else
             f"a sampling k·u of at most {rounded(following.position_limit_um, 3, up=False):g} µm")
    return f"Room for {more} takes a pad of at most {rounded(following.pad_um, 4, up=False):g} µm, and {needs}"


def _table(result: BudgetResult) -> list[str]:
    asked = result.budget
    if not result.eaters:
        return ["The budget names no contributors."]
    heads = ("mean", "k·sigma", "together", "variance")
    rows = [(f"Who uses it, µm (k = {asked.coverage_factor:g})", *heads)]
    rows += [_row(eater) for eater in result.by_size[:MOST_ROWS]]
    rows.append(("means add, sigmas in quadrature", significant(asked.mean_um), significant(_k_sigma(result)),
                 significant(float(asked.spent_um())), ""))
    wide = [max(columns(row[at]) for row in rows) for at in range(5)]
    lines = [row[0] + " " * (wide[0] - columns(row[0]))
             + "".join("  " + " " * (wide[at] - columns(row[at])) + row[at] for at in range(1, 5)) for row in rows]
    hidden = len(result.eaters) - MOST_ROWS
    if hidden > 0:
        lines.insert(len(lines) - 1, f"  and {hidden} smaller")
    return [line.rstrip() for line in lines]


def _k_sigma(result: BudgetResult) -> float:
    return result.budget.coverage_factor * result.budget.sigma_um


def _row(eater: Eater) -> tuple[str, str, str, str, str]:
    return (f"  {plain(eater.name, _NAME)}", significant(eater.mean_um), significant(eater.k_sigma_um),
            significant(eater.quoted_um), f"{100 * eater.variance_share:.0f} %")

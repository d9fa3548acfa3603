"""What a person reads on the terminal in ten seconds: at most 23 lines of 80 columns, the answer first."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

from sampler.errors import InputError, SamplerError
from sampler.panel.candidates import Candidates
from sampler.report.recipe import audit_lines, plan_lines
from sampler.tasks.results import BOUND_TOLERANCE, MEETS, Audit, AuditedLimit, Plan, SiteAudit, whole_sites
from sampler.tasks.study import Study
from sampler.tasks.wording import against, columns, plain, share, significant

WIDTH = 80
HEIGHT = 23  # of the 24 lines of a screen one is the prompt
TIGHTEST = 5
MOST_MISSED = 8
MOST_ADVICE = 4
MOST_WARNINGS = 2
MOST_REASONS = 3
MOST_IDS = 6
SHOWN_FLOOR = 0.5
_LABEL = 34

CAUTION = ("Predictions hold under the stated model and noise; confirm on densely measured",
           "panels; your plant's change control decides.")


def plan_summary(plan: Plan) -> str:
    """The answer to a study: count and proof, or which limits fail with all candidates measured and what would help."""
    cannot = plan.status == "cannot"

    def parts(each: int) -> tuple[list[str], list[str]]:
        head = [*_wrapped(_cannot(plan) if cannot else _answer(plan), 3), _study(plan.study),
                *_candidates(plan.candidates, each)]
        tail = [_position(plan.audit, plan.study)]
        if cannot:
            tail += _advice(plan.advice, each)
        else:
            tail.append(_efficiency(plan.d_efficiency_at_least))
            tail += [line for said in plan_lines(plan) for line in _wrapped(said, each)]
        return head, [*tail, f"Seconds: {significant(plan.seconds, 2)}.", *_warnings(plan.warnings, each)]

    return _screen(parts, plan.audit, "best k·u" if cannot else "k·u", plan.study)


def audit_summary(result: SiteAudit) -> str:
    """A given site list as text: does it meet the limits, what the fewest plan would need, what to drop or add."""
    audit = result.audit
    missed = _missed(audit)
    verdict = (f"{len(missed)} of {counted(len(audit.limits), 'limit')} missed" if missed else
               "every limit met" if audit.limits else "the study sets no limits")

    def parts(each: int) -> tuple[list[str], list[str]]:
        head = [*_wrapped(f"{counted(len(audit.sites), 'listed site')}: {verdict}.", each), _study(result.study),
                *_candidates(result.candidates, each)]
        tail = [_position(audit, result.study), *_wrapped(_fewest(result), each)]
        if not missed:
            tail += _wrapped(_droppable(result.droppable), each)
        elif result.best_to_add is not None:
            name, ratio = result.best_to_add
            then = "every limit is then met" if ratio <= 1 else f"the worst limit is then at {share(ratio)} of its max"
            tail += _wrapped(f"Best site to add: {plain(name, 30)}; {then}.", each)
        tail += [line for said in audit_lines(result) for line in _wrapped(said, each)]
        return head, [*tail, *_warnings(result.warnings, each)]

    return _screen(parts, audit, "k·u", result.study)


def faults_text(error: SamplerError) -> str:
    """Everything wrong with the input, one fault a line, for stderr."""
    faults = error.faults if isinstance(error, InputError) else (str(error),)
    if len(faults) == 1:
        return f"Nothing was written: {faults[0]}"
    return "\n".join([f"Nothing was written; {len(faults)} faults in the input:", *(f"  - {fault}" for fault in faults)])


def progress_line(bound: float, best: float | None, seconds: float) -> str:
    """One line for stderr while the search runs: bound and best count so far."""
    at_least = f"at least {whole_sites(bound)} sites (bound {bound_text(bound)})" if math.isfinite(bound) else "no bound yet"
    found = "none found yet" if best is None or not math.isfinite(best) else f"best so far {best:.0f}"
    return f"{seconds:6.1f} s  {at_least}, {found}"


def counted(number: int, noun: str) -> str:
    return f"{number:,} {noun}" if number == 1 else f"{number:,} {noun}s"


def _wrapped(text: str, most: int, first: str = "", later: str = "  ") -> list[str]:
    """At most `most` lines that begin with `first` and `later`; what does not fit is cut."""
    lines: list[str] = []
    line = ""
    words = plain(text, 10 * WIDTH).split()
    for i, word in enumerate(words):
        room = WIDTH - columns(later if lines else first)
        if line and columns(f"{line} {word}") > room:
            if len(lines) == most - 1:
                line = plain(" ".join([line, *words[i:]]), room)
                break
            lines.append((later if lines else first) + plain(line, room))
            line = word
        else:
            line = f"{line} {word}".lstrip()
    begin = later if lines else first
    return [*lines, begin + plain(line, WIDTH - columns(begin))]


def bound_text(bound: float) -> str:
    """A bound with the digits that show between which whole numbers it lies."""
    nearest = round(bound)
    return str(nearest) if abs(bound - nearest) <= BOUND_TOLERANCE else against(bound, nearest, 4)[0]


def _study(study: Study) -> str:
    return f"Study: {plain(study.title, WIDTH - 7)}"


def _missed(audit: Audit) -> list[AuditedLimit]:
    return [limit for limit in audit.limits if not limit.worst_ratio <= MEETS]


def _answer(plan: Plan) -> str:
    answer = plan.answer[0].upper() + plan.answer[1:]
    marks = "" if plan.stop_xy_mm is None else f" They read {counted(len(plan.sites), 'mark')}."
    if not plan.counts:
        return f"{answer}.{marks}"
    bound = f"lower bound {bound_text(plan.lower_bound)}" if math.isfinite(plan.lower_bound) else "no lower bound"
    ended = "" if plan.fewest_proven else "; search interrupted" if plan.interrupted else "; search ended before a proof"
    shown = "" if plan.audit.meets_limits else f" Shown: the best set found, {counted(len(plan.sites), 'site')}."
    return f"{answer} ({bound}{ended}).{shown}{marks}"


def _cannot(plan: Plan) -> str:
    missed = _missed(plan.audit)
    everything = f"all {counted(len(plan.sites), 'candidate')} measured"
    if missed:
        verb = "fails" if len(missed) == 1 else "fail"
        return f"Cannot be met: with {everything}, {len(missed)} of {counted(len(plan.audit.limits), 'limit')} {verb}."
    text = f"Cannot be met under the study's rules, although with {everything} every limit is met."
    if plan.study.rules.max_sites is not None and plan.at_least > plan.study.rules.max_sites:
        text += f" At least {counted(plan.at_least, 'site')} needed, max_sites is {plan.study.rules.max_sites}."
    return text


def _candidates(found: Candidates, most: int) -> list[str]:
    """Candidates and, shortly, why the other marks are none."""
    marks, free = len(found.reason), len(found.sites)
    if marks == free:
        return [f"Candidates: {counted(free, 'mark')}, all that are drawn."]
    reasons = [f"{count:,} {plain(reason, 60)}" for reason, count in found.counts().items()]
    if len(reasons) > MOST_REASONS:
        rest = sum(list(found.counts().values())[MOST_REASONS - 1:])
        reasons = [*reasons[:MOST_REASONS - 1], f"{rest:,} for other reasons"]
    return _wrapped(f"Candidates: {free:,} of {counted(marks, 'mark')}; not: {', '.join(reasons)}.", most)


def _table(audit: Audit, value: str, study: Study, rows: int) -> list[str]:
    """The limits with the highest ratios as aligned columns; `value` heads the predictions."""
    if not audit.limits:
        return ["The study sets no limits."]
    ranked = sorted(audit.limits, key=lambda limit: -limit.worst_ratio)
    value = f"{value}, any {audit.lost} lost" if audit.lost else value
    cells = [(f"Limits, tightest first (k = {study.coverage_factor:g})", value, "max", "unit", "of max", "")]
    for limit in ranked[:rows]:
        predicted, maximum = against(limit.worst_ratio * limit.maximum, limit.maximum)
        cells.append((f"  {plain(limit.label, _LABEL)}", predicted, maximum, plain(limit.unit, 8),
                      share(limit.worst_ratio), _verdict(limit)))
    wide = [max(columns(row[column]) for row in cells) for column in range(5)]
    lines = [f"{row[0]}{' ' * (wide[0] - columns(row[0]))}  {row[1]:>{wide[1]}}  {row[2]:>{wide[2]}} {row[3]:<{wide[3]}}"
             f"  {row[4]:>{wide[4]}}  {row[5]}".rstrip() for row in cells]
    hidden = ranked[rows:]
    if hidden:
        missed = sum(not limit.worst_ratio <= MEETS for limit in hidden)
        lines.append(f"  and {len(hidden)} more, {f'{missed} of them missed' if missed else 'all met'}")
    return lines


def _verdict(limit: AuditedLimit) -> str:
    """Whether the limit is missed, and its floor where it takes much of the limit: what every candidate together gives."""
    floor = limit.floor / limit.maximum
    if floor > MEETS:
        return "BELOW ITS FLOOR"
    said = "" if limit.worst_ratio <= MEETS else "MISSED"
    return f"{said} floor {share(floor)}".lstrip() if floor > SHOWN_FLOOR else said


def _position(audit: Audit, study: Study) -> str:
    worst = audit.worst_position
    if not math.isfinite(worst.predicted):
        return "Worst position: not determined by these sites."
    where = ""
    if worst.where_mm is not None:
        x, y = (at - origin for at, origin in zip(worst.where_mm, study.layout.origin_mm, strict=True))
        where = f" at ({x:.1f}, {y:.1f}) mm"
    return f"Worst position: k·u {significant(worst.predicted)} µm in {worst.axis or 'dx or dy'}{where}."


def _efficiency(value: float) -> str:
    if not math.isfinite(value):
        return "D-efficiency: not bounded."
    # Rounded down: "at least" must stay true.
    return f"D-efficiency at least {math.floor(1000 * value) / 1000:.3f}."


def _fewest(result: SiteAudit) -> str:
    plan = result.fewest
    if plan is None:
        return "Fewest plan: not searched."
    if plan.status == "cannot":
        return "Fewest plan: none; no set of candidates can meet the limits."
    efficiency = significant(result.d_efficiency) if math.isfinite(result.d_efficiency) else "not known"
    return f"Fewest plan: {plan.answer}; D-efficiency against it {efficiency}."


def _droppable(ids: Sequence[str]) -> str:
    if not ids:
        return "No listed site can be dropped."
    names = ", ".join(plain(name, 20) for name in ids[:MOST_IDS])
    if len(ids) == 1:
        return f"One site can be dropped: {names}."
    more = f" and {len(ids) - MOST_IDS} more" if len(ids) > MOST_IDS else ""
    return f"Any one of {len(ids)} sites can be dropped: {names}{more}."


def _advice(advice: Sequence[str], most: int) -> list[str]:
    lines = [line for item in advice[:MOST_ADVICE] for line in _wrapped(item, most, "- ")]
    return ["What would help:", *lines] if lines else []


def _warnings(warnings: Sequence[str], most: int) -> list[str]:
    lines = [line for warning in warnings[:MOST_WARNINGS] for line in _wrapped(f"Warning: {warning}", most)]
    if len(warnings) > MOST_WARNINGS:
        lines.append(f"  and {counted(len(warnings) - MOST_WARNINGS, 'more warning')}")
    return lines


def _screen(parts: Callable[[int], tuple[list[str], list[str]]], audit: Audit, value: str, study: Study) -> str:
    """Head, table, tail and caution on one screen: `parts(each)` gives head and tail with texts of at most `each` lines.

    Long texts give way first, then the table.
    """
    wanted = min(len(audit.limits), max(TIGHTEST, min(MOST_MISSED, len(_missed(audit)))))
    for each in (3, 2, 1):
        head, tail = parts(each)
        # Beside the rows: header and last line of the table and two empty lines.
        room = HEIGHT - len(head) - len(tail) - len(CAUTION) - 4
        if room >= wanted:
            break
    return "\n".join([*head, "", *_table(audit, value, study, max(1, min(wanted, room))), "", *tail, *CAUTION])

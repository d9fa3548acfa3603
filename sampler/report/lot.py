"""The plan for a lot as text."""

from __future__ import annotations

from sampler.report.characterise import HEIGHT, sentence
from sampler.tasks.lot import Choice, LotResult
from sampler.tasks.wording import against, plain


def lot_summary(result: LotResult) -> str:
    """The answer, the curve with its extremes, feed-forward beside it, and what feedback leaves of each limit."""
    lines = sentence(result.answer)
    if result.curve:
        lines.append("Lot mean within its limits by  sites a panel   panels   seconds   of max")
        lines += [_row(choice, " *" if choice is result.best else "") for choice in result.curve]
    if result.forward is not None:
        lines.append(_row(result.forward, "", "each panel by itself"))
    lines.append("Panels about the lot's mean, which feedback leaves as it is (k·u):")
    for floor in sorted(result.floors, key=lambda floor: -floor.k_u / floor.maximum)[:5]:
        k_u, maximum = against(floor.k_u, floor.maximum)
        lines.append(f"  {plain(floor.label, 34):34s} {k_u:>8s} of {maximum} {floor.unit}")
    for note in result.notes[:2]:
        lines += sentence(f"Note: {note}")[:2]
    return "\n".join(lines[:HEIGHT])


def _row(choice: Choice, mark: str, name: str = "") -> str:
    sets = name or (f"{choice.groups} site sets in turn" if choice.groups > 1 else "one plan repeated")
    return f"  {sets:29s}{choice.sites:>13d}{choice.panels:>9,d}{choice.seconds:>10,.0f}{100 * choice.ratio:>7.0f} %{mark}"

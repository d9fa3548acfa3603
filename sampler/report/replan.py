"""What re-planning prints: the answer, what the old sites would do, and each change with its reason."""

from __future__ import annotations

from sampler.report.summary import CAUTION
from sampler.tasks.replan import Replanned
from sampler.tasks.wording import plain, share

MOST_CHANGES = 12
WIDTH = 79


def replan_summary(result: Replanned) -> str:
    """The change as text of at most a screen."""
    plan, added = result.plan, result.count("added")
    if plan.status == "cannot":
        return "\n".join(["Cannot be met on the new layout.", *(f"- {plain(line, WIDTH - 2)}" for line in plan.advice), *CAUTION])
    kept, moved, dropped = (result.count(what) for what in ("kept", "moved", "dropped"))
    lines = [f"{plan.answer[:1].upper()}{plan.answer[1:]}: {kept} kept, {moved} moved, {dropped} dropped, {added} added."]
    among = "of any plan" if result.fewest_new else "of any plan of as many sites"
    lines.append(f"{added} new sites are the fewest {among}, proven." if result.new_proven and added else
                 "Nothing new has to be taught." if not added else
                 f"At least {result.new_at_least} new sites {among}; fewer than {added} not excluded.")
    if result.before is None:
        lines.append("No old site is left on the new layout.")
    else:
        worst = result.before.worst
        lines.append(f"The {len(result.before.sites)} old sites left would "
                     + ("meet every limit." if result.before.meets_limits else
                        f"miss {worst.label}: {share(worst.ratio)} of its max."))
    lines.append(f"Matched by id, then by place within {result.tolerance_mm:g} mm.")
    shown = [change for change in result.changes if change.what != "kept"]
    if shown:
        lines.append("")
        lines += [plain(f"  {change.what:8}{change.id}{': ' if change.reason else ''}{change.reason}", WIDTH)
                  for change in shown[:MOST_CHANGES]]
        if len(shown) > MOST_CHANGES:
            lines.append(f"  and {len(shown) - MOST_CHANGES} more, in change.csv")
    return "\n".join([*lines, "", *CAUTION])

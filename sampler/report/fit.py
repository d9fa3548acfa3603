"""Fitted panels as text: limits, verdicts, what to look at."""

from __future__ import annotations

import numpy as np

from sampler.report.characterise import HEIGHT, counted, sentence
from sampler.tasks.fit import FitResult
from sampler.tasks.wording import against, plain, significant

MOST_TERMS = 8
MOST_LIMITS = 4


def fit_summary(result: FitResult) -> str:
    """The answer first, then one line a term for a single panel, or the charts of many."""
    missed = ~result.meets_limits
    lines = sentence(f"{counted(len(result.panel), 'panel')} fitted: " +
                     ("every limit met" if not missed.any() else
                      f"{counted(int(missed.sum()), 'panel')} missed a limit: " +
                      ", ".join(plain(result.panel[i], 16) for i in np.flatnonzero(missed)[:4]))
                     + ("" if result.holds else ", but what the plan assumes no longer holds"))
    for verdict in result.verdicts:
        lines += sentence(("" if verdict.holds else "No longer: ") + verdict.text)[:2]
    order = np.argsort(-(result.predicted / result.limit_maximum).max(axis=0), kind="stable")[:MOST_LIMITS]
    for j in order:
        worst = int(result.predicted[:, j].argmax())
        k_u, maximum = against(float(result.predicted[worst, j]), float(result.limit_maximum[j]))
        lines += sentence(f"{result.limit_label[j]}: k·u {k_u} of {maximum} {result.limit_unit[j]}"
                          + (f" on the worst panel, {plain(result.panel[worst], 16)}" if len(result.panel) > 1 else ""))
    names, units = result.study.model.names, result.study.model.units
    single = len(result.panel) == 1
    lines.append("Corrections (the negated terms) and k·u:" if single else
                 "Mean correction (the negated terms), spread, outside 3 sigma:")
    for j in range(min(len(names), MOST_TERMS)):
        value = float(result.corrections[:, j].mean())
        outside = int(result.charts[names[j]].outside.sum())
        beside = (f"± {significant(float(result.k_u[0, j]))}" if single else
                  f"sd {significant(float(result.theta[:, j].std(ddof=1)))}, {outside} outside")
        lines.append(f"  {plain(names[j], 30):30s} {significant(value):>9s} {units[j]:5s} {beside}")
    if len(names) > MOST_TERMS:
        lines.append(f"  and {len(names) - MOST_TERMS} more in corrections.csv")
    if result.outliers:
        lines += sentence(f"{counted(len(result.outliers), 'reading')} taken out as not belonging")
    for name, why in result.skipped[:2]:
        lines += sentence(f"skipped {plain(name, 20)}: {why}")[:2]
    for warning in result.warnings[:2]:
        lines += sentence(f"Warning: {warning}")[:2]
    return "\n".join(lines[:HEIGHT])

"""The text on stdout: right in the awkward cases, and always one screen."""

from __future__ import annotations

from dataclasses import replace

import invented_plans as invented
import numpy as np
import pytest

from sampler.errors import CertificateError, InputError
from sampler.report.summary import CAUTION, audit_summary, faults_text, plan_summary, progress_line
from sampler.tasks.results import AuditedLimit
from sampler.tasks.study import Rules
from sampler.tasks.wording import columns


def screen(text):
    """The lines of a summary, after the checks that hold for all of them."""
    lines = text.splitlines()
    assert len(lines) <= 24
    assert max(columns(line) for line in lines) <= 80
    assert text.count(CAUTION[0]) == 1
    assert tuple(lines[-2:]) == CAUTION
    assert "optimal" not in text
    assert " inf" not in text
    assert "nan" not in text
    assert not any(line != line.rstrip() for line in lines)
    return lines


def rows(lines):
    """The rows of the table of limits."""
    start = next(i for i, line in enumerate(lines) if line.startswith("Limits, tightest first")) + 1
    return lines[start:lines.index("", start)]


@pytest.fixture(scope="module")
def plan():
    return invented.first_plan()


def test_proven_plan(plan):
    lines = screen(plan_summary(plan))
    assert lines[0] == "24 sites, fewest proven (lower bound 23.60)."
    assert lines[1] == "Study: First plan: invented organic core"
    assert lines[2] == "Candidates: 324 marks, all that are drawn."
    assert lines[4].split() == ["Limits,", "tightest", "first", "(k", "=", "3)", "k·u", "max", "unit", "of", "max"]
    assert lines[5].split() == ["dx_xy", "0.377", "0.45", "µm", "84", "%"]
    assert lines[10] == "  and 3 more, all met"
    assert "D-efficiency at least 0.987." in lines
    assert "Seconds: 1.9." in lines
    assert any(line.startswith("Worst position: k·u 0.758 µm in dy at (") for line in lines)


def test_plain_names_give_latin_1(plan):
    """Terminals with an old code page show it too."""
    plan_summary(plan).encode("latin-1")
    plan_summary(invented.impossible_plan()).encode("latin-1")


def test_columns_are_aligned(plan):
    table = rows(screen(plan_summary(plan)))[:5]
    ends = {row.index("%") for row in table}
    assert len(ends) == 1
    assert len({row.index(unit) for row, unit in zip(table, ("µm", "µm", "µm", "µm", "µrad"), strict=True)}) == 1


@pytest.mark.parametrize(("changes", "first"), [
    ({"status": "interval", "lower_bound": 14.8}, "Between 15 and 24 sites; best found 24 (lower bound 14.80; search ended"),
    ({"status": "interval", "lower_bound": 22.2, "interrupted": True},
     "Between 23 and 24 sites; best found 24 (lower bound 22.20; search interrupted)."),
    # A bound that reaches the count only by rounding is not called proven unless the search says so.
    ({"status": "interval", "lower_bound": 23.5}, "24 sites, fewest not proven (lower bound 23.50; search ended before a"),
    ({"status": "interval", "lower_bound": 23.0000001}, "Between 23 and 24 sites; best found 24 (lower bound 23; search"),
    ({"lower_bound": 23.0004}, "24 sites, fewest proven (lower bound 23.0004)."),
    ({"status": "interval", "lower_bound": -np.inf}, "Between 0 and 24 sites; best found 24 (no lower bound; search ended"),
])
def test_count_and_proof(plan, changes, first):
    assert screen(plan_summary(replace(plan, **changes)))[0].startswith(first)


def test_no_set_found(plan):
    limits = (replace(plan.audit.limits[0], predicted=np.inf), *plan.audit.limits[1:])
    lines = screen(plan_summary(replace(plan, audit=replace(plan.audit, limits=limits), status="interval", lower_bound=20.1)))
    assert lines[0].startswith("At least 21 needed; no set found that meets every limit (lower bound 20.10;")
    assert " ".join(lines[:2]).endswith("proof). Shown: the best set found, 24 sites.")
    assert rows(lines)[0].split() == ["translation_x", "not", "determined", "0.35", "µm", "-", "MISSED"]


def test_one_site():
    study = invented.study_of(invented.core_layout(4), ("translation",))
    lines = screen(plan_summary(invented.plan_of(study, 1, {"translation_x": 2.0})))
    assert lines[0] == "1 site, fewest proven (lower bound 0.6000)."


def test_no_limits():
    study = invented.study_of(invented.core_layout(4))
    lines = screen(plan_summary(invented.plan_of(study, 6, {}, d_efficiency_at_least=np.nan)))
    assert "The study sets no limits." in lines
    assert "D-efficiency: not bounded." in lines


def test_position_not_determined(plan):
    audit = replace(plan.audit, worst_position=replace(plan.audit.worst_position, predicted=np.inf))
    assert "Worst position: not determined by these sites." in screen(plan_summary(replace(plan, audit=audit)))


def test_d_efficiency_is_rounded_down(plan):
    assert "D-efficiency at least 0.999." in screen(plan_summary(replace(plan, d_efficiency_at_least=0.99996)))


def test_near_misses_show_their_side(plan):
    limits = (AuditedLimit("just over", 1.0, 1.0004, "ppm"), AuditedLimit("just under", 2.0, 1.99992, "ppm"),
              AuditedLimit("exact", 0.5, 0.5, "ppm"))
    lines = rows(screen(plan_summary(replace(plan, audit=replace(plan.audit, limits=limits), status="interval"))))
    assert lines[0].split() == ["just", "over", "1.0004", "1", "ppm", "101", "%", "MISSED"]
    assert lines[1].split() == ["exact", "0.500", "0.5", "ppm", "100", "%"]
    assert lines[2].split() == ["just", "under", "1.9999", "2", "ppm", "99", "%"]


def test_positions_are_written_in_the_layouts_frame():
    plan = invented.notched_plan()
    x, y = np.array(plan.audit.worst_position.where_mm) - np.array(plan.study.layout.origin_mm)
    text = plan_summary(plan)
    assert f"at ({x:.1f}, {y:.1f}) mm" in text
    lines = screen(text)
    assert lines[2].startswith("Candidates: 2,744 of 3,000 marks; not: 120 inside the edge exclusion of 6 mm, 69")
    assert lines[3] == "  outside the outline, 67 for other reasons."


def test_cannot_be_met():
    lines = screen(plan_summary(invented.impossible_plan()))
    assert lines[0] == "Cannot be met: with all 324 candidates measured, 3 of 5 limits fail."
    assert "best k·u" in lines[4]
    assert lines[5].split() == ["scale_x", "0.532", "0.3", "ppm", "177", "%", "MISSED"]
    start = lines.index("What would help:")
    assert lines[start + 1] == "- loosen the limit on scale_x from 0.3 to 0.573 ppm"
    assert not any("D-efficiency" in line or "fewest" in line for line in lines)


def test_cannot_be_met_for_one_limit_and_for_the_rules(plan):
    impossible = invented.impossible_plan()
    one = replace(impossible, audit=replace(impossible.audit, limits=impossible.audit.limits[:2]), advice=())
    lines = screen(plan_summary(one))
    assert lines[0].endswith("1 of 2 limits fails.")
    assert "What would help:" not in lines
    ruled = replace(plan, status="cannot", lower_bound=23.1, study=replace(plan.study, rules=Rules(max_sites=12)))
    text = " ".join(screen(plan_summary(ruled))[:3])
    assert "Cannot be met under the study's rules" in text
    assert "At least 24 sites needed, max_sites is 12." in " ".join(text.split())


def test_everything_long_still_fits():
    impossible = invented.impossible_plan()
    long = "a very long sentence about marks and limits " * 9
    limits = tuple(AuditedLimit(f"exposure[c{i}r{i}].{'orthogonality' * 6}", 1e-4, 123456.7 * (i + 1), "µrad") for i in range(40))
    plan = replace(impossible, advice=(long,) * 9, warnings=(long,) * 5, study=replace(impossible.study, title=long),
                   audit=replace(impossible.audit, limits=limits))
    lines = screen(plan_summary(plan))
    assert lines[0].startswith("Cannot be met")
    assert any(line.startswith("  and 3") and line.endswith("of them missed") for line in lines)
    assert "  and 3 more warnings" in lines
    assert sum(line.startswith("Warning:") for line in lines) == 2
    assert sum(line.startswith("- ") for line in lines) == 4


def test_wide_letters_and_escapes_are_tamed(plan):
    title = "パネル計測計画" * 10 + "\x1b[2J\nsecond line"
    text = plan_summary(replace(plan, study=replace(plan.study, title=title), warnings=("警告の内容" * 40,)))
    assert "\x1b" not in text
    assert columns("パネルa") == 7
    assert any(line.startswith("Study: パネル") and line.endswith("...") for line in screen(text))


def test_audit_that_meets_every_limit():
    lines = screen(audit_summary(invented.listed_audit(2.0)))
    assert lines[0] == "28 listed sites: every limit met."
    assert "Fewest plan: 24 sites, fewest proven; D-efficiency against it 0.871." in lines
    assert "Any one of 2 sites can be dropped: E-12, E-107." in lines


def test_audit_that_misses():
    result = invented.listed_audit(0.8, best_to_add=("E-1", 1.2))
    lines = screen(audit_summary(result))
    assert lines[0] == "28 listed sites: 5 of 8 limits missed."
    assert "Best site to add: E-1; the worst limit is then at 120 % of its max." in lines
    assert not any("drop" in line for line in lines)
    met = replace(result, best_to_add=("E-1", 0.99))
    assert "Best site to add: E-1; every limit is then met." in screen(audit_summary(met))
    assert not any("add" in line for line in screen(audit_summary(replace(result, best_to_add=None))))


@pytest.mark.parametrize(("ids", "line"), [
    ((), "No listed site can be dropped."),
    (("A",), "One site can be dropped: A."),
    (tuple("ABCDEFGHI"), "Any one of 9 sites can be dropped: A, B, C, D, E, F and 3 more."),
])
def test_droppable(ids, line):
    assert line in screen(audit_summary(invented.listed_audit(2.0, droppable=ids)))


def test_audit_without_a_fewest_plan():
    result = invented.listed_audit(2.0, fewest=None, d_efficiency=np.nan)
    assert "Fewest plan: not searched." in screen(audit_summary(result))
    none = replace(result, fewest=invented.impossible_plan())
    assert "Fewest plan: none; no set of candidates can meet the limits." in screen(audit_summary(none))
    unknown = replace(result, fewest=invented.first_plan())
    assert "Fewest plan: 24 sites, fewest proven; D-efficiency against it not known." in screen(audit_summary(unknown))
    free = replace(result, audit=replace(result.audit, limits=()))
    assert screen(audit_summary(free))[0] == "28 listed sites: the study sets no limits."


def test_faults():
    one = faults_text(InputError("a.toml: key \"widht_mm\" is not known; did you mean \"width_mm\"?"))
    assert one == 'Nothing was written: a.toml: key "widht_mm" is not known; did you mean "width_mm"?'
    many = faults_text(InputError(["a.toml: one", "b.csv line 3: two"])).splitlines()
    assert many == ["Nothing was written; 2 faults in the input:", "  - a.toml: one", "  - b.csv line 3: two"]
    assert faults_text(CertificateError("row 4")) == "Nothing was written: row 4"


@pytest.mark.parametrize(("bound", "best", "line"), [
    (23.0865, 24.0, "   1.9 s  at least 24 sites (bound 23.09), best so far 24"),
    (22.99999999, None, "   1.9 s  at least 23 sites (bound 23), none found yet"),
    (-np.inf, np.inf, "   1.9 s  no bound yet, none found yet"),
])
def test_progress(bound, best, line):
    assert progress_line(bound, best, 1.94) == line

"""The budget as text: fits a terminal, answer first, nothing undetermined printed as a number."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from sampler.report.budget import MOST_ROWS, budget_summary
from sampler.tasks.budget import Budget, Channel, Contributor, budget
from sampler.tasks.wording import columns

INVENTED = Budget("invented", 30.0, 70.0, 5.0, (Contributor("exposure tool", 0.5, 0.8), Contributor("drill", 0.0, 2.0),
                                                Contributor("drift", -1.5)), channel=Channel(130.0, 8.0, 8.0))
LONG = replace(INVENTED, name="a very long name " * 9, warnings=("w " * 300,), channel=None,
               contributors=tuple(Contributor(f"測定器 number {i} with a name that has no end at all", i, i) for i in range(30)))


@pytest.mark.parametrize("asked", [INVENTED, replace(INVENTED, pad_um=50.0), replace(INVENTED, pad_um=38.0), LONG,
                                   replace(INVENTED, contributors=()), replace(INVENTED, channel=Channel(75, 8, 8))])
@pytest.mark.parametrize("k_u", [None, 2.0, 40.0, math.inf])
def test_fits_a_terminal(asked, k_u):
    lines = budget_summary(budget(asked, k_u)).splitlines()
    assert max(columns(line) for line in lines) <= 80
    assert not any(line != line.rstrip() for line in lines)
    text = "\n".join(lines)
    assert "nan" not in text
    assert " inf" not in text


def test_answer_first_largest_first_and_what_to_enter():
    lines = budget_summary(budget(INVENTED, 2.0)).splitlines()
    assert lines[0].startswith("invented: left for sampling: k·u of up to 11.")
    assert lines[1] == "Overlay tolerance (70 - 30)/2 - 5 = 15 µm per axis."
    names = [line.split("  ")[1] for line in lines if line.startswith("  ") and "%" in line]
    assert names == ["drill", "drift", "exposure tool"]
    assert lines[-1].startswith("  position_um = 11.")
    assert any("Room for 4 lines takes a pad of at most 58 µm, and a sampling k·u of at" in line for line in lines)


def test_spent_budget_gives_nothing_to_enter():
    text = budget_summary(budget(replace(INVENTED, pad_um=50.0)))
    assert "position_um" not in text
    assert "spent without any sampling" in text
    assert "other contributors to shrink" in text.replace("\n  ", " ")


def test_many_contributors_are_cut():
    text = budget_summary(budget(LONG))
    assert f"and {30 - MOST_ROWS} smaller" in text
    assert text.count("µm (k = 3)") == 1


def test_no_pad_for_another_line():
    narrow = replace(INVENTED, channel=Channel(75, 25, 25))
    assert "No pad leaves room for 1 line at this pitch." in budget_summary(budget(narrow))

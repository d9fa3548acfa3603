"""The bar figure of the budget: repeatable, complete, and it shows what is over."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import pytest

from sampler.figures import style
from sampler.figures.budget import budget_figure
from sampler.tasks.budget import Budget, Contributor, budget

INVENTED = Budget("invented <b>", 30.0, 70.0, 5.0, (Contributor("exposure tool", 0.5, 0.8), Contributor("drill", 0.0, 2.0),
                                                    Contributor("drift", -1.5)))


def svg(result):
    return budget_figure(result)["budget.svg"].decode()


def texts(drawing):
    return re.findall(r"<text[^>]*>([^<]*)</text>", drawing)


def test_same_bytes_twice_and_both_kinds():
    result = budget(INVENTED, 2.0)
    pictures = budget_figure(result)
    assert set(pictures) == {"budget.png", "budget.svg"}
    assert pictures == budget_figure(result)
    assert pictures["budget.png"].startswith(b"\x89PNG")


def test_names_values_and_escaping():
    found = texts(svg(budget(INVENTED, 2.0)))
    for text in ("invented &lt;b&gt;", "drill", "drift", "exposure tool", "together", "limit for sampling",
                 "the plan's sampling", "together with the plan", "tolerance 15 µm"):
        assert text in found, found
    assert any(text.startswith("6.00 µm, ") for text in found)


def test_over_the_tolerance_is_coloured_only_when_it_is():
    def over(asked):
        """How often the hatch in the colour of alarm is drawn."""
        drawing = svg(budget(asked))
        pattern = next(part for part in re.findall(r'<pattern id="(.*?)</pattern>', drawing, re.S) if style.ALARM in part)
        return drawing.count(f"url(#{pattern.split(chr(34))[0]})")

    assert over(INVENTED) == 1  # the legend's
    assert over(replace(INVENTED, pad_um=50.0)) == 3  # the drill's and the sum's
    assert "limit for sampling" not in texts(svg(budget(replace(INVENTED, pad_um=50.0))))


@pytest.mark.parametrize("asked", [replace(INVENTED, contributors=()), replace(INVENTED, pad_um=36.0),
                                   replace(INVENTED, contributors=tuple(Contributor(f"c{i}", 0, i) for i in range(40)))])
@pytest.mark.parametrize("k_u", [None, math.inf])
def test_awkward_budgets_draw(asked, k_u):
    found = texts(svg(budget(asked, k_u)))
    assert any(text.startswith("together") for text in found)
    assert not any("nan" in text or "inf " in text for text in found)

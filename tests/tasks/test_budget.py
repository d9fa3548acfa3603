"""The overlay budget: facts of the trade, laws, and the two directions undoing each other."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sampler.tasks.budget import Budget, Channel, Contributor, budget, rounded

INVENTED = Budget("invented", 30.0, 70.0, 5.0, (Contributor("exposure tool", 0.5, 0.8), Contributor("drill", 0.0, 2.0),
                                                Contributor("reading", 0.0, 0.25), Contributor("drift", -1.5)),
                  channel=Channel(130.0, 8.0, 8.0))

lengths = st.floats(0.0, 50.0)
contributors = st.lists(st.builds(Contributor, st.sampled_from("abcdef"), st.floats(-5, 5), st.floats(0, 5)), max_size=5)
budgets = st.builds(lambda via, extra, ring, parts, k: Budget("any", via, via + extra, ring, tuple(parts), k),
                    st.floats(1, 100), st.floats(0.1, 100), st.floats(0, 10), contributors, st.sampled_from([1.0, 2.0, 3.0]))


@pytest.mark.parametrize(("via", "pad", "tolerance"), [(30, 70, 20.0), (9, 12, 1.5)])
def test_tolerance_of_a_via_on_its_pad(via, pad, tolerance):
    """Common practice, no source."""
    assert Budget("", via, pad, 0.0, ()).tolerance_um == tolerance
    assert budget(Budget("", via, pad, 0.0, ())).position_limit_um == pytest.approx(tolerance, rel=1e-15)


def test_means_add_and_sigmas_go_in_quadrature():
    # By hand: means 0.5 + 1.5; sigmas 0.8, 2, 0.25: variance 0.64 + 4 + 0.0625.
    assert INVENTED.tolerance_um == 15.0
    assert INVENTED.spent_um() == pytest.approx(2.0 + 3 * math.sqrt(4.7025), rel=1e-14)
    result = budget(INVENTED)
    assert result.position_limit_um == pytest.approx(math.sqrt(13.0 ** 2 - 9 * 4.7025), rel=1e-14)
    assert result.position_to_enter_um == 11.2
    assert [eater.name for eater in result.by_size] == ["drill", "drift", "exposure tool", "reading"]
    assert [eater.variance_share for eater in result.eaters] == pytest.approx(np.array([0.64, 4, 0.0625, 0]) / 4.7025)
    assert [eater.mean_share for eater in result.eaters] == pytest.approx([0.25, 0, 0, 0.75])
    assert [eater.quoted_um for eater in result.eaters] == pytest.approx([2.9, 6.0, 0.75, 1.5])


def test_simulated_overlay_stays_within_the_quoted_budget(rng):
    """At k = 2 a normal overlay error about a mean at its bound leaves the tolerance in 2.28 % of cases on that side."""
    asked = replace(INVENTED, coverage_factor=2.0, contributors=(
        Contributor("a", 1.0, 2.0), Contributor("b", 0.5, 1.0)))
    limit = budget(asked).position_limit_um
    n = 200_000
    error = sum(item.mean_um + item.sigma_um * rng.standard_normal(n) for item in asked.contributors)
    error = error + limit / 2.0 * rng.standard_normal(n)
    beyond = np.mean(error > asked.tolerance_um)
    assert beyond == pytest.approx(0.02275, abs=4 * math.sqrt(0.02275 / n))


@given(budgets)
def test_the_limit_just_fits_and_undoes_the_pad(asked):
    result = budget(asked)
    if result.spent:
        # Up to rounding: where nothing is left, nothing fits.
        assert asked.spent_um() >= asked.tolerance_um * (1 - 1e-12)
        return
    u = result.position_limit_um / asked.coverage_factor
    assert asked.spent_um(u) == pytest.approx(asked.tolerance_um, rel=1e-9, abs=1e-9)
    assert asked.smallest_pad_um(u) == pytest.approx(asked.pad_um, rel=1e-9)
    assert budget(asked, result.position_limit_um).fits
    assert budget(asked, result.position_to_enter_um).fits
    assert not budget(asked, result.position_limit_um + 0.5).fits
    assert result.position_to_enter_um <= result.position_limit_um * (1 + 1e-9)


@given(budgets, st.floats(0, 20))
def test_blame_names_the_largest_and_shrinking_it_just_fits(asked, k_u):
    result = budget(asked, k_u)
    u = k_u / asked.coverage_factor
    blame = result.supported.blame
    assert result.fits == (asked.spent_um(u) <= asked.tolerance_um + 1e-6)
    assert (blame is None) == (result.fits or not asked.contributors)
    if blame is None:
        return

    def scaled(index, factor):
        parts = list(asked.contributors)
        parts[index] = replace(parts[index], mean_um=factor * parts[index].mean_um, sigma_um=factor * parts[index].sigma_um)
        return replace(asked, contributors=tuple(parts)).spent_um(u)

    without = [scaled(i, 0.0) for i in range(len(asked.contributors))]
    at = int(np.argmin(without))
    assert blame.name == asked.contributors[at].name
    if math.isnan(blame.factor):
        assert blame.over_um == pytest.approx(without[at] - asked.tolerance_um, abs=1e-9)
        assert blame.over_um >= 0
    else:
        assert 0 <= blame.factor < 1
        assert scaled(at, blame.factor) == pytest.approx(asked.tolerance_um, rel=1e-7, abs=1e-7)


@given(budgets, lengths, lengths)
def test_more_sampling_uncertainty_never_takes_a_smaller_pad(asked, one, other):
    low, high = sorted((one, other))
    pads = asked.smallest_pad_um(np.array([low, high]))
    assert pads[0] <= pads[1]
    assert pads[0] == asked.smallest_pad_um(low)


@given(budgets)
def test_units_and_order_change_nothing(asked):
    thousand = Budget("", asked.via_um * 1000, asked.pad_um * 1000, asked.ring_um * 1000,
                      tuple(Contributor(c.name, 1000 * c.mean_um, 1000 * c.sigma_um) for c in asked.contributors[::-1]),
                      asked.coverage_factor)
    one, other = asked.position_limit_um(), thousand.position_limit_um()
    room = asked.tolerance_um - asked.mean_um
    if abs(room - asked.coverage_factor * asked.sigma_um) > 1e-6 * max(1.0, room):
        assert other / 1000 == pytest.approx(one, rel=1e-5, nan_ok=True)


def test_a_plan_with_another_coverage_factor_is_restated():
    assert budget(INVENTED, 2.0, 2.0).supported.k_u_um == pytest.approx(3.0)
    assert budget(INVENTED, 2.0, 2.0).supported.smallest_pad_um == budget(INVENTED, 3.0).supported.smallest_pad_um


@pytest.mark.parametrize(("pitch", "pad", "line", "space", "lines"), [
    (130, 70, 8, 8, 3),          # (130 − 70 − 8)/16 = 3.25
    (100, 70, 10, 10, 1),        # exactly (100 − 70 − 10)/20 = 1
    (0.3, 0.1, 0.05, 0.05, 1),   # in binary a hair below (0.3 − 0.1 − 0.05)/0.1 = 1.5
    (0.4, 0.1, 0.1, 0.1, 1),     # exactly 1 in decimals, 1.0000000000000002 in binary
    (0.8, 0.1, 0.1, 0.1, 3),     # exactly 3 in decimals, 3.0000000000000004 or 2.9999999999999996
    (1.1, 0.2, 0.1, 0.2, 2),     # (1.1 − 0.2 − 0.2)/0.3 = 2.33
    (100, 70.00001, 10, 10, 0),  # short of one line by more than rounding
    (100, 70.0000001, 10, 10, 1),
    (90, 85, 10, 10, 0),
    (90, 95, 10, 10, 0),
])
def test_lines_between_pads(pitch, pad, line, space, lines):
    channel = Channel(pitch, line, space)
    assert channel.lines(pad) == lines
    assert channel.lines(np.array([pad, pad])).tolist() == [lines] * 2
    if lines:
        assert channel.largest_pad_um(lines) >= pad - 1e-6


@given(st.floats(1, 200), st.floats(0.5, 20), st.floats(0.5, 20), st.integers(1, 9))
def test_the_largest_pad_for_n_lines_has_exactly_n(pad, line, space, count):
    channel = Channel(pad + space + count * (line + space), line, space)
    assert channel.largest_pad_um(count) == pytest.approx(pad, abs=1e-9)
    assert channel.lines(pad) == count
    assert channel.lines(pad + 0.01) == count - 1


def test_one_line_more():
    result = budget(INVENTED, 2.0)
    assert result.lines == 3
    assert (result.next_line.lines, result.next_line.pad_um) == (4, 58.0)
    # That limit on that pad just fits.
    assert INVENTED.smallest_pad_um(result.next_line.position_limit_um / 3) == pytest.approx(58.0)
    assert result.supported.lines == 4
    assert math.isnan(budget(replace(INVENTED, pad_um=50.0)).next_line.position_limit_um)


def test_answers_in_words():
    assert budget(INVENTED).answer == "left for sampling: k·u of up to 11.2 µm (k = 3)"
    assert budget(INVENTED).plan_answer == ""
    assert budget(INVENTED, 2.0).plan_answer == (
        "the plan's k·u of 2.00 µm fits; it supports a pad of 57.62 µm and larger, room for 4 lines")
    assert "does not fit, 11.2 µm is left; it supports a pad of 73.08" in budget(INVENTED, 13.0).plan_answer
    assert budget(INVENTED, math.inf).plan_answer.startswith("the plan does not determine the position")
    assert not budget(INVENTED, math.inf).fits
    assert budget(INVENTED, math.inf).supported.lines == 0
    spent = budget(replace(INVENTED, pad_um=50.0), 2.0)
    assert spent.answer == ("spent without any sampling: 8.51 of 5 µm; the largest is drill, which would have to shrink to "
                            "less than 27 % of itself")
    assert "does not fit; it supports" in spent.plan_answer
    assert "even without the largest, drill, 4.01 µm too much" in budget(replace(INVENTED, pad_um=41.0)).answer
    assert budget(replace(INVENTED, pad_um=38.0)).answer == (
        "nothing to spend: pad, via and ring leave a tolerance of -1.00 µm")
    none = budget(Budget("", 30, 40, 5, ()))
    assert none.spent
    assert none.blame is None
    assert none.answer.startswith("nothing to spend")


@pytest.mark.parametrize(("value", "digits", "up", "expected"), [
    (57.0111, 4, True, 57.02), (57.0199, 4, False, 57.01), (0.3, 3, False, 0.3), (0.1 + 0.2, 3, True, 0.3),
    (9.9999, 3, True, 10.0), (12345.6, 3, False, 12300.0), (0.0, 3, True, 0.0), (math.inf, 3, True, math.inf)])
def test_rounded(value, digits, up, expected):
    assert rounded(value, digits, up=up) == expected

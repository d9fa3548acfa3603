"""Which marks are candidates: edges, exclusions, keep-outs."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from invented_plans import NOTCHED, core_layout, notched_layout

from sampler.panel.candidates import candidates
from sampler.panel.layout import KeepOut, Sites
from sampler.panel.outline import counter_clockwise, polygon_fault

RECTANGLE = KeepOut("clamp left", np.array([[-255.0, -40.0], [-240.0, -40.0], [-240.0, 40.0], [-255.0, 40.0]]))
HOLE = KeepOut("port", None, (100.0, 50.0, 20.0))
DIAMOND = KeepOut("tilted", np.array([[0.0, -30.0], [30.0, 0.0], [0.0, 30.0], [-30.0, 0.0]]))


def reasons(xy, **changes):
    xy = np.array(xy, float).reshape(-1, 2)
    layout = core_layout(marks=Sites.at(np.array([f"M{i}" for i in range(len(xy))]), xy), **changes)
    return candidates(layout).reason.tolist()


@pytest.mark.parametrize(("at", "reason"), [
    ((0, 0), ""),
    ((247.0, 249.5), ""),  # on the inner edge of the exclusion
    ((247.001, 0), "inside the edge exclusion of 8 mm"),
    ((255.0, 257.5), "inside the edge exclusion of 8 mm"),  # on the outline
    ((255.001, 0), "outside the outline"),
    ((0, -300), "outside the outline"),
])
def test_outline_and_exclusion(at, reason):
    assert reasons([at]) == [reason]


@pytest.mark.parametrize(("keep_out", "at", "inside"), [
    (RECTANGLE, (-246, 0), True), (RECTANGLE, (-240, 0), False), (RECTANGLE, (-240.00001, 0), True),
    (RECTANGLE, (-239.99, 0), False),
    (HOLE, (100, 50), True), (HOLE, (120, 50), False), (HOLE, (119.99999, 50), True),
    (HOLE, (100 + 20 * np.cos(0.3), 50 + 20 * np.sin(0.3)), False),  # exact circle: no polygon's chord
    (HOLE, (100 + 19.9999 * np.cos(0.3), 50 + 19.9999 * np.sin(0.3)), True),
    (DIAMOND, (15, 15), False), (DIAMOND, (14.999, 14.999), True), (DIAMOND, (29, 29), False),
])
def test_keep_outs(keep_out, at, inside):
    assert reasons([at], keep_outs=(keep_out,)) == ([f'inside keep-out "{keep_out.name}"'] if inside else [""])


def test_the_first_reason_counts():
    both = (DIAMOND, KeepOut("other", np.array([[-9.0, -9.0], [9.0, -9.0], [9.0, 9.0], [-9.0, 9.0]])))
    assert reasons([(0, 0)], keep_outs=both) == ['inside keep-out "tilted"']
    assert reasons([(-250, 0)], keep_outs=(RECTANGLE,)) == ["inside the edge exclusion of 8 mm"]


def test_without_exclusion_the_outline_is_a_candidate_place():
    assert reasons([(255, 257.5), (255.1, 0)], edge_exclusion_mm=0.0) == ["", "outside the outline"]


def test_notch():
    """The exclusion runs around the notch, with square corners."""
    at = [(0, 280), (0, 265), (0, 263.9), (65, 290), (67, 290), (65, 265)]
    near = "inside the edge exclusion of 6 mm"
    got = reasons(at, outline_mm=NOTCHED, width_mm=457.0, height_mm=610.0, edge_exclusion_mm=6.0)
    assert got == ["outside the outline", near, "", near, "", near]


def test_no_marks_and_counts():
    assert reasons([]) == []
    found = candidates(notched_layout(3000))
    assert sum(found.counts().values()) + len(found.sites) == 3000
    assert list(found.counts().values()) == sorted(found.counts().values(), reverse=True)
    assert set(found.sites.id) == set(notched_layout(3000).marks.id[found.reason == ""])


@given(st.integers(0, 2**32 - 1))
def test_agrees_with_distances(seed):
    """A rectangle's exclusion and keep-out by plain inequalities."""
    xy = np.random.default_rng(seed).uniform(-270, 270, (200, 2))
    got = np.array(reasons(xy, keep_outs=(RECTANGLE, HOLE)))
    out = (np.abs(xy) > [255, 257.5]).any(1)
    usable = (np.abs(xy) <= [247, 249.5]).all(1)
    port = np.hypot(*(xy - [100, 50]).T) < 20
    clamp = (np.abs(xy - [-247.5, 0]) < [7.5, 40]).all(1)
    assert ((got == "outside the outline") == out).all()
    assert ((got == "") == (usable & ~port & ~clamp)).all()


def test_a_hundred_thousand_marks_in_any_order(rng):
    layout = notched_layout(100_000)
    order = rng.permutation(100_000)
    found, shuffled = candidates(layout), candidates(replace(layout, marks=layout.marks.take(order)))
    assert (found.reason[order] == shuffled.reason).all()
    assert 85_000 < len(found.sites) < 98_000


@pytest.mark.parametrize(("corners", "says"), [
    ([[0, 0], [1, 1], [1, 0], [0, 1]], "crosses or touches itself near (0.5, 0.5)"),
    ([[0, 0], [1, 1]], "fewer than three"), ([[0, 0], [1, 1], [0, 0]], "fewer than three"),
    ([[0, 0], [1, 1], [2, 2]], "self"),
    ([[0, 0], [1, 0], [0, 1]], None), ([[0, 0], [1, 0], [0, 1], [0, 0]], None),
])
def test_polygon_fault(corners, says):
    fault = polygon_fault(np.array(corners, float))
    assert fault is None if says is None else says in fault or "no area" in fault


def test_counter_clockwise():
    square = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]])
    for given_one in (square, square[[0, 3, 2, 1]], square[[0, 3, 2, 1, 0]], square[[0, 1, 2, 3, 0]]):
        assert np.array_equal(counter_clockwise(given_one), square)

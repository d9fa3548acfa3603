"""Stops: every largest group of marks that one field covers, once."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from known_tours import lattice

from sampler.errors import InputError
from sampler.route.stops import candidate_stops


def brute_force(xy, field, side):
    """Subsets whose bounding box fits the field and that no further mark can join."""
    n = len(xy)
    fits = [set(rows) for count in range(1, n + 1) for rows in combinations(range(n), count)
            if (np.ptp(xy[list(rows)], axis=0) <= np.array(field) + 1e-9).all() and len({side[row] for row in rows}) == 1]
    return sorted(sorted(one) for one in fits if not any(one < other for other in fits))


def groups(stops):
    return sorted(stops.marks(k).tolist() for k in range(len(stops)))


@settings(max_examples=150, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 6), st.integers(0, 6), st.booleans()), max_size=8), st.integers(1, 4),
       st.integers(1, 4), st.sampled_from([1.0, 0.1, 0.37]))
def test_brute_force_with_ties(marks, width, height, pitch):
    """On a coarse raster, so that marks coincide, align and lie exactly one field apart."""
    xy = np.array([mark[:2] for mark in marks], float).reshape(-1, 2) * pitch
    side = np.array(["back" if mark[2] else "front" for mark in marks], "U5")
    field = (width * pitch, height * pitch)
    stops = candidate_stops(xy, field, side)
    assert groups(stops) == brute_force(xy, field, side)
    for k in range(len(stops)):
        at = xy[stops.marks(k)]
        np.testing.assert_allclose(stops.xy_mm[k], (at.min(axis=0) + at.max(axis=0)) / 2, atol=1e-9)


@pytest.mark.parametrize("field", [(20.0, 30.0), (60.0, 15.0), (300.0, 300.0), (0.5, 0.5)])
def test_brute_force_spread(field, rng):
    for _ in range(3):
        xy = rng.uniform(-60, 60, (10, 2))
        assert groups(candidate_stops(xy, field)) == brute_force(xy, field, [""] * 10)


def test_lattice_counts(monkeypatch):
    """A 12×9 lattice of pitch 5, a field of 3×2 pitches: each stop reads 4×3 marks, at 9×7 places; also in pieces."""
    xy = 5.0 * lattice(12, 9) - 30.0
    stops = candidate_stops(xy, (15.0, 10.0))
    assert len(stops) == 63 and (np.diff(stops.indptr) == 12).all()
    assert stops.xy_mm[0].tolist() == [-22.5, -25.0]
    monkeypatch.setattr("sampler.route.stops.CHUNK", 100)
    pieces = candidate_stops(xy, (15.0, 10.0))
    assert (pieces.indices == stops.indices).all() and (pieces.xy_mm == stops.xy_mm).all()


def test_order_of_marks_does_not_matter(rng):
    xy = rng.uniform(-60, 60, (200, 2))
    rows = rng.permutation(200)
    stops, shuffled = candidate_stops(xy, (15.0, 10.0)), candidate_stops(xy[rows], (15.0, 10.0))
    np.testing.assert_array_equal(stops.xy_mm, shuffled.xy_mm)
    assert [sorted(rows[shuffled.marks(k)]) for k in range(len(stops))] == [stops.marks(k).tolist() for k in range(len(stops))]
    assert set(stops.indices) == set(range(200))
    assert (np.bincount(stops.stop_of) == np.diff(stops.indptr)).all()


def test_no_marks_and_no_field():
    assert len(candidate_stops(np.zeros((0, 2)), (1.0, 1.0))) == 0
    with pytest.raises(InputError, match="field_of_view_mm"):
        candidate_stops(np.zeros((1, 2)), (0.0, 1.0))

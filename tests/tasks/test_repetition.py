"""Grids recognised from repetition: the truth that made the marks comes back, and nothing is seen where nothing repeats."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sampler.panel.layout import Grid
from sampler.tasks.repetition import repetitions

CORNERS = np.array([[-50.0, -50], [50, -50], [-50, 50], [50, 50]])
EXPOSURE = Grid("", 4, 4, (118, 119), (122, 123))


def cells(grid, pattern, rng, jitter_mm=0.0, drop=0.0):
    xy = (grid.cell_centres_mm[:, None] + np.asarray(pattern, float)[None]).reshape(-1, 2)
    xy = xy + jitter_mm * rng.uniform(-1, 1, xy.shape)
    return xy[rng.uniform(size=len(xy)) >= drop]


def ordered(xy):
    xy = np.asarray(xy, float)
    return xy[np.lexsort(np.round(xy, 1).T)]


def same(found, grid, tolerance=0.0):
    assert (found.columns, found.rows) == (grid.columns, grid.rows)
    np.testing.assert_allclose(found.pitch_mm, grid.pitch_mm, atol=tolerance + 1e-6, rtol=0)
    np.testing.assert_allclose(found.centre_mm, grid.centre_mm, atol=tolerance + 1e-6, rtol=0)


@pytest.mark.parametrize(("jitter", "drop"), [(0, 0), (1e-3, 0), (1e-3, 0.1), (1e-3, 0.25)])
@pytest.mark.parametrize("pattern", [CORNERS, [(x, y) for x in (-50, 0, 50) for y in (-50, 0, 50)],
                                     [(-50, 0), (50, 0)], [(-40, 30), (40, -30), (10, 30), (-10, -30)]])
def test_exposure_grid(rng, pattern, jitter, drop):
    (found,), lattice = repetitions(cells(EXPOSURE, pattern, rng, jitter, drop))
    same(found.grid, EXPOSURE, 2 * jitter)
    assert lattice is None
    np.testing.assert_allclose(ordered(found.pattern_mm), ordered(pattern), atol=2 * jitter + 1e-6)
    assert found.member.all()
    assert found.missing == 16 * len(pattern) - len(found.member)


def test_a_hundred_thousand_marks_in_cells_with_a_tenth_missing(rng):
    grid = Grid("", 12, 10, (40, 48), (122 / 3, 49))
    pattern = np.concatenate([rng.uniform(-19, 19, (836, 2)), 19 * CORNERS / 50])
    xy = cells(grid, pattern, rng, 1e-3, 0.1)
    (found,), _ = repetitions(xy)
    same(found.grid, grid, 2e-3)
    assert found.member.mean() > 0.999
    assert abs(len(found.pattern_mm) - 840) <= 2


def test_a_hundred_thousand_marks_without_repetition(rng):
    assert repetitions(rng.uniform(-250, 250, (100_000, 2))) == ([], None)


def test_a_hundred_thousand_small_cells(rng):
    grid = Grid("", 100, 100, (4, 4), (4.8, 4.8))
    pattern = np.array([[-2, -2], [2, 2], [-0.3, 1.1], [1.7, -1.2], [0.5, 0.4]])
    (found,), _ = repetitions(cells(grid, pattern, rng, 1e-3, 0.05))
    same(found.grid, grid, 1e-3)


def test_an_even_lattice_shows_no_cells(rng):
    x = np.linspace(-240, 240, 100)
    xy = np.stack(np.meshgrid(x, x), axis=-1).reshape(-1, 2)[rng.permutation(10_000)[:9500]]
    found, lattice = repetitions(xy)
    assert found == []
    assert (lattice.columns, lattice.rows) == (100, 100)
    assert lattice.pitch_mm == pytest.approx([480 / 99] * 2, abs=1e-6)


def test_two_grids_and_fiducials_are_told_apart(rng):
    drill = Grid("", 9, 9, (50, 50), (53, 53.5))
    fiducials = np.array([[-250, -252], [250, -252], [-250, 252], [250, 252.0]])
    parts = [cells(drill, [(-20, 0), (20, 0), (0, 20), (0, -20)], rng, 1e-3, 0.05), cells(EXPOSURE, CORNERS, rng, 1e-3, 0.05),
             fiducials]
    (one, other), _ = repetitions(np.concatenate(parts))
    same(one.grid, drill, 2e-3)
    same(other.grid, EXPOSURE, 2e-3)
    assert not (one.member & other.member).any()
    assert not (one.member | other.member)[-4:].any()


@pytest.mark.parametrize("xy", [
    np.zeros((1, 2)), np.stack([np.arange(30.0), np.zeros(30)], axis=1), np.random.default_rng(3).uniform(-200, 200, (12, 2)),
    np.stack(np.meshgrid([-240.0, -100, 100, 240], [-250.0, 250]), axis=-1).reshape(-1, 2),  # fiducials about the centre
    CORNERS, np.random.default_rng(3).uniform(-200, 200, (2000, 2))])
def test_nothing_is_seen_where_nothing_repeats(xy):
    assert repetitions(xy)[0] == []


@settings(max_examples=40, deadline=None)
@given(st.integers(2, 7), st.integers(2, 7), st.floats(20, 70), st.floats(20, 70), st.integers(3, 9), st.integers(0, 2**32 - 1))
def test_random_grids_come_back_in_any_order(columns, rows, px, py, count, seed):
    rng = np.random.default_rng(seed)
    px, py = round(px, 3), round(py, 3)
    grid = Grid("", columns, rows, (px, py), (px, py), (3.0, -7.5))
    # Streets a tenth of the pitch wide, the outermost marks on the cell's used area.
    pattern = np.concatenate([rng.uniform(-0.45, 0.45, (count, 2)), [[-0.45, -0.45], [0.45, 0.45]]]) * [px, py]
    xy = cells(grid, pattern, rng, 1e-3)
    order = rng.permutation(len(xy))
    (found, *_), _ = repetitions(xy)
    (again, *_), _ = repetitions(xy[order])
    assert found.grid == again.grid
    np.testing.assert_array_equal(found.member[order], again.member)
    np.testing.assert_allclose(found.grid.pitch_mm, grid.pitch_mm, atol=2e-3)
    # Where the cut lies is a guess; every mark must be found in the cells all the same.
    assert found.member.all()
    assert found.grid.columns in (columns, columns + 1)

"""Points of regions: all inside, every corner on every side."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from invented_plans import core_layout, notched_layout

from sampler.panel.candidates import candidates
from sampler.panel.layout import Grid
from sampler.panel.region import inside_region, region_points

TRIANGLE = np.array([[-100.0, -50.0], [120.0, -50.0], [0.0, 130.0]])
ABUTTING = Grid("drill", 4, 4, (60.0, 50.0), (60.0, 50.0))
SHOTS = Grid("exposure", 2, 2, (118.0, 119.0), (122.0, 123.0))


def layout_with(*grids):
    return core_layout(grids=grids)


def at(points, xy):
    """Rows of the points that lie at a place."""
    return np.flatnonzero(np.abs(points.xy_mm - xy).max(axis=1) < 1e-9)


REGIONS = [("panel", None), ("marks", None), ("polygon", TRIANGLE), ("cells:exposure", None), ("cells:drill", None)]


@pytest.mark.parametrize(("region", "polygon"), REGIONS)
@pytest.mark.parametrize("layout", [layout_with(ABUTTING, SHOTS), notched_layout(300)], ids=["plain", "notched"])
def test_all_points_inside_and_every_cell_meant_holds_its_point(layout, region, polygon):
    points = region_points(layout, region, polygon, 20.0)
    assert len(points) > 50
    assert inside_region(layout, region, polygon, points.xy_mm).all()
    for grid in layout.grids:
        cell = points.cell[grid.name]
        here = cell >= 0
        off = np.abs(points.xy_mm[here] - grid.cell_centres_mm[cell[here]])
        assert (off <= np.array(grid.cell_mm) / 2 + 1e-6).all()
        if region == f"cells:{grid.name}":
            assert set(cell) == set(range(grid.cells))
    rows = np.column_stack([np.rint(points.xy_mm / 1e-6), *points.cell.values()])
    assert len(np.unique(rows, axis=0)) == len(rows)


def test_nothing_lies_further_than_the_spacing():
    layout, rng = notched_layout(10), np.random.default_rng(1)
    for region, polygon in [("panel", None), ("polygon", TRIANGLE), ("cells:drill", None)]:
        points = region_points(layout, region, polygon, 15.0).xy_mm
        probes = rng.uniform(-310, 310, (4000, 2))
        probes = probes[inside_region(layout, region, polygon, probes)]
        nearest = [np.hypot(*(points - probe).T).min() for probe in probes]
        assert max(nearest) <= 15.0 * np.sqrt(2)


def test_corners_of_the_region():
    layout = notched_layout(10)
    points = region_points(layout, "panel", None, 50.0)
    for corner in ([222.5, 299.0], [-222.5, -299.0], [66.0, 264.0], [-66.0, 299.0]):
        assert len(at(points, corner)) >= 1
    for corner in TRIANGLE:
        assert len(at(region_points(layout, "polygon", TRIANGLE, 50.0), corner)) >= 1


def test_every_side_of_abutting_cells():
    layout = layout_with(ABUTTING)
    points = region_points(layout, "panel", None, 50.0)
    inner = at(points, [0.0, 0.0])  # four cells meet here
    assert sorted(points.cell["drill"][inner]) == [5, 6, 9, 10]
    rim = at(points, [-120.0, 0.0])  # two cells and the outside
    assert sorted(points.cell["drill"][rim]) == [-1, 4, 8]
    assert sorted(points.cell["drill"][at(points, [-120.0, -100.0])]) == [-1, 0]
    within = region_points(layout, "cells:drill", None, 50.0)
    assert sorted(within.cell["drill"][at(within, [-120.0, 0.0])]) == [4, 8]
    assert sorted(within.cell["drill"][at(within, [-120.0, -100.0])]) == [0]


def test_cells_clipped_to_the_region():
    """Where a cell's edge leaves the region there is a corner of the clipped cell, on both sides."""
    points = region_points(layout_with(ABUTTING), "polygon", TRIANGLE, 500.0)
    crossing = at(points, [0.0, -50.0])  # the edge x = 0 meets the lower side, which is itself an edge of cells
    assert sorted(points.cell["drill"][crossing]) == [5, 6]
    left = [-100.0 + 100.0 * 50 / 180, 0.0]  # y = 0 meets the left side
    assert sorted(points.cell["drill"][at(points, left)]) == [4, 8]


def test_sides_of_two_grids_together():
    layout = layout_with(ABUTTING, SHOTS)
    points = region_points(layout, "panel", None, 100.0)
    here = at(points, [-2.0, 0.0])  # a corner line of a shot (x = -2), on an edge of drill cells (y = 0), in the street
    assert {(int(a), int(b)) for a, b in zip(points.cell["drill"][here], points.cell["exposure"][here], strict=True)} \
        == {(5, -1), (9, -1)}
    here = at(points, [-2.0, 50.0])  # the shot's right edge crosses an edge of drill cells
    assert {(int(a), int(b)) for a, b in zip(points.cell["drill"][here], points.cell["exposure"][here], strict=True)} \
        == {(9, 2), (9, -1), (13, 2), (13, -1)}


def test_marks():
    layout = notched_layout(500)
    found = candidates(layout).sites.xy_mm
    assert np.array_equal(region_points(layout, "marks", None, 1.0).xy_mm, found)
    assert inside_region(layout, "marks", None, np.concatenate([found[:5], found[:5] + 1e-3])).tolist() \
        == [True] * 5 + [False] * 5


def test_boundary_counts_as_inside():
    layout = core_layout()
    assert inside_region(layout, "panel", None, np.array([[247.0, 249.5], [247.0, 0.0], [247.01, 0.0]])).tolist() \
        == [True, True, False]
    assert inside_region(layout, "polygon", TRIANGLE, np.array([[10.0, -50.0], [10.0, -50.1]])).tolist() == [True, False]


def test_regions_that_are_empty_or_unknown():
    assert len(region_points(core_layout(edge_exclusion_mm=300.0), "panel", None, 10.0)) == 0
    with pytest.raises(KeyError, match="unknown region"):
        region_points(core_layout(), "panle", None, 10.0)
    assert len(region_points(core_layout(grids=()), "panel", None, 100.0)) > 20


def test_a_million_points():
    points = region_points(notched_layout(10), "panel", None, 0.5)
    assert len(points) > 1_000_000
    assert inside_region(notched_layout(10), "panel", None, points.xy_mm).all()


@settings(max_examples=25)
@given(st.integers(0, 2**32 - 1), st.integers(1, 5), st.integers(1, 5), st.booleans())
def test_every_cell_corner_is_seen_from_its_cell(seed, columns, rows, abut):
    """Whatever grid: each corner of each cell inside the panel occurs with that cell."""
    rng = np.random.default_rng(seed)
    cell = tuple(rng.uniform(20, 60, 2))
    pitch = cell if abut else tuple(np.array(cell) + rng.uniform(0.1, 5, 2))
    grid = Grid("g", columns, rows, cell, pitch, tuple(rng.uniform(-40, 40, 2)))
    points = region_points(core_layout(grids=(grid,)), "panel", None, 100.0)
    for index, centre in enumerate(grid.cell_centres_mm):
        for corner in centre + np.array(cell) / 2 * np.array([[-1, -1], [1, -1], [-1, 1], [1, 1]]):
            if (np.abs(corner) < [247, 249.5]).all():
                there = np.abs(points.xy_mm - corner).max(axis=1) < 1e-5
                assert index in points.cell["g"][there]

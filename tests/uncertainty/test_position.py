"""The worst place of a region is true to 0.1 %."""

from __future__ import annotations

import numpy as np
import pytest
from invented_plans import NOTCHED, core_layout, lattice

from sampler.model.basis import Model, ModelTerm, places
from sampler.model.terms import FAMILIES
from sampler.panel.region import inside_region
from sampler.uncertainty.assumed import Assumed
from sampler.uncertainty.information import Knowledge, information
from sampler.uncertainty.position import position_u, worst_place


def known(layout, assumed, rows):
    xy = layout.marks.xy_mm[rows]
    return Knowledge.of(information(assumed.readings(places(layout, xy), np.full(len(xy), "front")), assumed.prior_precision))


def model(*names):
    return Assumed.plain(Model(tuple(ModelTerm(name) if "." not in name else ModelTerm(*reversed(name.split(".")))
                                     for name in names)))


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("family", ["affine", "order3", "order5"])
def test_worst_place_of_the_panel_against_a_dense_raster(seed, family):
    layout, assumed = core_layout(), model(*FAMILIES[family])
    rows = np.random.default_rng(seed).permutation(len(layout.marks))[:30]
    knowledge = known(layout, assumed, rows)
    found = worst_place(assumed, layout, knowledge, "panel")
    dense = lattice(301, 301, 494.0, 499.0)
    truth = position_u(assumed, layout, knowledge, dense).max()
    assert truth * (1 - 1e-3) <= found.u_um <= truth * (1 + 1e-2)
    assert found.u_um == pytest.approx(position_u(assumed, layout, knowledge, np.array([found.xy_mm]))[0, found.axis])


def test_polygon_with_its_worst_place_inside(rng):
    layout, assumed = core_layout(), model(*FAMILIES["order4"])
    rows = rng.permutation(len(layout.marks))[:22]
    knowledge = known(layout, assumed, rows)
    polygon = np.array([[-200.0, -150.0], [30.0, -180.0], [180.0, 60.0], [-40.0, 210.0]])
    found = worst_place(assumed, layout, knowledge, "polygon", polygon)
    dense = lattice(401, 401, 500.0, 500.0)
    dense = dense[inside_region(layout, "polygon", polygon, dense)]
    assert found.u_um >= position_u(assumed, layout, knowledge, dense).max() * (1 - 1e-3)
    assert inside_region(layout, "polygon", polygon, np.array([found.xy_mm]))[0]


def test_cells_are_searched_to_their_corners(rng):
    """A term in cell coordinates is worst at a cell's corner, and both sides of a street are their own cells."""
    layout, assumed = core_layout(), model("translation_x", "translation_y", "exposure.scale_x", "exposure.dx_x2")
    knowledge = known(layout, assumed, rng.permutation(len(layout.marks))[:40])
    found = worst_place(assumed, layout, knowledge, "cells:exposure")
    corners = np.concatenate([layout.grids[0].cell_centres_mm + [59.0 * sx, 59.5 * sy] for sx in (-1, 1) for sy in (-1, 1)])
    assert found.u_um >= position_u(assumed, layout, knowledge, corners).max() * (1 - 1e-9)


def test_notched_outline_has_no_worst_place_in_the_notch(rng):
    layout = core_layout(width_mm=457.0, height_mm=610.0, outline_mm=NOTCHED)
    assumed = model(*FAMILIES["order2"])
    found = worst_place(assumed, layout, known(layout, assumed, rng.permutation(324)[:12]), "panel")
    assert inside_region(layout, "panel", None, np.array([found.xy_mm]))[0]


def test_undetermined_is_infinite(rng):
    layout, assumed = core_layout(), model(*FAMILIES["order2"])
    assert np.isinf(worst_place(assumed, layout, known(layout, assumed, np.arange(4)), "panel").u_um)

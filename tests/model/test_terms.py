"""The table of terms against the contract, and the physics of each sign."""

from __future__ import annotations

import doctest
import re

import numpy as np
import pytest

import sampler.model.basis
from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.model.terms import FAMILIES, TERMS
from sampler.panel.layout import Grid, Layout, Sites


def drawn(grids=()):
    none = Sites.at(np.zeros(0, "U1"), np.zeros((0, 2)))
    outline = np.array([[-200.0, -100], [200, -100], [200, 100], [-200, 100]])
    return Layout("test", 400, 200, outline, 0.0, grids, (), none)


def response(name, xy, grids=(), **where):
    return design_blocks(Model((ModelTerm(name, **where),)), places(drawn(grids), np.array([xy], float)))[0, :, 0]


def test_doctest_of_the_basis():
    assert doctest.testmod(sampler.model.basis).failed == 0


def test_counts_of_the_families():
    assert {name: len(terms) for name, terms in FAMILIES.items() if name != "translation" and name != "scale"} == {
        "similarity": 4, "affine": 6, "trapezoid": 2, "order2": 12, "order3": 20, "order4": 30, "order5": 42}
    assert all(term in TERMS for terms in FAMILIES.values() for term in terms)


# x = 100 mm, y = −50 mm on 400×200 mm: u = 0.5, v = −0.5. Contract: 1 ppm = 1 µm per m.
@pytest.mark.parametrize(("name", "expected"), [
    ("translation_x", (1, 0)), ("translation_y", (0, 1)), ("scale_x", (0.1, 0)), ("scale_y", (0, -0.05)),
    ("magnification", (0.1, -0.05)), ("rotation", (0.05, 0.1)), ("orthogonality", (0.05, 0)),
    ("dx_xy", (-0.25, 0)), ("dy_xy", (0, -0.25)), ("dx_x2y", (-0.125, 0)), ("dy_y3", (0, -0.125)),
    ("dy_x3y2", (0, 0.03125)), ("dx_x5", (0.03125, 0)),
])
def test_responses(name, expected):
    assert response(name, (100, -50)) == pytest.approx(expected, abs=1e-15)


LINEAR = {"translation_x": (1, 0), "translation_y": (0, 1), "scale_x": (0.1, 0), "scale_y": (0, -0.05),
          "magnification": (0.1, -0.05), "rotation": (0.05, 0.1), "orthogonality": (0.05, 0)}


def test_every_term_of_the_table_has_a_worked_response():
    """A new term must be given its response at x = 100 mm, y = −50 mm (u = ½, v = −½) here, or be a monomial of u, v."""
    for name in TERMS:
        found = re.fullmatch(r"(dx|dy)_((?:x\d?)?(?:y\d?)?)", name)
        if found is None:
            expected = LINEAR[name]
        else:
            powers = {letter: int(power or 1) for letter, power in re.findall(r"([xy])(\d?)", found.group(2))}
            value = 0.5 ** powers.get("x", 0) * (-0.5) ** powers.get("y", 0)
            expected = (value, 0) if found.group(1) == "dx" else (0, value)
        assert response(name, (100, -50)) == pytest.approx(expected, abs=1e-15), name


def test_rotation_is_counter_clockwise():
    """A point on the +x axis moves to +y, and a rigid rotation keeps distances to first order."""
    assert response("rotation", (100, 0)) == pytest.approx([0, 0.1])
    assert response("rotation", (0, 100)) == pytest.approx([-0.1, 0])


def test_affine_spans_every_linear_map(rng):
    xy = rng.uniform(-100, 100, (10, 2))
    blocks = design_blocks(Model(tuple(ModelTerm(name) for name in FAMILIES["affine"])), places(drawn(), xy))
    moved = xy @ rng.normal(size=(2, 2)) + rng.normal(size=2)
    fitted, *_ = np.linalg.lstsq(blocks.reshape(20, 6), moved.ravel(), rcond=None)
    assert blocks.reshape(20, 6) @ fitted == pytest.approx(moved.ravel(), abs=1e-9)


GRID = Grid("shot", 2, 1, (100.0, 80.0), (150.0, 90.0))


def test_cell_terms_use_cell_coordinates():
    assert response("scale_x", (95, 10), (GRID,), grid="shot") == pytest.approx([0.02, 0])  # cell centre at x = 75
    assert response("dx_xy", (100, 20), (GRID,), grid="shot") == pytest.approx([0.5 * 0.5, 0])


def test_outside_the_cells_a_grid_says_nothing():
    assert response("translation_x", (0, 0), (GRID,), grid="shot") == pytest.approx([0, 0])


def test_one_cell_alone():
    assert response("translation_x", (75, 0), (GRID,), grid="shot", cell=1, cell_label="c2r1") == pytest.approx([1, 0])
    assert response("translation_x", (-75, 0), (GRID,), grid="shot", cell=1, cell_label="c2r1") == pytest.approx([0, 0])


def test_names():
    assert ModelTerm("rotation").name == "rotation"
    assert ModelTerm("rotation", "shot").name == "shot.rotation"
    assert ModelTerm("rotation", "shot", 1, "c2r1").name == "shot[c2r1].rotation"


def test_millimetres_or_metres_describe_the_same_physics(rng):
    """Scaling the panel by 1000 scales each monomial's cell by the same: u, v and so all order ≥ 2 terms are unchanged."""
    xy = rng.uniform(-90, 90, (5, 2))
    small = design_blocks(Model((ModelTerm("dx_x2y"),)), places(drawn(), xy))
    big_panel = Layout("big", 400e3, 200e3, drawn().outline_mm * 1e3, 0.0, (), (), drawn().marks)
    assert design_blocks(Model((ModelTerm("dx_x2y"),)), places(big_panel, xy * 1e3)) == pytest.approx(small)


def test_abutting_cells_can_be_told_which_side(rng):
    touching = Grid("field", 2, 1, (100.0, 80.0), (100.0, 80.0))
    layout = drawn((touching,))
    edge = np.array([[0.0, 0.0], [0.0, 0.0]])
    model = Model((ModelTerm("scale_x", "field"),))
    rows = design_blocks(model, places(layout, edge, {"field": np.array([0, 1])}))[:, 0, 0]
    assert rows == pytest.approx([0.05, -0.05])

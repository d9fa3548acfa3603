"""A layout and study begun from bare marks: unit, origin, panel, names, and values that can be met."""

from __future__ import annotations

import numpy as np
import pytest

from sampler.errors import InputError
from sampler.panel.candidates import candidates
from sampler.panel.layout import Grid
from sampler.tasks.start import StartOptions, start

GRID = Grid("", 4, 4, (118, 119), (122, 123))
CORNERS = np.array([[-50.0, -50], [50, -50], [-50, 50], [50, 50]])


@pytest.fixture
def xy(rng):
    """Invented exposure marks with a jitter of 1 µm, a tenth missing, from the panel's centre."""
    xy = (GRID.cell_centres_mm[:, None] + CORNERS).reshape(-1, 2)
    return (xy + 1e-3 * rng.uniform(-1, 1, xy.shape))[rng.uniform(size=len(xy)) > 0.1]


def said(begun, about):
    return next(finding for finding in begun.findings if finding.startswith(about))


@pytest.mark.parametrize(("scale", "unit"), [(1, "mm"), (1e3, "um"), (1 / 25.4, "inch"), (1e-3, "m")])
@pytest.mark.parametrize(("shift", "origin"), [((0, 0), "centre"), ((255, 257.5), "lower-left")])
def test_units_and_origins_change_nothing(xy, scale, unit, shift, origin):
    begun = start(None, (xy + shift) * scale)
    assert said(begun, "unit").startswith(f"unit: {unit}, the only one")
    assert begun.origin == origin
    layout = begun.layout
    assert (layout.width_mm, layout.height_mm) == (510, 515)
    np.testing.assert_allclose(layout.marks.xy_mm, xy, atol=1e-9)
    (grid,) = layout.grids
    assert (grid.columns, grid.rows, grid.pitch_mm) == (4, 4, (122, 123))
    np.testing.assert_allclose(grid.centre_mm, 0, atol=2e-3)
    assert len(begun.repeats[0].pattern_mm) == 4
    assert (grid.locate(layout.marks.xy_mm) >= 0).all()
    assert (candidates(layout).reason == "").all()


def test_an_origin_elsewhere_is_moved_and_said(xy):
    begun = start(None, xy + [1000, -300])
    assert begun.origin == "centre"
    assert "(1000, -300) mm of the table" in said(begun, "origin")
    np.testing.assert_allclose(begun.layout.marks.xy_mm, xy, atol=2e-3)


def test_marks_far_from_the_corner_are_not_measured_from_it(xy):
    assert start(None, xy + [900, 900]).origin == "centre"


@pytest.mark.parametrize(("longer", "meaning"), [(40, "--unit inch: 1016"), (100, "--unit mm: 100"), (1e7, "--unit mm: 1e+07")])
def test_a_unit_in_doubt_is_asked_for(longer, meaning, rng):
    marks = np.concatenate([rng.uniform(0, longer, (50, 2)), [[0, 0], [longer, longer]]])
    with pytest.raises(InputError, match="the unit of the coordinates is in doubt") as caught:
        start(None, marks)
    assert meaning in str(caught.value)


def test_a_unit_that_headings_say_is_taken_or_doubted(xy):
    assert said(start(None, xy, unit="mm"), "unit") == "unit: mm, as the headings say"
    with pytest.raises(InputError, match="headings say um, but then the marks cover 0"):
        start(None, xy, unit="um")
    assert said(start(None, xy * 1e3, unit="mm", options=StartOptions(unit="um")), "unit") == "unit: um, as asked"


@pytest.mark.parametrize(("half", "panel"), [
    ((290, 290), (600, 600)),
    ((220, 290), (457, 610)), ((290, 220), (610, 457)), ((250, 240), (515, 510)), ((250, 257), (510, 515)),
    ((257, 250), (515, 510)), ((148, 225), (305, 457)), ((50, 200), (110, 410)), ((350, 350), (710, 710))])
def test_panel_sizes(half, panel, rng):
    marks = np.concatenate([rng.uniform(-1, 1, (40, 2)), [[-1, -1], [1, 1]]]) * half
    begun = start(None, marks)
    assert (begun.layout.width_mm, begun.layout.height_mm) == panel
    assert (candidates(begun.layout).reason == "").all()
    assert ("usual" in said(begun, "panel"))


def test_panel_and_origin_as_asked(xy):
    begun = start(None, xy, options=StartOptions(panel_mm=(480, 480), origin="centre"))
    assert said(begun, "panel") == "panel: 480 × 480 mm, as asked"
    begun = start(None, xy, options=StartOptions(panel_mm=(400, 480)))
    assert "marks lie outside it" in said(begun, "panel")
    with pytest.raises(InputError, match="no mark lies on a panel of 10 × 10 mm"):
        start(None, xy, options=StartOptions(panel_mm=(10, 10)))


def test_names(xy):
    names = np.array([f"T{i}" for i in range(len(xy))])
    assert (start(names, xy).layout.marks.id == names).all()
    assert start(None, xy).layout.marks.id[0] == "M01"
    names[3] = names[4]
    begun = start(names, xy)
    assert begun.layout.marks.id[3] == "M04"
    assert "1 repeated" in said(begun, "names")
    names[3] = " "
    assert "1 blank" in said(start(names, xy), "names")


def test_kinds_are_kept(xy):
    kinds = np.array(["cross", "ring"])[np.arange(len(xy)) % 2]
    assert (start(None, xy, kinds).layout.marks.kind == kinds).all()


def test_marks_at_one_place_are_kept_once(xy):
    begun = start(None, np.concatenate([xy, xy[:5]]))
    assert len(begun.layout.marks) == len(xy)
    assert "5 marks" in said(begun, "left out")


@pytest.mark.parametrize(("marks", "families"), [
    ([[-200, 0], [200, 0]], ("similarity",)), ([[-200, -200], [200, 0], [0, 200]], ("affine",)),
    ([[-200, -200], [200, -200], [-200, 200], [200, 200]], ("affine", "trapezoid"))])
def test_the_largest_model_that_the_marks_determine(marks, families):
    begun = start(None, np.array(marks, float))
    assert begun.families == families
    assert begun.position_um > 0
    assert any(finding.startswith("model") for finding in begun.findings) == (families != ("affine", "trapezoid"))


@pytest.mark.parametrize("marks", [np.zeros((3, 2)), np.full((1, 2), 7.0)])
def test_marks_at_one_place_only(marks):
    with pytest.raises(InputError, match="lie at one place"):
        start(None, marks, unit="mm")


def test_one_mark_on_the_panel_determines_nothing():
    with pytest.raises(InputError, match="do not determine even translation, rotation and magnification"):
        start(None, np.array([[0.0, 0.0], [300.0, 0.0]]), options=StartOptions(unit="mm", origin="centre", panel_mm=(200, 200)))


def test_no_grid_is_said(rng):
    begun = start(None, rng.uniform(-240, 240, (300, 2)))
    assert begun.layout.grids == ()
    assert said(begun, "grid") == "grid: none; the marks do not repeat"
    x = np.linspace(-240, 240, 20)
    begun = start(None, np.stack(np.meshgrid(x, x), axis=-1).reshape(-1, 2))
    assert "stand evenly, 20 × 20 at 25.26" in said(begun, "grid")


def test_cells_stay_on_the_panel(rng):
    grid = Grid("", 4, 4, (1, 1), (127, 128))
    xy = (grid.cell_centres_mm[:, None] + 0.9 * CORNERS).reshape(-1, 2)
    (found,) = start(None, xy, options=StartOptions(panel_mm=(500, 505))).layout.grids
    assert found.cell_mm == (500 - 3 * 127, 505 - 3 * 128)

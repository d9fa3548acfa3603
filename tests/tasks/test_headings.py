"""Columns guessed from headings in two languages, and from cells when there are none."""

from __future__ import annotations

import pytest

from sampler.tasks.headings import guess_columns, heading


@pytest.mark.parametrize(("text", "axis", "unit"), [
    ("X", "x", ""), ("posx", "x", ""), ("x [um]", "x", "um"), ("X (µm)", "x", "um"), ("y_mm", "y", "mm"),
    ("PosX", "x", ""), ("pos_y", "y", ""),
    ("xpos", "x", ""), ("Koordinate Y (Zoll)", "y", "inch"), ("X-Koordinate [mm]", "x", "mm"), ("X-Soll", "x", ""),
    ("NominalX", "x", ""), ("x in mm", "x", "mm"), ("X (in)", "x", "inch"), ("XMM", "x", "mm"), ("Y/mm", "y", "mm"),
    ("Ycenter", "y", ""), ("X [m]", "x", "m"), ("y mil", "y", "mil"), ("dx_um", "", "um"), ("x_error", "", ""),
    ("Offset X", "", ""),
    ("sigma_x_um", "", "um"), ("index", "", ""), ("max", "", ""), ("", "", ""), ("xy", "", "")])
def test_headings(text, axis, unit):
    found = heading(text)
    assert (found.axis, found.unit) == (axis, unit)


@pytest.mark.parametrize(("rows", "expected"), [
    ([["id", "x_mm", "y_mm"], ["a", "1", "2"]], (1, 2, 0)),
    ([["Y [um]", "Marke", "X [um]"], ["1,5", "a", "2"]], (2, 0, 1)),
    ([["Nr", "Name", "PosX", "PosY", "dx", "dy"], ["1", "a", "1", "2", "0", "0"]], (2, 3, 1)),
    ([["x", "y"], ["1", "2"]], (0, 1, None)),
    ([["x_meas", "x_nominal", "y_meas", "y_nominal"], ["1", "2", "3", "4"]], (1, 3, None)),
    ([["x", "x_design", "y", "y_design"], ["1", "2", "3", "4"]], (1, 3, None)),
    ([["M1", "-10.5", "3e1"], ["M2", "4", "5"]], (1, 2, 0)),
    ([["1", "-10.5", "3"], ["2", "4", "5"], ["3", "5", "5"]], (1, 2, 0)),
    ([["-10.5", "3"], ["4", "5"]], (0, 1, None)),
    ([["7,5", "3", "front"], ["4", "5", "front"]], (0, 1, 2)),
    ([["Mark ID", "X", "Y"], ["", "1", "2"]], (1, 2, 0)),
])
def test_columns(rows, expected):
    found = guess_columns(rows)
    assert found.doubts == ()
    assert (found.x, found.y, found.name) == expected


def test_kind_and_unit():
    found = guess_columns([["id", "Typ", "x [um]", "y [um]"], ["a", "cross", "1", "2"]])
    assert (found.kind, found.unit, found.headed) == (1, "um", True)


@pytest.mark.parametrize(("rows", "options", "expected"), [
    ([["a", "b", "c"], ["1", "2", "3"]], {}, "no heading says that its column of numbers holds x"),
    ([["x", "x_pos", "y"], ["1", "2", "3"]], {}, 'several columns may hold x: "x", "x_pos"; say which with --x'),
    ([["x_mm", "y_um"], ["1", "2"]], {}, "name different units"),
    ([["1", "2.5", "3", "4"], ["7", "8", "9", "9"]], {}, "no headings and 4 columns of numbers"),
    ([["1.5"], ["2.5"]], {}, "no column holds numbers for y"),
    ([["id", "x", "y"], ["1", "2", "3"]], {"x": "z"}, '--x names the column "z", which is not there; give "id", "x", "y" or a'),
    ([["1.5", "2"], ["2.5", "3"]], {"y": "3"}, '--y names the column "3", which is not there; give a number from 1 to 2'),
])
def test_doubts_name_the_option(rows, options, expected):
    assert any(expected in doubt for doubt in guess_columns(rows, **options).doubts), guess_columns(rows, **options)


def test_options_win():
    rows = [["a", "b", "c"], ["1", "2", "3"]]
    found = guess_columns(rows, x="c", y="1", name="b")
    assert (found.x, found.y, found.name, found.doubts) == (2, 0, 1, ())
    found = guess_columns([["1", "2.5", "3", "4"], ["7", "8", "9", "9"]], x="2", y="4")
    assert (found.x, found.y, found.doubts) == (1, 3, ())

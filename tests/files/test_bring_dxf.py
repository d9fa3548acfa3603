"""Marks from DXF: written by a library and by hand, nested and mirrored, to 1 nm."""

from __future__ import annotations

import math

import numpy as np
import pytest

from sampler.errors import InputError
from sampler.files.bring import Selection, bring, drawn
from sampler.files.start import start_files
from sampler.files.study import read_study
from sampler.tasks.start import StartOptions

ezdxf = pytest.importorskip("ezdxf")
NM = 1e-6


def ordered(xy):
    xy = np.asarray(xy, float)
    return xy[np.lexsort(np.round(xy, 5).T)]


def saved(tmp_path, document, name="drawing.dxf", **options):
    document.saveas(tmp_path / name, **options)
    return tmp_path / name


def places(found, **wanted):
    group = [i for i, one in enumerate(found.groups) if all(getattr(one, key) == value for key, value in wanted.items())]
    return found.xy[np.isin(found.group, group)]


@pytest.fixture
def xy(rng):
    """Invented places on a panel, to the nanometre."""
    return np.round(rng.uniform(-250, 250, (60, 2)), 6)


@pytest.mark.parametrize(("code", "factor"), [(4, 1), (1, 25.4), (6, 1e3), (13, 1e-3), (5, 10), (9, 0.0254)])
@pytest.mark.parametrize("fmt", ["asc", "bin"])
def test_every_unit_both_encodings(tmp_path, xy, code, factor, fmt):
    document = ezdxf.new("R2010")
    document.header["$INSUNITS"] = code
    for x, y in xy / factor:
        document.modelspace().add_point((x, y), dxfattribs={"layer": "MARKS"})
        document.modelspace().add_circle((x + 1 / factor, y), 0.5 / factor, dxfattribs={"layer": "RINGS"})
    found = drawn(saved(tmp_path, document, fmt=fmt))
    assert found.unit == "mm"
    np.testing.assert_allclose(places(found, kind="point", layer="MARKS"), xy, atol=NM)
    np.testing.assert_allclose(places(found, kind="circle"), xy + [1, 0], atol=NM)
    assert [group.size for group in found.groups if group.kind == "circle"] == pytest.approx([1.0])


def test_blocks_in_blocks_arrays_rotation_and_mirroring(tmp_path):
    document = ezdxf.new("R2010")
    document.header["$INSUNITS"] = 4
    mark = document.blocks.new("MARK", base_point=(1, 2))
    mark.add_circle((1, 2), 0.25, dxfattribs={"layer": "0"})
    cell = document.blocks.new("CELL")
    cell.add_blockref("MARK", (10, 3), dxfattribs={"layer": "M"})
    cell.add_point((4, 5))
    space = document.modelspace()
    space.add_blockref("CELL", (100, 50), dxfattribs={"rotation": 30, "xscale": -2, "yscale": 2, "column_count": 3,
                                                       "row_count": 2, "column_spacing": 7, "row_spacing": 11})
    space.add_blockref("MARK", (-20, 1))
    found = drawn(saved(tmp_path, document))
    cos, sin = math.cos(math.radians(30)), math.sin(math.radians(30))

    def world(x, y):
        return [(100 + cos * (i * 7 - 2 * x) - sin * (j * 11 + 2 * y), 50 + sin * (i * 7 - 2 * x) + cos * (j * 11 + 2 * y))
                for i in range(3) for j in range(2)]

    np.testing.assert_allclose(ordered(places(found, name="MARK")), ordered([*world(10, 3), (-20, 1)]), atol=NM)
    np.testing.assert_allclose(ordered(places(found, name="CELL")), ordered(world(0, 0)), atol=NM)
    np.testing.assert_allclose(ordered(places(found, kind="point")), ordered(world(4, 5)), atol=NM)
    # On layer 0 in a block: on the layer of the insert; and as large as the insert makes it.
    assert {(group.layer, group.size) for group in found.groups if group.kind == "circle"} == {("M", 1.0), ("0", 0.5)}


def test_entities_drawn_from_behind_and_closed_outlines(tmp_path):
    document = ezdxf.new("R2010")
    document.header["$INSUNITS"] = 4
    space = document.modelspace()
    space.add_circle((30, 40), 1, dxfattribs={"extrusion": (0, 0, -1)})
    space.add_lwpolyline([(0, 0), (2, 0), (2, 1), (0, 1)], close=True)
    space.add_lwpolyline([(0, 0), (2, 0)])
    space.add_line((0, 0), (1, 1))
    space.add_text("F1", dxfattribs={"layer": "names"}).set_placement((7, 8))
    found = drawn(saved(tmp_path, document))
    np.testing.assert_allclose(places(found, kind="circle"), [(-30, 40)], atol=NM)
    np.testing.assert_allclose(places(found, kind="outline"), [(1, 0.5)], atol=NM)
    np.testing.assert_allclose(places(found, kind="text"), [(7, 8)], atol=NM)
    assert found.text[found.text != ""].tolist() == ["F1"]
    assert len(found.xy) == 3


HAND = "\n".join(["0", "SECTION", "2", "HEADER", "9", "$INSUNITS", "70", "4", "0", "ENDSEC", "0", "SECTION", "2", "ENTITIES",
                  "0", "POINT", "8", "M", "10", "-12.345678", "20", "255.000001", "30", "0.0",
                  "0", "CIRCLE", "8", "C", "10", "1.5", "20", "2.5", "30", "0.0", "40", "0.75", "0", "ENDSEC", "0", "EOF", ""])


@pytest.mark.parametrize("end", ["\n", "\r\n"])
def test_bytes_by_hand(tmp_path, end):
    (tmp_path / "hand.txt").write_bytes(HAND.replace("\n", end).encode())  # known by its content, not by its name
    found = drawn(tmp_path / "hand.txt")
    np.testing.assert_allclose(places(found, layer="M"), [(-12.345678, 255.000001)], atol=NM)
    np.testing.assert_allclose(places(found, layer="C"), [(1.5, 2.5)], atol=NM)


@pytest.mark.parametrize(("content", "expected"), [
    (HAND[:120], "no EOF at its end"), (HAND.replace("-12.345678", "abc"), "DXF file is broken"),
    (HAND.replace("ENTITIES", "ENTITIEZ"), "nothing in the file can be a mark"), ("", "the file is empty"),
    (HAND.replace("0\nSECTION\n2\nHEADER", "0\nSECTION\n0\nX"), "DXF file is broken")])
def test_broken_files_get_one_clear_message(tmp_path, content, expected):
    (tmp_path / "a.dxf").write_text(content)
    with pytest.raises(InputError, match=expected) as caught:
        bring(tmp_path / "a.dxf")
    assert len(caught.value.faults) == 1


def test_blocks_that_hold_themselves(tmp_path):
    document = ezdxf.new("R2010")
    block = document.blocks.new("A")
    block.add_blockref("A", (1, 1))
    document.modelspace().add_blockref("A", (0, 0))
    with pytest.raises(InputError, match="hold themselves"):
        drawn(saved(tmp_path, document))


def test_undefined_block_is_named(tmp_path):
    document = ezdxf.new("R2010")
    document.modelspace().add_blockref("GONE", (0, 0))
    with pytest.raises(InputError, match="GONE"):
        drawn(saved(tmp_path, document))


def test_a_file_without_a_unit_is_asked_for_when_in_doubt(tmp_path, xy):
    document = ezdxf.new("R2010")
    document.header["$INSUNITS"] = 0
    for x, y in xy:
        document.modelspace().add_point((x, y))
    path = saved(tmp_path, document)
    assert drawn(path).unit == ""
    np.testing.assert_allclose(bring(path).layout.marks.xy_mm, xy, atol=NM)  # the extent says mm
    options = StartOptions(unit="um", origin="centre")
    np.testing.assert_allclose(bring(path, options=options).layout.marks.xy_mm, xy / 1e3, atol=NM)


def test_choosing(tmp_path, xy):
    document = ezdxf.new("R2010")
    document.header["$INSUNITS"] = 4
    for x, y in xy:
        document.modelspace().add_circle((x, y), 0.5, dxfattribs={"layer": "Marks"})
    document.modelspace().add_circle((0, 0), 2, dxfattribs={"layer": "Marks"})
    document.modelspace().add_point((0, 0), dxfattribs={"layer": "Other"})
    path = saved(tmp_path, document)
    with pytest.raises(InputError, match="say which of the things drawn are the marks") as caught:
        bring(path)
    assert '60 × circle, layer "Marks", size 1 mm; 1 × circle' in str(caught.value)
    with pytest.raises(InputError, match='nothing is drawn as --layer "X\\*" --size 3; the file holds 60 × circle'):
        bring(path, Selection(layer="X*", size=3))
    begun = bring(path, Selection(layer="mark*", size=1.0))
    np.testing.assert_allclose(begun.layout.marks.xy_mm, xy, atol=NM)
    assert begun.findings[0] == 'taken: 60 × circle, layer "Marks", size 1 mm'
    assert begun.findings[1] == "not taken: 2 other groups of things drawn"
    for name, content in start_files(begun).items():
        (tmp_path / name).write_text(content, encoding="utf-8")
    np.testing.assert_allclose(read_study(tmp_path / "study.toml").layout.marks.xy_mm, xy, atol=NM)


def test_texts_that_differ_name_their_marks(tmp_path, xy):
    document = ezdxf.new("R2010")
    document.header["$INSUNITS"] = 4
    for i, (x, y) in enumerate(xy):
        document.modelspace().add_text(f"F{i}").set_placement((x, y))
    assert bring(saved(tmp_path, document)).layout.marks.id.tolist() == [f"F{i}" for i in range(60)]

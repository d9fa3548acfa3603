"""Marks from GDSII and OASIS: written by a library, GDSII also record by record by hand, nested and mirrored, to 1 nm."""

from __future__ import annotations

import struct

import numpy as np
import pytest

from sampler.errors import InputError
from sampler.files.bring import Selection, bring, drawn

gdstk = pytest.importorskip("gdstk")
NM = 1e-6


def ordered(xy):
    xy = np.asarray(xy, float)
    return xy[np.lexsort(np.round(xy, 5).T)]


def places(found, **wanted):
    group = [i for i, one in enumerate(found.groups) if all(getattr(one, key) == value for key, value in wanted.items())]
    return found.xy[np.isin(found.group, group)]


def written(tmp_path, library, format):
    path = tmp_path / f"layout.{format}"
    (library.write_gds if format == "gds" else library.write_oas)(str(path))
    return path


@pytest.mark.parametrize("format", ["gds", "oas"])
def test_nested_arrays_rotations_and_mirrors_against_the_library(tmp_path, format):
    """Where the library puts the flattened squares is where the marks are."""
    library = gdstk.Library(unit=1e-6, precision=1e-9)
    mark = library.new_cell("MARK")
    mark.add(gdstk.rectangle((-5, -5), (5, 5), layer=10, datatype=2))
    inner = library.new_cell("INNER")
    inner.add(gdstk.Reference(mark, (100.125, 50)), gdstk.Reference(mark, (-30, 0), rotation=np.pi / 6, x_reflection=True),
              gdstk.Reference(mark, (0, 300), columns=3, rows=2, spacing=(40, 60)),
              gdstk.Label("L1", (7, 8), layer=3, texttype=1))
    dot = gdstk.rectangle((0, 0), (2, 4), layer=11)
    dot.repetition = gdstk.Repetition(columns=2, rows=2, spacing=(200, 300))
    inner.add(dot, gdstk.FlexPath([(0, -50), (20, -50)], 4, layer=12))
    middle = library.new_cell("MIDDLE")
    middle.add(gdstk.Reference(inner, (1000, 2000), rotation=np.pi / 2, x_reflection=True, columns=2, rows=2,
                               spacing=(5000, 7000)),
               gdstk.Reference(inner, (-4000, 900), rotation=0.3, magnification=2))
    top = library.new_cell("TOP")
    top.add(gdstk.Reference(middle, (100_000, -50_000), rotation=np.pi, x_reflection=True), gdstk.Reference(middle, (0, 0)))
    found = drawn(written(tmp_path, library, format))
    again = (gdstk.read_gds if format == "gds" else gdstk.read_oas)(str(tmp_path / f"layout.{format}"))
    (root,) = again.top_level()
    for layer, datatype in ((10, 2), (11, 0), (12, 0)):
        centres = [np.mean(polygon.points, axis=0) for polygon in root.get_polygons(layer=layer, datatype=datatype)]
        np.testing.assert_allclose(ordered(places(found, layer=f"{layer}/{datatype}")), ordered(np.array(centres) / 1e3), atol=NM)
    np.testing.assert_allclose(ordered(places(found, kind="cell", name="MARK")), ordered(places(found, layer="10/2")), atol=NM)
    labels = [label.origin for label in root.get_labels()]
    np.testing.assert_allclose(ordered(places(found, kind="label")), ordered(np.array(labels) / 1e3), atol=NM)
    counts = {group.name: group.count for group in found.groups if group.kind == "cell"}
    assert counts == {"MARK": 2 * 5 * 8, "INNER": 10, "MIDDLE": 2}
    assert sorted(group.size for group in found.groups if group.layer == "10/2") == pytest.approx([0.01, 0.02])


@pytest.mark.parametrize("format", ["gds", "oas"])
@pytest.mark.parametrize(("unit", "precision"), [(1e-6, 1e-9), (1e-3, 1e-9), (1e-6, 5e-10)])
def test_round_trip_to_a_nanometre(tmp_path, rng, format, unit, precision):
    xy = np.round(rng.uniform(-250, 250, (80, 2)), 6)
    library = gdstk.Library(unit=unit, precision=precision)
    mark = library.new_cell("FID")
    mark.add(gdstk.rectangle((-0.05, -0.05), (0.05, 0.05)))
    top = library.new_cell("TOP")
    for x, y in xy * 1e-3 / unit:
        top.add(gdstk.Reference(mark, (x, y)))
    begun = bring(written(tmp_path, library, format), Selection(name="fid"))
    np.testing.assert_allclose(ordered(begun.layout.marks.xy_mm), ordered(xy), atol=NM)


def record(code, data=b""):
    data += b"\0" * (len(data) % 2)
    return struct.pack(">HH", len(data) + 4, code) + data


def eight(value):
    """A GDSII real: sign, exponent to base 16 with excess 64, and 56 bits of fraction."""
    exponent = 0
    while value >= 1:
        value, exponent = value / 16, exponent + 1
    while value < 1 / 16:
        value, exponent = value * 16, exponent - 1
    return bytes([exponent + 64]) + round(value * 2**56).to_bytes(7, "big")


STAMP = struct.pack(">12h", *([1] * 12))


def by_hand(*elements):
    """A library of the cells MARK, a 2 µm square on layer 5, and TOP with the given elements; 1 nm, in µm."""
    square = struct.pack(">10i", -1000, -1000, 1000, -1000, 1000, 1000, -1000, 1000, -1000, -1000)
    return b"".join([
        record(0x0002, struct.pack(">h", 600)), record(0x0102, STAMP), record(0x0206, b"LIB"),
        record(0x0305, eight(1e-3) + eight(1e-9)),
        record(0x0502, STAMP), record(0x0606, b"MARK"), record(0x0800), record(0x0D02, struct.pack(">h", 5)),
        record(0x0E02, struct.pack(">h", 0)), record(0x1003, square), record(0x1100), record(0x0700),
        record(0x0502, STAMP), record(0x0606, b"TOP"), *elements, record(0x0700), record(0x0400)])


SREF = [record(0x0A00), record(0x1206, b"MARK"), record(0x1003, struct.pack(">2i", 123_456_789, -98_765_432)), record(0x1100)]
# Two columns along y and three rows along −x: an array turned by 90°.
AREF = [record(0x0B00), record(0x1206, b"MARK"), record(0x1A01, struct.pack(">H", 0)), record(0x1C05, eight(90.0)),
        record(0x1302, struct.pack(">2h", 2, 3)),
        record(0x1003, struct.pack(">6i", 10, 20, 10, 20 + 2 * 7_000_000, 10 - 3 * 5_000_000, 20)),
        record(0x1100)]


def test_records_by_hand(tmp_path):
    (tmp_path / "hand.bin").write_bytes(by_hand(*SREF, *AREF))
    found = drawn(tmp_path / "hand.bin")
    array = [(1e-5 - 5 * row, 2e-5 + 7 * column) for row in range(3) for column in range(2)]
    expected = ordered([(123.456789, -98.765432), *array])
    np.testing.assert_allclose(ordered(places(found, kind="cell", name="MARK")), expected, atol=NM)
    np.testing.assert_allclose(ordered(places(found, kind="shape", layer="5/0")), expected, atol=NM)
    assert next(group.size for group in found.groups if group.kind == "shape") == pytest.approx(0.002)


@pytest.mark.parametrize("cut", [5, 100, 200, -4, -3, -60])
def test_truncated_gdsii(tmp_path, cut):
    (tmp_path / "a.gds").write_bytes(by_hand(*SREF)[:cut])
    with pytest.raises(InputError, match=r"GDSII file is broken: it (ends within|does not end with)") as caught:
        bring(tmp_path / "a.gds")
    assert len(caught.value.faults) == 1


@pytest.mark.parametrize("cut", [20, 200, -1, -100])
def test_truncated_oasis(tmp_path, cut):
    library = gdstk.Library()
    cell = library.new_cell("TOP")
    for i in range(50):
        cell.add(gdstk.rectangle((3 * i, 0), (3 * i + 1, 1 + i % 7)))
    data = written(tmp_path, library, "oas").read_bytes()
    (tmp_path / "b.oas").write_bytes(data[:cut])
    with pytest.raises(InputError, match="OASIS file is broken"):
        bring(tmp_path / "b.oas")


def test_other_broken_files(tmp_path):
    def fault(data):
        (tmp_path / "a.gds").write_bytes(data)
        with pytest.raises(InputError) as caught:
            drawn(tmp_path / "a.gds")
        return str(caught.value)

    assert "the record at byte 6 has the length 1" in fault(record(2, struct.pack(">h", 600)) + b"\0\1\0\1")
    assert "the file is empty" in fault(b"")
    assert "GDSII file" in fault(b"something else")
    assert "GDSII file is broken" in fault(by_hand(*SREF).replace(b"MARK", b"MARC", 1))  # a cell placed but not there
    loop = [record(0x0A00), record(0x1206, b"TOP"), record(0x1003, struct.pack(">2i", 1, 1)), record(0x1100)]
    assert "hold each other in a circle (TOP)" in fault(by_hand(*loop))
    twice = by_hand(*SREF).replace(record(0x0606, b"TOP"), record(0x0606, b"MARK"))
    assert "two cells of the GDSII file have one name" in fault(twice)


def test_labels_name_their_marks(tmp_path):
    library = gdstk.Library()
    top = library.new_cell("TOP")
    for i, (x, y) in enumerate([(0, 0), (400_000, 0), (0, 400_000), (400_000, 400_000)]):
        top.add(gdstk.Label(f"F{i}", (x, y), layer=7), gdstk.rectangle((x - 1, y - 1), (x + 1, y + 1), layer=7))
    path = written(tmp_path, library, "gds")
    assert bring(path, Selection(kind="label")).layout.marks.id.tolist() == ["F0", "F1", "F2", "F3"]
    with pytest.raises(InputError, match=r'4 × label, layer "7/0"; 4 × shape, layer "7/0", size 0.002 mm'):
        bring(path)


def test_explosions_are_refused(tmp_path):
    library = gdstk.Library()
    cell = library.new_cell("C0")
    cell.add(gdstk.rectangle((0, 0), (1, 1)))
    for level in range(1, 5):
        parent = library.new_cell(f"C{level}")
        parent.add(gdstk.Reference(cell, (0, 0), columns=100, rows=100, spacing=(2, 2)))
        cell = parent
    with pytest.raises(InputError, match="draws more than"):
        drawn(written(tmp_path, library, "gds"))

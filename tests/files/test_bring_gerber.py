"""Marks from Gerber X2 and Excellon: written by a library and by hand, to 1 nm."""

from __future__ import annotations

import numpy as np
import pytest

from sampler.errors import InputError, MissingExtraError
from sampler.files.bring import Selection, bring, drawn

gerbonara = pytest.importorskip("gerbonara")
NM = 1e-6


def ordered(xy):
    xy = np.asarray(xy, float)
    return xy[np.lexsort(np.round(xy, 5).T)]


def places(found, **wanted):
    group = [i for i, one in enumerate(found.groups) if all(getattr(one, key) == value for key, value in wanted.items())]
    return found.xy[np.isin(found.group, group)]


def written(tmp_path, text, name="a.gbr"):
    (tmp_path / name).write_text(text)
    return tmp_path / name


GERBER = """G04 invented*
%FSLAX46Y46*%
%MOMM*%
%TA.AperFunction,FiducialPad,Global*%
%ADD10C,1.0*%
%TD*%
%ADD11R,0.5X0.25*%
%AMCROSS*21,1,1,0.1,0,0,0*21,1,0.1,1,0,0,0*%
%ADD12CROSS*%
G01*
D10*
X-250123456Y250000001D03*
X1000000D03*
D11*
X0Y0D02*
X9000000Y0D01*
X1Y-1D03*
D12*
X3000000Y4000000D03*
%LPC*%
X5000000Y5000000D03*
M02*
"""


def test_flashes_by_aperture_and_attribute(tmp_path):
    found = drawn(written(tmp_path, GERBER, "named.art"))
    np.testing.assert_allclose(places(found, attribute="FiducialPad,Global"), [(-250.123456, 250.000001), (1, 250.000001)],
                               atol=NM)
    np.testing.assert_allclose(places(found, name="rectangle 0.5 x 0.25"), [(1e-6, -1e-6)], atol=NM / 10)
    np.testing.assert_allclose(places(found, name="macro CROSS", kind="flash"), [(3, 4)], atol=NM)
    np.testing.assert_allclose(places(found, kind="clear flash"), [(5, 5)], atol=NM)
    assert len(found.xy) == 5  # what is drawn with a moving aperture is no mark


@pytest.mark.parametrize(("unit", "factor", "digits"), [("MM", 1, "46"), ("IN", 25.4, "26")])
def test_step_and_repeat(tmp_path, unit, factor, digits):
    text = f"""%FSLAX{digits}Y{digits}*%
%MO{unit}*%
%ADD10C,0.1*%
D10*
X90000000Y0D03*
%SRX2Y3I10.5J20.25*%
X5000000Y6000000D03*
%TD*%
X7000000Y6000000D03*
%SRX1Y2I0J-3*%
X0Y0D03*
%SR*%
X80000000Y0D03*
M02*"""
    blocks = [(5 + 10.5 * i + 2 * k, 6 + 20.25 * j) for i in range(2) for j in range(3) for k in range(2)]
    expected = factor * np.array([(90, 0), *blocks, (0, 0), (0, -3), (80, 0)])
    found = drawn(written(tmp_path, text))
    np.testing.assert_allclose(ordered(found.xy), ordered(expected), atol=NM)
    assert found.groups[0].size == pytest.approx(0.1 * factor)


def test_gerber_written_by_the_library(tmp_path, rng):
    from gerbonara.apertures import CircleAperture
    from gerbonara.cam import FileSettings
    from gerbonara.graphic_objects import Flash
    from gerbonara.utils import MM

    xy = np.round(rng.uniform(-250, 250, (80, 2)), 6)
    tool = CircleAperture(0.8, unit=MM)
    file = gerbonara.GerberFile(objects=[Flash(x, y, tool, unit=MM) for x, y in xy])
    path = tmp_path / "lib.gbr"
    path.write_bytes(file.write_to_bytes(FileSettings(unit=MM, number_format=(4, 6))))
    np.testing.assert_allclose(bring(path, Selection(size=0.8)).layout.marks.xy_mm, xy, atol=NM)


@pytest.mark.parametrize(("old", "new", "expected"), [
    ("M02*\n", "", "does not end with M02"), ("%MOMM*%", "", "does not contain a unit"),
    ("D12*\nX3", "D99*\nX3", "undefined aperture 99"),
    ("%LPC*%", "%ABD20*%", "uses aperture blocks"), ("%MOMM*%", "%MOMM*%\n%MIA1B0*%", "mirroring"),
    ("%MOMM*%", "%MOMM*%\n%SFA2B2*%", "scaling"), ("%MOMM*%", "%MOMM*%\n%IR90*%", "rotation of the image"),
    ("%MOMM*%", "%MOMM*%\n%OFA1B0*%", "an offset"), ("G01*", "G91*", "incremental"),
    ("%LPC*%", "%XYZ1*%", "statements that are not read"),
    ("%LPC*%", "%SRX2Y2I1J1*%", "does not end"), (GERBER, "", "the file is empty"), (GERBER, "%FS", "does not end with M02")])
def test_broken_gerber_gets_one_clear_message(tmp_path, old, new, expected):
    assert old in GERBER
    with pytest.raises(InputError, match=expected) as caught:
        bring(written(tmp_path, GERBER.replace(old, new)))
    assert len(caught.value.faults) == 1


def test_harmless_old_statements_are_read(tmp_path):
    text = GERBER.replace("%MOMM*%", "%MOMM*%\n%IPPOS*%\n%OFA0B0*%\n%SFA1.0B1.0*%\n%IR0*%\n%ASAXBY*%")
    assert len(drawn(written(tmp_path, text)).xy) == 5


DRILL = "M48\nMETRIC\nT1C0.500\nT2C1.000\n%\nG90\nT1\nX-10.123456Y20.5\nX5.0\nR3X1.5\nT2\nX0.000001Y0.0\nM30\n"


@pytest.mark.parametrize(("unit", "factor"), [("METRIC", 1), ("INCH", 25.4)])
def test_drills_by_hand(tmp_path, unit, factor):
    found = drawn(written(tmp_path, DRILL.replace("METRIC", unit), "holes.txt"))
    expected = [(-10.123456, 20.5), (5, 20.5), (6.5, 20.5), (8, 20.5), (9.5, 20.5)]
    np.testing.assert_allclose(places(found, size=0.5 * factor), factor * np.array(expected), atol=NM)
    np.testing.assert_allclose(places(found, size=1.0 * factor), [(factor * 1e-6, 0)], atol=NM / 10)


@pytest.mark.parametrize(("zeros", "expected"), [("LZ", [(10.1, -20), (10, 15)]), ("TZ", [(0.101, -0.002), (0.001, 0.015)])])
def test_stated_digits_without_points(tmp_path, zeros, expected):
    text = f"M48\nMETRIC,{zeros},000.000\nT1C0.500\n%\nT1\nX0101Y-02\nX01Y015\nM30\n"
    if zeros == "TZ":
        text = text.replace("X0101Y-02", "X101Y-2").replace("X01Y015", "X1Y15")
    np.testing.assert_allclose(drawn(written(tmp_path, text, "a.drl")).xy, expected, atol=NM)


def test_drills_written_by_the_library(tmp_path, rng):
    from gerbonara.apertures import ExcellonTool
    from gerbonara.cam import FileSettings
    from gerbonara.graphic_objects import Flash
    from gerbonara.utils import MM

    xy = np.round(rng.uniform(-250, 250, (80, 2)), 6)
    tools = [ExcellonTool(size, unit=MM) for size in (0.3, 3.0)]
    file = gerbonara.ExcellonFile(objects=[Flash(x, y, tools[i % 2], unit=MM) for i, (x, y) in enumerate(xy)])
    path = tmp_path / "lib.drl"
    path.write_bytes(file.write_to_bytes(FileSettings(unit=MM, number_format=(4, 6))))
    np.testing.assert_allclose(ordered(bring(path, Selection(size=3)).layout.marks.xy_mm), ordered(xy[1::2]), atol=NM)


@pytest.mark.parametrize(("text", "expected"), [
    (DRILL.replace("M30\n", ""), "does not end with M30"),
    (DRILL.replace("X5.0", "X5"), "coordinates without decimal points"),
    (DRILL.replace("T2\nX", "T7\nX"), "Undefined tool index 7"), (DRILL.replace("R3X1.5", "G85Q"), "file is broken"),
    (DRILL.replace("T2C1.000", "T1C1.000\nT2C1.000"), "said twice"),
    ("M48\nM30\n", "nothing in the file can be a mark"), ("M48", "M30")])
def test_broken_drill_files_get_one_clear_message(tmp_path, text, expected):
    with pytest.raises(InputError, match=expected) as caught:
        bring(written(tmp_path, text, "a.drl"))
    assert len(caught.value.faults) == 1


def test_files_of_no_known_format(tmp_path):
    with pytest.raises(InputError, match="none of DXF, GDSII, OASIS, Gerber, Excellon"):
        drawn(written(tmp_path, "id,x,y\n", "marks.csv"))
    with pytest.raises(InputError, match="folder"):
        drawn(tmp_path)
    with pytest.raises(InputError, match="no such file"):
        drawn(tmp_path / "none.gbr")


@pytest.mark.parametrize(("package", "name", "content", "extra"), [
    ("ezdxf", "a.dxf", "x", "dxf"), ("gdstk", "a.oas", "%SEMI-OASIS\r\n" + "x" * 30 + "\2" + "x" * 255, "gds"),
    ("gerbonara", "a.gbr", GERBER, "gerber"), ("gerbonara", "a.drl", DRILL, "gerber")])
def test_a_missing_extra_is_named(tmp_path, monkeypatch, package, name, content, extra):
    import sys

    monkeypatch.setitem(sys.modules, package, None)
    with pytest.raises(MissingExtraError, match=rf'needs the extra {extra}, .*pip install "sampler\[{extra}\]"'):
        drawn(written(tmp_path, content, name))

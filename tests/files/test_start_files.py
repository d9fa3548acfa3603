"""From a bare table to files that the readers take, and that say what was guessed."""

from __future__ import annotations

import math
import re
import tomllib

import numpy as np
import pytest

from sampler.errors import InputError
from sampler.files.start import read_start, start_files
from sampler.files.study import read_study
from sampler.model.basis import design_blocks, places
from sampler.panel.layout import Grid
from sampler.tasks.start import StartOptions
from sampler.uncertainty.information import Knowledge, information, whiten

GRID = Grid("", 4, 4, (118, 119), (122, 123))
XY = (GRID.cell_centres_mm[:, None] + np.array([[-50.0, -50], [50, -50], [-50, 50], [50, 50]])).reshape(-1, 2)


def table(tmp_path, header, rows, separator=",", name="marks of L1.csv", encoding="utf-8"):
    path = tmp_path / name
    lines = [separator.join(header)] if header else []
    path.write_bytes("\r\n".join(lines + [separator.join(map(str, row)) for row in rows]).encode(encoding))
    return path


def begin(tmp_path, path, options=None):
    """Everything written and read back."""
    begun = read_start(path, options)
    folder = tmp_path / "out"
    folder.mkdir()
    for name, content in start_files(begun).items():
        (folder / name).write_text(content, encoding="utf-8", newline="")
    return begun, read_study(folder / "study.toml")


def test_german_spreadsheet_in_um_from_the_corner(tmp_path):
    rows = [(f"P{i}", "Kreuz", f"{1e3 * (x + 255):.1f}".replace(".", ","), f"{1e3 * (y + 257.5):.1f}".replace(".", ","))
            for i, (x, y) in enumerate(XY)]
    begun, study = begin(tmp_path, table(tmp_path, ["Bezeichnung", "Typ", "X-Koordinate [µm]", "Y-Koordinate [µm]"], rows, ";",
                                         encoding="latin-1"))
    assert begun.findings[0] == ('columns: x from "X-Koordinate [µm]", y from "Y-Koordinate [µm]", name from "Bezeichnung", '
                                 'kind from "Typ"')
    layout = study.layout
    assert study.warnings == ()
    assert (layout.width_mm, layout.height_mm, layout.origin_mm) == (510, 515, (-255, -257.5))
    assert layout.name == "marks of L1"
    np.testing.assert_allclose(layout.marks.xy_mm, XY, atol=1e-9)
    assert layout.marks.id.tolist() == [f"P{i}" for i in range(len(XY))]
    assert set(layout.marks.kind) == {"Kreuz"}
    assert layout.grids == begun.layout.grids
    assert (layout.grids[0].columns, layout.grids[0].pitch_mm, layout.grids[0].centre_mm) == (4, (122, 123), (0, 0))


@pytest.mark.parametrize(("columns", "offset"), [(("x", "y"), 0), (("id", "x", "y"), 1)])
def test_no_headings_at_all(tmp_path, columns, offset):
    rows = [([i + 1] if offset else []) + [x, y] for i, (x, y) in enumerate(XY)]
    begun, study = begin(tmp_path, table(tmp_path, None, rows))
    np.testing.assert_allclose(study.layout.marks.xy_mm, XY, atol=1e-9)
    assert begun.findings[0].endswith("the table has no headings")
    assert len(study.layout.marks) == len(XY)  # the first row is a mark, too


def test_the_study_can_be_met_by_some_of_the_marks(tmp_path):
    _, study = begin(tmp_path, table(tmp_path, ["x", "y"], XY))
    (limit,) = study.limits
    marks = study.layout.marks
    blocks = whiten(design_blocks(study.model, places(study.layout, marks.xy_mm)), study.noise.sigma_um(marks))
    corners = design_blocks(study.model, places(study.layout, study.layout.outline_mm)).reshape(-1, len(study.model))
    best = 3 * math.sqrt(Knowledge.of(information(blocks)).variance(corners).max())
    assert best < limit.position_um < 3 * best
    assert study.model.names[:2] == ("translation_x", "translation_y")


def test_commented_keys_are_good_keys(tmp_path):
    """What a comment offers must be readable once the comment sign is gone."""
    begun = read_start(table(tmp_path, ["x", "y"], XY))
    files = start_files(begun)
    loosened = {name: re.sub(r"^# (?=\[|[a-z_]+ = )", "", text, flags=re.M) if name.endswith("toml") else text
                for name, text in files.items()}
    for name, text in loosened.items():
        (tmp_path / name).write_text(text, encoding="utf-8")
    tomllib.loads(loosened["layout.toml"])
    study = read_study(tmp_path / "study.toml")
    assert study.layout.keep_outs[0].name == "clamp"
    assert study.layout.edge_exclusion_mm == 5
    assert len(study.limits) == 3
    assert "exposure.rotation" in study.model.names


@pytest.mark.parametrize("name", ['a "quoted" \\ name.csv', "mit Ümläut.csv", "line\x7fdel.csv"])
def test_awkward_names_survive(tmp_path, name):
    _, study = begin(tmp_path, table(tmp_path, ["x", "y"], XY, name=name))
    assert study.layout.name == name.removesuffix(".csv")


def test_awkward_ids_survive(tmp_path):
    ids = [f'"a,""{i}"""' for i in range(len(XY))]
    _, study = begin(tmp_path, table(tmp_path, ["id", "x", "y"], [(name, *at) for name, at in zip(ids, XY, strict=True)]))
    assert study.layout.marks.id[0] == 'a,"0"'


def test_every_invented_value_is_marked(tmp_path):
    text = start_files(read_start(table(tmp_path, ["x", "y"], XY)))["study.toml"]
    for key in ("mark_um", "local_um", "position_um"):
        line = next(line for line in text.splitlines() if line.startswith(key))
        assert "# INVENTED" in line


@pytest.mark.parametrize(("header", "rows", "options", "expected"), [
    (["a", "b"], [(1, 2)], {}, "no heading says that its column of numbers holds x"),
    (["x", "y"], XY * 0.1, {}, "the unit of the coordinates is in doubt"),
    (["x", "y"], [*XY, ("oops", 3)], {}, "no heading says that its column of numbers holds x"),
    (["x", "y"], [(1, 2)] * 3, {}, "lie at one place"),
    (["x", "y", "z"], XY, {"x": "y", "y": "y"}, "one column is meant for two things"),
    (["x [mm]", "y [um]"], XY, {}, "name different units"),
    (None, [(1.5, 2, 3, 4), (2, 2, 2, 7)], {}, "no headings and 4 columns"),
])
def test_doubts_and_faults_name_the_file(tmp_path, header, rows, options, expected):
    with pytest.raises(InputError, match=expected) as caught:
        read_start(table(tmp_path, header, rows), StartOptions(**options))
    assert all("marks of L1.csv: " in fault for fault in caught.value.faults)


def test_a_bad_cell_far_down_is_named_with_its_line(tmp_path):
    rows = [*np.tile(XY, (5, 1)).tolist(), ("oops", 3)]
    with pytest.raises(InputError, match='line 321: column_1 is the text "oops"') as caught:
        read_start(table(tmp_path, None, rows), StartOptions(unit="mm"))
    assert len(caught.value.faults) == 1


@pytest.mark.parametrize("content", [b"", b"\0\0\1", b"\n\n", b";;\n;;\n", b'x,y\n', b"x,y\n\"" + b"a" * 200_000])
def test_files_that_are_no_table(tmp_path, content):
    (tmp_path / "a.csv").write_bytes(content)
    with pytest.raises(InputError):
        read_start(tmp_path / "a.csv")
    with pytest.raises(InputError, match="folder"):
        read_start(tmp_path)
    with pytest.raises(InputError, match="no such file"):
        read_start(tmp_path / "none.csv")

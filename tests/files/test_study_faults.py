"""Every fault of a study, its layout and its marks is said, all together, in words."""

from __future__ import annotations

from pathlib import Path

import pytest
from small_study import LAYOUT, MARKS, STUDY, faults_of, write_study

from sampler.files.study import read_study

CROSSED = "[[0, 0], [100, 100], [100, 0], [0, 100]]"
# ruff: noqa: E501
MUTATIONS = [
    # study: file, what is replaced, by what, phrases of the one fault
    ("study", "format = 1", "format = 2", "format is 2, which this version does not know; give format = 1"),
    ("study", "format = 1\n", "", "format is missing; give format = 1"),
    ("study", 'layout = "layouts/panel.toml"\n', "", "layout is missing; give the path of the layout file"),
    ("study", "layout =", "layuot =", 'layuot is not a known key; did you mean "layout"?'),
    ("study", "mark_um", "mark_sigma", 'did you mean "mark_um"?'),
    ("study", "seed = 3", "sed = 3", '[search] sed is not a known key; did you mean "seed"?'),
    ("study", "seed = 3", "zebra = 3", "[search] zebra is not a known key; the keys are seconds, seed, objective"),
    ("study", "seed = 3", "seed = 3.5", "[search] seed is 3.5; give a whole number of at least 0"),
    ("study", "seconds = 5", 'seconds = "5"', '[search] seconds is the text "5"; give a finite number above 0'),
    ("study", "seconds = 5", "seconds = true", "[search] seconds is true; give a finite number above 0"),
    ("study", "mark_um = [0.25, 0.3]", "mark_um = [0.25, 0]", "[noise] mark_um is [0.25, 0]; give [x, y], 2 finite numbers above 0"),
    ("study", "mark_um = [0.25, 0.3]", "mark_um = 0.25", "[noise] mark_um is 0.25; give [x, y]"),
    ("study", "mark_um = [0.25, 0.3]", "mark_um = [0.25, nan]", "[noise] mark_um is [0.25, nan]"),
    ("study", "local_um = [0.4, 0.5]", "local_um = [-0.4, 0.5]", "[noise] local_um is [-0.4, 0.5]; give [x, y], 2 finite numbers of at least 0"),
    ("study", "coverage_factor = 3.0", "coverage_factor = inf", "coverage_factor is inf; give a finite number above 0"),
    ("study", "coverage_factor = 3.0", f"coverage_factor = 1{'0' * 400}", "coverage_factor is 1"),
    ("study", "max = 8.0", "max = -8.0", "[[limit]] no. 1 max is -8; give a finite number above 0"),
    ("study", "max = 8.0\n", "", "[[limit]] no. 1 max is missing; give the largest k·u allowed"),
    ("study", "max = 8.0", "max = 8.0\nposition_um = 1.0", "no. 1 has terms and position_um; with terms give max"),
    ("study", "position_um = 2.0", "max = 2.0", "no. 2 has region and max; with region give position_um"),
    ("study", 'region = "panel"', "", "[[limit]] no. 2 has none of terms, region; give exactly one of terms, region"),
    ("study", 'region = "panel"', 'region = "panel"\nterms = "all"', "[[limit]] no. 2 has terms and region; give exactly one"),
    ("study", 'region = "panel"', 'region = "panle"', 'no. 2 region "panle" is not known; did you mean "panel"?'),
    ("study", 'region = "panel"', 'region = "cells:exposre"', 'did you mean "cells:exposure"?'),
    ("study", 'region = "panel"', 'region = "wafer"', 'region "wafer" is not known; give one of panel, marks, polygon'),
    ("study", 'region = "panel"', 'region = "polygon"', "[[limit]] no. 2 polygon_mm is missing"),
    ("study", 'region = "panel"', f"polygon_mm = {CROSSED}", "polygon_mm crosses or touches itself near (50, 50)"),
    ("study", 'region = "panel"', f'region = "marks"\npolygon_mm = {CROSSED}', 'polygon_mm and the region "marks"; drop one'),
    ("study", 'region = "panel"', "polygon_mm = [[0, 0], [1, 1], [0]]", "polygon_mm point 3 is [0]; give [x, y]"),
    ("study", 'region = "panel"', 'region = "panel"\nof = "corection"', 'did you mean "correction"?'),
    ("study", 'panel = ["affine", "trapezoid"]', 'panel = ["afine", "trapezoid"]', '[model] panel "afine" is not a term or family; did you mean "affine"?'),
    ("study", 'panel = ["affine", "trapezoid"]', 'panel = "affine"', '[model] panel is the text "affine"; give a list of texts'),
    ("study", 'panel = ["affine", "trapezoid"]\n[model.exposure]\nshared = ["rotation"]', "", "[model] has no terms"),
    ("study", "[model.exposure]", "[model.exposre]", '[model.exposre]: "exposre" is not a grid of the layout; did you mean "exposure"?'),
    ("study", 'shared = ["rotation"]', 'shard = ["rotation"]', '[model.exposure] shard is not a known key; did you mean "shared"?'),
    ("study", 'shared = ["rotation"]', "", "[model.exposure] has neither shared nor each"),
    ("study", 'shared = ["rotation"]', 'shared = ["rotation"]\neach = ["rotation"]', 'has "rotation" in shared and in each'),
    ("study", "[noise]", '[model.potential]\nterms = ["affine"]\nsd_um = 0.1\n[noise]', "[model.potential] terms are all in [model] already"),
    ("study", "[rules]", '[[prior]]\nterms = "scale_x"\nsd = 0\n[rules]', "[[prior]] sd is 0; give a finite number above 0"),
    ("study", "[rules]", '[[prior]]\nterms = "scale_z"\nsd = 1\n[rules]', '[[prior]] terms "scale_z" is not a term or family'),
    ("study", '"scale_x", "scale_y"', '"magnification"', '[[limit]] no. 1 terms name "magnification", which the model does not have; add it to [model] or drop it here'),
    ("study", '"scale_x", "scale_y"', '"order2"', '"order2", but the model does not have dx_x2, dx_y2, dy_x2, dy_y2; add'),
    ("study", '"scale_x", "scale_y"', '"exposure.rotatoin"', '"rotatoin" is not a term or family; did you mean "rotation"?'),
    ("study", '"scale_x", "scale_y"', '"drill.rotation"', '"drill.rotation": "drill" is not a grid of the layout; the grids are exposure'),
    ("study", '"scale_x", "scale_y"', '"exposure[c9r9].rotation"', '"c9r9" is not a cell of exposure; the cells are c1r1 to c4r4'),
    ("study", '"scale_x", "scale_y"', "3", "[[limit]] no. 1 terms is [3]; give a list of texts"),
    ("study", "[[limit]]\nterms", "[limit2]\nterms", 'limit2 is not a known key'),
    ("study", 'required = ["E-c1r1-1"]', 'required = ["E-c1r1-11"]', '[rules] required "E-c1r1-11" is not a mark of the layout; did you mean "E-c1r1-1"?'),
    ("study", 'required = ["E-c1r1-1"]', 'required = ["E-c2r2-4"]', '[rules] required "E-c2r2-4" is also forbidden'),
    ("study", 'required = ["E-c1r1-1"]', 'required = ["F1"]', 'required mark "F1" lies inside keep-out "clamp left"; move the mark'),
    ("study", 'required = ["E-c1r1-1"]', 'required = ["F2"]', 'required mark "F2" lies inside keep-out "pin"'),
    ("study", 'forbidden = ["E-c2r2-4"]', 'forbidden = ["zebra"]', '[rules] forbidden "zebra" is not a mark of the layout; give ids of marks'),
    ("study", "max_sites = 60", "max_sites = 0", "[rules] max_sites is 0; give a whole number of at least 1"),
    ("study", "[search]", "[search", "study.toml: this is not TOML: "),
    ("study", "panel.toml", "panle.toml", "panle.toml: there is no such file; give the path of a layout file (TOML)"),
    ("study", "layouts/panel.toml", "layouts", "layouts: this is a folder; give the path of a layout file (TOML) in it"),
    ("study", STUDY[STUDY.index("[[limit]]"):STUDY.index("[rules]")], "", "limit is missing; give at least one table [[limit]], or a number of sites in [search] sites"),
    # how a panel is measured
    ("study", "[rules]", '[measure]\nside = "top"\n[rules]', '[measure] side is the text "top"; give "front" or "back" or "both"'),
    ("study", "[rules]", "[measure]\nfield_of_view_mm = [2, 0]\n[rules]", "[measure] field_of_view_mm is [2, 0]; give [width, height], 2 finite numbers above 0"),
    ("study", "[rules]", "[measure]\nstop_um = [-0.1, 0]\n[rules]", "[measure] stop_um is [-0.1, 0]; give [x, y], 2 finite numbers of at least 0"),
    ("study", "[rules]", "[measure]\nflip_um = 1\n[rules]", "[measure] flip_um is 1; give [x, y]"),
    ("study", "[rules]", "[measure]\nread_rate = 0.9\n[rules]", "[measure] read_rate is 0.9; give a table of kinds of marks"),
    ("study", "[rules]", '[measure.read_rate]\n"" = 1.5\n[rules]', '[measure] read_rate "" is 1.5; give a finite number above 0 and of at most 1'),
    ("study", "[rules]", "[measure.read_rate]\nhole = 0.9\n[rules]", '[measure] read_rate "hole" is not a kind of any mark; the marks have no kinds'),
    ("study", "[rules]", "[machine]\nspeed_mm_s = 300\n[rules]", "[machine] speed_mm_s is 300; give [x, y]"),
    ("study", "[rules]", "[machine]\nspeed = 300\n[rules]", '[machine] speed is not a known key; did you mean "speed_mm_s"?'),
    ("study", "[rules]", "[machine]\nsettling_s = -1\n[rules]", "[machine] settling_s is -1; give a finite number of at least 0"),
    ("study", "[rules]", '[machine]\norigin = "upper"\n[rules]', '[machine] origin is the text "upper"; did you mean "upper-'),
    ("study", "[rules]", "[machine]\nrotation = 45\n[rules]", "[machine] rotation is 45; give 0, 90, 180 or 270"),
    ("study", "[rules]", '[machine]\nmirrored = "yes"\n[rules]', '[machine] mirrored is the text "yes"; give true or false'),
    ("study", "[rules]", '[machine]\nflip_axis = "z"\n[rules]', '[machine] flip_axis is the text "z"; give "x" or "y"'),
    # rules
    ("study", "max_sites = 60", 'required_kinds = ["hole"]', '[rules] required_kinds "hole" is not a kind of any mark; the marks have no kinds'),
    ("study", "max_sites = 60", 'required_kinds = [""]', "[rules] required_kinds is [an empty text]; give a list of texts"),
    ("study", "max_sites = 60", "lost = 3", "[rules] lost is 3; give a whole number of at least 0 and of at most 2"),
    ("study", "max_sites = 60", "min_spacing_mm = 0", "[rules] min_spacing_mm is 0; give a finite number above 0"),
    ("study", "max_sites = 60", "max_seconds = 60", "[rules] max_seconds needs the machine's speeds and times; add a table [machine]"),
    ("study", "max_sites = 60", 'per_cell = {grid = "exposre", min = 1}', '[[rules.per_cell]] grid "exposre" is not a grid of the layout; did you mean "exposure"?'),
    ("study", "max_sites = 60", 'per_cell = {grid = "exposure"}', "[[rules.per_cell]] has neither min nor max; give at least one"),
    ("study", "max_sites = 60", 'per_cell = {grid = "exposure", min = 2, max = 1}', "[[rules.per_cell]] min is 2 and max is 1; give a max of at least min"),
    ("study", "max_sites = 60", "per_cell = {min = 1}", "[[rules.per_cell]] grid is missing; give the name of a grid"),
    ("study", "max_sites = 60", 'per_cell = {grid = "exposure", min = -1}', "[[rules.per_cell]] min is -1; give a whole number of at least 0"),
    ("study", "[search]", '[[rules.per_zone]]\nname = "a"\nmin = 1\n[search]', "[[rules.per_zone]] has none of rectangle_mm, circle_mm, polygon_mm"),
    ("study", "[search]", '[[rules.per_zone]]\nname = "a"\nmin = 1\ncircle_mm = [0, 0, 0]\n[search]', 'zone "a" circle_mm has the radius 0; give a radius above 0'),
    ("study", "[search]", f'[[rules.per_zone]]\nname = "a"\nmin = 1\npolygon_mm = {CROSSED}\n[search]', 'zone "a" polygon_mm crosses or touches itself'),
    ("study", "[search]", '[[rules.per_zone]]\nmin = 1\ncircle_mm = [0, 0, 9]\n[search]', "[[rules.per_zone]] name is missing; give a name for the zone"),
    # search
    ("study", "seed = 3", 'objective = "time"', '[search] objective is the text "time"; give "sites" or "seconds"'),
    ("study", "seed = 3", 'objective = "seconds"', '[search] objective "seconds" needs the machine\'s speeds and times; add a table [machine]'),
    ("study", "seed = 3", 'prefer = "time"', '[search] prefer "time" needs the machine'),
    ("study", "seed = 3", "information_loss = 0.9", "[search] information_loss is 0.9; give a finite number of at least 0 and of at most 0.5"),
    ("study", "seed = 3", "sites = 70", "[search] sites is 70, but [rules] max_sites is 60; change one of them"),
    ("study", "seed = 3", 'sites = 7\nobjective = "seconds"\n[machine]', '[search] has sites and objective "seconds"; give one of them'),
    # process
    ("study", "coverage_factor = 3.0", 'process = "gone.toml"', "gone.toml: there is no such file; give the path of a file that `characterise` wrote"),
    ("study", "coverage_factor = 3.0", "process = 3", "process is 3; give a text"),
    # layout
    ("layout", "width_mm = 510.0", "width_mm = -510.0", "[panel] width_mm is -510; give a finite number above 0"),
    ("layout", "width_mm = 510.0", "widht_mm = 510.0", '[panel] widht_mm is not a known key; did you mean "width_mm"?'),
    ("layout", 'origin = "centre"', 'origin = "center"', 'origin is the text "center"; did you mean "centre"?'),
    ("layout", 'origin = "centre"', "origin = 0", 'origin is 0; give "centre" or "lower-left"'),
    ("layout", "[panel]", "[pannel]", 'pannel is not a known key; did you mean "panel"?'),
    ("layout", "edge_exclusion_mm = 8.0", "edge_exclusion_mm = 300", "edge_exclusion_mm is 300, which leaves nothing of the panel"),
    ("layout", "edge_exclusion_mm = 8.0", f"outline_mm = {CROSSED}", "[panel] outline_mm crosses or touches itself near (50, 50)"),
    ("layout", "edge_exclusion_mm = 8.0", "outline_mm = [[0, 0], [510, 0], [510, 515]]", "outline_mm reaches outside the panel, which is x from -255 to 255"),
    ("layout", "edge_exclusion_mm = 8.0", "outline_mm = [[0, 0], [1, 1]]", "give a list of at least 3 points [x, y]"),
    ("layout", "columns = 4", "columns = 0", "[[grid]] columns is 0; give a whole number of at least 1"),
    ("layout", "columns = 4\n", "", "[[grid]] columns is missing; give the number of columns"),
    ("layout", "cell_mm = [118.0, 119.0]", "cell_mm = [118.0]", "[[grid]] cell_mm is [118]; give [width, height] of a cell, 2 finite numbers above 0"),
    ("layout", "pitch_mm = [122.0, 123.0]", "pitch_mm = [110.0, 123.0]", "pitch_mm [110, 123] is smaller than cell_mm [118, 119], so that cells overlap"),
    ("layout", 'name = "exposure"', 'name = "my shots"', '[[grid]] name is the text "my shots"; give letters, digits'),
    ("layout", "[[marks]]\ngrid", '[[grid]]\nname = "exposure"\ncolumns = 1\nrows = 1\ncell_mm = [9, 9]\n[[marks]]\ngrid', 'name "exposure" is already taken'),
    ("layout", 'grid = "exposure"', 'grid = "exposre"', '[[marks]] no. 1 grid "exposre" is not a grid of this layout; did you mean "exposure"?'),
    ("layout", 'prefix = "E"\n', "", "[[marks]] no. 1 prefix is missing"),
    ("layout", 'file = "marks.csv"', "", "[[marks]] no. 2 has none of file, grid; give exactly one of file, grid"),
    ("layout", 'file = "marks.csv"', 'file = "marks.csv"\nprefix = "F"', "has file and prefix; prefix goes with grid"),
    ("layout", 'file = "marks.csv"', 'file = "other.csv"', "other.csv: there is no such file; give the path of a CSV file with the columns id, x_mm, y_mm"),
    ("layout", "rectangle_mm = [-255.0, -40.0, -230.0, 40.0]", "rectangle_mm = [-230, -40, -255, 40]", 'keep-out "clamp left" rectangle_mm is [-230, -40, -255, 40], which has no positive size'),
    ("layout", "rectangle_mm = [-255.0, -40.0, -230.0, 40.0]", f"polygon_mm = {CROSSED}", 'keep-out "clamp left" polygon_mm crosses or touches itself'),
    ("layout", "circle_mm = [0.0, 0.0, 9.0]", "circle_mm = [0, 0, -9]", 'keep-out "pin" circle_mm has the radius -9; give a radius above 0'),
    ("layout", "circle_mm = [0.0, 0.0, 9.0]", "", "[[keep_out]] no. 2 has none of rectangle_mm, circle_mm, polygon_mm"),
    ("layout", "circle_mm = [0.0, 0.0, 9.0]", "circle_mm = [0, 0, 9]\nrectangle_mm = [0, 0, 1, 1]", "[[keep_out]] no. 2 has rectangle_mm and circle_mm"),
    ("layout", "[[keep_out]]\nname = \"pin\"", "[[marks]]\nfile = \"marks.csv\"\n[[keep_out]]\nname = \"pin\"", '[[marks]] no. 3 file "marks.csv" is already read by [[marks]] no. 2; name each file once'),
    ("layout", "[[keep_out]]\nname = \"pin\"", '[[keep_out]]\nname = "all"\nrectangle_mm = [-255, -258, 255, 258]\n[[keep_out]]\nname = "pin"', 'no mark may be measured: 65 inside keep-out "all"; 3 inside keep-out "clamp left"'),
    # marks
    ("marks", "F3,", "F2,", 'mark id "F2" occurs 2 times; give each mark its own id'),
    ("marks", "F3,10.0,10.0,back", "F3,0.0,3.0,front", 'marks "F2" and "F3" lie at the same place; keep one of them'),
    ("marks", "200.5", "2oo.5", 'marks.csv: line 5: x_mm is the text "2oo.5"; give a finite number'),
    ("marks", "200.5", "NaN", 'line 5: x_mm is the text "NaN"; give a finite number'),
    ("marks", "200.5", "-inf", "line 5: x_mm is the text \"-inf\""),
    ("marks", "200.5", "", "line 5: x_mm is blank; give a finite number"),
    ("marks", "F4,", ",", "line 5: id is blank; give a text"),
    ("marks", "0.5\n", "0\n", 'line 3: sigma_x_um is the text "0"; give a finite number above 0'),
    ("marks", "back", "top", 'line 4: side is the text "top"; give "front" or "back"'),
    ("marks", "F4,200.5,-11.25,,", "F4,200.5", "line 5: the row has 2 cells, the header 5; give one cell for each column"),
    ("marks", "F4,200.5,", "F4,200,5,", "line 5: the row has 6 cells, the header 5; give one cell for each column; a decimal comma needs semicolons"),
    ("marks", "x_mm", "xmm", 'the column x_mm is missing from line 1, which must name the columns; is it "xmm"?'),
    ("marks", "side", "x_mm", "the column x_mm occurs 2 times; keep one"),
    ("marks", MARKS, "id\nF1\nF2\n", 'the table has one column, the text "id"; give the columns id, x_mm, y_mm, separated by comma'),
    ("marks", MARKS, "id,x_mm,y_mm\n\n,,\n", "the table has no rows"),
    ("marks", MARKS, "", "marks.csv: the file is empty; give a CSV file with the columns id, x_mm, y_mm"),
    ("marks", MARKS, "PK\x03\x04\0\0binary", "marks.csv: this is a binary file; give a CSV file"),
]


@pytest.mark.parametrize(("file", "old", "new", "phrase"), MUTATIONS, ids=range(len(MUTATIONS)))
def test_fault(tmp_path, file, old, new, phrase):
    texts = {"study": STUDY, "layout": LAYOUT, "marks": MARKS}
    assert old in texts[file]
    texts[file] = texts[file].replace(old, new, 1)
    faults = faults_of(write_study(tmp_path, **texts))
    assert [fault for fault in faults if phrase in fault], faults
    assert len(faults) <= 3  # what follows from one fault is not listed as faults of its own
    name = {"study": "study.toml", "layout": "panel.toml", "marks": "marks.csv"}[file]
    assert any(name in fault or "layouts" in fault or "gone" in fault for fault in faults)
    assert all("; " in fault or "and " in fault for fault in faults)  # what was found; what to do


def test_the_unchanged_study_has_no_fault(tmp_path):
    assert read_study(write_study(tmp_path)).warnings == ()


def test_faults_of_all_files_come_together(tmp_path):
    faults = faults_of(write_study(
        tmp_path, STUDY.replace("seed = 3", "sede = 3").replace("[0.25, 0.3]", "[0, 1]").replace('"affine"', '"afine"'),
        LAYOUT.replace("columns = 4", "colums = 4").replace("0.0, 9.0]", "0.0, -9.0]"), MARKS.replace("200.5", "x").replace("F1,", ",")))
    text = "\n".join(faults)
    for phrase in ("sede", "mark_um", "afine", "colums", "radius -9", 'x_mm is the text "x"', "id is blank"):
        assert phrase in text
    assert len(faults) == len(set(faults))


def test_many_faulty_rows_are_counted(tmp_path):
    rows = "".join(f"M{i},{'x' if i % 2 else i},{i}\n" for i in range(5000))
    faults = faults_of(write_study(tmp_path, marks="id,x_mm,y_mm\n" + rows))
    assert len([fault for fault in faults if "x_mm is" in fault]) == 20
    assert "line 3: x_mm" in faults[0]
    assert any("and 2,480 more faults in rows" in fault for fault in faults)
    twice = faults_of(write_study(tmp_path, marks="id,x_mm,y_mm\n" + "".join(f"M{i // 2},{i / 50},{i // 3}\n" for i in range(300))))
    assert any("and 130 more ids" in fault for fault in twice)
    same = faults_of(write_study(tmp_path, marks="id,x_mm,y_mm\n" + "".join(f"M{i},{i // 2 / 50},5\n" for i in range(300))))
    assert any("and 130 more marks lie at the place of another" in fault for fault in same)


@pytest.mark.parametrize(("content", "phrase"), [
    (None, "there is no such file; give the path of a study file (TOML)"),
    (b"", "the file is empty"), (b"\xef\xbb\xbf \r\n", "the file is empty"),
    (b"\x89PNG\r\n\x1a\n\0\0\0", "this is a binary file; give a study file (TOML)"),
    ("title = 'käse'".encode("latin-1"), "this is not UTF-8 text (line 1); save it as UTF-8"),
    (b"a = 1\na = 2\n", "this is not TOML"), (b"[" * 5000, "this is not TOML"), (b"id,x_mm\n1,2\n", "this is not TOML"),
])
def test_files_that_are_no_study(tmp_path, content, phrase):
    path = write_study(tmp_path, study=content)
    faults = faults_of(path)
    assert len(faults) == 1
    assert phrase in faults[0]
    assert faults[0].startswith(path.as_posix())


def test_files_that_cannot_be_read(tmp_path, monkeypatch):
    def refuse(path):
        raise PermissionError(13, "Permission denied", str(path))

    path = write_study(tmp_path)
    assert "cannot be read (embedded null byte)" in faults_of("a\0b.toml")[0]
    monkeypatch.setattr(Path, "read_bytes", refuse)
    assert faults_of(path)[0].endswith("cannot be read (Permission denied); give a study file (TOML) that may be read")
    assert "this is a folder" in faults_of(tmp_path)[0]  # as on systems that refuse to read folders


def test_a_table_where_tables_are_wanted(tmp_path):
    faults = faults_of(write_study(tmp_path, STUDY[:STUDY.index("[[limit]]")] + "[limit]\nterms = 'all'\nmax = 1\n"))
    assert faults[0].endswith("limit is a table; give tables [[limit]]")
    faults = faults_of(write_study(tmp_path, "model = 3\n" + STUDY[:STUDY.index("[model]")] + STUDY[STUDY.index("[noise]"):]))
    assert any(fault.endswith("model is 3; give a table [model]") for fault in faults)


def test_the_nearest_of_very_many_ids(tmp_path):
    marks = "id,x_mm,y_mm\n" + "".join(f"Mark{i:06},{i % 400 - 200}.3,{i // 400 - 125}.3\n" for i in range(40_000))
    fault, = faults_of(write_study(tmp_path, STUDY.replace("E-c1r1-1", "mark031415"), marks=marks))
    assert fault.endswith('"mark031415" is not a mark of the layout; did you mean "Mark031415"?')


def test_a_folder_is_no_study(tmp_path):
    assert "this is a folder" in faults_of(tmp_path)[0]


def test_all_candidates_forbidden(tmp_path):
    layout = LAYOUT[:LAYOUT.index("[[marks]]\ngrid")] + LAYOUT[LAYOUT.index('[[marks]]\nfile'):]
    study = STUDY.replace('required = ["E-c1r1-1"]', "").replace('"E-c2r2-4"', '"F3", "F4"')
    assert "2 forbidden; move marks" in faults_of(write_study(tmp_path, study, layout))[0]


def test_more_required_than_allowed(tmp_path):
    study = STUDY.replace('["E-c1r1-1"]', '["E-c1r1-1", "E-c1r1-2"]').replace("max_sites = 60", "max_sites = 1")
    assert faults_of(write_study(tmp_path, study))[0].endswith(
        "[rules] max_sites is 1, but 2 sites are required; raise it to at least 2")


def scaled(factor):
    return "id,x_mm,y_mm\n" + "".join(f"M{i},{(i % 7 - 3) * 70 * factor},{(i // 7 - 3) * 72 * factor}\n" for i in range(49))


@pytest.mark.parametrize(("factor", "unit"), [(1000, "µm"), (1 / 25.4, "inches")])
def test_units_that_look_wrong_are_doubted(tmp_path, factor, unit):
    warnings = read_study(write_study(tmp_path, marks=scaled(factor))).warnings
    assert len(warnings) == 1
    assert "marks.csv" in warnings[0]
    assert f"they look like {unit}: give mm" in warnings[0]


def test_doubt_is_part_of_the_fault_when_nothing_is_left(tmp_path):
    layout = LAYOUT[:LAYOUT.index("[[marks]]\ngrid")] + LAYOUT[LAYOUT.index('[[marks]]\nfile'):]
    study = STUDY.replace('required = ["E-c1r1-1"]\nforbidden = ["E-c2r2-4"]', "")
    marks = scaled(1000).replace("M24,0,0\n", "")
    fault, = faults_of(write_study(tmp_path, study, layout, marks))
    assert "no mark may be measured: 48 outside the outline" in fault
    assert "look like µm" in fault


def test_more_doubts(tmp_path):
    shifted = "id,x_mm,y_mm\n" + "".join(f"M{i},{20 + i % 7 * 70},{20 + i // 7 * 72}\n" for i in range(49))
    assert 'set origin = "lower-left"' in read_study(write_study(tmp_path, marks=shifted)).warnings[0]
    inches = LAYOUT.replace("510.0", "20.08").replace("515.0", "20.28")
    assert any("width_mm and height_mm are 20.08 and 20.28, which look like inches" in fault
               for fault in read_warnings(write_study(tmp_path, layout=inches)))
    polygon = STUDY.replace('region = "panel"', "polygon_mm = [[0, 0], [900, 0], [0, 100]]")
    assert "polygon_mm reaches outside the panel" in read_study(write_study(tmp_path, polygon)).warnings[0]


def read_warnings(path):
    from sampler.files.faults import Faults
    from sampler.files.layout import layout_file

    faults = Faults(str(path))
    layout_file(path.parent / "layouts" / "panel.toml", faults)
    return faults.warnings


PROCESS = """format = 1
[noise]
mark_um = [0.11, 0.12]
local_um = [0.2, 0.3]
local_range_mm = 90.0
[model]
panel = ["affine"]
[model.exposure]
each = ["translation"]
[[prior]]
terms = ["exposure[c1r1].translation_x"]
sd = 0.3
mean = 0.1
[[prior]]
terms = ["dx_x2"]
sd = 0.3
[[read_rate]]
kind = ""
rate = 0.97
interval = [0.95, 0.99]
[variation]
panels = 3
"""


def with_process(folder, process=PROCESS, study=STUDY):
    (folder / "process.toml").write_text(process, encoding="utf-8")
    return write_study(folder, study.replace("coverage_factor = 3.0", 'process = "process.toml"', 1))


def test_a_process_file_says_what_the_study_does_not(tmp_path):
    bare = STUDY.replace(STUDY[STUDY.index("[model]"):STUDY.index("[[limit]]")], "")
    study = read_study(with_process(tmp_path, study=bare))
    assert (study.noise.mark_um, study.noise.local_range_mm) == ((0.11, 0.12), 90.0)
    assert study.model.names[:2] == ("translation_x", "translation_y")
    assert len(study.model) == 6 + 2 * 16
    assert [(prior.terms, prior.sd, prior.mean) for prior in study.priors] == [(("exposure[c1r1].translation_x",), 0.3, 0.1)]
    assert study.measure.read_rate == (("", 0.97),)
    assert study.warnings == ()
    changed = read_study(with_process(tmp_path, PROCESS.replace("0.11", "0.10"), bare))
    assert changed.source.sha256 != study.source.sha256


def test_the_studys_own_keys_win_over_the_process_file(tmp_path):
    own = STUDY.replace("[noise]\nmark_um = [0.25, 0.3]\n", "[noise]\n") + (
        '[measure.read_rate]\n"" = 0.5\n[[prior]]\nterms = "scale_x"\nsd = 2.0\n')
    study = read_study(with_process(tmp_path, study=own))
    assert (study.noise.mark_um, study.noise.local_um, study.noise.local_range_mm) == ((0.11, 0.12), (0.4, 0.5), 90.0)
    assert "dx_xy" in study.model.names
    assert "exposure.rotation" in study.model.names
    assert [prior.terms for prior in study.priors] == [("scale_x",)]
    assert study.measure.read_rate == (("", 0.5),)


def test_correlated_distortion_taken_as_white_is_warned_of(tmp_path):
    own = STUDY.replace("local_um = [0.4, 0.5]", "local_um = [0.4, 0.5]\nlocal_range_mm = 0")
    (warning,) = read_study(with_process(tmp_path, study=own)).warnings
    assert "alike over 90 mm" in warning
    assert "undercounts sites severalfold" in warning


@pytest.mark.parametrize(("old", "new", "phrase"), [
    ("mark_um = [0.11, 0.12]", "mark_um = [0.11]", "process.toml: [noise] mark_um is [0.11]"),
    ("rate = 0.97", "rate = 0", "process.toml: [[read_rate]] rate is 0; give a finite number above 0 and of at most 1"),
    ('kind = ""', "kind = 3", "process.toml: [[read_rate]] kind is 3; give a text"),
    ("[noise]", "[noises]", 'process.toml: noises is not a known key; did you mean "noise"?'),
])
def test_faults_of_a_process_file(tmp_path, old, new, phrase):
    bare = STUDY.replace(STUDY[STUDY.index("[noise]"):STUDY.index("[[limit]]")], "")
    faults = faults_of(with_process(tmp_path, PROCESS.replace(old, new, 1), bare))
    assert [fault for fault in faults if phrase in fault], faults
    assert len(faults) == 1


def test_everything_that_may_be_said_of_measuring(tmp_path):
    text = STUDY.replace('required = ["E-c1r1-1"]\nforbidden = ["E-c2r2-4"]\nmax_sites = 60\n', """max_seconds = 80
min_spacing_mm = 20.0
lost = 1
[[rules.per_cell]]
grid = "exposure"
min = 1
[[rules.per_zone]]
name = "middle"
circle_mm = [0, 0, 100]
max = 4
[[rules.per_zone]]
name = "left"
rectangle_mm = [-250, -250, 0, 250]
min = 2
""").replace("seed = 3", 'prefer = "time"\ninformation_loss = 0.01') + """
[machine]
speed_mm_s = [300, 400]
read_s = 0.3
start_mm = [0, 0]
origin = "upper-left"
rotation = 180
mirrored = true
[measure]
side = "front"
field_of_view_mm = [12, 10]
stop_um = [0.1, 0.1]
"""
    study = read_study(write_study(tmp_path, text))
    assert (study.rules.max_seconds, study.rules.min_spacing_mm, study.rules.lost) == (80.0, 20.0, 1)
    assert [(rule.grid, rule.least, rule.most) for rule in study.rules.per_cell] == [("exposure", 1, None)]
    middle, left = study.rules.per_zone
    assert (middle.name, middle.circle_mm, middle.least, middle.most) == ("middle", (0.0, 0.0, 100.0), 0, 4)
    assert left.polygon_mm.tolist() == [[-250, -250], [0, -250], [0, 250], [-250, 250]]
    assert (study.search.prefer, study.search.information_loss) == ("time", 0.01)
    assert (study.machine.speed_mm_s, study.machine.read_s, study.machine.flip_s) == ((300.0, 400.0), 0.3, 20.0)
    assert (study.machine.origin, study.machine.rotation, study.machine.mirrored) == ("upper-left", 180, True)
    assert study.machine_stated
    assert (study.measure.side, study.measure.field_of_view_mm, study.measure.stop_um) == ("front", (12.0, 10.0), (0.1, 0.1))


def test_a_fixed_number_of_sites_needs_no_limit(tmp_path):
    text = STUDY.replace(STUDY[STUDY.index("[[limit]]"):STUDY.index("[rules]")], "").replace("seed = 3", "sites = 12")
    study = read_study(write_study(tmp_path, text))
    assert (study.limits, study.search.sites) == ((), 12)

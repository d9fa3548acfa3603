"""Tables as spreadsheets write them."""

from __future__ import annotations

import csv
import io
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from small_study import MARKS, faults_of, write_study

from sampler.errors import InputError
from sampler.files.layout import MARK_COLUMNS, read_layout
from sampler.files.study import read_study
from sampler.files.table import Column, read_site_ids, read_table

PLACES = [Column("id"), Column("x_mm", number=True), Column("y_mm", number=True), Column("kind", required=False, blank=True)]
DATA = [Column("panel"), Column("id"), Column("dx_um", number=True, blank=True), Column("dy_um", number=True, blank=True)]
PLAIN = b"id,x_mm,y_mm\nA,1.5,-2\nB,0.25,1e2\n"

VARIANTS = {
    "plain": PLAIN,
    "utf-8 mark": b"\xef\xbb\xbf" + PLAIN,
    "utf-16": PLAIN.decode().encode("utf-16"),
    "utf-16 big end first": b"\xfe\xff" + PLAIN.decode().encode("utf-16-be"),
    "crlf": PLAIN.replace(b"\n", b"\r\n"),
    "cr": PLAIN.replace(b"\n", b"\r"),
    "no last line end": PLAIN.rstrip(),
    "semicolon": PLAIN.replace(b",", b";"),
    "semicolon, decimal comma": b"id;x_mm;y_mm\nA;1,5;-2\nB;0,25;1e2\n",
    "tab, decimal comma": b"id\tx_mm\ty_mm\nA\t1,5\t-2,0\nB\t0,25\t100\n",
    "quoted": b'"id","x_mm","y_mm"\n"A","1.5","-2"\n"B","0.25","1e2"\n',
    "trailing blank lines": PLAIN + b"\n\n,,\n \n",
    "blank lines between": PLAIN.replace(b"B,", b"\n\nB,"),
    "blank lines above": b"\n,,\n" + PLAIN,
    "trailing blank columns": PLAIN.replace(b"\n", b",,\n"),
    "trailing blank cells in a row": PLAIN.replace(b"-2\n", b"-2,,\n"),
    "extra columns": b"note,id,x_mm,more,y_mm\nu,A,1.5,,-2\n,B,0.25,7,1e2\n",
    "columns in another order": b"y_mm,id,x_mm\n-2,A,1.5\n1e2,B,0.25\n",
    "header case and spaces": b" ID ,X mm,Y [mm]\nA,1.5,-2\nB,0.25,1e2\n",
    "spaced cells": b"id, x_mm, y_mm\nA , 1.5, -2\n B,0.25 , 1e2\n",
    "plus and true minus signs": "id,x_mm,y_mm\nA,+1.5,−2\nB,.25,100.\n".encode(),
    "quoted line end in a note": b'id,x_mm,y_mm,note\nA,1.5,-2,"two\nlines"\nB,0.25,1e2,\n',
    "short row lacking an optional cell": b"id,x_mm,y_mm,kind\nA,1.5,-2\nB,0.25,1e2,\n",
}


def written(tmp_path, data, name="table.csv"):
    (tmp_path / name).write_bytes(data)
    return tmp_path / name


@pytest.mark.parametrize("data", VARIANTS.values(), ids=VARIANTS)
def test_spreadsheet_variants(tmp_path, data):
    table, read = read_table(written(tmp_path, data), PLACES)
    assert read == data
    assert len(table) == 2
    assert table.columns["id"].tolist() == ["A", "B"]
    assert table.columns["x_mm"].tolist() == [1.5, 0.25]
    assert table.columns["y_mm"].tolist() == [-2, 100]


def test_latin_1(tmp_path):
    table, _ = read_table(written(tmp_path, "id,x_mm,y_mm,kind\nA,1,2,größer\n".encode("latin-1")), PLACES)
    assert table.columns["kind"].tolist() == ["größer"]


@pytest.mark.parametrize(("data", "lines"), [
    (b"id,x_mm,y_mm\nA,1,2\n\nB,3,4\n", [2, 4]),
    (b"\n\nid,x_mm,y_mm\nA,1,2\n\nB,3,4\n", [4, 6]),
    (b'id,x_mm,y_mm,note\nA,1,2,"a\nb"\nB,3,4,c\n', [2, 4]),
    (b"id,x_mm,y_mm\nA,1.0,2,\n\nB,3,4\n", [2, 4]),
])
def test_rows_know_their_line(tmp_path, data, lines):
    assert read_table(written(tmp_path, data), PLACES)[0].line.tolist() == lines


def faulty(tmp_path, data, columns=PLACES):
    return faults_of(written(tmp_path, data), lambda path: read_table(path, columns))


def test_faults_name_the_line_as_an_editor_counts_it(tmp_path):
    assert "line 6: x_mm" in faulty(tmp_path, b'\nid,x_mm,y_mm,note\nA,1,2,"a\nb"\n\nB,x,4,c\n')[0]
    assert "line 6: the row has 1 cell, the header 4" in faulty(tmp_path, b'\nid,x_mm,y_mm,note\nA,1,2,"a\nb"\n\nB\n')[0]
    assert "line 4: x_mm" in faulty(tmp_path, b"id,x_mm,y_mm\nA,1,2\n\nB,x,4\n")[0]


def test_a_decimal_comma_between_commas_is_never_guessed(tmp_path):
    """1,5 and 2 in three cells would read as x = 1, y = 5."""
    columns = [*PLACES, Column("more", number=True, required=False, blank=True)]
    for row in (b"A,1,5,2,", b"A,1,5,2,5,,"):
        faults = faulty(tmp_path, b"id,x_mm,y_mm,kind\n" + row + b"\n", columns)
        assert "needs semicolons" in faults[0]
    assert 'x_mm is the text "1,5"' in faulty(tmp_path, b'id,x_mm,y_mm\nA,"1,5",2\n')[0]
    assert 'x_mm is the text "1.234,5"' in faulty(tmp_path, b"id;x_mm;y_mm\nA;1.234,5;2\n")[0]


def test_blank_cells_where_they_are_allowed(tmp_path):
    table, _ = read_table(written(tmp_path, b"panel,id,dx_um,dy_um\nP1,A,,0.5\nP1,B,NaN,nan\nP2,A,1,2\n"), DATA)
    assert np.array_equal(table.columns["dx_um"], [np.nan, np.nan, 1.0], equal_nan=True)
    assert np.array_equal(table.columns["dy_um"], [0.5, np.nan, 2.0], equal_nan=True)
    fault, = faulty(tmp_path, b"panel,id,dx_um,dy_um\nP1,A,,0.5\nP1,B,inf,0\n", DATA)
    assert 'line 3: dx_um is the text "inf"; give a finite number' in fault


def test_site_ids(tmp_path):
    assert read_site_ids(written(tmp_path, b"id\nA\nB\n\n")) == ["A", "B"]
    assert read_site_ids(written(tmp_path, b"order;ID;x\n1;A;\n2;B;\n")) == ["A", "B"]
    assert "the column id is missing" in faults_of(written(tmp_path, b"order,site\n1,A\n"), read_site_ids)[0]
    assert "the table has no rows" in faults_of(written(tmp_path, b"id\n"), read_site_ids)[0]


def test_a_quote_that_never_ends(tmp_path):
    faults = faulty(tmp_path, b'id,x_mm,y_mm\nA,1,2\nB,"3,4\n' + b"C,5,6\n" * 200_000)
    assert any("the row" in fault for fault in faults)


TEXT = st.text(st.characters(blacklist_categories=("Cs", "Cc"), blacklist_characters='"'), min_size=1).filter(
    lambda text: text == text.strip() and text.strip())
NUMBER = st.floats(-1e6, 1e6, allow_nan=False, allow_subnormal=False)
ROWS = st.lists(st.tuples(TEXT, NUMBER, NUMBER), min_size=1, max_size=20)


@settings(max_examples=60)
@given(rows=ROWS, delimiter=st.sampled_from(",;\t"), ends=st.sampled_from(["\n", "\r\n"]), comma=st.booleans(),
       coding=st.sampled_from(["utf-8", "utf-8-sig", "utf-16"]))
def test_write_then_read_is_identity(tmp_path_factory, rows, delimiter, ends, comma, coding):
    out = io.StringIO()
    writer = csv.writer(out, delimiter=delimiter, lineterminator=ends)
    writer.writerow(["id", "x_mm", "y_mm"])
    for name, x, y in rows:
        numbers = [repr(x), repr(y)]
        writer.writerow([name, *([n.replace(".", ",") for n in numbers] if comma and delimiter != "," else numbers)])
    path = written(tmp_path_factory.mktemp("table"), out.getvalue().encode(coding))
    table, _ = read_table(path, PLACES)
    assert list(zip(*(table.columns[name].tolist() for name in ("id", "x_mm", "y_mm")), strict=True)) == rows


def test_marks_from_a_shuffled_file_are_the_same_marks(tmp_path, rng):
    rows = [f"M{i},{x:.3f},{y:.3f},hole" for i, (x, y) in enumerate(rng.uniform(-200, 200, (500, 2)))]
    header = "id,x_mm,y_mm,kind\n"
    plain = read_study(write_study(tmp_path, marks=header + "\n".join(rows))).layout.marks
    mixed = read_study(write_study(tmp_path, marks=header + "\n".join(rng.permutation(rows)))).layout.marks
    a, b = np.argsort(plain.id), np.argsort(mixed.id)
    for name in ("id", "xy_mm", "kind", "side"):
        assert np.array_equal(getattr(plain, name)[a], getattr(mixed, name)[b])


def test_a_hundred_thousand_marks_of_which_one_is_bad(tmp_path):
    def rows(count):
        return "".join(f"M{i},{i % 400 - 200}.5,{i // 400 - 125}.25\n" for i in range(count))

    path = write_study(tmp_path, marks="id,x_mm,y_mm\n" + rows(100_000))
    marks = read_layout(tmp_path / "layouts" / "panel.toml").marks
    assert len(marks) == 100_000 + 64
    assert marks.id[-1] == "M99999"
    assert marks.xy_mm[-1].tolist() == [199.5, 124.25]
    path = write_study(tmp_path, marks="id,x_mm,y_mm\n" + rows(99_999) + "M0,7.1,7.2\n")
    fault, = faults_of(path)
    assert fault.endswith('panel.toml: mark id "M0" occurs 2 times; give each mark its own id')


def test_columns_of_marks(tmp_path):
    text = "id,x_mm,y_mm,side,kind,sigma_x_um,sigma_y_um,read_rate,seconds\nA,1,2,back,hole,0.5,,0.9,0.2\nB,3,4,,,,,,\n"
    marks = read_study(write_study(tmp_path, marks=text)).layout.marks.take(np.array([-2, -1]))
    assert marks.side.tolist() == ["back", "front"]
    assert marks.kind.tolist() == ["hole", ""]
    assert np.array_equal(marks.sigma_um, [[0.5, np.nan], [np.nan, np.nan]], equal_nan=True)
    assert marks.read_rate.tolist() == [0.9, 1.0]
    assert np.array_equal(marks.seconds, [0.2, np.nan], equal_nan=True)


def test_mark_columns_are_those_of_the_contract():
    assert [column.name for column in MARK_COLUMNS] == ["id", "x_mm", "y_mm", "side", "kind", "sigma_x_um", "sigma_y_um",
                                                        "read_rate", "seconds"]
    assert MARKS.startswith("id,x_mm,y_mm,side,sigma_x_um")
    with pytest.raises(InputError):
        read_table("nowhere.csv", [replace(MARK_COLUMNS[0])])

"""Tables as they come from a spreadsheet, as columns of numpy arrays."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv
from numpy.typing import NDArray

from sampler.files.faults import MOST_ROWS, Faults, nearest, shown
from sampler.files.schema import ANY, Bounds
from sampler.files.source import UTF16_MARKS, read_bytes, shown_path

NUMBER = r"^-?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$"
QUOTED = re.compile(r'"[^"]*"')


@dataclass(frozen=True, slots=True)
class Column:
    """A column to read. `blank` allows blank cells: NaN for a number, "" for a text; `choices` are the texts allowed."""

    name: str
    number: bool = False
    required: bool = True
    blank: bool = False
    bounds: Bounds = ANY
    choices: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Table:
    """Columns by name, each (n,); an optional column that the file lacks is absent. `line` (n,) is the row's line."""

    columns: dict[str, NDArray[Any]]
    line: NDArray[np.int64]

    def __len__(self) -> int:
        return len(self.line)


def read_table(path: str | Path, columns: Sequence[Column], faults: Faults | None = None,
               header: Sequence[str] | None = None) -> tuple[Table, bytes] | None:
    """A table with its file's bytes, or None with every fault added; without `faults` raises InputError.

    Reads what spreadsheets write: UTF-8 with or without mark, UTF-16, Latin-1; any line ends; comma, semicolon or tab;
    decimal commas unless cells are separated by commas; quoted cells; blank lines, blank cells beyond the header,
    extra columns; header names in any case, spaced or with their unit in brackets. Columns come in any order.
    `header` names the columns of a table whose first line is a row already.
    """
    own = Faults(shown_path(path)) if faults is None else faults.of(shown_path(path))
    before = len(own.messages)
    data = read_bytes(path, f"a CSV file with the columns {', '.join(c.name for c in columns if c.required)}", own)
    table = None if data is None else _table(data, columns, own, header)
    if faults is None:
        own.close()
    return None if table is None or data is None or len(own.messages) > before else (table, data)


def read_site_ids(path: str | Path) -> list[str]:
    """The `id` column of a site list. Raises InputError."""
    read = read_table(path, [Column("id")])
    assert read is not None
    return [str(name) for name in read[0].columns["id"]]


def _as_utf8(data: bytes) -> bytes:
    """The text in UTF-8 without mark, lines ending in a line feed."""
    if data.startswith(UTF16_MARKS):
        data = data.decode("utf-16", errors="replace").encode("utf-8")
    else:
        data = data.removeprefix(b"\xef\xbb\xbf")
        try:
            data.decode("utf-8")
        except UnicodeDecodeError:
            data = data.decode("latin-1").encode("utf-8")
    if b"\r" in data:
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    return data


def plain_name(name: str) -> str:
    """A heading as columns are looked up by: small letters, digits and single underscores."""
    return re.sub(r"[\W_]+", "_", name.strip().casefold()).replace("µ", "u").replace("μ", "u").strip("_")


def first_rows(path: str | Path, most: int, faults: Faults) -> list[list[str]]:
    """The cells of the first rows of a table, its header included, blank rows left out; none with the fault added."""
    data = read_bytes(path, "a CSV file with a row for each mark", faults)
    if data is None:
        return []
    lines = _as_utf8(data).decode().strip("\n \t,;").split("\n")[:2 * most]
    delimiter = max(",;\t", key=QUOTED.sub("", lines[0]).count)
    try:
        rows = [row for row in csv.reader(lines, delimiter=delimiter) if any(cell.strip() for cell in row)]
    except csv.Error as error:
        faults.add(f"the first rows cannot be read ({error}); mend their quotes")
        return []
    if not rows:
        faults.add("the table has no rows; give one row for each mark")
    return rows[:most]


def _table(data: bytes, wanted: Sequence[Column], faults: Faults, named: Sequence[str] | None = None) -> Table | None:
    data = _as_utf8(data)
    skip = len(data) - len(data.lstrip(b"\n \t,;"))
    above = data[:skip].count(b"\n")  # blank lines, and then the header
    start = data.rfind(b"\n", 0, skip) + 1
    first = data[start:].split(b"\n", 1)[0].decode()
    bare = QUOTED.sub("", first)
    delimiter = max(",;\t", key=bare.count)
    header = [plain_name(name) for name in named or next(csv.reader([first], delimiter=delimiter))]
    columns = _wanted(header, wanted, faults)
    if columns is None:
        return None
    body = data[start + (0 if named else len(first.encode()) + 1):]
    above += 0 if named else 1
    if not body.strip(b"\n \t,;\""):
        faults.add("the table has no rows; give one row for each mark")
        return None
    cells, line = (_fast(body, delimiter, len(header), columns)
                   or _careful(body, delimiter, len(header), columns, wanted, above, faults))
    line = line + above  # the body begins below these
    cells = {name: pc.utf8_trim_whitespace(column) for name, column in cells.items()}
    filled = np.zeros(len(line), bool)
    for column in cells.values():
        filled |= pc.not_equal(column, "").to_numpy(zero_copy_only=False)
    if not filled.all():
        cells = {name: column.filter(pa.array(filled)) for name, column in cells.items()}
        line = line[filled]
    found: list[tuple[int, str]] = []
    values = {column.name: _numbers(cells[column.name], column, delimiter, line, found) if column.number
              else _texts(cells[column.name], column, line, found) for column in wanted if column.name in cells}
    faults.rows(found)
    return Table(values, line)


def _wanted(header: list[str], wanted: Sequence[Column], faults: Faults) -> dict[str, int] | None:
    """Where each wanted column stands, or None with the faults of the header."""
    before = len(faults.messages)
    place: dict[str, int] = {}
    missing = []
    names = [column.name for column in wanted]
    for column in wanted:
        at = [i for i, name in enumerate(header) if name == column.name]
        if len(at) > 1:
            faults.add(f"the column {column.name} occurs {len(at)} times; keep one")
        elif at:
            place[column.name] = at[0]
        elif column.required:
            missing.append(column.name)
    if missing and len(header) == 1:
        faults.add(f"the table has one column, {shown(header[0])}; give the columns "
                   f"{', '.join(column.name for column in wanted if column.required)}, separated by comma, semicolon or tab")
    elif missing:
        spare = [name for name in header if name and name not in names]
        for name in missing:
            near = nearest(name, spare)
            faults.add(f"the column {name} is missing from line 1, which must name the columns; "
                       + (f'is it "{near}"?' if near else f"found {shown(header)}"))
    return None if missing or len(faults.messages) > before else place


Cells = dict[str, pa.StringArray]


def _fast(body: bytes, delimiter: str, width: int, place: dict[str, int]) -> tuple[Cells, NDArray[np.int64]] | None:
    """All cells as texts when every line is a row of `width` cells; otherwise None."""
    odd = []

    def note(row: Any) -> str:
        odd.append(row)
        return "skip"

    names = [str(i) for i in range(width)]
    include = [names[i] for i in place.values()]
    try:
        table = pyarrow.csv.read_csv(
            io.BytesIO(body), pyarrow.csv.ReadOptions(column_names=names, use_threads=False),
            pyarrow.csv.ParseOptions(delimiter=delimiter, ignore_empty_lines=False, invalid_row_handler=note),
            pyarrow.csv.ConvertOptions(include_columns=include, column_types={name: pa.string() for name in include},
                                       strings_can_be_null=False))
    except pa.ArrowInvalid:
        return None
    lines = body.count(b"\n") + (not body.endswith(b"\n"))
    if odd or table.num_rows != lines:
        return None
    return {name: table[names[i]].combine_chunks() for name, i in place.items()}, np.arange(1, lines + 1)


def _careful(body: bytes, delimiter: str, width: int, place: dict[str, int], wanted: Sequence[Column],
             above: int, faults: Faults) -> tuple[Cells, NDArray[np.int64]]:
    """The same row by row, where rows are short or long or cells hold line ends."""
    rows, line, odd = [], [], []
    least = max([place[column.name] + 1 for column in wanted if column.required], default=1)
    numbers = [place[column.name] for column in wanted if column.number and column.name in place]
    reader = csv.reader(io.StringIO(body.decode(), newline=""), delimiter=delimiter)
    at = 0
    try:
        for row in reader:
            began, at = at + 1, reader.line_num
            if not any(cell.strip() for cell in row):
                continue
            if len(row) > width and (delimiter != "," or not numbers or any("." in row[i] for i in numbers)):
                while len(row) > width and not row[-1].strip():  # not where decimal commas may have split the cells
                    row.pop()
            if len(row) < least or len(row) > width:
                hint = "; a decimal comma needs semicolons between cells" if delimiter == "," and len(row) > width else ""
                odd.append((began + above, f"the row has {len(row)} {'cell' if len(row) == 1 else 'cells'}, the header "
                            f"{width}; give one cell for each column{hint}"))
                continue
            rows.append([row[i] if i < len(row) else "" for i in place.values()])
            line.append(began)
    except csv.Error as error:
        odd.append((reader.line_num + above, f"the row cannot be read ({error}); mend its quotes"))
    faults.rows(odd)
    return ({name: pa.array([row[i] for row in rows], pa.string()) for i, name in enumerate(place)},
            np.array(line, np.int64))


def _numbers(cells: pa.StringArray, column: Column, delimiter: str, line: NDArray[np.int64],
             found: list[tuple[int, str]]) -> NDArray[np.float64]:
    text = cells if delimiter == "," else pc.replace_substring(cells, ",", ".")
    try:
        value = pc.cast(text, pa.float64()).to_numpy(zero_copy_only=False)
    except pa.ArrowInvalid:
        text = pc.replace_substring_regex(pc.replace_substring(text, "\u2212", "-"), r"^\+", "")
        good = pc.match_substring_regex(text, NUMBER)
        value = pc.cast(pc.if_else(good, text, "nan"), pa.float64()).to_numpy(zero_copy_only=False)
    bad = ~np.isfinite(value)
    if column.blank and bad.any():
        bad &= ~pc.is_in(pc.utf8_lower(cells), pa.array(["", "nan"])).to_numpy(zero_copy_only=False)
    with np.errstate(invalid="ignore"):
        low, least, most = column.bounds.above, column.bounds.at_least, column.bounds.at_most
        bad |= ((value <= low) if low is not None else False) | ((value < least) if least is not None else False) | (
            (value > most) if most is not None else False)
    _note(bad, cells, column, f"give a finite number{column.bounds}", line, found)
    return np.asarray(value, float)


def _texts(cells: pa.StringArray, column: Column, line: NDArray[np.int64],
           found: list[tuple[int, str]]) -> NDArray[np.str_]:
    bad = np.zeros(len(cells), bool)
    if not column.blank:
        bad |= pc.equal(cells, "").to_numpy(zero_copy_only=False)
    if column.choices:
        bad |= ~pc.is_in(cells, pa.array([*column.choices, *([""] if column.blank else [])])).to_numpy(zero_copy_only=False)
    _note(bad, cells, column, "give " + (" or ".join(f'"{choice}"' for choice in column.choices) or "a text"), line, found)
    return cells.to_numpy(zero_copy_only=False).astype(str)


def _note(bad: NDArray[np.bool_], cells: pa.StringArray, column: Column, give: str, line: NDArray[np.int64],
          found: list[tuple[int, str]]) -> None:
    """Adds the faults of one column; beyond those that are listed only their number matters."""
    rows = np.flatnonzero(bad)
    for row in rows[:MOST_ROWS + 1]:
        text = cells[row].as_py()
        found.append((int(line[row]), f"{column.name} is {shown(text) if text else 'blank'}; {give}"))
    found += [(int(line[row]), "") for row in rows[MOST_ROWS + 1:]]

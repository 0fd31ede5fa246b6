"""Comma-separated text to arrays: a fast path, and a slow one that finds every bad cell."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv
from numpy.typing import NDArray

from jointmap.ingest.problems import LISTED_ROWS, Problems
from jointmap.ingest.survey import Ints

NUMBER = r"(?i)^[+-]?((\d+\.?\d*|\.\d+)(e[+-]?\d+)?|inf|infinity)$"
WHOLE = r"^[+-]?\d{1,18}$"
#: Spellings of "not given" in a number column, besides blanks.
EMPTY = ("", "nan", "NaN", "NAN", "-nan", "-NaN", "+nan")
_ARROW = {
    "float64": pa.float64(),
    "int64": pa.int64(),
    "text": pa.dictionary(pa.int32(), pa.string()),
}
#: Bytes that are searched for line breaks at a time; small enough to stay in the cache.
_CHUNK = 1 << 17


@dataclass(frozen=True)
class Parsed:
    """Columns as Arrow arrays and the line of the file that each row stands in."""

    columns: Mapping[str, pa.ChunkedArray]
    row: Ints


def header_of(data: memoryview) -> tuple[list[str], int]:
    """Names in the first line, stripped, and the offset of the first byte after it."""
    head = bytes(data[: 1 << 20])
    found = re.search(rb"\r\n|\n|\r", head)
    line, end = (head[: found.start()], found.end()) if found else (head, len(head))
    text = line.decode("utf-8-sig", errors="replace")
    names = next(csv.reader([text], skipinitialspace=True), [])
    return [n.strip() for n in names], end


def parse_csv(
    data: memoryview,
    path: str,
    header: Sequence[str],
    kinds: Mapping[str, str],
    problems: Problems,
    *,
    skip: int = 1,
) -> Parsed:
    """Columns of ``kinds`` out of comma-separated text.

    Parameters
    ----------
    data : memoryview
        The whole text, header included.
    path : str
        Name for the problems.
    header : sequence of str
        Names of all columns in order.
    kinds : mapping
        ``"float64"``, ``"int64"`` or ``"text"`` by the name of each column to read.
    skip : int
        Lines before the first row (the header).
    """
    if skip and data.nbytes and header_of(data)[1] >= data.nbytes:
        return Parsed({k: pa.chunked_array([[]], _ARROW[v]) for k, v in kinds.items()}, _rows(0))
    try:
        table = _arrow(data, header, {k: _ARROW[v] for k, v in kinds.items()}, skip, None)
    except pa.ArrowInvalid:
        return _parse_slowly(data, path, header, kinds, problems, skip)
    rows = row_numbers(data, table.num_rows, skip, np.empty(0, dtype=np.int64))
    return Parsed({k: table.column(k) for k in kinds}, rows)


def _arrow(
    data: memoryview,
    header: Sequence[str],
    types: Mapping[str, pa.DataType],
    skip: int,
    handler: object,
) -> pa.Table:
    """One call of the parser; a handler of bad rows needs one thread to count lines."""
    return pacsv.read_csv(
        pa.BufferReader(pa.py_buffer(data)),
        read_options=pacsv.ReadOptions(
            column_names=list(header), skip_rows=skip, use_threads=handler is None
        ),
        parse_options=pacsv.ParseOptions(invalid_row_handler=handler),
        convert_options=pacsv.ConvertOptions(
            column_types=dict(types),
            include_columns=list(types),
            null_values=list(EMPTY),
            strings_can_be_null=False,
        ),
    )


def _parse_slowly(
    data: memoryview,
    path: str,
    header: Sequence[str],
    kinds: Mapping[str, str],
    problems: Problems,
    skip: int,
) -> Parsed:
    """Read every cell as text, then name each one that is not what it should be."""
    data = _valid_utf8(data, path, problems)
    short: list[tuple[int, int, str]] = []

    def keep(bad: pacsv.InvalidRow) -> str:
        short.append((bad.number, bad.actual_columns, bad.text))
        return "skip"

    table = _arrow(data, header, dict.fromkeys(kinds, pa.string()), skip, keep)
    lines = np.array([b[0] - 1 for b in short], dtype=np.int64)
    rows = row_numbers(data, table.num_rows, skip, lines)
    _report_rows(data, path, header, short, problems)
    columns = {}
    for name, kind in kinds.items():
        cells = table.column(name)
        if kind == "text":
            columns[name] = cells.dictionary_encode()
        else:
            columns[name] = _convert(cells, rows, path, name, kind, problems)
    return Parsed(columns, rows)


def _valid_utf8(data: memoryview, path: str, problems: Problems) -> memoryview:
    try:
        str(data, "utf-8")
    except UnicodeDecodeError as error:
        row = bytes(data[: error.start]).count(b"\n") + 1
        problems.add(path, "the text is not UTF-8", "save the file as UTF-8", row=row)
        return memoryview(str(data, "utf-8", "replace").encode())
    return data


def _report_rows(
    data: memoryview,
    path: str,
    header: Sequence[str],
    short: Sequence[tuple[int, int, str]],
    problems: Problems,
) -> None:
    """Rows whose number of cells differs from the header's; lines of blanks are no rows."""
    filled = [b for b in short if b[2].strip()]
    if not filled:
        return
    lines = content_lines(data)
    rows = [int(lines[min(b[0] - 1, len(lines) - 1)]) for b in filled]
    message = [f"{b[1]} cells where there should be {len(header)}" for b in filled]
    mend = "give every row one cell per column"
    problems.rows(path, rows, None, message, mend)


def _convert(
    cells: pa.ChunkedArray, rows: Ints, path: str, name: str, kind: str, problems: Problems
) -> pa.ChunkedArray:
    """Text cells to numbers; the cells that are none are reported and left out."""
    cells = pc.utf8_trim_whitespace(cells)
    empty = pc.is_in(pc.utf8_lower(cells), pa.array([e.lower() for e in EMPTY]))
    good = pc.match_substring_regex(cells, NUMBER if kind == "float64" else WHOLE)
    bad = np.flatnonzero(pc.invert(pc.or_(good, empty)).to_numpy())
    if bad.size:
        wanted = "a number" if kind == "float64" else "a whole number of nanoseconds"
        listed = cells.take(bad[:LISTED_ROWS]).to_pylist()
        message = [f"{_shown(c)} is not {wanted}" for c in listed]
        mend = "write a number with a decimal point, or leave the cell empty"
        problems.rows(path, rows[bad], name, message, mend)
    plain = pc.replace_substring_regex(cells, r"^\+", "")
    return pc.if_else(good, plain, pa.scalar(None, pa.string())).cast(_ARROW[kind])


def _shown(cell: str) -> str:
    return repr(cell if len(cell) <= 30 else cell[:27] + "...")


def _rows(n: int, skip: int = 1) -> Ints:
    return np.arange(skip + 1, skip + 1 + n, dtype=np.int64)


def row_numbers(data: memoryview, n: int, skip: int, dropped: NDArray[np.int64]) -> Ints:
    """Line of the file of each of ``n`` parsed rows, as a text editor counts.

    ``dropped`` are the places of rows that the parser left out, counted over lines with content.
    """
    if _line_count(data) == n + skip and dropped.size == 0:
        return _rows(n, skip)
    lines = content_lines(data)
    keep = np.ones(len(lines), dtype=bool)
    keep[:skip] = False
    keep[dropped[dropped < len(lines)]] = False
    lines = lines[keep]
    # A quoted cell that holds a line break makes lines and rows differ: count rows then.
    return lines if len(lines) == n else _rows(n, skip)


def _line_count(data: memoryview) -> int:
    """Number of lines, the last one with or without its line break."""
    view = np.frombuffer(data, dtype=np.uint8)
    breaks = sum(
        int(np.count_nonzero(view[i : i + _CHUNK] == 10)) for i in range(0, len(view), _CHUNK)
    )
    return breaks + (1 if len(view) and view[-1] != 10 else 0)


def content_lines(data: memoryview) -> Ints:
    """Numbers (from 1) of the lines that are not empty."""
    view = np.frombuffer(data, dtype=np.uint8)
    ends = np.flatnonzero(view == 10)
    if len(view) and view[-1] != 10:
        ends = np.append(ends, len(view))
    starts = np.concatenate([[0], ends[:-1] + 1]) if len(ends) else ends
    length = ends - starts
    # A line that holds a carriage return only is empty too.
    first = view[np.minimum(starts, max(len(view) - 1, 0))]
    empty = (length == 0) | ((length == 1) & (first == 13))
    return np.asarray(np.flatnonzero(~empty) + 1, dtype=np.int64)


def blanks_to_commas(text: bytes) -> bytes:
    """Text separated by blanks and tabs, with ``#`` comments, as comma-separated lines.

    Lines stay where they are: a comment becomes an empty line, so row numbers still hold.
    """
    text = re.sub(rb"#[^\r\n]*", b"", text)
    text = re.sub(rb"(?m)^[ \t]+|[ \t\r]+$", b"", text)
    return re.sub(rb"[ \t]+", b",", text)


def quoted(values: Sequence[object]) -> str:
    """One CSV line without its line break."""
    out = io.StringIO()
    csv.writer(out, lineterminator="").writerow(values)
    return out.getvalue()

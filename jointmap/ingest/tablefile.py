"""A table file, CSV or Parquet by its name, checked against the schema's columns."""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from jointmap import schema
from jointmap.ingest.csvtext import Parsed, header_of, parse_csv
from jointmap.ingest.files import TABLE_ENDINGS, SurveyFiles
from jointmap.ingest.problems import Problems, close_match
from jointmap.ingest.survey import Floats, Ints
from jointmap.ingest.table import Names, Table

#: No time, length, speed or angle of a survey is larger; such a cell is a fault of the log.
LARGEST = 1e12


def read_table(
    files: SurveyFiles, name: str, spec: schema.Table, asked_by: str, key: str
) -> Table | None:
    """One file of the survey as a table; ``None`` when nothing of it can be used.

    Cells that are no numbers, infinite numbers, columns of the other dimension, doubled and
    unknown columns are recorded in ``files.problems``.
    """
    path = files.locate(name, asked_by, key)
    if path is None:
        return None
    if not name.endswith(TABLE_ENDINGS):
        ends = ", ".join(TABLE_ENDINGS)
        files.problems.add(name, "unknown kind of file", f"name it with one of {ends}")
        return None
    if name.endswith(".parquet"):
        parsed = _read_parquet(files, path, name, spec)
    else:
        parsed = _read_csv(files, path, name, spec)
    return None if parsed is None else _to_table(parsed, name, files.problems)


def _mapped(path: Path) -> memoryview:
    """The bytes of a file without copying them."""
    if path.stat().st_size == 0:
        return memoryview(b"")
    return memoryview(pa.memory_map(str(path)).read_buffer())


def _read_csv(files: SurveyFiles, path: Path, name: str, spec: schema.Table) -> Parsed | None:
    data = _mapped(path)
    files.digest(name, data)
    if name.endswith(".gz"):
        try:
            data = memoryview(gzip.decompress(data))
        except (OSError, EOFError, zlib.error) as error:
            files.problems.add(name, f"cannot be unpacked ({error})", "compress it again")
            return None
    header, _ = header_of(data)
    if not any(header):
        files.problems.add(name, "no header in the first line", "write the header row", row=1)
        return None
    kinds = _kinds(header, spec, name, files.problems, row=1)
    return None if kinds is None else parse_csv(data, name, header, kinds, files.problems)


def _read_parquet(files: SurveyFiles, path: Path, name: str, spec: schema.Table) -> Parsed | None:
    data = _mapped(path)
    files.digest(name, data)
    try:
        source = pq.ParquetFile(pa.BufferReader(pa.py_buffer(data)))
        kinds = _kinds(source.schema_arrow.names, spec, name, files.problems, row=None)
        table = source.read(columns=list(kinds or ()))
    except (pa.ArrowException, OSError) as error:
        files.problems.add(name, f"is no readable Parquet file ({error})", "write it again")
        return None
    if kinds is None:
        return None
    columns = {}
    for column, kind in kinds.items():
        cast = _cast(table.column(column), kind)
        if cast is None:
            found = table.column(column).type
            message = f"holds {found}, not {'names' if kind == 'text' else 'numbers'}"
            files.problems.add(name, message, f"store it as {kind}", column=column)
        else:
            columns[column] = cast
    return Parsed(columns, np.arange(1, table.num_rows + 1, dtype=np.int64))


def _cast(column: pa.ChunkedArray, kind: str) -> pa.ChunkedArray | None:
    """A Parquet column in the wanted type; ``None`` when it holds something else."""
    found = column.type
    number = pa.types.is_integer(found) or pa.types.is_floating(found) or pa.types.is_decimal(found)
    if pa.types.is_null(found):
        number = True
    if kind == "float64":
        return column.cast(pa.float64(), safe=False) if number else None
    if kind == "int64":
        if pa.types.is_timestamp(found):
            return column.cast(pa.timestamp("ns", found.tz)).cast(pa.int64())
        return column.cast(pa.int64(), safe=False) if number else None
    if pa.types.is_floating(found) or pa.types.is_boolean(found) or pa.types.is_nested(found):
        return None
    if pa.types.is_dictionary(found):
        column = column.cast(found.value_type)
    return column.cast(pa.string()).dictionary_encode()


def _kinds(
    header: Sequence[str],
    spec: schema.Table,
    name: str,
    problems: Problems,
    row: int | None,
) -> dict[str, str] | None:
    """Which columns are read, and as what; the others are reported.

    Columns of the other dimension are read as well: empty ones harm nobody.
    """
    doubled = sorted({h for h in header if header.count(h) > 1})
    for column in doubled:
        message = "the header names the column more than once"
        problems.add(name, message, "keep one of them", row=row, column=column)
    known = known_columns(spec)
    _report_unknown(header, known, name, problems, row)
    return None if doubled else {h: known[h] for h in header if h in known}


def known_columns(spec: schema.Table) -> dict[str, str]:
    """Type by name of every column of a table, lower triangles of covariances included."""
    known: dict[str, str] = {c.name: c.dtype for c in spec.columns}
    for prefix in ("cov_", "acc_cov_"):
        if f"{prefix}x_x" in known:
            for dimension in (2, 3):
                lower = schema.covariance_lower_columns(dimension, prefix)
                known.update(dict.fromkeys(lower, "float64"))
    return known


def _report_unknown(
    header: Sequence[str],
    known: Mapping[str, str],
    name: str,
    problems: Problems,
    row: int | None,
) -> None:
    unknown = [h for h in header if h not in known]
    if not unknown:
        return
    if len(header) == 1 and any(mark in header[0] for mark in ";\t"):
        message = f"the header {header[0][:40]!r} is not separated by commas"
        problems.add(name, message, "separate the cells by commas", row=row)
        return
    free = [k for k in known if k not in header]
    hints = [(u, close_match(u, free)) for u in unknown]
    shown = ", ".join(u + (f" (did you mean {m}?)" if m else "") for u, m in hints)
    problems.add(name, f"unknown columns: {shown}", "they are ignored", row=row, mended=True)


def _to_table(parsed: Parsed, name: str, problems: Problems) -> Table:
    """Arrow columns to arrays; times in nanoseconds become seconds."""
    numbers: dict[str, Floats] = {}
    texts: dict[str, Names] = {}
    from_ns = set()
    for column, values in parsed.columns.items():
        if pa.types.is_dictionary(values.type):
            texts[column] = _names_of(values)
        elif pa.types.is_integer(values.type):
            seconds = column.removesuffix("_ns") + "_s"
            from_ns.add(seconds)
            numbers[seconds] = seconds_of(values)
        elif column not in numbers:
            numbers[column] = _floats(values)
    for seconds in sorted(from_ns & set(parsed.columns)):
        message = f"given beside {seconds}"
        column = seconds.removesuffix("_s") + "_ns"
        problems.add(name, message, "the nanoseconds are used", column=column, mended=True)
    file = np.zeros(len(parsed.row), dtype=np.int64)
    table = Table((name,), file, parsed.row, numbers, texts, frozenset(from_ns))
    _refuse_infinite(table, numbers, problems)
    return table


def _floats(values: pa.ChunkedArray) -> Floats:
    return np.asarray(values.to_numpy(), dtype=np.float64)


def seconds_of(values: pa.ChunkedArray) -> Floats:
    """Whole nanoseconds to seconds; the whole ones are split off first to keep the rest exact."""
    missing = values.is_null().to_numpy()
    whole: Ints = pc.fill_null(values, 0).to_numpy().astype(np.int64)
    seconds, rest = np.divmod(whole, 1_000_000_000)
    out = seconds + rest * 1e-9
    out[missing] = np.nan
    return np.asarray(out, dtype=np.float64)


def _names_of(values: pa.ChunkedArray) -> Names:
    """Codes into the sorted list of distinct names, blanks around names removed."""
    values = values.unify_dictionaries()
    if values.num_chunks == 0 or len(values) == 0:
        return Names(np.empty(0, dtype=np.int64), ())
    entries = [e.strip() if e is not None else "" for e in values.chunk(0).dictionary.to_pylist()]
    codes = np.concatenate(
        [pc.fill_null(c.indices, -1).to_numpy(zero_copy_only=False) for c in values.chunks]
    ).astype(np.int64)
    names = tuple(sorted({e for e in entries if e}))
    place = {n: i for i, n in enumerate(names)}
    to = np.array([place.get(e, -1) for e in entries] + [-1], dtype=np.int64)
    return Names(to[codes], names)


def _refuse_infinite(table: Table, numbers: dict[str, Floats], problems: Problems) -> None:
    """Report infinite and absurd cells, and empty them for the checks that follow."""
    for column, values in list(numbers.items()):
        largest = max(np.fmax.reduce(values, initial=0.0), -np.fmin.reduce(values, initial=0.0))
        if largest <= LARGEST:
            continue
        infinite, absurd = np.isinf(values), np.abs(values) > LARGEST
        mend = "leave the cell empty or mend it"
        table.complain(problems, infinite, column, "the number is infinite", mend)
        message = f"the number is beyond {LARGEST:.0e}"
        table.complain(problems, absurd & ~infinite, column, message, mend)
        numbers[column] = np.where(absurd, np.nan, values)

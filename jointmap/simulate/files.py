"""Files of a survey: tables in CSV or Parquet, survey.toml, and the truth.

Numbers are rounded to what the rest of the tool may rely on: stamps to microseconds, metres and
radians to 1e-6, twists and quaternions to 1e-9.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_FINE = ("_mps", "_radps")


def decimals(column: str) -> int:
    """Decimals that a column keeps."""
    return 9 if column.endswith(_FINE) or column in ("qx", "qy", "qz", "qw") else 6


def write_table(path: Path, columns: Mapping[str, Any]) -> None:
    """Write columns; the file name decides the format (``.csv``, ``.csv.gz``, ``.parquet``)."""
    path.parent.mkdir(parents=True, exist_ok=True)
    arrays = {}
    for name, values in columns.items():
        array = np.asarray(values)
        if array.dtype.kind == "f":
            # adding zero turns -0.0 into 0.0
            arrays[name] = pa.array(np.round(array, decimals(name)) + 0.0, from_pandas=True)
        else:
            arrays[name] = pa.array(array)
    table = pa.table(arrays)
    if path.suffix == ".parquet":
        pa.parquet.write_table(table, path, compression="zstd")
        return
    # the library puts quotes round header names, whatever the style: the header is written here
    options = pa.csv.WriteOptions(include_header=False, quoting_style="none")
    with _sink(path) as stream:
        stream.write((",".join(arrays) + "\n").encode())
        pa.csv.write_csv(table, stream, options)


def _sink(path: Path) -> pa.NativeFile:
    """A file to write to, compressed by its name."""
    if path.suffix == ".gz":
        return pa.CompressedOutputStream(str(path), "gzip")
    return pa.OSFile(str(path), "wb")


def toml_value(value: Any) -> str:
    """A value as TOML: text, truth value, number or a list of them."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return json.dumps(value)
    if isinstance(value, Sequence | np.ndarray):
        return "[" + ", ".join(toml_value(v) for v in value) + "]"
    return repr(round(float(value), 9)) if isinstance(value, float) else str(value)


def write_toml(path: Path, sections: Sequence[tuple[str, Mapping[str, Any]]]) -> None:
    """Write sections in order, ``[name]`` and its keys; comments are left to the reader."""
    lines: list[str] = []
    for name, entries in sections:
        lines.append(f"[{name}]")
        lines += [f"{key} = {toml_value(value)}" for key, value in entries.items()]
        lines.append("")
    path.write_text("\n".join(lines), encoding="utf-8")


def write_json(path: Path, content: Mapping[str, Any]) -> None:
    """Write a JSON file; the folder is made when missing."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps(content, indent=1) + "\n", encoding="utf-8")

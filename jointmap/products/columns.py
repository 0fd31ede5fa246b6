"""Tables of a reference as data frames: exactly the columns of the schema, null where unknown."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from jointmap.schema import Column, covariance_columns, output_table

#: Trust in the order of the codes 0, 1, 2: larger is worse, so the worse of two is the maximum.
TRUST = ("checked", "weak", "unchecked")
VERDICTS = ("kept", "down-weighted", "rejected", "unusable")
STATUSES = ("ok", "weak", "not-converged", "disconnected", "inconsistent")

#: Every key of reference.json, in the order of writing.
META_KEYS = (
    "format",
    "status",
    "reasons",
    "survey",
    "settings",
    "versions",
    "seed",
    "datum",
    "components",
    "counts",
    "chi2",
    "dof",
    "evidence",
    "distrust",
    "timings",
)

#: File of each table of a reference -> its name in the schema.
TABLES = {
    "landmarks": "landmarks",
    "measurements": "measurements",
    "associations": "associations_verdict",
    "noise": "noise",
    "calibration": "calibration",
    "suspects": "suspects",
    "holdout": "holdout",
    "robots": "robots",
}

#: Data types that can say "unknown" whatever they hold.
_DTYPES = {"float64": "float64", "int64": "Int64", "text": "str", "bool": "boolean"}


def table_columns(name: str, dimension: int) -> tuple[Column, ...]:
    """Columns of the table ``name`` (its file's stem) in a survey of this dimension."""
    columns = output_table(TABLES[name]).columns
    return tuple(c for c in columns if dimension in c.dimensions)


def table_dtypes(name: str, dimension: int) -> dict[str, str]:
    """Data type of each column, for reading."""
    return {c.name: _DTYPES[c.dtype] for c in table_columns(name, dimension)}


def complete(name: str, dimension: int, values: Mapping[str, Any] | pd.DataFrame) -> pd.DataFrame:
    """A table with exactly its columns, in order; those that ``values`` lacks are null.

    Parameters
    ----------
    name : str
        Stem of the file: ``landmarks``, ``measurements`` …
    dimension : int
    values : mapping of column to (n,) array, or data frame

    Raises
    ------
    ValueError
        ``values`` has a column that the table has not.
    """
    given = pd.DataFrame(dict(values)) if isinstance(values, Mapping) else values
    columns = table_columns(name, dimension)
    unknown = sorted(set(given.columns) - {c.name for c in columns})
    if unknown:
        raise ValueError(f"table {name} has no column {', '.join(unknown)}")
    made = {
        c.name: _typed(given[c.name], c) if c.name in given else _null(len(given), c)
        for c in columns
    }
    return pd.DataFrame(made).reset_index(drop=True)


def _typed(values: pd.Series[Any], column: Column) -> pd.Series[Any]:
    if column.dtype == "text":
        # An empty text and an unknown one are the same empty cell of a CSV.
        known = values.notna() & (values.astype("object") != "")
        return values.astype("object").where(known, None).astype("str")
    return values.astype(_DTYPES[column.dtype])  # type: ignore[call-overload, no-any-return]


def _null(n: int, column: Column) -> pd.Series[Any]:
    fill = np.nan if column.dtype == "float64" else None
    return pd.Series([fill] * n, dtype=_DTYPES[column.dtype])


def table_covariance_columns(dimension: int) -> tuple[str, ...]:
    """Upper triangle of a pose covariance, row by row: 6 columns in 2-D, 21 in 3-D."""
    return covariance_columns(dimension)


def pack_covariance(cov: NDArray[np.float64]) -> NDArray[np.float64]:
    """(N, d, d) symmetric -> (N, d (d + 1) / 2) in the order of the columns."""
    i, j = np.triu_indices(cov.shape[-1])
    return np.ascontiguousarray(cov[..., i, j])


def unpack_covariance(packed: NDArray[np.float64]) -> NDArray[np.float64]:
    """(N, d (d + 1) / 2) -> (N, d, d), the inverse of :func:`pack_covariance`."""
    d = int((np.sqrt(8 * packed.shape[-1] + 1) - 1) / 2)
    i, j = np.triu_indices(d)
    cov = np.empty((*packed.shape[:-1], d, d))
    cov[..., i, j] = packed
    cov[..., j, i] = packed
    return cov

"""Times of a table: missing, out of order, doubled."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import Floats, Ints
from jointmap.ingest.table import Table

#: Odd multiplier that spreads bits (the golden ratio of 2^64).
_PRIME = 0x9E3779B97F4A7C15


def sort_by_time(table: Table, problems: Problems, column: str = "t_s") -> Table:
    """The rows in increasing time; a table out of order is sorted stably, with a notice.

    Rows without a stamp are reported and left out.
    """
    t = table.number(column)
    missing = np.isnan(t)
    if missing.any():
        message = "empty or NaN where a time is needed"
        table.complain(problems, missing, column, message, "give the time or drop the row")
        table, t = table.take(~missing), t[~missing]
    back = np.flatnonzero(np.diff(t) < 0.0) + 1
    if back.size == 0:
        return table
    first = back[:1]
    message = f"stamps go back {back.size} times, first here"
    table.complain(problems, first, column, message, "the rows are sorted by time", mended=True)
    return table.take(np.argsort(t, kind="stable"))


def same_as_before(t: Floats) -> NDArray[np.bool_]:
    """Which stamps of a sorted column equal the one before."""
    out = np.zeros(len(t), dtype=bool)
    np.equal(t[1:], t[:-1], out=out[1:])
    return out


def copies(t: Floats, columns: Sequence[NDArray[Any]]) -> Ints:
    """Rows of a table sorted by time that repeat an earlier row of the same stamp entirely.

    ``columns`` hold everything else in a row, each (n,); NaN equals NaN.
    """
    tied = same_as_before(t)
    tied[:-1] |= tied[1:]
    index = np.flatnonzero(tied)
    # Exact comparison sorts whole rows, which is slow: only for rows that share a hash.
    index = index[_repeated(_hashes([t, *columns], index))]
    if index.size == 0:
        return index
    rows = np.column_stack([_canonical(c[index]) for c in (t, *columns)])
    _, first = np.unique(rows, axis=0, return_index=True)
    again = np.ones(index.size, dtype=bool)
    again[first] = False
    return index[again]


def drop_copies(
    table: Table, columns: Sequence[NDArray[Any]], t: Floats, problems: Problems
) -> NDArray[np.bool_]:
    """Report rows that repeat another one entirely; returns which rows to keep."""
    extra = copies(t, columns)
    message, mend = "repeats another row entirely", "the first one is kept"
    table.complain(problems, extra, None, message, mend, mended=True)
    keep = np.ones(table.n, dtype=bool)
    keep[extra] = False
    return keep


def _canonical(values: NDArray[Any]) -> Ints:
    """Bit patterns that are equal where the numbers are; one NaN, one zero."""
    numbers = np.asarray(values, dtype=np.float64) + 0.0
    numbers[np.isnan(numbers)] = np.nan
    return numbers.view(np.int64)


def _hashes(columns: Sequence[NDArray[Any]], index: Ints) -> NDArray[np.uint64]:
    """One number per row; equal rows have equal numbers."""
    mixed = np.zeros(index.size, dtype=np.uint64)
    for column in columns:
        mixed = (mixed ^ _canonical(column[index]).view(np.uint64)) * np.uint64(_PRIME)
        mixed ^= mixed >> np.uint64(29)
    return mixed


def _repeated(keys: NDArray[np.uint64]) -> NDArray[np.bool_]:
    """Which keys occur more than once."""
    ranked = np.sort(keys)  # far faster than argsort, and mostly the end of it
    if not (ranked[1:] == ranked[:-1]).any():
        return np.zeros(keys.size, dtype=bool)
    order = np.argsort(keys, kind="stable")
    again = np.zeros(keys.size, dtype=bool)
    again[1:] = keys[order[1:]] == keys[order[:-1]]
    again[:-1] |= again[1:]
    out = np.zeros(keys.size, dtype=bool)
    out[order] = again
    return out

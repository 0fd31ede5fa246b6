"""Times of a table: missing, out of order, doubled."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import Floats, Ints
from jointmap.ingest.table import Table


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


def copies(t: Floats, content: Floats) -> Ints:
    """Rows of a table sorted by time that repeat an earlier row of the same stamp entirely.

    ``content`` (n, m) holds everything else in a row; NaN equals NaN.
    """
    tied = same_as_before(t)
    tied[:-1] |= tied[1:]
    index = np.flatnonzero(tied)
    if index.size == 0:
        return np.empty(0, dtype=np.int64)
    rows = np.column_stack([t[index], content[index]]) + 0.0  # -0.0 becomes 0.0
    _, first = np.unique(np.where(np.isnan(rows), np.inf, rows), axis=0, return_index=True)
    keep = np.zeros(index.size, dtype=bool)
    keep[first] = True
    return np.asarray(index[~keep])

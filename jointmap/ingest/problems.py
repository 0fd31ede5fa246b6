"""Collects everything that is wrong with a survey while reading goes on."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from jointmap.errors import LogFormatError, LogProblem

#: Rows listed one by one for each kind of problem in a file; the rest is counted.
LISTED_ROWS = 20


class Problems:
    """Problems in the order in which they were found.

    Not a frozen type on purpose: it is the notebook of one reading and dies with it.
    """

    def __init__(self) -> None:
        self._found: list[LogProblem] = []
        self._cells: dict[tuple[str, str], NDArray[np.int64]] = {}

    def add(
        self,
        path: str,
        message: str,
        mend: str,
        *,
        row: int | None = None,
        column: str | None = None,
        mended: bool = False,
    ) -> None:
        """Record one problem."""
        self._found.append(LogProblem(path, row, column, message, mend, mended))

    def rows(
        self,
        path: str,
        rows: Sequence[int] | NDArray[np.int64],
        column: str | None,
        message: str | Sequence[str],
        mend: str,
        *,
        mended: bool = False,
    ) -> None:
        """Record the same problem of many rows of a file: the first listed, the rest counted.

        ``message`` is one text, or one per listed row. A cell that was refused already is not
        refused again: a text in a number is not also an empty number.
        """
        index = np.arange(len(rows))
        if column is not None and not mended:
            known = self._cells.get((path, column), np.empty(0, dtype=np.int64))
            index = np.flatnonzero(~np.isin(rows, known))
            self._cells[path, column] = np.concatenate([known, rows])
        for i in index[:LISTED_ROWS].tolist():
            one = message if isinstance(message, str) else message[min(i, len(message) - 1)]
            self.add(path, one, mend, row=int(rows[i]), column=column, mended=mended)
        if len(index) > LISTED_ROWS:
            kind = message if isinstance(message, str) else message[0]
            text = f"{len(index) - LISTED_ROWS} more rows of the same kind ({kind})"
            self.add(path, text, mend, column=column, mended=mended)

    def extend(self, problems: Iterable[LogProblem]) -> None:
        """Take over problems found elsewhere."""
        self._found.extend(problems)

    @property
    def refused(self) -> bool:
        """Whether something was found that was not mended."""
        return any(not p.mended for p in self._found)

    def all(self) -> tuple[LogProblem, ...]:
        """Everything found so far."""
        return tuple(self._found)

    def raise_refused(self) -> None:
        """Raise when the input has to be refused.

        Raises
        ------
        LogFormatError
            Carries every problem of every file, the unmended first.
        """
        if self.refused:
            raise LogFormatError(sorted(self._found, key=lambda p: p.mended))


def close_match(word: str, known: Iterable[str]) -> str | None:
    """The known word that looks most like this one, ``None`` when none does."""
    words = list(known)
    lowered = {w.lower(): w for w in words}
    found = difflib.get_close_matches(word.lower(), list(lowered), n=1, cutoff=0.6)
    return lowered[found[0]] if found else None


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """A mend that names the close match, or everything known."""
    words = sorted(known)
    match = close_match(word, words)
    if match is not None:
        return f"did you mean {match!r}?"
    return "known are: " + (", ".join(words) if words else "none")

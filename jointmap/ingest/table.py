"""One table of the survey as plain arrays, with the place that each row came from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from jointmap.ingest.problems import LISTED_ROWS, Problems
from jointmap.ingest.survey import Floats, Ints, Provenance


@dataclass(frozen=True)
class Names:
    """A column of names: ``names[code[i]]``, names sorted, code -1 where the cell is empty."""

    code: Ints
    names: tuple[str, ...]

    def text(self) -> list[str]:
        """The names row by row (for a few rows: messages and small tables)."""
        return [self.names[c] if c >= 0 else "" for c in self.code]


@dataclass(frozen=True)
class Table:
    """Columns of one or of several concatenated files.

    ``numbers`` float64 columns (NaN: not given; times in seconds under their ``_s`` names),
    ``texts`` columns of names. ``from_ns`` lists the times that the file gives in nanoseconds.
    """

    files: tuple[str, ...]
    file: Ints
    row: Ints
    numbers: Mapping[str, Floats]
    texts: Mapping[str, Names]
    from_ns: frozenset[str] = frozenset()

    @property
    def n(self) -> int:
        """Number of rows."""
        return len(self.row)

    @property
    def provenance(self) -> Provenance:
        """Where the rows came from."""
        return Provenance(self.files, self.file, self.row)

    def has(self, *names: str) -> bool:
        """Whether all these columns are there."""
        return all(n in self.numbers or n in self.texts for n in names)

    def given(self, name: str) -> bool:
        """Whether a number column is there and not empty throughout."""
        return name in self.numbers and not bool(np.isnan(self.numbers[name]).all())

    def number(self, name: str) -> Floats:
        """A number column, NaN throughout where it is missing."""
        found = self.numbers.get(name)
        return np.full(self.n, np.nan) if found is None else found

    def matrix(self, names: Sequence[str]) -> Floats:
        """Number columns side by side, (n, len(names)); missing ones are NaN."""
        out = np.empty((self.n, len(names)))
        for j, name in enumerate(names):
            out[:, j] = self.numbers.get(name, np.nan)
        return out

    def take(self, index: NDArray[np.int64] | NDArray[np.bool_]) -> Table:
        """The rows of an index or mask."""
        return replace(
            self,
            file=self.file[index],
            row=self.row[index],
            numbers={k: v[index] for k, v in self.numbers.items()},
            texts={k: Names(v.code[index], v.names) for k, v in self.texts.items()},
        )

    def complain(
        self,
        problems: Problems,
        where: NDArray[np.bool_] | NDArray[np.int64],
        column: str | None,
        message: str | Sequence[str],
        mend: str,
        *,
        mended: bool = False,
    ) -> bool:
        """Record a problem of the rows of a mask or index; returns whether there are any.

        A sequence of messages goes with the first selected rows, one each.
        """
        index = np.flatnonzero(where) if where.dtype == np.bool_ else where
        if column in self.from_ns:
            column = str(column).removesuffix("_s") + "_ns"
        for k, name in enumerate(self.files):
            chosen = np.flatnonzero(self.file[index] == k)
            if chosen.size == 0:
                continue
            text: str | list[str] = message if isinstance(message, str) else list(message)
            if isinstance(text, list):
                text = [text[min(i, len(text) - 1)] for i in chosen[:LISTED_ROWS].tolist()]
            rows = self.row[index[chosen]]
            problems.rows(name, rows, column, text, mend, mended=mended)
        return index.size > 0


def concatenate(tables: Sequence[Table]) -> Table:
    """The rows of several files of one kind, in the order of the files."""
    if len(tables) == 1:
        return tables[0]
    numbers = dict.fromkeys(k for t in tables for k in t.numbers)
    texts = dict.fromkeys(k for t in tables for k in t.texts)
    return Table(
        files=tuple(f for t in tables for f in t.files),
        file=np.repeat(np.arange(len(tables)), [t.n for t in tables]),
        row=np.concatenate([t.row for t in tables]),
        numbers={k: np.concatenate([t.number(k) for t in tables]) for k in numbers},
        texts={k: _join_names([_names(t, k) for t in tables]) for k in texts},
        from_ns=frozenset.union(*(t.from_ns for t in tables)),
    )


def _names(table: Table, key: str) -> Names:
    empty = Names(np.full(table.n, -1, dtype=np.int64), ())
    return table.texts.get(key, empty)


def _join_names(parts: Sequence[Names]) -> Names:
    """Columns of names with one common, sorted list."""
    names = tuple(sorted({n for p in parts for n in p.names}))
    place = {n: i for i, n in enumerate(names)}
    codes = []
    for part in parts:
        # One entry more at the end: code -1 (an empty cell) maps to itself.
        to = np.array([place[n] for n in part.names] + [-1], dtype=np.int64)
        codes.append(to[part.code])
    return Names(np.concatenate(codes), names)

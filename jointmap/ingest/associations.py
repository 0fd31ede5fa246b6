"""Associations: which shared landmark a robot's label is, and when."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

import numpy as np

from jointmap import schema
from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import Associations
from jointmap.ingest.table import Table
from jointmap.ingest.values import known_names, require, require_names

SPEC = schema.input_table("associations")


def read_associations(
    table: Table, robots: Sequence[str], problems: Problems
) -> Associations | None:
    """The associations of a survey; an empty table makes every label private."""
    columns = ["robot", "label", "landmark"]
    if not require(table, columns, (), problems):
        return None
    for column in columns:
        require_names(table, column, problems)
    known_names(table, "robot", robots, "robot", problems)
    t_from, t_to = table.number("t_from_s"), table.number("t_to_s")
    t_from = np.where(np.isnan(t_from), -np.inf, t_from)
    t_to = np.where(np.isnan(t_to), np.inf, t_to)
    backward = t_from > t_to
    table.complain(problems, backward, "t_to_s", "ends before it begins", "swap the times")
    keep = _resolve_overlaps(table, t_from, t_to, problems)
    table, t_from, t_to = table.take(keep), t_from[keep], t_to[keep]
    return Associations(
        robots=tuple(table.texts["robot"].text()),
        labels=tuple(table.texts["label"].text()),
        landmarks=tuple(table.texts["landmark"].text()),
        t_from_s=t_from,
        t_to_s=t_to,
        source=table.provenance,
    )


def _resolve_overlaps(
    table: Table,
    t_from: np.ndarray[tuple[int], np.dtype[np.float64]],
    t_to: np.ndarray[tuple[int], np.dtype[np.float64]],
    problems: Problems,
) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """One label is one landmark at a time: copies are dropped, contradictions refused."""
    robot, label, landmark = (table.texts[c].code for c in ("robot", "label", "landmark"))
    order = np.lexsort((t_from, label, robot))
    keep = np.ones(table.n, dtype=bool)
    latest: dict[tuple[int, int], int] = {}
    copied, clashing = [], []
    for i in order.tolist():  # rows of one small table: one per label
        key = (int(robot[i]), int(label[i]))
        before = latest.get(key)
        if before is not None and t_from[i] <= t_to[before]:
            same = landmark[i] == landmark[before]
            if same and t_from[i] == t_from[before] and t_to[i] == t_to[before]:
                copied.append(i)
                keep[i] = False
                continue
            if not same:
                clashing.append(i)
        if before is None or t_to[i] >= t_to[before]:
            latest[key] = i
    message = "repeats another row entirely"
    where = np.array(sorted(copied), dtype=np.int64)
    table.complain(problems, where, None, message, "the first one is kept", mended=True)
    message = "the label is two landmarks at one time"
    where = np.array(sorted(clashing), dtype=np.int64)
    mend = "keep one row, or part them by t_from_s and t_to_s"
    table.complain(problems, where, "landmark", message, mend)
    return keep


def drop_unseen(
    associations: Associations, seen: Mapping[str, Iterable[str]], problems: Problems
) -> Associations:
    """Leave out the associations of labels that their robot never sighted."""
    labels = {(robot, label) for robot, names in seen.items() for label in names}
    pairs = list(zip(associations.robots, associations.labels, strict=True))
    keep = np.array([p in labels for p in pairs], dtype=bool)
    lost = np.flatnonzero(~keep)
    source = associations.source
    if lost.size == 0:
        return associations
    message = [f"{pairs[i][0]} never sighted {pairs[i][1]!r}" for i in lost.tolist()]
    mend = "the association is ignored"
    problems.rows(source.files[0], source.row[lost], "label", message, mend, mended=True)
    return take(associations, keep)


def take(
    associations: Associations, keep: np.ndarray[tuple[int], np.dtype[np.bool_]]
) -> Associations:
    """The associations of a mask."""
    index = np.flatnonzero(keep).tolist()
    source = associations.source
    return Associations(
        robots=tuple(associations.robots[i] for i in index),
        labels=tuple(associations.labels[i] for i in index),
        landmarks=tuple(associations.landmarks[i] for i in index),
        t_from_s=associations.t_from_s[keep],
        t_to_s=associations.t_to_s[keep],
        source=type(source)(source.files, source.file[keep], source.row[keep]),
    )

"""Checks of values that several tables share: names, angles, sigmas, quaternions, covariances."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from jointmap import schema
from jointmap.ingest.problems import LISTED_ROWS, Problems, did_you_mean
from jointmap.ingest.survey import Floats, Ints
from jointmap.ingest.table import Table

TURN = 2.0 * np.pi
#: Angles may pass a full turn by rounding, not by more.
SLACK_RAD = 0.01
DEGREES_MEND = "multiply by pi/180"
#: A quaternion is normalised quietly up to here, with a notice up to the second value.
QUIET_NORM, MENDED_NORM = 1e-6, 0.01


def name_fault(name: str) -> str | None:
    """What is wrong with a name, ``None`` when nothing is."""
    if not name.strip():
        return "is empty"
    if "/" in name or "\\" in name:
        return "holds a slash"
    if name in (".", ".."):
        return "is a folder's"
    if not name.isprintable():
        return "holds an unprintable character"
    return None


def require(table: Table, columns: Sequence[str], known: Sequence[str], problems: Problems) -> bool:
    """Report the missing ones of these columns in every file of the table."""
    missing = [c for c in columns if not table.has(c)]
    for column in missing:
        there = [c for c in (*table.numbers, *table.texts) if c not in known]
        extra = f" (the file has {', '.join(there)})" if there else ""
        for name in table.files:
            problems.add(name, "the column is missing", f"add it{extra}", column=column)
    return not missing


def require_numbers(table: Table, columns: Sequence[str], problems: Problems) -> None:
    """Report empty cells of columns that need a number in every row."""
    for column in columns:
        empty = np.isnan(table.number(column))
        if empty.any():
            message = "empty or NaN where a number is needed"
            table.complain(problems, empty, column, message, "give the number or drop the row")


def require_names(table: Table, column: str, problems: Problems) -> None:
    """Report empty cells and unusable names of a column of names."""
    names = table.texts[column]
    table.complain(problems, names.code < 0, column, "the name is missing", "give the name")
    for code, name in enumerate(names.names):
        fault = name_fault(name)
        if fault:
            where = names.code == code
            table.complain(problems, where, column, f"the name {name!r} {fault}", "rename it")


def known_names(
    table: Table, column: str, known: Sequence[str], what: str, problems: Problems
) -> Ints:
    """Codes of a column of names into ``known``; -1 and a problem for a name that is not."""
    names = table.texts[column]
    to = np.full(len(names.names) + 1, -1, dtype=np.int64)
    for code, name in enumerate(names.names):
        if name in known:
            to[code] = list(known).index(name)
        else:
            mend = did_you_mean(name, known)
            table.complain(problems, names.code == code, column, f"no {what} {name!r}", mend)
    return to[names.code]


def refuse_dimension(
    table: Table,
    spec: schema.Table,
    dimension: int,
    problems: Problems,
    harmless: Sequence[str] = (),
) -> None:
    """Report filled columns that belong to the other dimension; harmless ones are ignored."""
    mine = set(spec.names(dimension)) | set(table.texts)
    for prefix in ("cov_", "acc_cov_"):
        mine |= set(schema.covariance_lower_columns(dimension, prefix))
    for column in table.numbers:
        if column in mine or not table.given(column):
            continue
        mended = column in harmless
        message = f"belongs to a survey of {5 - dimension} dimensions, this one has {dimension}"
        mend = "it is ignored" if mended else "leave the column out or change the dimension"
        for name in table.files:
            problems.add(name, message, mend, column=column, mended=mended)


def check_sigmas(table: Table, columns: Sequence[str], problems: Problems) -> None:
    """Report sigmas that are not positive, and angular ones over half a turn."""
    for column in columns:
        if column not in table.numbers:
            continue
        values = table.numbers[column]
        with np.errstate(invalid="ignore"):
            wrong = values <= 0.0
            degrees = values > np.pi
        if wrong.any():
            message = "a sigma must be positive"
            table.complain(problems, wrong, column, message, "leave it empty when unknown")
        if column.endswith("_rad") and degrees.any():
            message = "a sigma over half a turn: degrees for radians?"
            table.complain(problems, degrees, column, message, DEGREES_MEND)


def check_angle(table: Table, column: str, problems: Problems, limit: float = TURN) -> None:
    """Report angles beyond a limit: degrees when a full turn is passed."""
    if column not in table.numbers:
        return
    size = np.abs(table.numbers[column])
    with np.errstate(invalid="ignore"):
        degrees, beyond = size > TURN + SLACK_RAD, size > limit + SLACK_RAD
    if degrees.any():
        largest = float(np.nanmax(size))
        message = f"angles up to {largest:.4g}: degrees for radians"
        table.complain(problems, degrees, column, message, DEGREES_MEND)
    elif beyond.any():
        table.complain(problems, beyond, column, f"angle beyond {limit:.4f} rad", "mend the angle")


def unit_quaternion(rows: Floats) -> tuple[Floats, NDArray[np.bool_]]:
    """Quaternions (n, 4) of unit length, and which are too far from it to be trusted."""
    norm = np.linalg.norm(rows, axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        wrong = np.abs(norm - 1.0) > MENDED_NORM
        unit = rows / norm[:, None]
    return np.where(wrong[:, None], rows, unit), wrong


def normalise(table: Table, quaternion: Floats, problems: Problems) -> Floats:
    """Quaternions (n, 4) to unit length: within 1 % mended, otherwise refused; NaN rows pass."""
    norm = np.linalg.norm(quaternion, axis=1)
    unit, wrong = unit_quaternion(quaternion)
    with np.errstate(invalid="ignore"):
        off = (np.abs(norm - 1.0) > QUIET_NORM) & ~wrong
    if wrong.any():
        message = [f"quaternion of length {v:.4g}" for v in norm[wrong][:LISTED_ROWS]]
        table.complain(problems, wrong, "qx", message, "write a unit quaternion qx qy qz qw")
    if off.any():
        notice = "quaternion of a length other than one"
        table.complain(problems, off, "qx", notice, "it is normalised", mended=True)
    return unit


def used_names(code: Ints, names: Sequence[str]) -> tuple[Ints, tuple[str, ...]]:
    """Codes and names without the names that no row uses."""
    used = np.unique(code[code >= 0])
    to = np.full(len(names) + 1, -1, dtype=np.int64)
    to[used] = np.arange(len(used))
    return to[code], tuple(names[i] for i in used)

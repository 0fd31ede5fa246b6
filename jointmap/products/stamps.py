"""Poses at the stamps of a file: reading the questions, writing the answers."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray

from jointmap import schema
from jointmap.atomic import new_file
from jointmap.errors import LogFormatError, LogProblem, SettingsError
from jointmap.ingest.files import SurveyFiles
from jointmap.ingest.problems import Problems, did_you_mean
from jointmap.ingest.table import Table
from jointmap.ingest.tablefile import read_table
from jointmap.products.columns import TRUST, pack_covariance, table_covariance_columns
from jointmap.products.files import write_csv
from jointmap.products.reference import Reference

ENDINGS = (".csv", ".csv.gz", ".parquet")

_QUESTIONS = schema.Table(
    "stamps",
    "any name",
    "one row per pose that is asked for",
    (
        schema.Column("robot", "text", "", "robot of the reference", True),
        schema.Column("t_s", "float64", "s", "survey time", True),
        schema.Column("t_ns", "int64", "ns", "instead of `t_s`: the same in nanoseconds"),
    ),
)


@dataclass(frozen=True)
class Stamps:
    """Questions in the order of their file: ``robots[robot[i]]`` at ``t_s[i]`` (survey time)."""

    robots: tuple[str, ...]
    robot: NDArray[np.int64]
    t_s: NDArray[np.float64]


def read_stamps(path: Path | str, robots: tuple[str, ...]) -> Stamps:
    """Read a table with the columns ``robot`` and ``t_s`` (or ``t_ns``).

    Parameters
    ----------
    path : path
        CSV, ``.csv.gz`` or Parquet, by its name.
    robots : tuple of str
        The robots that can be asked for.

    Raises
    ------
    LogFormatError
        Rows without stamp or robot, robots that are not known, cells that are no numbers; every
        one with its row.
    """
    path = Path(path)
    if not path.is_file():
        mend = "name a CSV or Parquet file with the columns robot and t_s"
        raise LogFormatError([LogProblem(str(path), None, None, "there is no such file", mend)])
    path = path.resolve()
    problems = Problems()
    # Reuse of the survey's reader: the folder of the file stands for the survey's.
    table = read_table(SurveyFiles(path.parent, problems), path.name, _QUESTIONS, "", "--at")
    if table is not None:
        _check(table, path.name, robots, problems)
    problems.raise_refused()
    if table is None:
        raise LogFormatError(problems.all())
    names = table.texts["robot"]
    return Stamps(names.names, names.code, table.number("t_s"))


def _check(table: Table, file: str, robots: tuple[str, ...], problems: Problems) -> None:
    missing = [name for name in ("robot", "t_s") if not table.has(name)]
    for name in missing:
        problems.add(file, "the column is missing", "add it", row=1, column=name)
    if missing:
        return
    names, stamps = table.texts["robot"], table.numbers["t_s"]
    table.complain(problems, names.code < 0, "robot", "no robot given", "name the robot")
    table.complain(problems, np.isnan(stamps), "t_s", "no stamp given", "give the survey time")
    for code, name in enumerate(names.names):
        if name not in robots:
            table.complain(
                problems,
                names.code == code,
                "robot",
                f"the reference has no robot {name!r}",
                did_you_mean(name, robots),
            )


def answer(reference: Reference, stamps: Stamps) -> pd.DataFrame:
    """One row per question, in its order.

    Returns
    -------
    DataFrame
        ``robot t_s``, pose columns in the map frame, full covariance, ``component``, ``trust``
        and ``reason`` (empty where everything is known).
    """
    n, dimension = len(stamps.t_s), reference.dimension
    pose_names = schema.pose_columns(dimension)
    cov_names = table_covariance_columns(dimension)
    pose = np.full((n, len(pose_names)), np.nan)
    cov = np.full((n, len(cov_names)), np.nan)
    component = np.full(n, -1)
    trust, reason = np.full(n, -1), np.full(n, "", dtype=object)
    for code, robot in enumerate(stamps.robots):
        mine = np.flatnonzero(stamps.robot == code)
        found = reference.pose_at(robot, stamps.t_s[mine])
        pose[mine], cov[mine] = found.pose, pack_covariance(found.cov)
        component[mine], trust[mine], reason[mine] = found.component, found.trust, found.reason
    words = np.array([*TRUST, None], dtype=object)
    return pd.DataFrame(
        {
            "robot": pd.Series(np.array(stamps.robots, dtype=object)[stamps.robot], dtype="str"),
            "t_s": stamps.t_s,
            **dict(zip(pose_names, pose.T, strict=True)),
            **dict(zip(cov_names, cov.T, strict=True)),
            "component": pd.Series(component, dtype="Int64").mask(component < 0),
            "trust": pd.Series(words[trust], dtype="str"),
            "reason": pd.Series(reason, dtype="str"),
        }
    )


def write_table(frame: pd.DataFrame, path: Path | str, replace: bool = False) -> None:
    """Write a table whole or not at all, CSV or Parquet by the name.

    Raises
    ------
    SettingsError
        The name ends in none of ``ENDINGS``.
    OutputExistsError
        The file exists and may not be replaced.
    """
    path = Path(path)
    if not path.name.endswith(ENDINGS):
        raise SettingsError(f"{path.name}: name the output with one of {', '.join(ENDINGS)}")
    with new_file(path, replace=replace) as fresh:
        if path.name.endswith(".parquet"):
            table = pa.Table.from_pandas(frame, preserve_index=False)
            pq.write_table(table, fresh, compression="zstd")
        else:
            write_csv(frame, fresh)

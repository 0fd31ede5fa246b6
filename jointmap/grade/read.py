"""Reading what the online estimators reported: ``online/NAME`` of a survey folder."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from jointmap import frames, schema
from jointmap.errors import LogFormatError, LogProblem, SurveyError
from jointmap.frames import Group
from jointmap.grade.online import (
    COVARIANCES,
    DATA,
    EVIDENCES,
    FRAMES,
    JointCross,
    MapEstimate,
    OnlineEstimate,
    RobotEstimate,
)
from jointmap.graph.clock import SurveyClock
from jointmap.ingest.covariance import indefinite
from jointmap.ingest.files import TABLE_ENDINGS, SurveyFiles
from jointmap.ingest.problems import Problems, did_you_mean
from jointmap.ingest.section import Section, load_toml
from jointmap.ingest.stamps import same_as_before, sort_by_time
from jointmap.ingest.survey import Survey
from jointmap.ingest.table import Table
from jointmap.ingest.tablefile import read_table
from jointmap.ingest.values import require, unit_quaternion

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

FOLDER = "online"
#: Files of an estimator's folder that are no robot's.
_WIDE = ("joint", "map")
#: What each key of estimator.toml may say, and why it is needed.
_KEYS = {
    "frame": (FRAMES, "in which frame the poses are"),
    "covariance": (COVARIANCES, "which axes the covariances are about"),
    "evidence": (EVIDENCES, "what the estimator could use"),
    "data": (DATA, "whether its data are those of the reference"),
}


def estimator_names(survey: Survey) -> tuple[str, ...]:
    """Names of the estimators in a survey folder, sorted."""
    folder = survey.path / FOLDER
    if not folder.is_dir():
        return ()
    return tuple(sorted(p.name for p in folder.iterdir() if p.is_dir()))


def read_online(
    survey: Survey, names: Sequence[str] | None = None
) -> tuple[tuple[OnlineEstimate, ...], tuple[LogProblem, ...]]:
    """Read estimators of a survey.

    Parameters
    ----------
    survey : Survey
    names : sequence of str, optional
        Which ones; all by default.

    Returns
    -------
    estimates, problems
        Estimators in the order asked for, and everything that was mended while reading.

    Raises
    ------
    SurveyError
        The survey has no estimator, or none of this name.
    LogFormatError
        Something cannot be used as it is; carries every problem of every file.
    """
    known = estimator_names(survey)
    if not known:
        where = survey.path / FOLDER
        raise SurveyError(
            f"no online estimates in {where}; put each estimator's into {FOLDER}/NAME"
        )
    wanted = known if names is None else tuple(dict.fromkeys(names))
    for name in wanted:
        if name not in known:
            raise SurveyError(f"no estimator {name!r} in {FOLDER}: {did_you_mean(name, known)}")
    problems = Problems()
    files = SurveyFiles(survey.path, problems)
    clock = SurveyClock(survey)
    found = [_estimator(files, survey, clock, name) for name in wanted]
    problems.raise_refused()
    return tuple(f for f in found if f is not None), problems.all()


def _estimator(
    files: SurveyFiles, survey: Survey, clock: SurveyClock, name: str
) -> OnlineEstimate | None:
    home = f"{FOLDER}/{name}"
    said = _declared(files, home)
    group = frames.group(survey.dimension)
    tables = _tables_of(files, home)
    robots = {}
    for stem in [s for s in tables if s not in _WIDE]:
        file = tables[stem]
        if stem not in survey.robots:
            message = f"the survey has no robot {stem!r}"
            mend = f"rename or remove the file; {did_you_mean(stem, survey.robots)}"
            files.problems.add(file, message, mend)
            continue
        table = read_table(files, file, schema.input_table("online_trajectory"), file, "")
        if table is None:
            continue
        made = _robot(table, group, said, clock, stem, files.problems)
        if made is not None:
            robots[stem] = made
    if not any(s not in _WIDE for s in tables):
        files.problems.add(home, "holds no robot's file", "write ROBOT.csv for each robot")
    joint = _joint(files, tables, survey, group, said)
    maps = _maps(files, tables, survey)
    if said is None:
        return None
    return OnlineEstimate(
        name=name,
        frame=said["frame"],  # type: ignore[arg-type]
        covariance=said["covariance"],
        evidence=said["evidence"],  # type: ignore[arg-type]
        data=said["data"],  # type: ignore[arg-type]
        robots=robots,
        joint=joint,
        maps=maps,
    )


def _declared(files: SurveyFiles, home: str) -> dict[str, str] | None:
    """What estimator.toml declares; every missing key is asked for by name."""
    name = f"{home}/estimator.toml"
    before = len(files.problems.all())
    values = load_toml(files, name)
    if values is None:
        return None
    section = Section(name, "", values, files.problems)
    said = {}
    for key, (allowed, why) in _KEYS.items():
        if not section.has(key):
            words = " | ".join(f'"{w}"' for w in allowed)
            section.wrong(key, f"the key is missing: it says {why}", f"write {key} = {words}")
            continue
        said[key] = section.choice(key, allowed, allowed[-1])
    section.done()
    refused = any(not p.mended for p in files.problems.all()[before:])
    return None if refused else said


def _tables_of(files: SurveyFiles, home: str) -> dict[str, str]:
    """Table files of an estimator's folder by their stem; two of one stem are refused."""
    found: dict[str, str] = {}
    for path in sorted((files.folder / home).iterdir()):
        ending = next((e for e in TABLE_ENDINGS if path.name.endswith(e)), None)
        if ending is None or not path.is_file():
            continue
        stem = path.name.removesuffix(ending)
        name = f"{home}/{path.name}"
        if stem in found:
            message = f"the same table as {Path(found[stem]).name}"
            files.problems.add(name, message, "keep one of them")
        found[stem] = name
    return found


def _robot(
    table: Table,
    group: Group,
    said: dict[str, str] | None,
    clock: SurveyClock,
    robot: str,
    problems: Problems,
) -> RobotEstimate | None:
    dimension = group.dim
    names = schema.pose_columns(dimension)
    if not require(table, ("t_s", *names), (), problems):
        return None
    before = table.n
    if before == 0:
        message = "the file has no rows: nothing of this robot can be graded"
        problems.add(table.files[0], message, "write its estimates, or leave the file", mended=True)
    table = sort_by_time(table, problems)
    rows = table.matrix(names)
    empty = np.asarray(np.isnan(rows).any(axis=1))
    if dimension == 3:
        unit, faulty = unit_quaternion(rows[:, 3:])
        empty |= faulty
        rows[:, 3:] = unit
    doubled = same_as_before(table.number("t_s")) & ~empty
    table.complain(
        problems, empty, names[0], "the row has no pose", "the row counts as a gap", mended=True
    )
    table.complain(
        problems,
        doubled,
        "t_s",
        "repeats the stamp before it",
        "the first one is kept",
        mended=True,
    )
    keep = ~empty & ~doubled
    table, rows = table.take(keep), rows[keep]
    pose = group.from_rows(rows)
    cov = _covariance(table, group, pose, said, problems)
    t_s = clock.survey_time(robot, table.number("t_s"))
    return RobotEstimate(t_s, pose, cov, table.row, before - table.n)


def _covariance(
    table: Table, group: Group, pose: Floats, said: dict[str, str] | None, problems: Problems
) -> Floats | None:
    """Body-tangent covariances; rows whose covariance cannot be one lose it, with a notice."""
    names = schema.covariance_columns(group.dim)
    if not any(table.given(n) for n in names):
        return None
    i, j = np.triu_indices(group.dof)
    cov = np.empty((table.n, group.dof, group.dof))
    cov[:, i, j] = cov[:, j, i] = table.matrix(names)
    unknown = np.isnan(cov)
    partial = np.asarray(unknown.any(axis=(1, 2)) & ~unknown.all(axis=(1, 2)))
    mend = "the row's covariance is left out"
    table.complain(problems, partial, names[0], "the covariance is incomplete", mend, mended=True)
    cov[partial] = np.nan
    # An exact first pose has a covariance of zeros: only negative ones are impossible.
    bad = indefinite(np.where(np.isnan(cov), 0.0, cov), -1e-6)
    message = "the covariance has a negative eigenvalue"
    table.complain(problems, bad, names[0], message, mend, mended=True)
    cov[bad] = np.nan
    return to_body(cov, group, pose, said["covariance"] if said else "fixed-axes")


def to_body(cov: Floats, group: Group, pose: Floats, convention: str) -> Floats:
    """Covariances (n, dof, dof) as files state them, as body tangents of :mod:`jointmap.frames`.

    ``fixed-axes``: position and rotation about the axes of the frame, order x, y, yaw or x, y, z,
    rx, ry, rz. ``body-tangent``: the same order about the axes of the body.
    """
    if convention == "fixed-axes":
        return group.covariance_from_table(pose, cov)
    if group.dim == 2:
        return cov
    order = np.array([3, 4, 5, 0, 1, 2])
    return np.ascontiguousarray(cov[:, order][:, :, order])


def _joint(
    files: SurveyFiles,
    tables: dict[str, str],
    survey: Survey,
    group: Group,
    said: dict[str, str] | None,
) -> JointCross | None:
    """joint.parquet; its cross-covariances stay in the file's axes."""
    if "joint" not in tables:
        return None
    name = tables["joint"]
    table = read_table(files, name, schema.input_table("online_joint"), name, "")
    names = schema.xcov_columns(group.dim)
    if table is None or not require(
        table, ("t_s", "robot_a", "robot_b", *names), (), files.problems
    ):
        return None
    values = table.matrix(names).reshape(table.n, group.dof, group.dof)
    a, b = (table.texts[c].text() for c in ("robot_a", "robot_b"))
    for robot in sorted({*a, *b} - set(survey.robots)):
        message, mend = f"the survey has no robot {robot!r}", did_you_mean(robot, survey.robots)
        files.problems.add(name, message, mend)
    return JointCross(table.number("t_s"), tuple(a), tuple(b), values)


def _maps(files: SurveyFiles, tables: dict[str, str], survey: Survey) -> dict[str, MapEstimate]:
    if "map" not in tables:
        return {}
    name, dimension = tables["map"], survey.dimension
    table = read_table(files, name, schema.input_table("online_map"), name, "")
    axes = ("x", "y", "z")[:dimension]
    place = tuple(f"{a}_m" for a in axes)
    if table is None or not require(table, ("robot", "landmark", *place), (), files.problems):
        return {}
    position = table.matrix(place)
    empty = np.asarray(np.isnan(position).any(axis=1))
    table.complain(
        files.problems, empty, place[0], "no position", "the row is left out", mended=True
    )
    cov = np.empty((table.n, dimension, dimension))
    for p, a in enumerate(axes):
        for q in range(p, dimension):
            cov[:, p, q] = cov[:, q, p] = table.number(f"cov_{a}_{axes[q]}")
    owner = np.array(table.texts["robot"].text(), dtype=object)
    landmark = np.array(table.texts["landmark"].text(), dtype=object)
    out = {}
    for robot in sorted(set(owner.tolist())):
        if robot not in survey.robots:
            message, mend = f"the survey has no robot {robot!r}", did_you_mean(robot, survey.robots)
            files.problems.add(name, message, mend, column="robot")
            continue
        mine = np.flatnonzero((owner == robot) & ~empty)
        out[robot] = MapEstimate(tuple(landmark[mine].tolist()), position[mine], cov[mine])
    return out


def refuse(path: str, message: str, mend: str) -> LogFormatError:
    """A refusal of one file of the estimates."""
    return LogFormatError([LogProblem(path, None, None, message, mend)])

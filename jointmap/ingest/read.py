"""A survey folder to a :class:`Survey`: everything read, everything wrong with it found."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, is_dataclass, replace
from pathlib import Path

import numpy as np

from jointmap import schema
from jointmap.errors import LogFormatError, LogProblem
from jointmap.ingest.associations import drop_unseen, read_associations
from jointmap.ingest.checks import check_survey
from jointmap.ingest.closures import read_closures
from jointmap.ingest.config import FILE, Config, RobotConfig, read_config
from jointmap.ingest.control import read_control
from jointmap.ingest.edits import FILE as EDITS_FILE
from jointmap.ingest.edits import read_edits
from jointmap.ingest.files import SurveyFiles
from jointmap.ingest.fixes import RawFixes, place_fixes, read_fixes
from jointmap.ingest.observations import read_observations
from jointmap.ingest.odometry import read_odometry
from jointmap.ingest.presence import without_absent
from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import (
    Associations,
    Closures,
    ControlPoints,
    Edits,
    RobotLog,
    Survey,
)
from jointmap.ingest.table import Table, concatenate
from jointmap.ingest.tablefile import read_table


def read_survey(path: Path | str) -> Survey:
    """Read a survey folder and check it.

    Parameters
    ----------
    path : path
        The folder, or its survey.toml.

    Returns
    -------
    Survey
        With everything that was mended on the way in ``problems``.

    Raises
    ------
    LogFormatError
        Something cannot be mended; carries every problem of every file.
    """
    folder = Path(path)
    if folder.name == FILE and folder.is_file():
        folder = folder.parent
    problems = Problems()
    if not folder.is_dir():
        mend = "name the folder that holds survey.toml"
        raise LogFormatError([LogProblem(str(path), None, None, "is no folder", mend)])
    files = SurveyFiles(folder, problems)
    config = read_config(files)
    if config is None:
        raise LogFormatError(problems.all())
    with np.errstate(all="ignore"):  # what the numbers are is for the checks to say
        survey = _read(files, config)
        problems.raise_refused()
        assert survey is not None  # nothing was refused, so there are robots
        survey = _finish(survey, problems)
    problems.raise_refused()
    survey = replace(survey, problems=problems.all(), inputs=dict(sorted(files.digests.items())))
    _freeze(survey)
    return survey


@dataclass(frozen=True)
class _Wide:
    """What belongs to the survey as a whole."""

    control_points: ControlPoints | None
    closures: Closures | None
    associations: Associations | None
    edits: Edits


def _read(files: SurveyFiles, config: Config) -> Survey | None:
    """Every file of the survey; ``None`` when no robot is left."""
    problems = files.problems
    logs: dict[str, RobotLog] = {}
    raw_fixes: dict[str, RawFixes] = {}
    for name, robot in config.robots.items():
        log, fixes = _robot(files, config, robot)
        if log is not None:
            logs[name] = log
        if fixes is not None:
            raw_fixes[name] = fixes
    wide = _wide(files, config)
    control = wide.control_points
    has_control = control is not None and len(control.landmarks) > 0
    placed, origin = place_fixes(raw_fixes, config, has_control, problems)
    if config.datum_kind == "control" and not has_control and not raw_fixes:
        message, mend = "there are neither control points nor fixes", 'choose kind = "landmarks"'
        problems.add(FILE, message, f"give some, or {mend}", column="datum.kind")
    if not logs:
        if config.robots and not problems.refused:
            problems.add(FILE, "no robot has odometry", "name the odometry of at least one robot")
        return None
    return Survey(
        path=files.folder.resolve(),
        name=config.name,
        dimension=config.dimension,
        gravity_aligned=config.gravity_aligned,
        crs=config.crs,
        datum_kind=config.datum_kind,
        datum_robot=config.datum_robot or next(iter(logs)),
        robots={n: replace(log, fixes=placed.get(n)) for n, log in logs.items()},
        closures=wide.closures,
        control_points=control,
        associations=wide.associations,
        edits=wide.edits,
        geodetic_origin=origin,
    )


def _finish(survey: Survey, problems: Problems) -> Survey:
    """Leave out what refers to robots or labels that are not there, then check the whole."""
    survey = without_absent(survey, problems)
    if survey.associations is not None:
        seen = {
            name: log.sightings.targets
            for name, log in survey.robots.items()
            if log.sightings is not None
        }
        known = drop_unseen(survey.associations, seen, problems)
        survey = replace(survey, associations=known)
    check_survey(survey, problems)
    return survey


def _tables(files: SurveyFiles, names: Sequence[str], kind: str, key: str) -> Table | None:
    """The concatenated files of one kind, those that can be read; ``None`` when there are none."""
    found = [read_table(files, n, schema.input_table(kind), FILE, key) for n in names]
    tables = [t for t in found if t is not None]
    if not tables:
        return None
    for table in tables:
        if table.n == 0:
            message, mend = "the table has no rows", "this is fine if nothing was logged"
            files.problems.add(table.files[0], message, mend, mended=True)
    return concatenate(tables)


def _robot(
    files: SurveyFiles, config: Config, robot: RobotConfig
) -> tuple[RobotLog | None, RawFixes | None]:
    """Everything of one robot; no log when it has no odometry."""
    problems = files.problems
    tables = {
        kind: _tables(files, names, kind, f"robots.{robot.name}.{kind}")
        for kind, names in robot.files.items()
    }
    observed = {
        kind: read_observations(table, kind, robot.name, config, problems)
        for kind in ("sightings", "encounters")
        if (table := tables[kind]) is not None
    }
    fixes, table = tables["fixes"], tables["odometry"]
    raw = None if fixes is None else read_fixes(fixes, config.dimension, problems)
    odometry = None if table is None else read_odometry(table, config.dimension, problems)
    if odometry is None or len(odometry.t_s) == 0:
        if not robot.files["odometry"] or odometry is not None:
            message, mend = "has no odometry", "the robot and what it saw are left out"
            problems.add(FILE, message, mend, column=f"robots.{robot.name}", mended=True)
        return None, None
    log = RobotLog(
        name=robot.name,
        odometry=odometry,
        sightings=observed.get("sightings"),
        encounters=observed.get("encounters"),
        fixes=None,
        sensors=robot.sensors,
        clock=robot.clock,
        target_point=robot.target_point,
        antenna=robot.antenna,
        gravity_sigma_rad=robot.gravity_sigma_rad,
        odometry_lag_s=robot.odometry_lag_s,
        odometry_noise=robot.odometry_noise,
    )
    return log, raw


def _wide(files: SurveyFiles, config: Config) -> _Wide:
    """The survey-wide files that are present."""
    tables: dict[str, Table | None] = dict.fromkeys(schema.DEFAULT_FILES)
    for kind in tables:
        name = files.default(kind)
        if name is not None:
            tables[kind] = _tables(files, [name], kind, kind)
    robots, dimension, problems = tuple(config.robots), config.dimension, files.problems
    control, closures = tables["control_points"], tables["closures"]
    named = tables["associations"]
    return _Wide(
        None if control is None else read_control(control, dimension, problems),
        None if closures is None else read_closures(closures, dimension, robots, problems),
        None if named is None else read_associations(named, robots, problems),
        _edits(files, config),
    )


def _edits(files: SurveyFiles, config: Config) -> Edits:
    path = files.folder / EDITS_FILE
    if not (path.exists() or path.is_symlink()):
        return Edits()
    return read_edits(files, {n: tuple(r.sensors) for n, r in config.robots.items()})


def _freeze(value: object) -> None:
    """Make every array inside a dataclass read-only."""
    if isinstance(value, np.ndarray):
        value.setflags(write=False)
    elif isinstance(value, Mapping):
        for item in value.values():
            _freeze(item)
    elif is_dataclass(value) and not isinstance(value, type):
        for one in fields(value):
            _freeze(getattr(value, one.name))

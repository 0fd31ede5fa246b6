"""Checks that need the survey as a whole: one table against another."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from jointmap.ingest.config import FILE
from jointmap.ingest.naming import landmarks_of
from jointmap.ingest.problems import LISTED_ROWS, Problems
from jointmap.ingest.survey import Floats, Observations, Provenance, RobotLog, Survey

_EDITS = "edits.toml"


def check_survey(survey: Survey, problems: Problems) -> None:
    """Record everything that is odd between the tables of a survey."""
    if len(survey.robots) == 1:
        message = "the survey has one robot"
        mend = "this is fine; nothing joins robots"
        problems.add(FILE, message, mend, column="robots", mended=True)
    for log in survey.robots.values():
        _check_spans(log, problems)
    _check_closure_spans(survey, problems)
    seen = _components_by_landmark(survey)
    _check_control(survey, seen, problems)
    _check_determined(survey, seen, problems)
    _check_edits(survey, problems)


def _outside(t: Floats, log: RobotLog) -> NDArray[np.bool_]:
    first, last = log.odometry.t_s[0], log.odometry.t_s[-1]
    return np.asarray((t < first) | (t > last))


def _note_rows(
    source: Provenance, where: NDArray[np.bool_], message: str, mend: str, problems: Problems
) -> None:
    """One line for many rows of one file: how many, and the first of them."""
    for k in np.unique(source.file[where]).tolist():
        rows = source.row[where & (source.file == k)]
        text = f"{len(rows)} rows {message}, first here"
        problems.add(source.files[k], text, mend, row=int(rows[0]), mended=True)


def _check_spans(log: RobotLog, problems: Problems) -> None:
    """Rows beyond the ends of the robot's odometry, where its pose is not known."""
    for table in (log.sightings, log.encounters, log.fixes):
        if table is None:
            continue
        outside = _outside(table.t_s, log)
        if outside.any():
            message = "lie before or after the robot's odometry"
            _note_rows(table.source, outside, message, "they will be unusable", problems)


def _check_closure_spans(survey: Survey, problems: Problems) -> None:
    closures = survey.closures
    if closures is None:
        return
    outside = np.zeros(len(closures.t_a_s), dtype=bool)
    for i, name in enumerate(closures.robots):
        log = survey.robots[name]
        outside |= (closures.robot_a == i) & _outside(closures.t_a_s, log)
        outside |= (closures.robot_b == i) & _outside(closures.t_b_s, log)
    if outside.any():
        message = "lie before or after a robot's odometry"
        _note_rows(closures.source, outside, message, "they will be unusable", problems)


def _components_by_landmark(survey: Survey) -> dict[str, tuple[int, int]]:
    """Observed scalars and sightings of each landmark, over all robots."""
    found: dict[str, tuple[int, int]] = {}
    for robot, log in survey.robots.items():
        if log.sightings is None:
            continue
        code, names = landmarks_of(robot, log.sightings, survey.associations)
        scalars = _position_scalars(log.sightings)
        total = np.bincount(code, weights=scalars, minlength=len(names))
        times = np.bincount(code, minlength=len(names))
        for name, n, k in zip(names, total.tolist(), times.tolist(), strict=True):
            before = found.get(name, (0, 0))
            found[name] = (before[0] + int(n), before[1] + int(k))
    return found


def _position_scalars(sightings: Observations) -> Floats:
    """How many components of each sighting bear on the landmark's position (columns 0 to 5)."""
    return np.asarray((~np.isnan(sightings.value[:, :6])).sum(axis=1), dtype=np.float64)


def _check_control(survey: Survey, seen: Mapping[str, tuple[int, int]], problems: Problems) -> None:
    control = survey.control_points
    if control is None:
        return
    unseen = [i for i, name in enumerate(control.landmarks) if name not in seen]
    message = [f"{control.landmarks[i]!r} was never sighted" for i in unseen]
    rows = control.source.row[unseen]
    problems.rows(
        control.source.files[0], rows, "landmark", message, "it says nothing", mended=True
    )


def _check_determined(
    survey: Survey, seen: Mapping[str, tuple[int, int]], problems: Problems
) -> None:
    """Landmarks with fewer observed scalars than coordinates, such as one bearing only."""
    surveyed = set(survey.control_points.landmarks) if survey.control_points else set()
    poor = sorted(
        name
        for name, (scalars, _) in seen.items()
        if scalars < survey.dimension and name not in surveyed
    )
    places = _first_sightings(survey, poor[:LISTED_ROWS])
    for name in poor[:LISTED_ROWS]:
        path, row = places[name]
        n, k = seen[name]
        message = f"{name!r} is seen {k} times with {n} components in all"
        if k == 1:
            message = f"{name!r} is seen once, with {n} components"
        mend = f"it takes {survey.dimension} to place it; it will be unusable"
        problems.add(path, message, mend, row=row, column="landmark", mended=True)
    if len(poor) > LISTED_ROWS:
        message = f"{len(poor) - LISTED_ROWS} more landmarks with too few observations"
        problems.add(FILE, message, "they will be unusable", mended=True)


def _first_sightings(survey: Survey, names: list[str]) -> dict[str, tuple[str, int]]:
    """File and row of the first sighting of each of a few landmarks."""
    places: dict[str, tuple[str, int]] = {}
    wanted = set(names)
    for robot, log in survey.robots.items():
        if log.sightings is None or not wanted:
            continue
        code, known = landmarks_of(robot, log.sightings, survey.associations)
        source = log.sightings.source
        for i, name in enumerate(known):
            if name in wanted:
                k = int(np.argmax(code == i))
                places.setdefault(name, (source.files[source.file[k]], int(source.row[k])))
    return places


def _check_edits(survey: Survey, problems: Problems) -> None:
    """Edits that change nothing."""
    for edit in survey.edits.associations:
        log = survey.robots.get(edit.robot)
        labels = log.sightings.targets if log is not None and log.sightings is not None else ()
        if edit.label not in labels:
            message = f"{edit.robot} never sighted {edit.label!r}"
            problems.add(_EDITS, message, "the edit changes nothing", column="label", mended=True)
    for split in survey.edits.splits:
        log = survey.robots.get(split.robot)
        if log is not None and _outside(np.array([split.t_s]), log)[0]:
            message = f"{split.t_s!r} lies before or after the odometry of {split.robot}"
            problems.add(_EDITS, message, "the edit changes nothing", column="t_s", mended=True)

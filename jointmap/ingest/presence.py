"""Robots without odometry are left out; so is everything that refers to them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from jointmap.ingest.associations import take
from jointmap.ingest.config import FILE
from jointmap.ingest.problems import Problems
from jointmap.ingest.survey import Closures, Edits, Observations, Provenance, Survey
from jointmap.ingest.values import used_names


def without_absent(survey: Survey, problems: Problems) -> Survey:
    """The survey without rows that refer to robots which are not in it."""
    present = tuple(survey.robots)
    if survey.datum_robot not in survey.robots:
        message = f"the robot {survey.datum_robot!r} has no odometry"
        problems.add(FILE, message, "choose another one", column="datum.robot")
    robots = {
        name: replace(log, encounters=_met(log.encounters, present, problems))
        for name, log in survey.robots.items()
    }
    associations = survey.associations
    if associations is not None:
        keep = np.array([r in robots for r in associations.robots], dtype=bool)
        _say(associations.source, ~keep, problems)
        associations = take(associations, keep)
    return replace(
        survey,
        robots=robots,
        closures=_closed(survey.closures, present, problems),
        associations=associations,
        edits=_edited(survey.edits, present),
    )


def _say(source: Provenance, gone: NDArray[np.bool_], problems: Problems) -> None:
    for k in np.unique(source.file[gone]).tolist():
        n = int((gone & (source.file == k)).sum())
        message = f"{n} rows name a robot without odometry"
        problems.add(source.files[k], message, "they are left out", mended=True)


def _rows(source: Provenance, keep: NDArray[np.bool_]) -> Provenance:
    return Provenance(source.files, source.file[keep], source.row[keep])


def _met(
    table: Observations | None, present: tuple[str, ...], problems: Problems
) -> Observations | None:
    if table is None:
        return None
    known = np.array([t in present for t in table.targets] + [False], dtype=bool)
    keep = known[table.target]
    if keep.all():
        return table
    _say(table.source, ~keep, problems)
    target, targets = used_names(table.target[keep], table.targets)
    return Observations(
        t_s=table.t_s[keep],
        sensor=table.sensor[keep],
        sensors=table.sensors,
        target=target,
        targets=targets,
        value=table.value[keep],
        sigma=table.sigma[keep],
        cov=None if table.cov is None else table.cov[keep],
        source=_rows(table.source, keep),
    )


def _closed(
    closures: Closures | None, present: tuple[str, ...], problems: Problems
) -> Closures | None:
    if closures is None:
        return None
    place = np.array(
        [present.index(r) if r in present else -1 for r in closures.robots] + [-1], dtype=np.int64
    )
    a, b = place[closures.robot_a], place[closures.robot_b]
    keep = (a >= 0) & (b >= 0)
    if not keep.all():
        _say(closures.source, ~keep, problems)
    return Closures(
        robots=present,
        robot_a=a[keep],
        t_a_s=closures.t_a_s[keep],
        robot_b=b[keep],
        t_b_s=closures.t_b_s[keep],
        pose=closures.pose[keep],
        cov=closures.cov[keep],
        source=_rows(closures.source, keep),
    )


def _edited(edits: Edits, present: tuple[str, ...]) -> Edits:
    return Edits(
        associations=tuple(e for e in edits.associations if e.robot in present),
        masks=tuple(e for e in edits.masks if e.robot in present),
        splits=tuple(e for e in edits.splits if e.robot in present),
        values=tuple(e for e in edits.values if e.robot in present),
    )

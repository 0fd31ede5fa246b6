"""What a survey holds, for a look before fusing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from jointmap.errors import LogProblem
from jointmap.ingest.naming import landmarks_of
from jointmap.ingest.survey import Floats, Observations, Odometry, RobotLog, Survey

#: A pause of the odometry counts as a gap when it is this long and this many usual steps.
GAP_S, GAP_STEPS = 0.5, 5.0
_LISTED_GAPS = 5


@dataclass(frozen=True)
class Gap:
    """A pause of a robot's odometry, by its clock."""

    t_from_s: float
    t_to_s: float

    @property
    def length_s(self) -> float:
        """Duration in seconds."""
        return self.t_to_s - self.t_from_s


@dataclass(frozen=True)
class RobotSummary:
    """One robot: times by its own clock, counts of rows.

    ``rate_hz`` counts rows per second outside the gaps. ``path_m`` is the length of its odometry
    (twist form: gaps count for nothing). ``met`` counts its encounters by robot, ``met_by`` those
    of others with it, ``shared`` names the landmarks that it and each other robot sighted.
    ``last_observation_s`` is the last time when it observed
    anything (``None``: never); what comes later is dead reckoning unless others saw it.
    """

    name: str
    form: str
    t_first_s: float
    t_last_s: float
    n_odometry: int
    rate_hz: float | None
    gaps: tuple[Gap, ...]
    path_m: float
    n_sightings: int
    n_encounters: int
    n_fixes: int
    by_sensor: Mapping[str, int]
    landmarks: tuple[str, ...]
    met: Mapping[str, int]
    met_by: Mapping[str, int]
    shared: Mapping[str, tuple[str, ...]]
    last_observation_s: float | None

    @property
    def span_s(self) -> float:
        """Duration of the odometry in seconds."""
        return self.t_last_s - self.t_first_s


@dataclass(frozen=True)
class SurveySummary:
    """A survey in numbers, and what was wrong with its files."""

    name: str
    dimension: int
    datum: str
    robots: tuple[RobotSummary, ...]
    n_landmarks: int
    n_shared_landmarks: int
    n_closures: int
    n_control_points: int
    n_associations: int | None
    n_edits: int
    geodetic_origin: tuple[float, float, float] | None
    problems: tuple[LogProblem, ...]


def summarise(survey: Survey) -> SurveySummary:
    """Count what each robot logged and what joins the robots."""
    names = {n: _landmarks(survey, log) for n, log in survey.robots.items()}
    robots = tuple(_robot(survey, log, names) for log in survey.robots.values())
    times: dict[str, int] = {}
    for seen in names.values():
        for landmark in seen:
            times[landmark] = times.get(landmark, 0) + 1
    edits = survey.edits
    return SurveySummary(
        name=survey.name,
        dimension=survey.dimension,
        datum=_datum(survey),
        robots=robots,
        n_landmarks=len(times),
        n_shared_landmarks=sum(n > 1 for n in times.values()),
        n_closures=0 if survey.closures is None else len(survey.closures.t_a_s),
        n_control_points=0
        if survey.control_points is None
        else len(survey.control_points.landmarks),
        n_associations=None if survey.associations is None else len(survey.associations.robots),
        n_edits=sum(map(len, (edits.associations, edits.masks, edits.splits, edits.values))),
        geodetic_origin=survey.geodetic_origin,
        problems=survey.problems,
    )


def _datum(survey: Survey) -> str:
    if survey.datum_kind == "control":
        return "control"
    return f"{survey.datum_kind}, starting from {survey.datum_robot}"


def _landmarks(survey: Survey, log: RobotLog) -> tuple[str, ...]:
    if log.sightings is None:
        return ()
    return landmarks_of(log.name, log.sightings, survey.associations)[1]


def _robot(survey: Survey, log: RobotLog, names: Mapping[str, tuple[str, ...]]) -> RobotSummary:
    odometry = log.odometry
    gaps = find_gaps(odometry.t_s)
    logged_s = float(odometry.t_s[-1] - odometry.t_s[0]) - sum(g.length_s for g in gaps)
    steps = len(odometry.t_s) - 1 - len(gaps)
    tables = (log.sightings, log.encounters)
    mine = set(names[log.name])
    others = [r for r in survey.robots if r != log.name]
    met_by = {r: _met(survey.robots[r].encounters).get(log.name, 0) for r in others}
    return RobotSummary(
        name=log.name,
        form=odometry.form,
        t_first_s=float(odometry.t_s[0]),
        t_last_s=float(odometry.t_s[-1]),
        n_odometry=len(odometry.t_s),
        rate_hz=steps / logged_s if logged_s > 0.0 else None,
        gaps=gaps,
        path_m=path_length(odometry),
        n_sightings=0 if log.sightings is None else len(log.sightings.t_s),
        n_encounters=0 if log.encounters is None else len(log.encounters.t_s),
        n_fixes=0 if log.fixes is None else len(log.fixes.t_s),
        by_sensor=_by_sensor(log),
        landmarks=names[log.name],
        met=_met(log.encounters),
        met_by={r: n for r, n in met_by.items() if n},
        shared={r: tuple(sorted(mine & set(names[r]))) for r in others},
        last_observation_s=max(
            (float(t.t_s[-1]) for t in (*tables, log.fixes) if t is not None and len(t.t_s)),
            default=None,
        ),
    )


def _by_sensor(log: RobotLog) -> dict[str, int]:
    counts = dict.fromkeys(log.sensors, 0)
    for table in (log.sightings, log.encounters):
        if table is not None:
            rows = np.bincount(table.sensor, minlength=len(table.sensors)).tolist()
            for name, n in zip(table.sensors, rows, strict=True):
                counts[name] += n
    return counts


def _met(encounters: Observations | None) -> dict[str, int]:
    if encounters is None:
        return {}
    rows = np.bincount(encounters.target, minlength=len(encounters.targets)).tolist()
    return dict(zip(encounters.targets, rows, strict=True))


def gap_threshold(t: Floats) -> float:
    """Length of a step in time from which on it counts as a gap."""
    return max(GAP_S, GAP_STEPS * float(np.median(np.diff(t)))) if len(t) > 1 else GAP_S


def find_gaps(t: Floats) -> tuple[Gap, ...]:
    """Pauses in increasing times."""
    at = np.flatnonzero(np.diff(t) > gap_threshold(t))
    return tuple(Gap(float(t[i]), float(t[i + 1])) for i in at)


def path_length(odometry: Odometry) -> float:
    """Length of a robot's odometry in metres.

    Pose form: sum of the distances between rows. Twist form: sum of speed times duration, each
    speed held until the next row but not across gaps.
    """
    if odometry.pose is not None:
        dim = 2 if odometry.pose.shape[1] == 3 else 3
        return float(np.linalg.norm(np.diff(odometry.pose[:, :dim], axis=0), axis=1).sum())
    assert odometry.twist is not None  # one of the two forms
    dim = 2 if odometry.twist.shape[1] == 3 else 3
    speed = np.linalg.norm(odometry.twist[:-1, :dim], axis=1)
    duration = np.diff(odometry.t_s)
    held = duration <= gap_threshold(odometry.t_s)
    return float((speed * duration)[held].sum())


def summary_dict(summary: SurveySummary) -> dict[str, Any]:
    """The summary as plain dicts, lists, numbers and texts (for JSON)."""
    out: dict[str, Any] = _plain(asdict(summary))
    for robot, row in zip(summary.robots, out["robots"], strict=True):
        row["span_s"] = robot.span_s
    return out


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    return value


def summary_lines(summary: SurveySummary) -> list[str]:
    """The summary as lines of plain text."""
    lines = [
        f"survey {summary.name}: {summary.dimension}-D, {_count(len(summary.robots), 'robot')}, "
        f"{_count(summary.n_landmarks, 'landmark')} ({summary.n_shared_landmarks} seen by two "
        "robots or more)",
        f"datum: {summary.datum}",
    ]
    extra = [
        _count(n, word)
        for n, word in (
            (summary.n_closures, "closure"),
            (summary.n_control_points, "control point"),
            (summary.n_associations or 0, "association"),
            (summary.n_edits, "edit"),
        )
        if n
    ]
    if extra:
        lines.append("also: " + ", ".join(extra))
    if summary.n_associations is not None:
        lines.append("labels without an association are private to their robot")
    if summary.geodetic_origin is not None:
        lat, lon, height = summary.geodetic_origin
        lines.append(f"origin of the site frame: {lat:.9f} {lon:.9f} deg, {height:.3f} m")
    for robot in summary.robots:
        lines += ["", *_robot_lines(robot)]
    return [*lines, "", *_problem_lines(summary.problems)]


def _count(n: int, word: str) -> str:
    return f"{n} {word}" + ("" if n == 1 else "s")


def _robot_lines(robot: RobotSummary) -> list[str]:
    rate = "" if robot.rate_hz is None else f", {robot.rate_hz:.3g} Hz"
    lines = [
        f"{robot.name}",
        f"  odometry: {robot.form} form, {_count(robot.n_odometry, 'row')}{rate}, "
        f"{robot.t_first_s:.3f} to {robot.t_last_s:.3f} s ({robot.span_s:.1f} s), "
        f"path {robot.path_m:.1f} m",
    ]
    if robot.gaps:
        worst = sorted(robot.gaps, key=lambda g: -g.length_s)[:_LISTED_GAPS]
        shown = ", ".join(f"{g.length_s:.2f} s at {g.t_from_s:.3f}" for g in worst)
        total = sum(g.length_s for g in robot.gaps)
        head = f"  gaps: {len(robot.gaps)}, together {total:.1f} s; longest: "
        lines.append(head + shown)
    sensors = ", ".join(f"{s} {n}" for s, n in robot.by_sensor.items())
    lines.append(
        f"  observed: {_count(robot.n_sightings, 'sighting')} of "
        f"{_count(len(robot.landmarks), 'landmark')}, {_count(robot.n_encounters, 'encounter')}, "
        f"{_count(robot.n_fixes, 'fix').replace('fixs', 'fixes')}"
        + (f"; by sensor: {sensors}" if sensors else "")
    )
    if robot.met or robot.met_by:
        seen = ", ".join(f"{r} {n}" for r, n in robot.met.items()) or "nobody"
        by = ", ".join(f"{r} {n}" for r, n in robot.met_by.items()) or "nobody"
        lines.append(f"  met: {seen}; was met by: {by}")
    if robot.shared:
        shared = ", ".join(f"{r} {len(names)}" for r, names in robot.shared.items())
        lines.append(f"  shares landmarks with: {shared}")
    if robot.last_observation_s is None:
        lines.append("  it observed nothing: dead reckoning unless others saw it")
    elif robot.t_last_s - robot.last_observation_s > 1.0:
        tail = robot.t_last_s - robot.last_observation_s
        lines.append(f"  its last {tail:.1f} s have no observation of its own")
    return lines


def _problem_lines(problems: tuple[LogProblem, ...]) -> list[str]:
    if not problems:
        return ["nothing to complain about"]
    return [f"{_count(len(problems), 'note')} on the files:", *(f"  {p}" for p in problems)]

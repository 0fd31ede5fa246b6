"""Tables of measurements -> blocks of rows with equal kind, robot, sensor and components."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.clock import SurveyClock
from jointmap.graph.keyframes import nearest
from jointmap.graph.motion import Motion
from jointmap.graph.observed import ObservedRows, split_by_components
from jointmap.graph.odometry import dead_reckon
from jointmap.graph.problem import Block, Keyframes, Kind, Tracks, Unusable
from jointmap.graph.tracks import TrackTable
from jointmap.ingest.survey import (
    Closures,
    ControlPoints,
    Fixes,
    Observations,
    Provenance,
    Survey,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: A measurement may lie this far outside a robot's odometry and is then moved to its end.
OUTSIDE_S = 0.25


class BuilderSettings(Protocol):
    """The part of the build settings that blocks need."""

    @property
    def burst_gap_s(self) -> float:
        """Sightings of one target that follow each other within it are one burst."""

    @property
    def burst_window_s(self) -> float:
        """A burst is cut after this time: errors are taken to be shared no longer."""


class Context(Protocol):
    """What the builder knows when blocks are made."""

    @property
    def survey(self) -> Survey:
        """The survey."""

    @property
    def settings(self) -> BuilderSettings:
        """How it is built."""

    @property
    def clock(self) -> SurveyClock:
        """From log time to survey time."""

    @property
    def motions(self) -> tuple[Motion, ...]:
        """Odometry per robot."""

    @property
    def keyframes(self) -> Keyframes:
        """Chosen instants."""

    @property
    def reckoned(self) -> Floats:
        """Keyframes by odometry alone."""

    def times(self, robot: int, table: Observations) -> Floats:
        """Survey time of a table's rows."""


@dataclass
class Made:
    """Blocks of one table and the rows that none could be made of."""

    blocks: list[Block]
    unusable: list[Unusable]


def take(source: Provenance, rows: Ints | Bools) -> Provenance:
    """Provenance of some rows."""
    return Provenance(source.files, source.file[rows], source.row[rows])


def attach(context: Context, robot: int, t_s: Floats) -> tuple[Ints, Floats, Bools]:
    """Keyframe (n,), motion from it to each instant (n, *shape), and whether odometry reaches it."""
    motion = context.motions[robot]
    group = frames.group(context.survey.dimension)
    index = nearest(context.keyframes, robot, t_s)
    start, stop = motion.span
    reached = (t_s >= start - OUTSIDE_S) & (t_s <= stop + OUTSIDE_S)
    step = group.identity(len(t_s))
    late = np.flatnonzero(np.abs(t_s - context.keyframes.t_s[index]) > 1e-7)
    if len(late):
        there = dead_reckon(
            motion.odometry,
            motion.t_rows,
            t_s[late],
            context.survey.dimension,
            translation_scale=motion.translation_scale,
            rotation_scale=motion.turn_scale,
        )
        step[late] = group.between(context.reckoned[index[late]], there)
    return index, step, reached


def bursts(sensor: Ints, target: Ints, t_s: Floats, gap_s: float, window_s: float) -> Ints:
    """Burst number (n,) of rows: one sensor, one target, no pause longer than ``gap_s``, no longer
    in all than ``window_s``.
    """
    order = np.lexsort((t_s, target, sensor))
    new = np.ones(len(order), dtype=bool)
    if len(order) > 1:
        same = (np.diff(sensor[order]) == 0) & (np.diff(target[order]) == 0)
        new[1:] = ~(same & (np.diff(t_s[order]) <= gap_s))
    run = np.cumsum(new) - 1
    begin = t_s[order][new] if len(order) else t_s
    part = np.floor((t_s[order] - begin[run]) / window_s).astype(np.int64)
    cut = np.ones(len(order), dtype=bool)
    if len(order) > 1:
        cut[1:] = (np.diff(run) != 0) | (np.diff(part) != 0)
    out = np.empty(len(order), dtype=np.int64)
    out[order] = np.cumsum(cut) - 1
    return out


def observation_blocks(
    context: Context, robot: int, table: Observations, keep: Bools, kind: Kind, tracks: TrackTable
) -> Made:
    """Blocks of sightings or encounters of one robot (``keep``: rows the user's masks leave)."""
    survey = context.survey
    names = list(survey.robots)
    log = survey.robots[names[robot]]
    group = frames.group(survey.dimension)
    t_s = context.times(robot, table)
    a, step, reached = attach(context, robot, t_s)
    gap, window = context.settings.burst_gap_s, context.settings.burst_window_s
    burst = bursts(table.sensor, table.target, t_s, gap, window)
    mounts = np.stack([group.from_rows(log.sensors[s].body_T_sensor) for s in table.sensors])
    frame_a = group.compose(step, mounts[table.sensor])
    frame_b = np.broadcast_to(group.identity(1), (len(t_s), *group.shape)).copy()
    other_reached = np.ones(len(t_s), dtype=bool)
    if kind == "sighting":
        b = tracks.track_of(robot, table.targets, table.target, table.t_s)
    else:
        b = np.full(len(t_s), -1, dtype=np.int64)
        for code, other in enumerate(table.targets):
            mine = np.flatnonzero(table.target == code)
            if other not in names or not len(mine):
                continue
            o = names.index(other)
            b[mine], step_b, other_reached[mine] = attach(context, o, t_s[mine])
            point = group.build(
                np.eye(group.dim), np.asarray(survey.robots[other].target_point, dtype=np.float64)
            )
            frame_b[mine] = group.compose(step_b, point)
    made = Made([], [])
    reasons = (
        (~keep, "masked by an edit"),
        (keep & ~reached, "outside the robot's odometry"),
        (keep & reached & ~other_reached, "outside the other robot's odometry"),
    )
    for rows, reason in reasons:
        _drop(made, kind, robot, table, rows, t_s, reason)
    usable = keep & reached & other_reached
    given = {name: sensor.sigma for name, sensor in log.sensors.items()}
    parts = split_by_components(table, usable, survey.dimension, kind, given)
    _drop(made, kind, robot, table, parts.empty, t_s, "no component observed")
    for part in parts.parts:
        made.blocks.append(
            _observation_block(part, kind, robot, table, a, b, frame_a, frame_b, t_s, burst)
        )
        if kind == "sighting":
            tracks.count(b[part.rows], oriented=part.components == ("pose",))
    return made


def _observation_block(
    part: ObservedRows,
    kind: Kind,
    robot: int,
    table: Observations,
    a: Ints,
    b: Ints,
    frame_a: Floats,
    frame_b: Floats,
    t_s: Floats,
    burst: Ints,
) -> Block:
    rows = part.rows
    return Block(
        kind=kind,
        robot=robot,
        sensor=part.sensor,
        components=part.components,
        a=a[rows],
        b=b[rows],
        obs=part.obs,
        frame_a=frame_a[rows],
        frame_b=frame_b[rows],
        sigma=part.sigma,
        covariance=part.covariance,
        odometry_basis=None,
        t_s=t_s[rows],
        source=take(table.source, rows),
        burst=burst[rows],
    )


def _drop(
    made: Made, kind: Kind, robot: int, table: Observations, rows: Bools, t_s: Floats, reason: str
) -> None:
    index = np.flatnonzero(rows)
    if not len(index):
        return
    made.unusable.append(
        Unusable(
            kind=kind,
            robot=robot,
            sensor=tuple(table.sensors[i] for i in table.sensor[index]),
            target=tuple(table.targets[i] for i in table.target[index]),
            t_s=t_s[index],
            source=take(table.source, index),
            reason=reason,
        )
    )


def fix_blocks(context: Context, robot: int, table: Fixes) -> Made:
    """Absolute positions of a robot's antenna."""
    survey = context.survey
    group = frames.group(survey.dimension)
    name = list(survey.robots)[robot]
    log = survey.robots[name]
    t_s = context.clock.survey_time(name, table.t_s)
    a, step, reached = attach(context, robot, t_s)
    antenna = group.build(np.eye(group.dim), np.asarray(log.antenna, dtype=np.float64))
    rows = np.flatnonzero(reached)
    made = Made([], [])
    if len(rows) < len(t_s):
        lost = np.flatnonzero(~reached)
        made.unusable.append(
            Unusable(
                "fix",
                robot,
                ("",) * len(lost),
                ("",) * len(lost),
                t_s[lost],
                take(table.source, lost),
                "outside the robot's odometry",
            )
        )
    if len(rows):
        made.blocks.append(
            Block(
                kind="fix",
                robot=robot,
                sensor="",
                components=("x_m", "y_m", "z_m")[: group.dim],
                a=a[rows],
                b=np.full(len(rows), -1),
                obs=table.position[rows],
                frame_a=group.compose(step, antenna)[rows],
                frame_b=group.identity(1),
                sigma=table.sigma[rows],
                covariance=None,
                odometry_basis=None,
                t_s=t_s[rows],
                source=take(table.source, rows),
                burst=np.arange(len(rows)),
            )
        )
    return made


def gravity_block(context: Context, robot: int) -> Block:
    """Roll and pitch of the odometry as an observation at every keyframe."""
    group = frames.group(3)
    keyframes = context.keyframes
    index = np.arange(keyframes.first[robot], keyframes.first[robot + 1])
    n = len(index)
    source = context.motions[robot].odometry.source
    rows = np.clip(
        np.searchsorted(context.motions[robot].t_rows, keyframes.t_s[index], side="right") - 1,
        0,
        None,
    )
    return Block(
        kind="gravity",
        robot=robot,
        sensor="",
        components=("tilt",),
        a=index,
        b=np.full(n, -1),
        obs=context.reckoned[index],
        frame_a=group.identity(1),
        frame_b=group.identity(1),
        sigma=np.full((n, 2), np.nan),
        covariance=None,
        odometry_basis=None,
        t_s=keyframes.t_s[index],
        source=take(source, rows),
        burst=np.arange(n),
    )


def closure_blocks(context: Context, table: Closures) -> Made:
    """Relative poses between two instants, one block per pair of robots."""
    survey = context.survey
    group = frames.group(survey.dimension)
    names = list(survey.robots)
    code = np.array([names.index(n) if n in names else -1 for n in table.robots], dtype=np.int64)
    ra, rb = code[table.robot_a], code[table.robot_b]
    obs = group.from_rows(table.pose)
    made = Made([], [])
    for pair in np.unique(np.stack([ra, rb], axis=1), axis=0):
        rows = np.flatnonzero((ra == pair[0]) & (rb == pair[1]) & (ra >= 0) & (rb >= 0))
        if not len(rows):
            continue
        t_a = context.clock.survey_time(names[pair[0]], table.t_a_s[rows])
        t_b = context.clock.survey_time(names[pair[1]], table.t_b_s[rows])
        a, step_a, ok_a = attach(context, int(pair[0]), t_a)
        b, step_b, ok_b = attach(context, int(pair[1]), t_b)
        ok = ok_a & ok_b & (a != b)
        lost = np.flatnonzero(~ok)
        if len(lost):
            made.unusable.append(
                Unusable(
                    "closure",
                    int(pair[0]),
                    ("",) * len(lost),
                    (names[pair[1]],) * len(lost),
                    t_a[lost],
                    take(table.source, rows[lost]),
                    "outside the odometry of one of its robots, or both ends at one instant",
                )
            )
        if not ok.any():
            continue
        covariance = table.cov[rows]
        made.blocks.append(
            Block(
                kind="closure",
                robot=int(pair[0]),
                sensor="",
                components=("pose",),
                a=a[ok],
                b=b[ok],
                obs=obs[rows[ok]],
                frame_a=step_a[ok],
                frame_b=step_b[ok],
                sigma=np.full((int(ok.sum()), group.dof), np.nan),
                covariance=group.covariance_from_table(obs[rows[ok]], covariance[ok]),
                odometry_basis=None,
                t_s=t_a[ok],
                source=take(table.source, rows[ok]),
                burst=np.arange(int(ok.sum())),
            )
        )
    return made


def control_block(control: ControlPoints, tracks: Tracks, dimension: int) -> Block:
    """Surveyed coordinates of landmarks."""
    group = frames.group(dimension)
    ids = {name: i for i, name in enumerate(tracks.landmarks)}
    n = len(control.landmarks)
    dim = control.position.shape[1]
    return Block(
        kind="control",
        robot=-1,
        sensor="",
        components=("x_m", "y_m", "z_m")[:dim],
        a=np.full(n, -1),
        b=np.array([ids[name] for name in control.landmarks], dtype=np.int64),
        obs=control.position,
        frame_a=group.identity(1),
        frame_b=group.identity(1),
        sigma=control.sigma,
        covariance=None,
        odometry_basis=None,
        t_s=np.full(n, np.nan),
        source=control.source,
        burst=np.arange(n),
    )

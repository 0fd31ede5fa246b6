"""Sightings and encounters of one robot: what its sensors report.

An observation is the target point in the sensor's frame, ``p = (world_T_body body_T_sensor)^-1 q``,
as bearing ``atan2(y, x)``, elevation ``atan2(z, hypot(x, y))`` and range ``|p|``, or as ``p``
itself. Tags also give their orientation in the sensor's frame.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import group, matrix_to_quaternion, wrap
from jointmap.simulate.clocks import LogClock
from jointmap.simulate.motion import Motion
from jointmap.simulate.plan import Plates
from jointmap.simulate.processes import gross_errors, sensor_errors
from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams
from jointmap.simulate.team import RobotSpec, SensorSpec
from jointmap.simulate.visibility import (
    MAX_INCIDENCE_RAD,
    blocked,
    in_view,
    incidence,
    pairs_in_reach,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Observed:
    """Observations of one robot in the order of their stamps.

    ``log_s`` (n,) stamps; ``sensor`` (n,) index into the robot's sensors; ``target`` (n,) number
    of the plate or robot; ``values`` columns by name (n,), NaN where not observed; ``gross`` (n,)
    marks gross errors.
    """

    log_s: Floats
    sensor: Ints
    target: Ints
    values: Mapping[str, Floats]
    gross: Bools


@dataclass(frozen=True)
class Scene:
    """What all robots share: plates, walls (k, 2, 2), settings and random streams."""

    plates: Plates
    walls: Floats
    settings: SimulationSettings
    streams: Streams


@dataclass(frozen=True)
class Frames:
    """Instants at which a sensor looks: stamps, survey times and world_T_sensor of each."""

    log_s: Floats
    t_s: Floats
    pose: Floats


@dataclass(frozen=True)
class Target:
    """Target points of many pairs (n, dimension), and orientations for those that show one.

    ``rotation`` (n, dim, dim) world_R_target; ``oriented`` (n,); ``incidence_rad`` (n,).
    """

    number: Ints
    point: Floats
    rotation: Floats
    oriented: Bools
    incidence_rad: Floats


def sensor_frames(
    motion: Motion, robot: RobotSpec, sensor: SensorSpec, clock: LogClock, scene: Scene
) -> Frames:
    """Instants of one sensor, by its rate with jitter, exact to the rounding of the stamps."""
    settings = scene.settings
    rng = scene.streams.get("frames", robot.name, sensor.name)
    first, last = motion.t_s[0] + 0.5, motion.t_s[-1] - 0.5
    if robot.name in settings.lost:
        last = min(last, settings.start_s + settings.duration_s / 2)
    n = max(0, int((last - first) * settings.sighting_rate_hz))
    when = first + (np.arange(n) + rng.uniform(0.1, 0.9, n)) / settings.sighting_rate_hz
    log_s = np.round(clock.log(when - sensor.lag_s), 6)
    t_s = clock.survey(log_s) + sensor.lag_s
    space = group(motion.dimension)
    return Frames(log_s, t_s, space.compose(motion.at(t_s), sensor.mount))


def see_plates(
    frames: Frames, robot: RobotSpec, sensor: SensorSpec, scene: Scene
) -> tuple[Ints, Target]:
    """Frame number and target of every plate that is seen and reported."""
    plates, settings = scene.plates, scene.settings
    dim = plates.position.shape[1]
    eyes = group(dim).translation(frames.pose)
    i, j = pairs_in_reach(eyes[:, :2], plates.position[:, :2], settings.max_range_m)
    local = group(dim).inverse_transform(frames.pose[i], plates.position[j])
    angle = incidence(eyes[i], plates.position[j], plates.yaw[j])
    seen = in_view(local, settings.field_of_view_rad, settings.max_range_m)
    seen &= angle <= MAX_INCIDENCE_RAD
    i, j, angle = i[seen], j[seen], angle[seen]
    reach = settings.max_range_m
    keep = ~blocked(eyes[i, :2], plates.position[j, :2], scene.walls, reach)
    luck = scene.streams.get("detect", robot.name, sensor.name).random(len(i))
    keep &= luck < settings.detection
    i, j, angle = i[keep], j[keep], angle[keep]
    oriented = plates.tag[j]
    return i, Target(j, plates.position[j], _facing(plates.yaw[j], dim), oriented, angle)


def see_robots(
    frames: Frames,
    others: Mapping[int, tuple[Motion, RobotSpec]],
    robot: RobotSpec,
    sensor: SensorSpec,
    scene: Scene,
) -> tuple[Ints, Target]:
    """Frame number and target of every other robot's target point that is seen and reported."""
    settings = scene.settings
    dim = scene.plates.position.shape[1]
    space = group(dim)
    rows: list[Ints] = []
    numbers: list[Ints] = []
    points: list[Floats] = []
    for index, (motion, other) in others.items():
        live = (frames.t_s >= motion.t_s[0]) & (frames.t_s <= motion.t_s[-1])
        i = np.flatnonzero(live)
        point = space.transform(motion.at(frames.t_s[i]), other.target_point)
        local = space.inverse_transform(frames.pose[i], point)
        seen = in_view(local, settings.field_of_view_rad, settings.max_range_m)
        luck = scene.streams.get("meet", robot.name, sensor.name, other.name).random(len(i))
        seen &= luck < settings.detection
        eye = space.translation(frames.pose[i[seen]])
        free = ~blocked(eye[:, :2], point[seen][:, :2], scene.walls, settings.max_range_m)
        rows.append(i[seen][free])
        numbers.append(np.full(int(free.sum()), index))
        points.append(point[seen][free])
    i = np.concatenate([*rows, np.empty(0, dtype=np.int64)])
    number = np.concatenate([*numbers, np.empty(0, dtype=np.int64)])
    at = np.concatenate([*points, np.empty((0, dim))])
    none = np.zeros(len(i))
    return i, Target(number, at, _facing(none, dim), none > 0, none)


def _facing(yaw: Floats, dim: int) -> Floats:
    """Rotation (n, dim, dim) of upright targets: x axis along the normal of the plate."""
    c, s = np.cos(yaw), np.sin(yaw)
    rotation = np.zeros((len(yaw), dim, dim))
    rotation[:, 0, 0], rotation[:, 0, 1], rotation[:, 1, 0], rotation[:, 1, 1] = c, -s, s, c
    if dim == 3:
        rotation[:, 2, 2] = 1.0
    return rotation


def report(
    frames: Frames,
    seen: tuple[Ints, Target],
    sensor: SensorSpec,
    scene: Scene,
    *name: object,
) -> Observed:
    """Values with all errors, for one sensor and kind of target.

    Parameters
    ----------
    seen : ((n,) int, Target)
        Frame and target of each observation.
    *name : object
        Name of the streams: kind, robot, sensor.
    """
    rows, target = seen
    settings, streams = scene.settings, scene.streams
    order = np.lexsort((target.number, rows))
    rows = rows[order]
    target = Target(*(getattr(target, f)[order] for f in Target.__dataclass_fields__))
    pose, t_s = frames.pose[rows], frames.t_s[rows]
    dim = target.point.shape[1]
    local = group(dim).inverse_transform(pose, target.point)
    gross = _gross_rows(len(rows), settings, streams, *name)
    values: dict[str, Floats] = {}
    cartesian = ("x_m", "y_m", "z_m")[:dim]
    for columns, use, kind in (
        (sensor.columns, ~target.oriented, "point"),
        (cartesian, target.oriented, "tag"),
    ):
        if not use.any():
            continue
        error = sensor_errors(
            t_s, target.number, target.incidence_rad, len(columns), settings, streams, *name, kind
        )
        error *= _sigmas(sensor, columns, np.linalg.norm(local, axis=1))
        size = gross_errors(columns, int(gross.sum()), streams.get("gross size", *name, kind))
        error[gross] += size
        _fill(values, columns, _exact(local, columns) + error, use)
    if target.oriented.any():
        values |= _orientation(pose, target, sensor, streams, *name)
    sensors = np.zeros(len(rows), dtype=np.int64)
    return Observed(frames.log_s[rows], sensors, target.number, values, gross)


def _fill(values: dict[str, Floats], columns: tuple[str, ...], seen: Floats, use: Bools) -> None:
    """Put components (n, c) of the rows in use into their columns, within their domain."""
    for k, column in enumerate(columns):
        cells = values.setdefault(column, np.full(len(use), np.nan))
        cells[use] = seen[use, k]
        if column == "bearing_rad":
            cells[use] = wrap(cells[use])
        elif column == "elevation_rad":
            cells[use] = np.clip(cells[use], -np.pi / 2, np.pi / 2)
        elif column == "range_m":
            cells[use] = np.maximum(cells[use], 0.05)


def _exact(local: Floats, columns: tuple[str, ...]) -> Floats:
    """Components (n, c) of points in the sensor's frame (n, dimension)."""
    x, y = local[:, 0], local[:, 1]
    z = local[:, 2] if local.shape[1] == 3 else np.zeros(len(local))
    every = {
        "bearing_rad": np.arctan2(y, x),
        "elevation_rad": np.arctan2(z, np.hypot(x, y)),
        "range_m": np.linalg.norm(local, axis=1),
        "x_m": x,
        "y_m": y,
        "z_m": z,
    }
    return np.stack([every[c] for c in columns], axis=1)


def _sigmas(sensor: SensorSpec, columns: tuple[str, ...], distance: Floats) -> Floats:
    """True white sigma (n, c): constant, and for ranges also growing with distance."""
    sigma = np.tile([sensor.sigma[c] for c in columns], (len(distance), 1))
    if "range_m" in columns:
        k = columns.index("range_m")
        sigma[:, k] = np.hypot(sigma[:, k], sensor.sigma["range_per_m"] * distance)
    return sigma


def _gross_rows(n: int, settings: SimulationSettings, streams: Streams, *name: object) -> Bools:
    """Exactly the stated share of rows, at random."""
    gross = np.zeros(n, dtype=bool)
    chosen = streams.get("gross", *name).permutation(n)[: round(settings.gross_errors * n)]
    gross[chosen] = True
    return gross


def _orientation(
    pose: Floats, target: Target, sensor: SensorSpec, streams: Streams, *name: object
) -> dict[str, Floats]:
    """Orientation of tags in the sensor's frame, as table columns, NaN for other plates.

    Noise is a rotation vector about the axes of the sensor's frame.
    """
    dim = target.point.shape[1]
    rows = np.flatnonzero(target.oriented)
    rotation = np.swapaxes(group(dim).rotation(pose[rows]), -1, -2) @ target.rotation[rows]
    noise = streams.get("orientation", *name).normal(size=(len(rows), 3))
    noise *= [sensor.sigma[c] for c in ("rx_rad", "ry_rad", "rz_rad")]
    if dim == 2:
        names: tuple[str, ...] = ("yaw_rad",)
        seen = wrap(np.arctan2(rotation[:, 1, 0], rotation[:, 0, 0]) + noise[:, 2])[:, None]
    else:
        names = ("qx", "qy", "qz", "qw")
        twist = np.concatenate([noise, np.zeros_like(noise)], axis=1)
        seen = matrix_to_quaternion(group(3).rotation(group(3).exp(twist)) @ rotation)
    result = {}
    for k, column in enumerate(names):
        result[column] = np.full(len(target.number), np.nan)
        result[column][rows] = seen[:, k]
    return result


def merge(parts: list[Observed]) -> Observed:
    """Observations of several sensors in the order of their stamps; parts are numbered."""
    columns = dict.fromkeys(c for p in parts for c in p.values)
    sensor = np.repeat(np.arange(len(parts)), [len(p.log_s) for p in parts])
    log_s = np.concatenate([p.log_s for p in parts])
    target = np.concatenate([p.target for p in parts])
    order = np.lexsort((target, sensor, log_s))
    values = {
        c: np.concatenate([p.values.get(c, np.full(len(p.log_s), np.nan)) for p in parts])[order]
        for c in columns
    }
    gross = np.concatenate([p.gross for p in parts])
    return Observed(log_s[order], sensor[order], target[order], values, gross[order])

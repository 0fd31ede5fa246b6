"""Odometry: what a robot believes about its own motion.

The reported body motion of an interval is ``motion / scale + noise``, stamped earlier than the
motion by the lag. White noise of an interval has the variances

``translation: a^2 |ds| + d^2 dt`` and ``rotation: b^2 |ds| + c^2 |dtheta| + e^2 dt``

with the five terms of survey.toml (per_sqrt_m, per_sqrt_rad and per_sqrt_s).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import group
from jointmap.simulate.clocks import LogClock
from jointmap.simulate.motion import Motion
from jointmap.simulate.processes import gauss_markov
from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams
from jointmap.simulate.team import RobotSpec

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Correlation time of the tilt error of gravity-aligned odometry, seconds.
TILT_TIME_S = 20.0
#: A slip lasts this long, seconds.
SLIP_S = 1.0


@dataclass(frozen=True)
class OdometryLog:
    """Odometry of one robot.

    ``log_s`` (n,) stamps and ``values`` columns (n,) of the rows that were logged; ``gaps`` and
    ``slips`` lists of (first, last) survey times of the motion concerned.
    """

    log_s: Floats
    values: Mapping[str, Floats]
    gaps: tuple[tuple[float, float], ...]
    slips: tuple[tuple[float, float], ...]


def log_odometry(
    motion: Motion,
    robot: RobotSpec,
    clock: LogClock,
    settings: SimulationSettings,
    streams: Streams,
) -> OdometryLog:
    """Odometry rows of a true motion with every error that the settings ask for."""
    steps, slips = _reported_steps(motion, robot, settings, streams)
    log_s = np.round(clock.log(motion.t_s - robot.lag_s), 6)
    if robot.odometry_form == "twist":
        span = np.diff(motion.t_s)
        twist = steps / span[:, None]
        twist = np.concatenate([twist, np.zeros_like(twist[:1])])
        values = _twist_columns(twist, robot)
    else:
        pose = _integrate(steps, motion, robot, settings, streams)
        rows = group(motion.dimension).to_rows(pose)
        names: tuple[str, ...] = ("x_m", "y_m", "yaw_rad")
        if motion.dimension == 3:
            names = ("x_m", "y_m", "z_m", "qx", "qy", "qz", "qw")
        values = {c: rows[:, k] for k, c in enumerate(names)}
    keep, gaps = _outages(motion.t_s, robot.name, settings, streams)
    return OdometryLog(log_s[keep], {c: v[keep] for c, v in values.items()}, gaps, slips)


def _twist_columns(twist: Floats, robot: RobotSpec) -> dict[str, Floats]:
    """Table columns of body twists in tangent order; a planar crawler reports no ``vy``."""
    if twist.shape[1] == 3:
        columns = {"vx_mps": twist[:, 0], "vy_mps": twist[:, 1], "wz_radps": twist[:, 2]}
        if robot.kind == "crawler":
            del columns["vy_mps"]
        return columns
    names = ("wx_radps", "wy_radps", "wz_radps", "vx_mps", "vy_mps", "vz_mps")
    columns = {c: twist[:, k] for k, c in enumerate(names)}
    return {c: columns[c] for c in (*names[3:], *names[:3])}


def _parts(dimension: int) -> tuple[slice, slice]:
    """Translation and rotation within a tangent."""
    return (slice(0, 2), slice(2, 3)) if dimension == 2 else (slice(3, 6), slice(0, 3))


def _reported_steps(
    motion: Motion, robot: RobotSpec, settings: SimulationSettings, streams: Streams
) -> tuple[Floats, tuple[tuple[float, float], ...]]:
    """Reported motion of each interval (n - 1, dof), tangent order, and the slips put in."""
    span = np.diff(motion.t_s)
    true = motion.twist() * span[:, None]
    shift, turn = _parts(motion.dimension)
    steps = true.copy()
    steps[:, shift] /= robot.scale
    steps[:, turn] /= robot.rotation_scale
    draws = streams.get("odometry", robot.name).normal(size=true.shape)
    steps += step_sigma(true, span, motion.dimension, robot.odometry_noise) * draws
    if settings.odometry_correlated > 0:
        draws = streams.get("odometry correlated", robot.name).normal(size=(len(span), 2))
        one = np.zeros(len(span), dtype=np.int64)
        tau = settings.odometry_correlation_time_s
        error = settings.odometry_correlated * gauss_markov(motion.t_s[:-1], one, tau, draws)
        steps[:, shift] += true[:, shift] * error[:, :1]
        steps[:, turn] += true[:, turn] * error[:, 1:]
    if motion.dimension == 2 and robot.kind == "crawler":
        steps[:, 1] = 0.0  # slip to the side is in the truth and unknown to the wheels
    slips = _slips(len(steps), robot.name, settings, streams)
    for first, last, ahead, about in slips:
        steps[first:last, shift.start] += ahead / (last - first)
        steps[first:last, turn.stop - 1] += about / (last - first)
    times = [(float(motion.t_s[s[0]]), float(motion.t_s[s[1]])) for s in slips]
    return steps, tuple(sorted(times))


def step_sigma(steps: Floats, span_s: Floats, dimension: int, noise: Mapping[str, float]) -> Floats:
    """White sigma (n, dof) of each component of true steps (n, dof) that last ``span_s`` (n,)."""
    shift, turn = _parts(dimension)
    metres = np.linalg.norm(steps[:, shift], axis=1)
    radians = np.linalg.norm(steps[:, turn], axis=1)
    sigma = np.empty_like(steps)
    sigma[:, shift] = np.sqrt(
        noise["translation_per_sqrt_m"] ** 2 * metres
        + noise["translation_per_sqrt_s"] ** 2 * span_s
    )[:, None]
    sigma[:, turn] = np.sqrt(
        noise["rotation_per_sqrt_m"] ** 2 * metres
        + noise["rotation_per_sqrt_rad"] ** 2 * radians
        + noise["rotation_per_sqrt_s"] ** 2 * span_s
    )[:, None]
    return sigma


def _slips(
    n: int, name: str, settings: SimulationSettings, streams: Streams
) -> list[tuple[int, int, float, float]]:
    """Slips of one robot: first and last interval, metres and radians that did not happen."""
    rng = streams.get("slips", name)
    rows = max(1, round(SLIP_S * settings.odometry_rate_hz))
    found = []
    for _ in range(settings.odometry_slips):
        first = int(rng.integers(0, max(1, n - rows)))
        ahead, about = rng.uniform(0.3, 1.0), rng.uniform(0.15, 0.5) * rng.choice([-1, 1])
        found.append((first, min(first + rows, n), float(ahead), float(about)))
    return found


def _outages(
    t_s: Floats, name: str, settings: SimulationSettings, streams: Streams
) -> tuple[Bools, tuple[tuple[float, float], ...]]:
    """Which rows were logged, and the outages; the first and last row always are."""
    rng = streams.get("gaps", name)
    hours = (t_s[-1] - t_s[0]) / 3600.0
    count = round(settings.odometry_gaps_per_h * hours)
    keep = np.ones(len(t_s), dtype=bool)
    starts = np.sort(rng.uniform(t_s[0], t_s[-1], count))
    stops = starts + settings.odometry_gap_s * rng.uniform(0.2, 1.0, count)
    for a, b in zip(starts, stops, strict=True):
        keep[np.searchsorted(t_s, a) : np.searchsorted(t_s, b)] = False
    keep[[0, -1]] = True
    gaps = tuple((float(a), float(b)) for a, b in zip(starts, stops, strict=True))
    return keep, gaps


def _integrate(
    steps: Floats,
    motion: Motion,
    robot: RobotSpec,
    settings: SimulationSettings,
    streams: Streams,
) -> Floats:
    """Pose-form odometry (n, ...) from reported steps, in the robot's own frame."""
    space = group(motion.dimension)
    rng = streams.get("odometry start", robot.name)
    where = rng.uniform(-20.0, 20.0, motion.dimension)
    yaw = float(rng.uniform(-np.pi, np.pi))
    arbitrary = settings.odometry_start == "arbitrary"
    if motion.dimension == 3 and settings.gravity_aligned:
        pose = _integrate_level(steps, motion, robot, streams)
    else:
        pose = accumulate(space.exp(steps), motion.dimension)
    if not arbitrary:
        return pose
    tangent = np.zeros(space.dof)
    tangent[2] = yaw
    start = space.build(space.rotation(space.exp(tangent)), where)
    return space.compose(start, pose)


def _integrate_level(steps: Floats, motion: Motion, robot: RobotSpec, streams: Streams) -> Floats:
    """Odometry that knows the vertical: only yaw and position drift (n, 3, 4).

    The reported attitude is ``Rz(e) R_true D``, with the accumulated yaw error ``e`` and a small
    correlated tilt error ``D``; positions add up the reported translations in it. The odometry
    frame is level, its yaw zero at the start.
    """
    space = group(3)
    rotation = space.rotation(motion.pose)
    true = motion.twist() * np.diff(motion.t_s)[:, None]
    # error of rotation about the vertical: the body z component of what was put into the steps
    error = np.concatenate([[0.0], np.cumsum(steps[:, 2] - true[:, 2])])
    error -= np.arctan2(rotation[0, 1, 0], rotation[0, 0, 0])
    draws = streams.get("tilt", robot.name).normal(size=(len(error), 2))
    same = np.zeros(len(error), dtype=np.int64)
    tilt = robot.tilt_rad * gauss_markov(motion.t_s, same, TILT_TIME_S, draws)
    lean = np.column_stack([tilt, np.zeros((len(error), 4))])
    tangent = np.zeros((len(error), 6))
    tangent[:, 2] = error
    attitude = space.rotation(space.exp(tangent)) @ rotation @ space.rotation(space.exp(lean))
    moved = space.translation(space.exp(steps))
    track = np.einsum("nij,nj->ni", attitude[:-1], moved)
    place = np.concatenate([np.zeros((1, 3)), np.cumsum(track, axis=0)])
    return space.build(attitude, place)


def accumulate(steps: Floats, dimension: int) -> Floats:
    """Poses (n + 1, ...) from steps (n, ...): running products, starting at the identity.

    Rows are cut into about sqrt(n) runs that are multiplied side by side, then joined: 2 sqrt(n)
    vectorised products instead of n.
    """
    space = group(dimension)
    n = len(steps)
    width = int(np.ceil(np.sqrt(max(n, 1))))
    padded = np.concatenate([steps, space.identity(width * width - n)])
    runs = padded.reshape(width, width, *steps.shape[1:]).copy()
    for k in range(1, width):
        runs[:, k] = space.compose(runs[:, k - 1], runs[:, k])
    for k in range(1, width):
        runs[k] = space.compose(runs[k - 1, -1], runs[k])
    joined = runs.reshape(width * width, *steps.shape[1:])[:n]
    return np.concatenate([space.identity(1), joined])

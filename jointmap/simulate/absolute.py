"""Measurements that tie poses to the site or to each other: fixes, control points, closures."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import group
from jointmap.simulate.clocks import LogClock
from jointmap.simulate.motion import Motion
from jointmap.simulate.plan import Plates
from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams
from jointmap.simulate.team import RobotSpec

Floats = NDArray[np.float64]
Columns = dict[str, "Floats | list[str]"]

#: True white sigmas of closures at factor 1, metres and radians.
CLOSURE_SIGMA_M = 0.05
CLOSURE_SIGMA_RAD = 0.015
#: Two poses of one place are closer than this, metres and radians.
_PLACE_M, _PLACE_RAD = 1.5, 0.6
#: A robot recognises its own place only after this time, seconds.
_RETURN_S = 30.0


@dataclass(frozen=True)
class ClosureLog:
    """Place recognitions as table columns; ``wrong`` (n,) marks the false ones."""

    columns: Columns
    wrong: NDArray[np.bool_]


def log_fixes(
    motion: Motion,
    robot: RobotSpec,
    clock: LogClock,
    settings: SimulationSettings,
    streams: Streams,
) -> Columns:
    """Positions of the antenna in the world, which is the site frame."""
    dim = motion.dimension
    count = int((motion.t_s[-1] - motion.t_s[0]) / settings.fix_period_s)
    when = motion.t_s[0] + (np.arange(count) + 0.5) * settings.fix_period_s
    log_s = np.round(clock.log(when), 6)
    place = group(dim).transform(motion.at(clock.survey(log_s)), robot.antenna)
    sigma = settings.fix_sigma_m
    noise = streams.get("fixes", robot.name).normal(size=place.shape)
    # a survey without noise has none here either; the stated sigma stays
    place = place + sigma * min(1.0, settings.sighting_noise) * noise
    axes = ("x_m", "y_m", "z_m")[:dim]
    columns: Columns = {"t_s": log_s}
    columns |= {axis: place[:, k] for k, axis in enumerate(axes)}
    columns |= {f"sigma_{axis}": np.full(count, sigma) for axis in axes}
    return columns


def survey_control(plates: Plates, settings: SimulationSettings, streams: Streams) -> Columns:
    """Surveyed coordinates of some plates, well spread by taking every n-th along the walls."""
    count = min(settings.control_points, len(plates.names))
    chosen = np.unique(np.linspace(0, len(plates.names) - 1, count).astype(int))
    sigma = settings.control_sigma_m
    noise = streams.get("control").normal(size=(len(chosen), plates.position.shape[1]))
    place = plates.position[chosen] + sigma * min(1.0, settings.sighting_noise) * noise
    axes = ("x_m", "y_m", "z_m")[: place.shape[1]]
    columns: Columns = {"landmark": [plates.names[k] for k in chosen]}
    columns |= {axis: place[:, k] for k, axis in enumerate(axes)}
    columns |= {f"sigma_{axis}": np.full(len(chosen), sigma) for axis in axes}
    return columns


def recognise_places(
    motions: Mapping[str, Motion],
    clocks: Mapping[str, LogClock],
    settings: SimulationSettings,
    streams: Streams,
) -> ClosureLog:
    """Pairs of poses at one place, of one robot or two, with their relative pose.

    Exactly the stated share is wrong: the relative pose then leads to another place.
    """
    rng = streams.get("closures")
    names = list(motions)
    space = group(motions[names[0]].dimension)
    robot, log_s, t_s = _moments(motions, clocks, settings, rng)
    pose = np.concatenate([motions[n].at(t_s[robot == k]) for k, n in enumerate(names)])
    a, b = _same_place(space.translation(pose), space.rotation(pose), robot, t_s)
    chosen = rng.permutation(len(a))[: settings.closures]
    chosen = chosen[np.argsort(log_s[a[chosen]], kind="stable")]
    a, b = a[chosen], b[chosen]
    wrong = np.zeros(len(a), dtype=bool)
    wrong[rng.permutation(len(a))[: round(settings.wrong_closures * len(a))]] = True
    sigma = np.full(space.dof, CLOSURE_SIGMA_RAD)
    sigma[slice(0, 2) if space.dim == 2 else slice(3, 6)] = CLOSURE_SIGMA_M
    noise = streams.get("closure noise").normal(size=(len(a), space.dof)) * sigma
    noise *= settings.sighting_noise
    noise[wrong] += streams.get("closure error").uniform(-2, 2, (int(wrong.sum()), space.dof))
    rows = space.to_rows(space.retract(space.between(pose[a], pose[b]), noise))
    axes = ("x_m", "y_m", "z_m", "qx", "qy", "qz", "qw")
    columns: Columns = {
        "robot_a": [names[k] for k in robot[a]],
        "t_a_s": log_s[a],
        "robot_b": [names[k] for k in robot[b]],
        "t_b_s": log_s[b],
    }
    columns |= {
        axis: rows[:, k]
        for k, axis in enumerate(axes if space.dim == 3 else ("x_m", "y_m", "yaw_rad"))
    }
    return ClosureLog(columns | _closure_sigmas(len(a), space.dim), wrong)


def _closure_sigmas(n: int, dim: int) -> Columns:
    """Sigma columns of closures; closures always state them."""
    turns = ("yaw_rad",) if dim == 2 else ("rx_rad", "ry_rad", "rz_rad")
    columns: Columns = {
        f"sigma_{axis}": np.full(n, CLOSURE_SIGMA_M) for axis in ("x_m", "y_m", "z_m")[:dim]
    }
    return columns | {f"sigma_{axis}": np.full(n, CLOSURE_SIGMA_RAD) for axis in turns}


def _moments(
    motions: Mapping[str, Motion],
    clocks: Mapping[str, LogClock],
    settings: SimulationSettings,
    rng: np.random.Generator,
) -> tuple[NDArray[np.int64], Floats, Floats]:
    """Moments at which robots look about: robot index, stamp and survey time, by robot."""
    each = int(np.clip(8 * settings.closures / len(motions), 100, 2500))
    robot, stamps, times = [], [], []
    for k, (name, motion) in enumerate(motions.items()):
        when = np.sort(rng.uniform(motion.t_s[0] + 0.01, motion.t_s[-1] - 0.01, each))
        stamps.append(np.round(clocks[name].log(when), 6))
        times.append(clocks[name].survey(stamps[-1]))
        robot.append(np.full(each, k))
    return np.concatenate(robot), np.concatenate(stamps), np.concatenate(times)


def _same_place(
    place: Floats, rotation: Floats, robot: NDArray[np.int64], t_s: Floats
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Pairs (a < b) that are close in place and heading, and not close in time on one robot."""
    found_a, found_b = [np.empty(0, dtype=np.int64)], [np.empty(0, dtype=np.int64)]
    ahead = rotation[:, :2, 0]
    for first in range(0, len(place), 1024):
        rows = np.arange(first, min(first + 1024, len(place)))
        near = np.linalg.norm(place[rows, None] - place[None], axis=2) < _PLACE_M
        near &= ahead[rows] @ ahead.T > np.cos(_PLACE_RAD)
        alone = robot[rows, None] == robot[None]
        near &= ~alone | (np.abs(t_s[rows, None] - t_s[None]) > _RETURN_S)
        near &= rows[:, None] < np.arange(len(place))[None]
        i, j = np.nonzero(near)
        found_a.append(i + first)
        found_b.append(j)
    return np.concatenate(found_a), np.concatenate(found_b)

"""All runs of a team relaxed together, with the landmarks on which they agree."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.problem import Problem
from jointmap.graph.start.consensus import agreeing
from jointmap.graph.start.gather import Material
from jointmap.graph.start.merge import Teams
from jointmap.graph.start.net import Net, Pins, Seen
from jointmap.graph.start.relax import relax
from jointmap.graph.start.rows import sum_by_group
from jointmap.graph.start.solo import Solo, middle_positions, take_joints, take_touches

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Rounds of relaxing and asking anew which tracks agree.
_ROUNDS = 3


@dataclass(frozen=True)
class Joined:
    """Chunk poses (C, *shape) in the frame of their group; accepted tracks (T,)."""

    poses: Floats
    accepted: Bools


def join_teams(problem: Problem, material: Material, solo: Solo, teams: Teams) -> Joined:
    """Relax every team; agreement and relaxation take turns."""
    lie = frames.group(problem.dimension)
    poses = lie.compose(teams.pose[solo.unit], solo.poses)
    accepted = np.zeros(len(solo.point_unit), dtype=bool)
    for round_ in range(_ROUNDS):
        fresh = _agree(problem, material, solo, teams, poses)
        if round_ and np.array_equal(fresh, accepted):
            break
        accepted = fresh
        variable = _variables(problem, solo, teams, accepted)
        net = _net(problem, material, solo, teams, accepted, variable)
        count = int(variable.max(initial=-1)) + 1
        start = middle_positions(net.seen, net.seen.point, count, poses, problem.dimension)
        # From the second round on the graph lies straight: no wide kernel is needed.
        schedule = ((3.0, 6), (1.0, 10)) if round_ == 0 else ((1.0, 6),)
        poses = relax(net, poses, start, schedule).poses
    return Joined(poses, _by_track(problem, solo, accepted))


def _own_positions(solo: Solo, poses: Floats, dimension: int) -> tuple[Floats, Floats]:
    """Return where each run by itself places each of its points, and a typical covariance."""
    lie = frames.group(dimension)
    seen = solo.condensed.seen
    count = len(solo.point_unit)
    position = middle_positions(seen, solo.point_of_seen, count, poses, dimension)
    turn = lie.rotation(poses[seen.pose])
    covariance = turn @ seen.covariance @ np.swapaxes(turn, -1, -2)
    size = np.maximum(np.bincount(solo.point_of_seen, minlength=count), 1)
    total = sum_by_group(solo.point_of_seen, covariance, count)
    return position, total / size[:, None, None]


def _agree(problem: Problem, material: Material, solo: Solo, teams: Teams, poses: Floats) -> Bools:
    """Tell which points (L,) are the landmark they claim; control points vote too."""
    d = problem.dimension
    position, covariance = _own_positions(solo, poses, d)
    tracks = problem.tracks
    claim = np.where(tracks.rejected, -1, tracks.claim)[solo.point_track]
    absolute = material.absolute
    n = len(absolute.control)
    own = absolute.control_sigma[:, :, None] ** 2 * np.eye(d)
    accepted = agreeing(
        np.concatenate([position, absolute.control_position]),
        np.concatenate([covariance, own]),
        np.concatenate([claim, absolute.control]),
        np.concatenate([teams.group[solo.point_unit], np.full(n, teams.group[-1])]),
        np.concatenate([solo.point_unit, np.full(n, solo.units)]),
        solo.units,
    )[: len(claim)]
    return np.asarray(accepted | (tracks.forced[solo.point_track] & (claim >= 0)))


def _variables(problem: Problem, solo: Solo, teams: Teams, accepted: Bools) -> Ints:
    """Return the variable (L,) of each point: one per group and agreed landmark, else its track's.

    Tracks seen in several runs of one robot are one landmark once those runs are one group.
    """
    shared = len(problem.tracks.landmarks)
    track = solo.point_track
    key = np.where(accepted, problem.tracks.claim[track], shared + track)
    _, index = np.unique(
        np.stack([teams.group[solo.point_unit], key], axis=1), axis=0, return_inverse=True
    )
    return np.asarray(index.ravel(), dtype=np.int64)


def _net(
    problem: Problem, material: Material, solo: Solo, teams: Teams, accepted: Bools, variable: Ints
) -> Net:
    """Return the net of everything within groups; fixes and control points for the sited one."""
    condensed, group = solo.condensed, teams.group[solo.unit]
    closures, touches, pins = condensed.closures, condensed.touches, condensed.pins
    sited = group[pins.pose] == teams.group[-1]
    return replace(
        solo.net,
        closures=take_joints(closures, group[closures.a] == group[closures.b]),
        touches=take_touches(touches, group[touches.a] == group[touches.b]),
        seen=replace(solo.net.seen, point=variable[solo.point_of_seen]),
        pins=Pins(pins.pose[sited], pins.of[sited], pins.at[sited], pins.covariance[sited]),
        pinned=_pinned(problem, material, solo, teams, accepted, variable),
    )


def _pinned(
    problem: Problem, material: Material, solo: Solo, teams: Teams, accepted: Bools, variable: Ints
) -> Seen:
    """Coordinates of control points that accepted tracks of the sited group are."""
    absolute = material.absolute
    good = accepted & (teams.group[solo.point_unit] == teams.group[-1])
    of_landmark = np.full(len(problem.tracks.landmarks), -1)
    of_landmark[problem.tracks.claim[solo.point_track[good]]] = variable[good]
    row = np.flatnonzero(of_landmark[absolute.control] >= 0)
    sigma2 = np.maximum(absolute.control_sigma[row], 1e-3) ** 2
    return Seen(
        np.zeros(len(row), dtype=np.int64),
        of_landmark[absolute.control[row]],
        absolute.control_position[row],
        sigma2[:, :, None] * np.eye(problem.dimension),
    )


def _by_track(problem: Problem, solo: Solo, accepted: Bools) -> Bools:
    """Tell which tracks (T,) are accepted: in more than half of the runs that place them."""
    count = len(problem.tracks.robot)
    yes = np.bincount(solo.point_track, weights=accepted, minlength=count)
    total = np.bincount(solo.point_track, minlength=count)
    return np.asarray((yes > 0.5 * total) | (problem.tracks.forced & (problem.tracks.claim >= 0)))

"""From decisions to a solved state: the two solves that a fusion alternates.

The *robust* solve has a kernel on every measurement and finds its way from rough values. The *full*
solve has none: the inlier set at full weight, whose curvature is a covariance.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.calibrate import Calibration
from jointmap.graph.noise import Noise, block_covariance, whitening
from jointmap.graph.problem import Assignment, Block, Problem, State
from jointmap.solve.decisions import Decisions
from jointmap.solve.kernels import Kernel, RobustLoss
from jointmap.solve.layout import n_landmarks
from jointmap.solve.system import System, make_system, part_rows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Standard deviation of "is the same landmark", far below what any sensor sees (metres).
LINK_SIGMA = 2e-4
#: Kinds that get the kernel in a robust solve.
ROBUST = ("odometry", "sighting", "encounter", "closure", "fix", "control")


def own_landmarks(problem: Problem) -> Assignment:
    """Every track with a landmark of its own; associations are links between landmarks."""
    return Assignment(len(problem.tracks.landmarks) + np.arange(len(problem.tracks.robot)))


def first_state(
    problem: Problem, poses: Floats, points: Floats, turns: Floats | None, accepted: Bools
) -> State:
    """State from start values.

    Parameters
    ----------
    poses : (K, *shape)
    points : (T, dim) landmark position of each track, NaN where undetermined
    turns : (T, dim, dim) orientation of tags, None without any
    accepted : (T,) tracks that place the shared landmark they claim
    """
    n, dim = n_landmarks(problem), problem.dimension
    shared = len(problem.tracks.landmarks)
    landmarks = np.full((n, dim), np.nan)
    landmarks[shared:] = points
    orientations = np.broadcast_to(np.eye(dim), (n, dim, dim)).copy()
    if turns is not None:
        orientations[shared:] = np.where(np.isfinite(turns), turns, np.eye(dim))
    known = np.isfinite(points).all(axis=1) & (problem.tracks.claim >= 0)
    for tracks in (np.flatnonzero(known), np.flatnonzero(known & accepted)):
        claim = problem.tracks.claim[tracks]
        count = np.bincount(claim, minlength=shared)
        for axis in range(dim):
            total = np.bincount(claim, weights=points[tracks, axis], minlength=shared)
            landmarks[:shared, axis] = np.where(
                count > 0, total / np.maximum(count, 1), landmarks[:shared, axis]
            )
        orientations[claim] = orientations[shared + tracks]
    has_pose = problem.tracks.oriented.any()
    return State(poses, landmarks, orientations if has_pose else None)


def whiten_blocks(problem: Problem, noise: Noise) -> tuple[Floats, ...]:
    """Whitening of every block under the noise in force."""
    return tuple(whitening(block_covariance(b, problem, noise)) for b in problem.blocks)


def linked_tracks(problem: Problem, decisions: Decisions, determined: Bools) -> Ints:
    """Accepted tracks whose landmark has a value."""
    return np.flatnonzero(decisions.accepted & (problem.tracks.claim >= 0) & determined)


def determined_tracks(problem: Problem, state: State, decisions: Decisions) -> Bools:
    """Tracks (T,) with a finite landmark and at least one used sighting."""
    shared = len(problem.tracks.landmarks)
    finite = np.isfinite(state.landmarks[shared:]).all(axis=1)
    seen = np.zeros(len(problem.tracks.robot), dtype=bool)
    for block, rows in zip(problem.blocks, decisions.used, strict=True):
        if block.kind == "sighting":
            seen[block.b[rows]] = True
    return finite & seen


def system_of(
    problem: Problem,
    whiten: tuple[Floats, ...],
    decisions: Decisions,
    state: State,
    kernel: RobustLoss | None,
    sensitivity: Mapping[int, Floats],
    calibration: Calibration,
) -> System:
    """The system of the present decisions; with a kernel all usable rows are in."""
    used = decisions.usable if kernel is not None else decisions.used
    kernels = tuple(_kernel(kernel, b) for b in problem.blocks)
    weighted = whiten
    if kernel is None:
        weighted = tuple(
            w if (a == 1.0).all() else w * np.sqrt(a)[:, None, None]
            for w, a in zip(whiten, decisions.weight, strict=True)
        )
    present = determined_tracks(problem, state, replace(decisions, used=used))
    return make_system(
        problem,
        own_landmarks(problem),
        used,
        weighted,
        kernels,
        sensitivity,
        calibration.offset,
        calibration.prior,
        linked_tracks(problem, decisions, present),
        LINK_SIGMA,
    )


def _kernel(kernel: RobustLoss | None, block: Block) -> RobustLoss | None:
    """The measurements' kernel; a convex one for odometry.

    A redescending kernel on odometry would rather let the robot jump than give up a wrong
    sighting; Huber's lets a slip stand out without ever cutting the chain.
    """
    if kernel is None or block.kind not in ROBUST:
        return None
    return Kernel("huber") if block.kind == "odometry" else kernel


def usable_rows(problem: Problem, state: State) -> tuple[Bools, ...]:
    """Rows that a factor can be made of: sightings whose landmark has a value."""
    shared = len(problem.tracks.landmarks)
    finite: Bools = np.asarray(np.isfinite(state.landmarks).all(axis=1))
    out = []
    for block in problem.blocks:
        if block.kind == "sighting":
            out.append(finite[shared + block.b])
        elif block.kind == "control":
            out.append(finite[block.b])
        else:
            out.append(np.ones(block.n, dtype=bool))
    return tuple(out)


def undetermined(problem: Problem, system: System, state: State, least: float = 1e-3) -> Ints:
    """Tracks whose own sightings leave their landmark loose even with all poses held.

    A landmark seen by bearing from one place only has no distance; a direction counts as loose when
    its information is below ``least`` of the strongest one's and of one per square kilometre.
    """
    dim = problem.dimension
    info = np.zeros((len(problem.tracks.robot), dim, dim))
    turned = np.zeros(len(problem.tracks.robot), dtype=bool)
    for part in system.parts:
        if part.block.kind != "sighting":
            continue
        jacobian = part_rows(system, part, state)[0].jacobians[1]
        if jacobian.shape[2] != dim:
            turned[part.block.b] = True
            continue
        np.add.at(info, part.block.b, np.swapaxes(jacobian, 1, 2) @ jacobian)
    values = np.linalg.eigvalsh(info)
    loose = values[:, 0] <= np.maximum(least**2 * values[:, -1], 1e-6)
    seen = np.trace(info, axis1=1, axis2=2) > 0
    return np.flatnonzero(loose & seen & ~turned)


def pose_rows(problem: Problem, state: State, robot: int) -> Floats:
    """Table rows (k, 3 or 7) of a robot's keyframes."""
    first = problem.keyframes.first
    group = frames.group(problem.dimension)
    return np.asarray(group.to_rows(state.poses[first[robot] : first[robot + 1]]))

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
from jointmap.graph.models import linearise_block
from jointmap.graph.noise import (
    BURSTY,
    Noise,
    block_covariance,
    row_range,
    shared_model,
    stated_rows,
    whitening,
)
from jointmap.graph.problem import Assignment, Block, Problem, State
from jointmap.solve.decisions import Decisions
from jointmap.solve.disputed import with_disputes
from jointmap.solve.kernels import Kernel, RobustLoss
from jointmap.solve.layout import n_landmarks
from jointmap.solve.shared import LEAST_SHARE, SharedModel
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


def whiten_blocks(
    problem: Problem, noise: Noise, shared: Mapping[int, SharedModel] | None = None
) -> tuple[Floats, ...]:
    """Whitening of every block under the noise in force.

    ``shared``: blocks whose shared errors are variables and do not weaken the rows.
    """
    shared = shared or {}
    apart = {at for at, model in shared.items() if model.sigma is not None}
    return tuple(
        whitening(block_covariance(b, problem, noise, shared=at not in apart))
        for at, b in enumerate(problem.blocks)
    )


#: Shared errors below this share of the white variance are nothing.
LEAST_SHARED = 1e-3


def shared_models(
    problem: Problem, noise: Noise, *, constant: bool
) -> tuple[dict[int, SharedModel], tuple[tuple[int, str], ...]]:
    """What the rows of each block share, and the sensors that may have constant errors.

    ``constant``: whether sensors whose noise is not stated get range bias, range scale and bearing
    offset as variables.
    """
    models: dict[int, SharedModel] = {}
    sensors: list[tuple[int, str]] = []
    for at, block in enumerate(problem.blocks):
        if block.kind not in BURSTY:
            continue
        robot = problem.robots[block.robot]
        key = (block.robot, block.sensor)
        open_noise = any(
            t.free for t in noise.terms.values() if t.robot == robot and t.sensor == block.sensor
        )
        index = -1
        if constant and open_noise and block.components != ("pose",):
            if key not in sensors:
                sensors.append(key)
            index = sensors.index(key)
        found, sigma = shared_model(block, problem, noise), None
        time = np.zeros(block.sigma.shape[1])
        if found is not None:
            white = np.einsum("nii->ni", block_covariance(block, problem, noise, shared=False))
            variance = found[0] ** 2 + found[1] ** 2 * row_range(block)[:, None] ** 2
            variance = np.where(stated_rows(block), 0.0, variance)
            if block.n and (variance.mean(axis=0) > LEAST_SHARED * white.mean(axis=0)).any():
                sigma, time = np.sqrt(np.maximum(variance, LEAST_SHARE**2 * white)), found[2]
        if sigma is not None or index >= 0:
            models[at] = SharedModel(sigma, time, index)
    return models, tuple(sensors)


#: Ranges that scale noise are never taken to be shorter than this (m).
LEAST_RANGE_M = 0.05


def with_distances(problem: Problem, state: State) -> Problem:
    """The problem with the range of every row as the state has it (see :func:`row_range`)."""
    oriented = np.zeros(n_landmarks(problem), dtype=bool)
    landmark = own_landmarks(problem).landmark
    oriented[landmark] = problem.tracks.oriented
    blocks = list(problem.blocks)
    for at, block in enumerate(blocks):
        if block.kind not in BURSTY or "range_m" not in block.components:
            continue
        lin = linearise_block(
            frames.group(problem.dimension),
            block,
            state.poses,
            state.landmarks,
            state.orientations,
            landmark,
            oriented,
            jacobians=False,
        )
        i = block.components.index("range_m")
        observed = block.obs[:, i]
        predicted = observed + lin.residual[:, i]
        distance = np.where(np.isfinite(predicted), predicted, observed)
        blocks[at] = replace(block, distance=np.maximum(distance, LEAST_RANGE_M))
    return replace(problem, blocks=tuple(blocks))


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
    shared: Mapping[int, SharedModel] | None = None,
    sensors: tuple[tuple[int, str], ...] = (),
    constants: Bools | None = None,
) -> System:
    """The system of the present decisions; with a kernel all usable rows are in.

    ``shared``, ``sensors``: from :func:`shared_models`, where shared errors are variables;
    ``constants`` (3,) the constant errors of sensors that are used (None: all).
    """
    used = decisions.usable if kernel is not None else decisions.used
    kernels = tuple(_kernel(kernel, b) for b in problem.blocks)
    if kernel is not None:
        kernels = with_disputes(problem, whiten, used, kernel, kernels)
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
        calibration.value[:, 0],
        linked_tracks(problem, decisions, present),
        LINK_SIGMA,
        shared,
        sensors,
        constants,
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

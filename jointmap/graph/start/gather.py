"""From a problem's blocks to the flat arrays that start values are computed from."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.noise import (
    DEFAULT_SIGMA,
    Noise,
    NoiseTerm,
    block_covariance,
    residual_names,
)
from jointmap.graph.problem import ODOMETRY_TERMS, Block, Problem
from jointmap.graph.start.rows import COMPONENTS, SightingRows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Sighted:
    """All sightings: keyframe, track, sensor pose in the body of the keyframe, components.

    ``value``, ``sigma`` (n, 6) by COMPONENTS; ``turn`` (n, d, d) is the rotation of a tag in the
    sensor frame, NaN where none was observed.
    """

    keyframe: Ints
    track: Ints
    frame: Floats
    value: Floats
    sigma: Floats
    turn: Floats

    def rows(self, poses: Floats, group: Ints, dimension: int) -> SightingRows:
        """Rows for triangulation, with the keyframes at ``poses`` (n, *shape)."""
        lie = frames.group(dimension)
        sensor = lie.compose(poses, self.frame)
        return SightingRows(
            group, lie.translation(sensor), lie.rotation(sensor), self.value, self.sigma
        )

    def take(self, index: Ints | Bools) -> Sighted:
        """Some of the sightings."""
        return Sighted(
            self.keyframe[index],
            self.track[index],
            self.frame[index],
            self.value[index],
            self.sigma[index],
            self.turn[index],
        )


@dataclass(frozen=True)
class Met:
    """Encounters and closures: what keyframe ``a`` says about keyframe ``b``.

    ``frame_a`` body to what measures, ``frame_b`` body to what is seen. ``pose`` (n, *shape) for
    pose-valued rows with ``covariance`` (n, dof, dof) of the body tangent; else ``value`` and
    ``sigma`` by COMPONENTS. ``is_pose`` (n,) tells which; ``closure`` (n,) the kind; ``burst`` a
    number shared by rows that follow each other without a pause.
    """

    a: Ints
    b: Ints
    frame_a: Floats
    frame_b: Floats
    pose: Floats
    covariance: Floats
    value: Floats
    sigma: Floats
    is_pose: Bools
    closure: Bools
    burst: Ints

    @property
    def n(self) -> int:
        """Number of rows."""
        return len(self.a)


@dataclass(frozen=True)
class Absolute:
    """Fixes (keyframe, antenna in its body) and control points (shared landmark), site frame."""

    fix_keyframe: Ints
    fix_antenna: Floats
    fix_position: Floats
    fix_sigma: Floats
    control: Ints
    control_position: Floats
    control_sigma: Floats


@dataclass(frozen=True)
class Steps:
    """Odometry between neighbouring keyframes, stored at the later one (K, ...).

    ``delta`` the increment, identity where nothing ties a keyframe to the one before;
    ``turn_variance`` of the heading (of the whole rotation in three free dimensions, per axis),
    ``shift_variance`` of the position per axis; ``length`` m and ``turned`` rad travelled.
    """

    delta: Floats
    turn_variance: Floats
    shift_variance: Floats
    length: Floats
    turned: Floats


@dataclass(frozen=True)
class Material:
    """Everything that start values are computed from."""

    sighted: Sighted
    met: Met
    absolute: Absolute
    steps: Steps


def assumed_noise(problem: Problem) -> Noise:
    """Return the documented default of every term that the blocks of a problem need."""
    nan = float("nan")
    terms = []
    for block in problem.blocks:
        robot = problem.robots[block.robot] if block.robot >= 0 else ""
        odometry = block.kind == "odometry"
        names = ODOMETRY_TERMS if odometry else residual_names(block, problem.dimension)
        for name in dict.fromkeys(names):
            key = ("odometry", name) if odometry else (name, "constant")
            sensor = "" if odometry else block.sensor or block.kind
            value = 1.0 if block.kind == "fix" else DEFAULT_SIGMA[name]
            terms.append(NoiseTerm(robot, sensor, *key, nan, value, nan, nan, "default"))
    return Noise({t.key: t for t in terms})


def gather(problem: Problem, noise: Noise) -> Material:
    """Return the flat arrays of a problem under the noise in force."""
    return Material(
        sighted=_sighted(problem, noise),
        met=_met(problem, noise),
        absolute=_absolute(problem, noise),
        steps=_steps(problem, noise),
    )


def _wide(block: Block, covariance: Floats, dimension: int) -> tuple[Floats, Floats, Floats]:
    """Spread a block over COMPONENTS: value, sigma (n, 6), and the rotation observed (n, d, d)."""
    value = np.full((block.n, 6), np.nan)
    sigma = np.full((block.n, 6), np.nan)
    turn = np.full((block.n, dimension, dimension), np.nan)
    spread = np.sqrt(np.maximum(np.einsum("nii->ni", covariance), 1e-12))
    if block.components == ("pose",):
        lie = frames.group(dimension)
        value[:, 3 : 3 + dimension] = lie.translation(block.obs)
        # The tangent is that of the body; its mean per axis is good enough to start.
        linear = spread[:, :2] if dimension == 2 else spread[:, 3:]
        sigma[:, 3 : 3 + dimension] = np.sqrt(np.mean(linear**2, axis=1))[:, None]
        turn[:] = lie.rotation(block.obs)
    else:
        columns = [COMPONENTS.index(name) for name in block.components]
        value[:, columns], sigma[:, columns] = block.obs, spread
    return value, sigma, turn


def _sighted(problem: Problem, noise: Noise) -> Sighted:
    d = problem.dimension
    shape = frames.group(d).shape
    parts = [
        (np.zeros(0, np.int64), np.zeros(0, np.int64), np.zeros((0, *shape)))
        + (np.zeros((0, 6)), np.zeros((0, 6)), np.zeros((0, d, d)))
    ]
    for block in problem.blocks:
        if block.kind == "sighting" and block.n:
            wide = _wide(block, block_covariance(block, problem, noise), d)
            frame = np.broadcast_to(block.frame_a, (block.n, *shape))
            parts.append((block.a, block.b, frame, *wide))
    return Sighted(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _met(problem: Problem, noise: Noise) -> Met:
    d = problem.dimension
    lie = frames.group(d)
    pose0, cov0 = np.zeros((0, *lie.shape)), np.zeros((0, lie.dof, lie.dof))
    none = np.zeros(0, np.int64)
    false = np.zeros(0, bool)
    parts = [(none, none, pose0, pose0, pose0, cov0, np.zeros((0, 6)), np.zeros((0, 6)),
              false, false, none)]  # fmt: skip
    last = 0
    for block in problem.blocks:
        if block.kind not in ("encounter", "closure") or not block.n:
            continue
        n = block.n
        covariance = block_covariance(block, problem, noise)
        posed = block.components == ("pose",)
        if posed:
            value = sigma = np.full((n, 6), np.nan)
            obs, spread = block.obs, covariance
        else:
            value, sigma, _ = _wide(block, covariance, d)
            obs, spread = lie.identity(n), np.full((n, lie.dof, lie.dof), np.nan)
        frame_a = np.broadcast_to(block.frame_a, (n, *lie.shape))
        frame_b = np.broadcast_to(block.frame_b, (n, *lie.shape))
        parts.append((block.a, block.b, frame_a, frame_b, obs, spread, value, sigma,
                      np.full(n, posed), np.full(n, block.kind == "closure"),
                      block.burst + last))  # fmt: skip
        last += int(block.burst.max()) + 1
    return Met(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _absolute(problem: Problem, noise: Noise) -> Absolute:
    d = problem.dimension
    lie = frames.group(d)
    fixes = [(np.zeros(0, np.int64), np.zeros((0, d)), np.zeros((0, d)), np.zeros((0, d)))]
    control = [(np.zeros(0, np.int64), np.zeros((0, d)), np.zeros((0, d)))]
    for block in problem.blocks:
        if block.kind not in ("fix", "control") or not block.n:
            continue
        covariance = block_covariance(block, problem, noise)
        sigma = np.sqrt(np.maximum(np.einsum("nii->ni", covariance), 1e-8))
        if block.kind == "fix":
            antenna = np.broadcast_to(lie.translation(block.frame_a), (block.n, d))
            fixes.append((block.a, antenna, block.obs, sigma))
        else:
            control.append((block.b, block.obs, sigma))
    return Absolute(
        *(np.concatenate(column) for column in zip(*fixes, strict=True)),
        *(np.concatenate(column) for column in zip(*control, strict=True)),
    )


def _steps(problem: Problem, noise: Noise) -> Steps:
    lie = frames.group(problem.dimension)
    count = len(problem.keyframes.robot)
    delta = lie.identity(count)
    turn, shift = np.full(count, np.inf), np.full(count, np.inf)
    for block in problem.blocks:
        if block.kind != "odometry" or not block.n:
            continue
        covariance = block_covariance(block, problem, noise)
        delta[block.b] = block.obs
        variance = np.einsum("nii->ni", covariance)
        turn[block.b], shift[block.b] = _split_variance(variance, problem)
    tangent = lie.log(delta)
    linear = tangent[:, :2] if problem.dimension == 2 else tangent[:, 3:]
    angular = tangent[:, 2:] if problem.dimension == 2 else tangent[:, :3]
    return Steps(
        delta, turn, shift, np.linalg.norm(linear, axis=1), np.linalg.norm(angular, axis=1)
    )


def _split_variance(variance: Floats, problem: Problem) -> tuple[Floats, Floats]:
    """Variance of heading and of position per axis from the diagonal in tangent order."""
    if problem.dimension == 2:
        return variance[:, 2], variance[:, :2].mean(axis=1)
    heading = variance[:, 2] if problem.gravity_aligned else variance[:, :3].mean(axis=1)
    return heading, variance[:, 3:].mean(axis=1)

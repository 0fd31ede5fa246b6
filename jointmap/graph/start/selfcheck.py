"""How good a robot's odometry is, judged by landmarks that neighbouring chunks share.

Where two neighbouring chunks see two or more common landmarks, these give the motion between the
anchors without odometry. The ratio of the two motions is the scale of the odometry; what is left,
against what the noise model predicts, says by how much that model understates the drift.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.start.align import Form, align, minimal_points
from jointmap.graph.start.chunks import Chunks
from jointmap.graph.start.condense import Condensed
from jointmap.graph.start.gather import Steps

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Motions that a verdict needs, and the least rotation and path of one that counts.
_LEAST_MOTIONS = 8
_LEAST_TURN = 0.15
_LEAST_PATH = 0.15
#: Median of chi-square with one degree of freedom.
_MEDIAN = 0.4549
#: Scales beyond this are a broken log, not a scale.
_SCALE_LIMITS = (0.5, 2.0)


@dataclass(frozen=True)
class OdometryCheck:
    """Per robot: scale of translation and rotation (motion / odometry), variance factors."""

    translation: Floats
    rotation: Floats
    turn_factor: Floats
    shift_factor: Floats

    @property
    def worth_repeating(self) -> bool:
        """Whether the corrected odometry is so different that the chunks should be cut anew."""
        scaled = np.abs(np.stack([self.translation, self.rotation]) - 1.0).max(initial=0.0)
        factor = np.stack([self.turn_factor, self.shift_factor]).max(initial=1.0)
        return bool(scaled > 0.015 or factor > 2.0)


@dataclass(frozen=True)
class _Motion:
    """One motion between neighbouring anchors by landmarks and by odometry.

    ``turn`` (1,) and ``shift`` (d,) are vectors, so that both are treated alike.
    """

    robot: int
    turn: Floats
    odometry_turn: Floats
    turn_variance: float
    shift: Floats
    odometry_shift: Floats
    shift_variance: float


def check_odometry(condensed: Condensed, chunks: Chunks, robots: int, form: Form) -> OdometryCheck:
    """Compare odometry with landmarks robot by robot; 1 where there is too little to tell."""
    motions = _motions(condensed, chunks, form)
    values = np.ones((4, robots))
    for r in range(robots):
        values[:, r] = _judge([m for m in motions if m.robot == r])
    return OdometryCheck(*values)


def _motions(condensed: Condensed, chunks: Chunks, form: Form) -> list[_Motion]:
    seen = condensed.seen
    order = np.argsort(seen.pose, kind="stable")
    bounds = np.searchsorted(seen.pose[order], np.arange(chunks.n + 1))
    result = []
    for c in range(1, chunks.n):
        if not np.isfinite(chunks.joint_turn[c]):
            continue
        a, b = order[bounds[c - 1] : bounds[c]], order[bounds[c] : bounds[c + 1]]
        _, i, j = np.intersect1d(seen.point[a], seen.point[b], return_indices=True)
        if len(i) < minimal_points(form):
            continue
        a, b = a[i], b[j]
        variance = np.trace(seen.covariance[a] + seen.covariance[b], axis1=1, axis2=2)
        variance = variance / seen.at.shape[1]
        fit = align(seen.at[b], seen.at[a], 1.0 / variance, form)
        if bool(fit.degenerate):
            continue
        result.append(_motion(chunks, c, fit.rotation, fit.translation, fit.covariance))
    return result


def _motion(
    chunks: Chunks, c: int, rotation: Floats, translation: Floats, covariance: Floats
) -> _Motion:
    lie = frames.group(len(translation))
    tangent = lie.log(lie.build(rotation, translation))
    odometry = lie.log(chunks.joint[c])
    linear = slice(0, 2) if lie.dim == 2 else slice(3, 6)
    # The turn is about the vertical (2-D, upright) or about the axis that odometry turned about.
    axis = np.array([2])
    return _Motion(
        int(chunks.robot[c]),
        tangent[axis],
        odometry[axis],
        float(covariance[2, 2] + chunks.joint_turn[c]),
        tangent[linear],
        odometry[linear],
        float(np.trace(covariance[linear, linear]) / lie.dim + chunks.joint_shift[c]),
    )


def _judge(motions: list[_Motion]) -> tuple[float, float, float, float]:
    if len(motions) < _LEAST_MOTIONS:
        return 1.0, 1.0, 1.0, 1.0
    turn, odometry_turn, shift, odometry_shift = (
        np.array([getattr(m, name) for m in motions])
        for name in ("turn", "odometry_turn", "shift", "odometry_shift")
    )
    turn_variance = np.array([m.turn_variance for m in motions])
    shift_variance = np.array([m.shift_variance for m in motions])
    rotation = _scale(turn, odometry_turn, _LEAST_TURN)
    translation = _scale(shift, odometry_shift, _LEAST_PATH)
    turn_rest = (turn - rotation * odometry_turn + np.pi) % (2.0 * np.pi) - np.pi
    turn_factor = np.median(turn_rest[:, 0] ** 2 / turn_variance) / _MEDIAN
    shift_rest = (shift - translation * odometry_shift) ** 2
    shift_factor = np.median(shift_rest / shift_variance[:, None]) / _MEDIAN
    return translation, rotation, max(float(turn_factor), 1.0), max(float(shift_factor), 1.0)


def _scale(measured: Floats, odometry: Floats, least: float) -> float:
    """Return the ratio of two motions (n, k); 1 unless it clearly differs from 1.

    Noise in the divisor pulls a ratio towards zero. The ratio is therefore taken with either
    motion as the divisor; these two err to opposite sides, and the one nearer to 1 counts.
    """
    forward = _ratio(measured, odometry, least)
    backward = _ratio(odometry, measured, least)
    if forward is None or backward is None:
        return 1.0
    low, high = sorted((forward, 1.0 / backward))
    scale = low if low > 1.0 else min(1.0, high)
    return scale if _SCALE_LIMITS[0] < scale < _SCALE_LIMITS[1] else 1.0


def _ratio(a: Floats, b: Floats, least: float) -> float | None:
    """Return the weighted median of a.b / b.b over motions b that are large enough.

    1 when it is within four standard deviations of 1; None with too few motions.
    """
    square = np.sum(b * b, axis=1)
    good = square > least**2
    if np.count_nonzero(good) < _LEAST_MOTIONS:
        return None
    ratio, weight = np.sum(a * b, axis=1)[good] / square[good], np.sqrt(square[good])
    order = np.argsort(ratio)
    total = np.cumsum(weight[order])
    scale = float(ratio[order][np.searchsorted(total, 0.5 * total[-1])])
    spread = 1.4826 * float(np.median(np.abs(ratio - scale)))
    sure = abs(scale - 1.0) > 4.0 * 1.2533 * spread / np.sqrt(np.count_nonzero(good))
    return scale if sure and scale > 0.0 else 1.0


def corrected(steps: Steps, robot: Ints, check: OdometryCheck, dimension: int) -> Steps:
    """Apply scales and variance factors to increments (K, ...) of robots (K,)."""
    lie = frames.group(dimension)
    tangent = lie.log(steps.delta)
    linear = slice(0, 2) if dimension == 2 else slice(3, 6)
    angular = slice(2, 3) if dimension == 2 else slice(0, 3)
    tangent[:, linear] *= check.translation[robot][:, None]
    tangent[:, angular] *= check.rotation[robot][:, None]
    return Steps(
        lie.exp(tangent),
        steps.turn_variance * check.turn_factor[robot],
        steps.shift_variance * check.shift_factor[robot],
        steps.length * check.translation[robot],
        steps.turned * check.rotation[robot],
    )

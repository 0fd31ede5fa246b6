"""Stretches of a trajectory between solved keyframes, and the rule that fills each of them.

The mathematics is in :mod:`jointmap.graph.bridge`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.bend import half_jacobian
from jointmap.graph.intervals import Cumulative

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Seconds outside odometry and keyframes that are still answered: stamps may precede the motion
#: that their rows describe.
MARGIN_S = 60.0


@dataclass(frozen=True)
class SolvedKeyframes:
    """Keyframes of one robot with their joint uncertainty.

    Parameters
    ----------
    t_s : (K,) seconds, increasing
    poses : (K, *pose shape)
    covariance : (K, dof, dof)
        Body tangent.
    cross : (K-1, dof, dof)
        Cross-covariance of each keyframe (rows) with the next (columns), body tangents.
    """

    t_s: Floats
    poses: Floats
    covariance: Floats
    cross: Floats


@dataclass(frozen=True)
class Stretches:
    """Time cut at keyframes and cuts: ``bounds`` (S+1,), and which keyframes hold each stretch.

    ``left`` and ``right`` (S,) index keyframes, -1 where nothing holds that end.
    """

    bounds: Floats
    left: Ints
    right: Ints


@dataclass(frozen=True)
class Spans:
    """One rule per stretch.

    With D and M from the start of the stretch, the pose is ``base exp(M lean) D`` and, in the
    tangent of the base, ``cov = root + J (sign M + M bend M) J^T + J M tie + (J M tie)^T``.
    ``bound`` marks stretches held at both ends; the others have no lean, bend or tie.
    """

    base: Floats
    root: Floats
    sign: Floats
    lean: Floats
    bend: Floats
    tie: Floats
    bound: Bools


def find_stretches(made: Cumulative, t_key: Floats, cuts: Sequence[float]) -> Stretches:
    """Cut the time from before the odometry to after it at keyframes (K,) and at ``cuts``."""
    k = len(t_key)
    head = min(made.edges[0], t_key[0]) - MARGIN_S
    tail = max(made.edges[-1], t_key[-1]) + MARGIN_S
    bounds = np.concatenate([[head], t_key, [tail]])
    left, right = np.arange(-1, k), np.arange(0, k + 1)
    right[-1] = -1
    inside = np.unique([c for c in cuts if t_key[0] < c <= t_key[-1]])
    place = np.searchsorted(t_key, inside, side="left")
    # several cuts between two keyframes: what lies between them is held by the left one
    _, first = np.unique(place, return_index=True)
    inside, place = inside[first], place[first]
    bounds = np.insert(bounds, place + 1, inside)
    left = np.insert(left, place + 1, -1)
    right = np.insert(right, place, -1)
    return Stretches(bounds, left, right)


def make_spans(
    keyframes: SolvedKeyframes, parts: Stretches, motion: Floats, m: Floats, dimension: int
) -> Spans:
    """Rules of all stretches.

    Parameters
    ----------
    keyframes : SolvedKeyframes
    parts : Stretches
    motion : (S, *pose shape)
        Motion over each whole stretch by odometry.
    m : (S, dof, dof)
        Its covariance in the tangent at the start of the stretch.
    dimension : int
    """
    group, n = frames.group(dimension), len(m)
    base, root = np.empty((n, *group.shape)), np.empty((n, group.dof, group.dof))
    ahead = parts.left >= 0
    behind = ~ahead
    base[ahead] = keyframes.poses[parts.left[ahead]]
    root[ahead] = keyframes.covariance[parts.left[ahead]]
    held = parts.right[behind]
    base[behind] = group.compose(keyframes.poses[held], group.inverse(motion[behind]))
    out = group.adjoint(motion[behind])
    root[behind] = out @ keyframes.covariance[held] @ _t(out) + m[behind]
    both = ahead & (parts.right >= 0)
    lean, bend, tie = np.zeros((n, group.dof)), np.zeros_like(root), np.zeros_like(root)
    lean[both], bend[both], tie[both] = _bent(
        keyframes, parts.left[both], parts.right[both], motion[both], m[both], group
    )
    return Spans(base, root, np.where(ahead, 1.0, -1.0), lean, bend, tie, both)


def _bent(
    keyframes: SolvedKeyframes, i: Ints, j: Ints, motion: Floats, m: Floats, group: frames.Group
) -> tuple[Floats, Floats, Floats]:
    """``lean, bend, tie`` of stretches between keyframes ``i`` and ``j``."""
    cross = keyframes.cross[i]
    between = group.between(keyframes.poses[i], keyframes.poses[j])
    correction = group.log(group.compose(between, group.inverse(motion)))
    stiff = _inverse(m)
    # the same first-order Jacobian as along the way, so that the end is met exactly
    jacobian = np.empty_like(m)
    for k in range(len(m)):
        half_jacobian(correction[k], jacobian[k])
    turned = np.linalg.solve(jacobian, group.adjoint(between))
    back = group.adjoint(group.inverse(between))
    back_i, back_c = back @ keyframes.covariance[i], back @ cross
    differ = keyframes.covariance[j] - back_c - _t(back_c) + back_i @ _t(back)
    gain = stiff @ turned
    lean = np.einsum("nij,nj->ni", stiff, correction)
    return lean, gain @ differ @ _t(gain) - stiff, gain @ (_t(cross) - back_i)


def _t(matrix: Floats) -> Floats:
    return np.swapaxes(matrix, -1, -2)


def _inverse(m: Floats) -> Floats:
    """Inverse of positive definite matrices, whatever their units."""
    scale = 1.0 / np.sqrt(np.einsum("nii->ni", m))
    inner = np.linalg.inv(m * scale[:, :, None] * scale[:, None, :])
    return np.asarray(inner * scale[:, :, None] * scale[:, None, :], dtype=np.float64)

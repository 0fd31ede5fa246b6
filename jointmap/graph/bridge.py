"""Full-rate trajectory between solved keyframes: the odometry, bent to meet them.

Notes
-----
Between keyframes i and j the odometry is a random walk with independent increments. With ``D`` the
motion since i by odometry, ``M`` its accumulated covariance in the tangent of i (a sum over rows),
``D_j`` and ``M_j`` the same at j, and the correction ``r = log((T_i^-1 T_j) D_j^-1)`` in the tangent
of i, the walk that is known to end at ``T_j`` has at any instant between the mean

    T = T_i exp(M M_j^-1 r) D,

and, in the tangent of i, the covariance ``M - M M_j^-1 M``: the conditional of a Gaussian, as in a
Brownian bridge with M in the place of time. The errors of the two keyframes are carried along: with
J the left Jacobian at ``M M_j^-1 r``, J_r the one at r, B the adjoint of ``T_i^-1 T_j``, V its
inverse,

    d = d_i + J M M_j^-1 J_r^-1 B (d_j - V d_i).

Both parts are of first order in errors; the mean is exact at the keyframes. Before the first, after
the last keyframe and on the far sides of a cut the odometry is extrapolated, its covariance growing
away from the keyframe.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap import frames
from jointmap.graph.intervals import PLANAR, Cumulative, Gaps, cumulative, find_gaps, from_seven
from jointmap.graph.odometry import moment_covariance, walk_increments
from jointmap.graph.rownoise import RowNoise, stated_noise
from jointmap.ingest.survey import Odometry

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Standard deviations per square root of a second that every walk has: they decide how a correction
#: is spread where the noise model has none (a robot at rest), and are too small to matter elsewhere.
FLOOR_TRANSLATION, FLOOR_ROTATION = 1e-6, 1e-7
#: Seconds outside odometry and keyframes that are still answered: stamps may precede the motion
#: that their rows describe.
MARGIN_S = 60.0
#: Stamps handled at once, so that temporary matrices stay small.
_CHUNK = 65_536


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
class Bridged:
    """Poses (Q, *shape) at stamps ``t_s`` (Q,), covariance (Q, dof, dof) of the body tangent."""

    t_s: Floats
    poses: Floats
    covariance: Floats


@dataclass(frozen=True)
class _Spans:
    """Stretches of time with one rule each, between ``bounds`` (S+1,).

    With D and M from the start of the stretch, the pose is ``base exp(M lean) D`` and, in the
    tangent of the base, ``cov = root + J (sign M + M bend M) J^T + J M tie + (J M tie)^T``.
    ``stated`` marks stretches whose rows state their own noise.
    """

    bounds: Floats
    base: Floats
    root: Floats
    sign: Floats
    lean: Floats
    bend: Floats
    tie: Floats
    stated: NDArray[np.bool_]


@dataclass(frozen=True)
class Bridge:
    """A robot's solved keyframes and odometry, ready to be asked at any stamp."""

    made: Cumulative
    gaps: Gaps
    noise: RowNoise
    per_piece: Floats
    spans: _Spans

    def at(self, t_query: ArrayLike) -> Bridged:
        """Poses and covariances at stamps (Q,) in any order.

        NaN further than MARGIN_S outside both odometry and keyframes.
        """
        t = np.asarray(t_query, dtype=np.float64)
        bounds = self.spans.bounds
        group = frames.group(self.made.dimension)
        order = np.argsort(t, kind="stable")
        poses = np.full((len(t), *group.shape), np.nan)
        covariance = np.full((len(t), group.dof, group.dof), np.nan)
        span = np.searchsorted(bounds, t, side="right") - 1
        order = order[(t[order] >= bounds[0]) & (t[order] < bounds[-1])]
        for lo in range(0, len(order), _CHUNK):
            rows = order[lo : lo + _CHUNK]
            poses[rows], covariance[rows] = self._chunk(t[rows], span[rows])
        return Bridged(t, poses, covariance)

    def _chunk(self, t: Floats, span: Ints) -> tuple[Floats, Floats]:
        """Poses and covariances at increasing stamps within ``span``."""
        group, s = frames.group(self.made.dimension), self.spans
        bounds = s.bounds[span[0] : span[-1] + 1]
        stamps = np.concatenate([bounds, t])
        order = np.argsort(stamps, kind="stable")
        restart = order < len(bounds)
        walked, m = _accumulate(self, stamps[order], restart)
        asked = ~restart
        d, m = walked[asked], m[asked]
        own = s.stated[span][:, None, None]
        m = np.where(own, m[:, 1], m[:, 0])
        bent = np.einsum("nij,nj->ni", m, s.lean[span])
        pose = group.compose(group.compose(s.base[span], group.exp(bent)), d)
        left = group.right_jacobian(-bent)
        spread = s.sign[span][:, None, None] * m + m @ s.bend[span] @ m
        tied = left @ m @ s.tie[span]
        total = s.root[span] + left @ spread @ _t(left) + tied + _t(tied)
        back = group.adjoint(group.between(pose, s.base[span]))
        total = back @ total @ _t(back)
        return pose, 0.5 * (total + _t(total))


def _t(matrix: Floats) -> Floats:
    return np.swapaxes(matrix, -1, -2)


def _accumulate(
    bridge: Bridge, stamps: Floats, restart: NDArray[np.bool_]
) -> tuple[Floats, Floats]:
    """Motion (Q, *shape) since the last restart, covariance (Q, 2, dof, dof) by model and rows."""
    dimension = bridge.made.dimension
    pose, moments, stated, _, _ = walk_increments(
        bridge.made, stamps, restart, bridge.gaps, bridge.per_piece, bridge.noise
    )
    m = moment_covariance(moments, dimension)
    if bridge.noise.kind:
        m[:, 1] += stated if dimension == 3 else stated[:, PLANAR, :][..., PLANAR]
    return from_seven(pose, dimension), m


def _channels(theta: Floats) -> Floats:
    """Noise per unit of path, turn, time and gap: the model in force, and what rows do not state."""
    out = np.zeros((2, 2, 5))
    out[:, 0, 2], out[:, 1, 2] = FLOOR_TRANSLATION**2, FLOOR_ROTATION**2
    out[:, 0, 3] = out[:, 1, 4] = 1.0
    square = np.asarray(theta, dtype=np.float64) ** 2
    out[0, 0, 0] += square[0]
    out[0, 1, 0] += square[1]
    out[0, 1, 1] += square[2]
    out[0, 0, 2] += square[3]
    out[0, 1, 2] += square[4]
    return out


def prepare_bridge(
    odometry: Odometry,
    t_rows: Floats,
    keyframes: SolvedKeyframes,
    theta: Floats,
    dimension: int,
    translation_scale: float = 1.0,
    rotation_scale: float = 1.0,
    max_gap_s: float | None = None,
    cuts: Sequence[float] = (),
) -> Bridge:
    """Prepare the trajectory of one robot between and around its solved keyframes.

    Parameters
    ----------
    odometry, t_rows, dimension, translation_scale, rotation_scale, max_gap_s
        As in :func:`jointmap.graph.odometry.increments`, with the values that the solution used.
    keyframes : SolvedKeyframes
    theta : (5,)
        Odometry noise in force, in the order of ODOMETRY_TERMS. Pairs of keyframes between which
        every row states its own noise use that instead, as the graph does.
    cuts : sequence of float
        Survey times across which no motion is known.

    Raises
    ------
    SurveyError
        As :func:`jointmap.graph.intervals.cumulative`.
    """
    made = cumulative(odometry, t_rows, dimension, translation_scale, rotation_scale)
    noise = stated_noise(odometry, made.edges, dimension)
    bounds, left, right = _stretches(made, keyframes.t_s, cuts)
    n, dof = len(left), frames.group(dimension).dof
    spans = _Spans(
        bounds=bounds,
        base=np.empty((n, *frames.group(dimension).shape)),
        root=np.empty((n, dof, dof)),
        sign=np.where(left < 0, -1.0, 1.0),
        lean=np.zeros((n, dof)),
        bend=np.zeros((n, dof, dof)),
        tie=np.zeros((n, dof, dof)),
        stated=np.zeros(n, dtype=bool),
    )
    bridge = Bridge(made, find_gaps(made, max_gap_s), noise, _channels(theta), spans)
    motion, m = _accumulate(bridge, bounds, np.ones(n + 1, dtype=bool))
    m = m[1:]
    if noise.kind:
        spans.stated[:] = np.isfinite(m[:, 1]).all(axis=(1, 2))
    m = np.where(spans.stated[:, None, None], m[:, 1], m[:, 0])
    _fill(spans, keyframes, left, right, motion[1:], m, dimension)
    return bridge


def _stretches(made: Cumulative, t_key: Floats, cuts: Sequence[float]) -> tuple[Floats, Ints, Ints]:
    """Bounds (S+1,) and the keyframes (S,) that hold each stretch at its left and right, or -1."""
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
    return bounds, left, right


def _fill(
    spans: _Spans,
    keyframes: SolvedKeyframes,
    left: Ints,
    right: Ints,
    motion: Floats,
    m: Floats,
    dimension: int,
) -> None:
    """Set the rule of each stretch from its total ``motion`` and covariance ``m``."""
    group = frames.group(dimension)
    ahead = left >= 0
    spans.base[ahead] = keyframes.poses[left[ahead]]
    spans.root[ahead] = keyframes.covariance[left[ahead]]
    spans.base[~ahead] = group.compose(
        keyframes.poses[right[~ahead]], group.inverse(motion[~ahead])
    )
    out = group.adjoint(motion[~ahead])
    spans.root[~ahead] = out @ keyframes.covariance[right[~ahead]] @ _t(out) + m[~ahead]
    both = np.flatnonzero(ahead & (right >= 0))
    if len(both) == 0:
        return
    i, j = left[both], right[both]
    cross = keyframes.cross[i]
    between = group.between(keyframes.poses[i], keyframes.poses[j])
    lean = group.log(group.compose(between, group.inverse(motion[both])))
    stiff = _inverse(m[both])
    spans.lean[both] = np.einsum("nij,nj->ni", stiff, lean)
    # d(lean) = turned (d_j - back d_i)
    turned = group.right_jacobian_inverse(-lean) @ group.adjoint(between)
    back = group.adjoint(group.inverse(between))
    back_i = back @ keyframes.covariance[i]
    differ = keyframes.covariance[j] - back @ cross - _t(back @ cross) + back_i @ _t(back)
    gain = stiff @ turned
    spans.bend[both] = gain @ differ @ _t(gain) - stiff
    spans.tie[both] = gain @ (_t(cross) - back_i)


def _inverse(m: Floats) -> Floats:
    """Inverse of positive definite matrices, whatever their units."""
    scale = 1.0 / np.sqrt(np.einsum("nii->ni", m))
    inner = np.linalg.inv(m * scale[:, :, None] * scale[:, None, :])
    return np.asarray(inner * scale[:, :, None] * scale[:, None, :], dtype=np.float64)


def bridge(
    odometry: Odometry,
    t_rows: Floats,
    keyframes: SolvedKeyframes,
    theta: Floats,
    dimension: int,
    translation_scale: float = 1.0,
    rotation_scale: float = 1.0,
    max_gap_s: float | None = None,
    cuts: Sequence[float] = (),
) -> Bridged:
    """Pose and covariance at every odometry row; parameters as in :func:`prepare_bridge`."""
    ready = prepare_bridge(
        odometry,
        t_rows,
        keyframes,
        theta,
        dimension,
        translation_scale,
        rotation_scale,
        max_gap_s,
        cuts,
    )
    return ready.at(t_rows)

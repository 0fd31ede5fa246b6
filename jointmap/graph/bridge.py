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

Both parts are of first order in errors (J by ``I + ad / 2``, J_r likewise); the mean is exact at
the keyframes. Before the first, after the last keyframe and on the far sides of a cut the odometry
is extrapolated, its covariance growing away from the keyframe.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap import frames
from jointmap.graph.bend import evaluate
from jointmap.graph.intervals import PLANAR, Cumulative, Gaps, cumulative, find_gaps, from_seven
from jointmap.graph.odometry import moment_covariance, walk_increments
from jointmap.graph.rownoise import RowNoise, stated_noise
from jointmap.graph.spans import MARGIN_S, SolvedKeyframes, Spans, find_stretches, make_spans
from jointmap.ingest.survey import Odometry

__all__ = ["MARGIN_S", "Bridge", "Bridged", "SolvedKeyframes", "bridge", "prepare_bridge"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Standard deviations per square root of a second that every walk has: they decide how a correction
#: is spread where the noise model has none (a robot at rest), and are too small to matter elsewhere.
FLOOR_TRANSLATION, FLOOR_ROTATION = 1e-6, 1e-7
#: Stamps handled at once, so that temporary matrices stay small.
_CHUNK = 65_536


@dataclass(frozen=True)
class Bridged:
    """Poses (Q, *shape) at stamps ``t_s`` (Q,), covariance (Q, dof, dof) of the body tangent."""

    t_s: Floats
    poses: Floats
    covariance: Floats


@dataclass(frozen=True)
class _Walker:
    """Odometry with the noise in force, asked for motion and noise since restarts."""

    made: Cumulative
    gaps: Gaps
    noise: RowNoise
    per_piece: Floats

    def __call__(self, stamps: Floats, restart: Bools) -> tuple[Floats, Floats, Floats]:
        """Motion (Q, 7), moments (Q, 2, 11) by model and without it, rows' own noise."""
        pose, moments, stated, _, _ = walk_increments(
            self.made, stamps, restart, self.gaps, self.per_piece, self.noise
        )
        return pose, moments, stated


@dataclass(frozen=True)
class Bridge:
    """A robot's solved keyframes and odometry, ready to be asked at any stamp.

    ``bounds`` (S+1,) seconds of the stretches, ``stated`` (S,) whether their rows' own noise is in
    force, ``spans`` their rules, ``base`` (S, 7) the poses of these as rows.
    """

    walker: _Walker
    bounds: Floats
    stated: Bools
    spans: Spans
    base: Floats

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return self.walker.made.dimension

    def at(self, t_query: ArrayLike) -> Bridged:
        """Poses and covariances at stamps (Q,) in any order.

        NaN further than MARGIN_S outside both odometry and keyframes.
        """
        t = np.asarray(t_query, dtype=np.float64)
        group = frames.group(self.dimension)
        order = np.argsort(t, kind="stable")
        poses = np.full((len(t), *group.shape), np.nan)
        covariance = np.full((len(t), group.dof, group.dof), np.nan)
        span = np.searchsorted(self.bounds, t, side="right") - 1
        order = order[(t[order] >= self.bounds[0]) & (t[order] < self.bounds[-1])]
        for lo in range(0, len(order), _CHUNK):
            rows = order[lo : lo + _CHUNK]
            poses[rows], covariance[rows] = self._chunk(t[rows], span[rows])
        return Bridged(t, poses, covariance)

    def _chunk(self, t: Floats, span: Ints) -> tuple[Floats, Floats]:
        """Poses and covariances at increasing stamps within ``span``."""
        bounds = self.bounds[span[0] : span[-1] + 1]
        stamps = np.concatenate([bounds, t])
        order = np.argsort(stamps, kind="stable")
        restart = order < len(bounds)
        motion, moments, stated = self.walker(stamps[order], restart)
        asked = ~restart
        s, dof = self.spans, frames.group(self.dimension).dof
        poses, covariance = np.empty((len(t), 7)), np.empty((len(t), dof, dof))
        evaluate(
            span,
            motion[asked],
            moments[asked],
            stated[asked] if len(stated) else stated,
            self.stated,
            self.base,
            s.root,
            s.sign,
            s.lean,
            s.bend,
            s.tie,
            s.bound,
            poses,
            covariance,
        )
        return from_seven(poses, self.dimension), covariance


def _seven(poses: Floats, dimension: int) -> Floats:
    """Rows ``x y z qx qy qz qw`` (S, 7) of poses, the inverse of ``from_seven``."""
    if dimension == 3:
        return frames.SE3.to_rows(poses)
    out = np.zeros((len(poses), 7))
    out[:, :2] = poses[:, :2]
    out[:, 5], out[:, 6] = np.sin(0.5 * poses[:, 2]), np.cos(0.5 * poses[:, 2])
    return out


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
    walker = _Walker(made, find_gaps(made, max_gap_s), noise, _channels(theta))
    parts = find_stretches(made, keyframes.t_s, cuts)
    motion, moments, own = walker(parts.bounds, np.ones(len(parts.bounds), dtype=bool))
    m = moment_covariance(moments[1:], dimension)
    stated = np.zeros(len(m), dtype=bool)
    if noise.kind:
        m[:, 1] += own[1:] if dimension == 3 else own[1:][:, PLANAR, :][..., PLANAR]
        stated = np.asarray(np.isfinite(m[:, 1]).all(axis=(1, 2)), dtype=bool)
    m = np.where(stated[:, None, None], m[:, 1], m[:, 0])
    spans = make_spans(keyframes, parts, from_seven(motion[1:], dimension), m, dimension)
    base = _seven(spans.base, dimension)
    return Bridge(walker, parts.bounds, stated, spans, base)


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

"""Odometry of one robot, integrated exactly between any stamps, with its noise and sensitivities.

Notes
-----
Noise is a random walk along the path (:data:`jointmap.graph.problem.ODOMETRY_TERMS`); the shapes
that the terms scale are accumulated by :mod:`jointmap.graph.walk`. Where rows are missing the twist
is unknown: a gap of length G adds the variance ``(v G)^2`` to each axis of translation and
``(w G)^2`` to each of rotation, with v and w the 0.99 quantiles of the robot's own speed and turn
rate while it moves or turns. A keyframe inside a gap divides that variance by time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.intervals import PLANAR, Cumulative, Gaps, cumulative, find_gaps, from_seven
from jointmap.graph.rownoise import RowNoise, stated_noise
from jointmap.graph.walk import GAP, LONGEST, PATH, TURN, walk
from jointmap.ingest.survey import Odometry

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Channels of the walk: the five terms of ODOMETRY_TERMS, then gaps.
_TERMS = np.zeros((6, 2, 5))
for _channel, _side, _amount in ((0, 0, 0), (1, 1, 0), (2, 1, 1), (3, 0, 2), (4, 1, 2)):
    _TERMS[_channel, _side, _amount] = 1.0
_TERMS[5, 0, 3] = _TERMS[5, 1, 4] = 1.0


@dataclass(frozen=True)
class OdometryIncrements:
    """What a robot's odometry says between K neighbouring keyframes.

    Parameters
    ----------
    delta : (K-1, *pose shape)
        Pose of the later keyframe in the earlier one.
    basis : (K-1, 5, dof, dof)
        Covariance of ``delta`` (body tangent at the later keyframe) per squared unit of each term
        of ODOMETRY_TERMS.
    row_cov : (K-1, dof, dof)
        Covariance accumulated from what the rows state by themselves; NaN where any row of the
        pair states nothing usable.
    gap_cov : (K-1, dof, dof)
        Covariance to add for the time without rows; zero without gaps.
    path_m, turn_rad, duration_s : (K-1,)
    gap_s : (K-1,)
        Longest time without rows inside the pair.
    gap : (K-1,) bool
        The pair touches an interval longer than the threshold, or time outside the rows.
    n_ignored : int
        Rows whose accumulated covariance could not be used.
    """

    delta: Floats
    basis: Floats
    row_cov: Floats
    gap_cov: Floats
    path_m: Floats
    turn_rad: Floats
    duration_s: Floats
    gap_s: Floats
    gap: Bools
    n_ignored: int


def dead_reckon(
    odometry: Odometry,
    t_rows: Floats,
    t_query: Floats,
    dimension: int,
    translation_scale: float = 1.0,
    rotation_scale: float = 1.0,
) -> Floats:
    """Poses (Q, *shape) of the body in the robot's odometry frame at stamps (Q,) in any order.

    Queries outside the span of the rows are clamped to its ends. Parameters as in
    :func:`cumulative`; make that once and ask it with ``at`` to query large logs repeatedly.
    """
    made = cumulative(odometry, t_rows, dimension, translation_scale, rotation_scale)
    return made.at(t_query)


def moment_covariance(moments: Floats, dimension: int) -> Floats:
    """Covariance (…, dof, dof) in the tangent of the last restart, of moments (…, 11)."""
    m = np.zeros((*moments.shape[:-1], 6, 6))
    wt, wr = moments[..., 0], moments[..., 1]
    spread = np.empty((*moments.shape[:-1], 3, 3))
    for k, (i, j) in enumerate(((0, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 2))):
        spread[..., i, j] = spread[..., j, i] = moments[..., 5 + k]
    lever = frames.skew(moments[..., 2:5])
    eye = np.eye(3)
    m[..., :3, :3] = wr[..., None, None] * eye
    m[..., 3:, :3], m[..., :3, 3:] = lever, np.swapaxes(lever, -1, -2)
    trace = np.einsum("...ii->...", spread) + wt
    m[..., 3:, 3:] = trace[..., None, None] * eye - spread
    return m if dimension == 3 else m[..., PLANAR, :][..., PLANAR]


def walk_increments(
    made: Cumulative, stamps: Floats, restart: Bools, gaps: Gaps, per_piece: Floats, noise: RowNoise
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """:func:`jointmap.graph.walk.walk` with the arguments in order and C layout."""
    return walk(  # type: ignore[no-any-return]
        made.edges,
        made.tangents,
        np.ascontiguousarray(stamps, dtype=np.float64),
        restart,
        gaps.speed2,
        gaps.hole,
        per_piece,
        noise.kind,
        noise.values,
    )


def increments(
    odometry: Odometry,
    t_rows: Floats,
    t_key: Floats,
    dimension: int,
    translation_scale: float = 1.0,
    rotation_scale: float = 1.0,
    max_gap_s: float | None = None,
) -> OdometryIncrements:
    """Motion and noise shapes between neighbouring keyframes with increasing stamps ``t_key`` (K,).

    Parameters as in :func:`cumulative`; ``max_gap_s`` as in :func:`find_gaps`.
    """
    made = cumulative(odometry, t_rows, dimension, translation_scale, rotation_scale)
    gaps = find_gaps(made, max_gap_s)
    noise = stated_noise(odometry, made.edges, dimension)
    key = np.asarray(t_key, dtype=np.float64)
    all_restart = np.ones(len(key), dtype=bool)
    pose, moments, stated, extra, _ = walk_increments(made, key, all_restart, gaps, _TERMS, noise)
    group = frames.group(dimension)
    delta = from_seven(pose, dimension)[1:]
    back = group.adjoint(group.inverse(delta))
    back_t = np.swapaxes(back, -1, -2)
    shapes = moment_covariance(moments[1:], dimension)
    shapes = back[:, None] @ shapes @ back_t[:, None]
    row_cov = np.full((len(delta), group.dof, group.dof), np.nan)
    if noise.kind:
        total = stated[1:] if dimension == 3 else stated[1:][:, PLANAR, :][..., PLANAR]
        row_cov = back @ total @ back_t
    return OdometryIncrements(
        delta=delta,
        basis=shapes[:, :5],
        row_cov=row_cov,
        gap_cov=shapes[:, 5],
        path_m=extra[1:, PATH],
        turn_rad=extra[1:, TURN],
        duration_s=np.diff(key),
        gap_s=extra[1:, LONGEST],
        gap=extra[1:, GAP] > 0,
        n_ignored=noise.n_ignored,
    )


def increment_jacobians(
    odometry: Odometry,
    t_rows: Floats,
    t_key: Floats,
    dimension: int,
    translation_scale: float = 1.0,
    rotation_scale: float = 1.0,
) -> Floats:
    """Derivative (K-1, dof, 3) of each increment by translation scale, rotation scale and lag.

    Rows are the body tangent at the later keyframe. A larger lag moves ``t_rows`` later while the
    keyframes stay.

    Notes
    -----
    With ``D`` the increment, ``w_a`` and ``w_b`` the twists at both ends:
    ``exp(l w_a) D exp(-l w_b) = D exp(l (Ad(D^-1) w_a - w_b))`` to first order in the lag ``l``.
    The position of D is proportional to the translation scale.
    """
    made = cumulative(odometry, t_rows, dimension, translation_scale, rotation_scale)
    key = np.asarray(t_key, dtype=np.float64)
    none = RowNoise(0, np.zeros((0, 1, 1)), 0)
    quiet = Gaps(np.zeros(len(made.tangents)), np.zeros(2))
    pose, _, _, _, slope = walk_increments(
        made, key, np.ones(len(key), dtype=bool), quiet, np.zeros((0, 2, 5)), none
    )
    group = frames.group(dimension)
    spatial = frames.SE3.from_rows(pose[1:])
    turned = np.swapaxes(spatial[..., :3], -1, -2)
    by = np.zeros((len(spatial), 6, 2))
    by[:, 3:, 0] = np.einsum("nij,nj->ni", turned, spatial[..., 3]) / translation_scale
    by[:, :3, 1] = np.einsum("nij,nj->ni", turned, slope[1:, :3]) / rotation_scale
    by[:, 3:, 1] = np.einsum("nij,nj->ni", turned, slope[1:, 3:]) / rotation_scale
    twist = made.twist(key)
    back = group.adjoint(group.inverse(from_seven(pose, dimension)[1:]))
    lag = np.einsum("nij,nj->ni", back, twist[:-1]) - twist[1:]
    return np.concatenate([by if dimension == 3 else by[:, PLANAR], lag[..., None]], axis=-1)

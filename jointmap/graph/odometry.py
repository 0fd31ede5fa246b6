"""Odometry of one robot, integrated exactly between any stamps, with its noise and sensitivities.

The rows become intervals of constant body twist: in twist form a row holds until the next one (the
last for one median period), in pose form the motion between two rows follows the geodesic. Before
the first and after the last interval the body is held where it is.

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
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.errors import SurveyError
from jointmap.graph import steps
from jointmap.graph.rownoise import RowNoise, stated_noise
from jointmap.graph.walk import GAP, LONGEST, PATH, TURN, walk
from jointmap.ingest.survey import Odometry

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Quantile of a robot's own speed that stands for what it may do while no rows come.
SPEED_QUANTILE = 0.99
#: A gap is an interval longer than both.
GAP_PERIODS, GAP_SECONDS = 10.0, 0.5
#: Rows that quantiles look at; more add nothing but time.
_SAMPLE = 500_000
#: Tangent of a planar pose (x, y, yaw) within the spatial one (rotation first).
_PLANAR = (3, 4, 2)
#: Channels of the walk: the five terms of ODOMETRY_TERMS, then gaps.
_TERMS = np.zeros((6, 2, 5))
for _channel, _side, _amount in ((0, 0, 0), (1, 1, 0), (2, 1, 1), (3, 0, 2), (4, 1, 2)):
    _TERMS[_channel, _side, _amount] = 1.0
_TERMS[5, 0, 3] = _TERMS[5, 1, 4] = 1.0


@dataclass(frozen=True)
class Cumulative:
    """Odometry as intervals of constant body twist.

    Parameters
    ----------
    dimension : int
    edges : (M+1,) seconds, not decreasing
    tangents : (M, dof)
        Motion over each whole interval, body tangent at its start, scale factors applied.
    rows : (N, 3 or 7) or None
        Table rows of pose form that are the poses at the edges (scale factors 1).
    start : (3 or 7,)
        Table row of the pose at the first edge.
    period_s : float
        Median time between rows.
    """

    dimension: int
    edges: Floats
    tangents: Floats
    rows: Floats | None
    start: Floats
    period_s: float

    @cached_property
    def poses(self) -> Floats:
        """Table rows ``x y z qx qy qz qw`` (M+1, 7) of the poses at the edges."""
        out = np.zeros((len(self.edges), 7))
        rows = self.start[None] if self.rows is None else self.rows
        full = np.zeros((len(rows), 7))
        if self.dimension == 2:
            full[:, :2], half = rows[:, :2], 0.5 * rows[:, 2]
            full[:, 5], full[:, 6] = np.sin(half), np.cos(half)
        else:
            full[:] = rows
        if self.rows is not None:
            return full
        steps.chain(self.tangents, full[0], out)
        return out

    def at(self, t_query: Floats) -> Floats:
        """Poses (Q, *shape) in the odometry frame at stamps (Q,) in any order, clamped."""
        t = np.asarray(t_query, dtype=np.float64)
        last = len(self.edges) - 1
        edge = np.clip(np.searchsorted(self.edges, t, side="right") - 1, 0, last)
        length = self.edges[np.minimum(edge + 1, last)] - self.edges[edge]
        share = np.clip((t - self.edges[edge]) / np.where(length > 0, length, np.inf), 0.0, 1.0)
        out = np.empty((len(t), 7))
        steps.follow(self.poses, self.tangents, edge, share, out)
        return from_seven(out, self.dimension)

    def twist(self, t_query: Floats) -> Floats:
        """Body twists (Q, dof) per second at stamps (Q,); zero outside the span."""
        t = np.asarray(t_query, dtype=np.float64)
        out = np.zeros((len(t), self.tangents.shape[1]))
        edge = np.searchsorted(self.edges, t, side="right") - 1
        inside = (edge >= 0) & (edge < len(self.tangents))
        e = edge[inside]
        out[inside] = self.tangents[e] / (self.edges[e + 1] - self.edges[e])[:, None]
        return out


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


@dataclass(frozen=True)
class Gaps:
    """Where rows are missing: ``hole`` (M,) length of gaps, else 0; ``speed2`` (2,) squared."""

    hole: Floats
    speed2: Floats


def from_seven(rows: Floats, dimension: int) -> Floats:
    """Poses (Q, *shape) of rows ``x y z qx qy qz qw`` (planar ones turn about z only)."""
    if dimension == 3:
        return frames.SE3.from_rows(rows)
    out = rows[:, :3].copy()
    out[:, 2] = frames.wrap(2.0 * np.arctan2(rows[:, 5], rows[:, 6]))
    return out


def cumulative(
    odometry: Odometry,
    t_rows: Floats,
    dimension: int,
    translation_scale: float = 1.0,
    rotation_scale: float = 1.0,
) -> Cumulative:
    """Prepare a robot's odometry for any number of queries.

    Parameters
    ----------
    odometry : Odometry
    t_rows : (N,) seconds
        Survey time of the motion that each row describes (clock and lag applied), increasing.
    dimension : int
        2 or 3.
    translation_scale, rotation_scale : float
        Factors on the tangent of each increment (pose form) or on the twist.

    Raises
    ------
    SurveyError
        No rows, or stamps that go back.
    """
    t = np.asarray(t_rows, dtype=np.float64)
    if len(t) == 0:
        raise SurveyError("odometry has no rows (mend: remove the robot or give its odometry)")
    step = np.diff(t)
    if not np.all(step >= 0.0):
        raise SurveyError("odometry stamps go back (mend: sort the rows by time)")
    period = float(np.median(step)) if len(step) else 0.0
    dof = frames.group(dimension).dof
    scale = np.full(dof, float(translation_scale))
    scale[2 if dimension == 2 else slice(0, 3)] = rotation_scale
    rows, start = None, np.array([0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 1.0])
    if odometry.pose is not None:
        rows = np.ascontiguousarray(odometry.pose, dtype=np.float64)
        edges, tangents, start = t, np.empty((len(t) - 1, dof)), rows[0]
        steps.between_rows(rows, tangents)
        unit = translation_scale == 1.0 and rotation_scale == 1.0
        rows = rows if unit else None
    else:
        assert odometry.twist is not None
        edges = np.append(t, t[-1] + period)
        twist = np.asarray(odometry.twist, dtype=np.float64)
        if dimension == 2:
            # a robot that logs no sideways speed has none
            tangents, start = (
                np.where([[False, True, False]] & np.isnan(twist), 0.0, twist),
                np.zeros(3),
            )
        else:
            tangents = twist[:, [3, 4, 5, 0, 1, 2]]
        tangents = tangents * np.diff(edges)[:, None]
    tangents *= scale
    return Cumulative(dimension, edges, tangents, rows, start, period)


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


def find_gaps(made: Cumulative, max_gap_s: float | None = None) -> Gaps:
    """Gaps longer than ``max_gap_s`` (default: 0.5 s and ten median periods), and the speeds."""
    limit = max(GAP_SECONDS, GAP_PERIODS * made.period_s) if max_gap_s is None else max_gap_s
    length = np.diff(made.edges)
    hole = np.where(length > limit, length, 0.0)
    usable = np.flatnonzero((length > 0.0) & (hole == 0.0))
    usable = usable[:: max(1, len(usable) // _SAMPLE)]
    turns = _PLANAR[2] if made.dimension == 2 else slice(0, 3)
    moves = slice(0, 2) if made.dimension == 2 else slice(3, 6)
    speed2 = np.zeros(2)
    for side, columns in enumerate((moves, turns)):
        part = made.tangents[usable][:, columns].reshape(len(usable), -1)
        rate = np.linalg.norm(part, axis=1) / length[usable]
        rate = rate[rate > 0.0]
        speed2[side] = np.quantile(rate, SPEED_QUANTILE) ** 2 if len(rate) else 0.0
    return Gaps(hole, speed2)


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
    return m if dimension == 3 else m[..., _PLANAR, :][..., _PLANAR]


def walk_increments(
    made: Cumulative, stamps: Floats, restart: Bools, gaps: Gaps, per_piece: Floats, noise: RowNoise
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    """:func:`jointmap.graph.walk.walk` with the arguments in order and C layout."""
    return walk(  # type: ignore[no-any-return]
        made.edges,
        np.ascontiguousarray(made.tangents),
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
        total = stated[1:] if dimension == 3 else stated[1:][:, _PLANAR, :][..., _PLANAR]
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
    return np.concatenate([by if dimension == 3 else by[:, _PLANAR], lag[..., None]], axis=-1)

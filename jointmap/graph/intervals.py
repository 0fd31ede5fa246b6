"""Odometry rows as intervals of constant body twist, in either form of log.

In twist form a row holds until the next one (the last for one median period), in pose form the
motion between two rows follows the geodesic. Before the first and after the last interval the body
is held where it is.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.errors import SurveyError
from jointmap.graph import steps
from jointmap.ingest.survey import Odometry

Floats = NDArray[np.float64]

#: Quantile of a robot's own speed that stands for what it may do while no rows come.
SPEED_QUANTILE = 0.99
#: A gap is an interval longer than both.
GAP_PERIODS, GAP_SECONDS = 10.0, 0.5
#: Rows that quantiles look at; more add nothing but time.
_SAMPLE = 500_000
#: Tangent of a planar pose (x, y, yaw) within the spatial one (rotation first).
PLANAR = (3, 4, 2)


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
    # the compiled loops want rows in sequence; a copy per query would cost the square of the length
    tangents = np.ascontiguousarray(tangents * scale)
    return Cumulative(dimension, edges, tangents, rows, start, period)


def find_gaps(made: Cumulative, max_gap_s: float | None = None) -> Gaps:
    """Gaps longer than ``max_gap_s`` (default: 0.5 s and ten median periods), and the speeds."""
    limit = max(GAP_SECONDS, GAP_PERIODS * made.period_s) if max_gap_s is None else max_gap_s
    length = np.diff(made.edges)
    hole = np.where(length > limit, length, 0.0)
    usable = np.flatnonzero((length > 0.0) & (hole == 0.0))
    usable = usable[:: max(1, len(usable) // _SAMPLE)]
    moves, turns = ([0, 1], [2]) if made.dimension == 2 else ([3, 4, 5], [0, 1, 2])
    speed2 = np.zeros(2)
    for side, columns in enumerate((moves, turns)):
        rate = np.linalg.norm(made.tangents[usable][:, columns], axis=1) / length[usable]
        rate = rate[rate > 0.0]
        speed2[side] = np.quantile(rate, SPEED_QUANTILE) ** 2 if len(rate) else 0.0
    return Gaps(hole, speed2)

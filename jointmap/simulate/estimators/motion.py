"""Odometry between instants: increments and their covariance.

Twists are held until the next row; pose-form rows become the constant twist between them. The
noise is white in path, turn and time, as survey.toml states it:

    var(translation) = a^2 |step| + d^2 dt,   var(heading) = b^2 |step| + c^2 |turn| + e^2 dt.
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

from jointmap.frames import SE2
from jointmap.graph.noise import DEFAULT_SIGMA
from jointmap.graph.problem import ODOMETRY_TERMS
from jointmap.ingest.survey import RobotLog

Floats = NDArray[np.float64]


def twists(log: RobotLog) -> tuple[Floats, Floats]:
    """Stamps (N,) and twists (N, 3) that hold from each stamp on, body frame."""
    odometry = log.odometry
    if odometry.twist is not None:
        return odometry.t_s, odometry.twist
    assert odometry.pose is not None
    step = np.diff(odometry.t_s)
    moved = SE2.local(odometry.pose[:-1], odometry.pose[1:]) / step[:, None]
    return odometry.t_s, np.concatenate([moved, np.zeros((1, 3))])


def noise_of(log: RobotLog) -> Floats:
    """Standard deviations (5,) in the order of ODOMETRY_TERMS, defaults where not stated."""
    # Part of the noise being stated states all of it.
    stated = log.odometry_noise
    empty = {} if stated else DEFAULT_SIGMA
    return np.array([stated.get(term, empty.get(term, 0.0)) for term in ODOMETRY_TERMS])


def increments(t_s: Floats, twist: Floats, edges: Floats, theta: Floats) -> tuple[Floats, Floats]:
    """Motion (E - 1, 3) between neighbouring edges and its covariance (E - 1, 3, 3).

    Both in the body frame at the first edge of each pair; ``edges`` increase.
    """
    count = max(len(edges) - 1, 0)
    motion, cov = np.zeros((count, 3)), np.zeros((count, 3, 3))
    _integrate(t_s, twist, edges, theta**2, motion, cov)
    return motion, cov


@numba.njit(cache=True)
def _integrate(t_s, twist, edges, square, motion, cov):  # type: ignore[no-untyped-def]
    row = 0
    for k in range(len(edges) - 1):
        now, end = edges[k], edges[k + 1]
        x, y, yaw = 0.0, 0.0, 0.0
        p = np.zeros((3, 3))
        while now < end:
            while row + 1 < len(t_s) and t_s[row + 1] <= now:
                row += 1
            stop = end
            if row + 1 < len(t_s) and t_s[row + 1] < end and t_s[row + 1] > now:
                stop = t_s[row + 1]
            dt = stop - now
            w = twist[row, 2] * dt
            # Mid-point rule: second order in the turn of one row.
            half = yaw + 0.5 * w
            c, s = np.cos(half), np.sin(half)
            forward, left = twist[row, 0] * dt, twist[row, 1] * dt
            dx, dy = c * forward - s * left, s * forward + c * left
            length = np.hypot(forward, left)
            place = square[0] * length + square[3] * dt
            turn = square[1] * length + square[2] * abs(w) + square[4] * dt
            f02, f12 = -dy, dx
            for j in range(3):
                p[0, j] += f02 * p[2, j]
                p[1, j] += f12 * p[2, j]
            for i in range(3):
                p[i, 0] += f02 * p[i, 2]
                p[i, 1] += f12 * p[i, 2]
            p[0, 0] += place + 0.25 * f02 * f02 * turn
            p[1, 1] += place + 0.25 * f12 * f12 * turn
            p[0, 1] += 0.25 * f02 * f12 * turn
            p[1, 0] += 0.25 * f02 * f12 * turn
            p[0, 2] += 0.5 * f02 * turn
            p[2, 0] += 0.5 * f02 * turn
            p[1, 2] += 0.5 * f12 * turn
            p[2, 1] += 0.5 * f12 * turn
            p[2, 2] += turn
            x, y, yaw = x + dx, y + dy, yaw + w
            now = stop
        motion[k, 0], motion[k, 1], motion[k, 2] = x, y, yaw
        cov[k] = p

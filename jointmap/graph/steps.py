"""Compiled steps on rigid motions, one at a time, for loops over odometry rows.

Planar motion is spatial motion that stays in the plane z = 0, so one set of loops serves both
dimensions: a planar tangent row is ``(x, y, yaw)``, a spatial one ``(rx, ry, rz, x, y, z)``. A pose
is a position and a unit quaternion ``x y z w``, renormalised at every step, so that ten million
steps do not drift off the group. Vectors are tuples: the compiler keeps them in registers.
"""

from __future__ import annotations

import numba
import numpy as np


@numba.njit(cache=True)
def multiply(a, b):  # type: ignore[no-untyped-def]
    """Product of two unit quaternions x y z w (tuples), normalised."""
    x = a[3] * b[0] + a[0] * b[3] + a[1] * b[2] - a[2] * b[1]
    y = a[3] * b[1] + a[1] * b[3] + a[2] * b[0] - a[0] * b[2]
    z = a[3] * b[2] + a[2] * b[3] + a[0] * b[1] - a[1] * b[0]
    w = a[3] * b[3] - a[0] * b[0] - a[1] * b[1] - a[2] * b[2]
    n = 1.0 / np.sqrt(x * x + y * y + z * z + w * w)
    return x * n, y * n, z * n, w * n


@numba.njit(cache=True)
def cross(a, b):  # type: ignore[no-untyped-def]
    """Cross product of two vectors (tuples)."""
    return a[1] * b[2] - a[2] * b[1], a[2] * b[0] - a[0] * b[2], a[0] * b[1] - a[1] * b[0]


@numba.njit(cache=True)
def rotate(q, v):  # type: ignore[no-untyped-def]
    """Vector ``v`` turned by the unit quaternion ``q`` (tuples)."""
    u = (q[0], q[1], q[2])
    a = cross(u, v)
    b = cross(u, a)
    return (
        v[0] + 2.0 * (q[3] * a[0] + b[0]),
        v[1] + 2.0 * (q[3] * a[1] + b[1]),
        v[2] + 2.0 * (q[3] * a[2] + b[2]),
    )


@numba.njit(cache=True)
def split_tangent(row, share):  # type: ignore[no-untyped-def]
    """Rotation and translation (tuples) of ``share`` of a planar or spatial tangent row."""
    if len(row) == 3:
        return (0.0, 0.0, share * row[2]), (share * row[0], share * row[1], 0.0)
    return (
        (share * row[0], share * row[1], share * row[2]),
        (share * row[3], share * row[4], share * row[5]),
    )


@numba.njit(cache=True)
def coefficients(square):  # type: ignore[no-untyped-def]
    """``sin(t/2)/t, cos(t/2), (1 - cos t)/t^2, (t - sin t)/t^3`` of a squared angle."""
    if square < 1e-4:
        # four terms leave less than 1e-18; most rows end here
        half = 0.5 - square * (1 / 48 - square * (1 / 3840 - square / 645120))
        real = 1.0 - square * (1 / 8 - square * (1 / 384 - square / 46080))
        c2 = 0.5 - square * (1 / 24 - square * (1 / 720 - square / 40320))
        c3 = 1 / 6 - square * (1 / 120 - square * (1 / 5040 - square / 362880))
        return half, real, c2, c3
    angle = np.sqrt(square)
    half, real = np.sin(0.5 * angle) / angle, np.cos(0.5 * angle)
    return half, real, 2.0 * half * half, (1.0 - 2.0 * half * real) / square


@numba.njit(cache=True)
def exponential(w, v):  # type: ignore[no-untyped-def]
    """Position and quaternion of exp of a tangent (rotation ``w``, translation ``v``)."""
    half, real, c2, c3 = coefficients(w[0] * w[0] + w[1] * w[1] + w[2] * w[2])
    a = cross(w, v)
    b = cross(w, a)
    position = (
        v[0] + c2 * a[0] + c3 * b[0],
        v[1] + c2 * a[1] + c3 * b[1],
        v[2] + c2 * a[2] + c3 * b[2],
    )
    return position, (half * w[0], half * w[1], half * w[2], real)


@numba.njit(cache=True)
def scaled_turn(w, v):  # type: ignore[no-untyped-def]
    """Derivative (tuple) of the position of ``exp(s w, v)`` by ``s`` at one.

    The position is ``v + s c_2(s t) w x v + s^2 c_3(s t) w x (w x v)`` with t the angle; the
    factors have the derivatives ``c_1 - c_2`` and ``c_2 - c_3``.
    """
    half, real, c2, c3 = coefficients(w[0] * w[0] + w[1] * w[1] + w[2] * w[2])
    f, g = 2.0 * half * real - c2, c2 - c3
    a = cross(w, v)
    b = cross(w, a)
    return f * a[0] + g * b[0], f * a[1] + g * b[1], f * a[2] + g * b[2]


@numba.njit(cache=True)
def logarithm(p, q):  # type: ignore[no-untyped-def]
    """Tangent (rotation, translation) of a position and a unit quaternion."""
    sign = 1.0 if q[3] >= 0.0 else -1.0
    sine = np.sqrt(q[0] * q[0] + q[1] * q[1] + q[2] * q[2])
    angle = 2.0 * np.arctan2(sine, sign * q[3])
    k = sign * (angle / sine if sine > 0.0 else 2.0)
    w = (k * q[0], k * q[1], k * q[2])
    square = angle * angle
    if square < 1e-2:
        c = 1 / 12 + square * (1 / 720 + square * (1 / 30240 + square / 1209600))
    else:
        c = (1.0 - 0.5 * angle * np.cos(0.5 * angle) / np.sin(0.5 * angle)) / square
    a = cross(w, p)
    b = cross(w, a)
    return w, (
        p[0] - 0.5 * a[0] + c * b[0],
        p[1] - 0.5 * a[1] + c * b[1],
        p[2] - 0.5 * a[2] + c * b[2],
    )


@numba.njit(cache=True)
def row_pose(row):  # type: ignore[no-untyped-def]
    """Position and unit quaternion of a table row ``x y yaw`` or ``x y z qx qy qz qw``."""
    if len(row) == 3:
        return (row[0], row[1], 0.0), (0.0, 0.0, np.sin(0.5 * row[2]), np.cos(0.5 * row[2]))
    n = 1.0 / np.sqrt(row[3] ** 2 + row[4] ** 2 + row[5] ** 2 + row[6] ** 2)
    return (row[0], row[1], row[2]), (row[3] * n, row[4] * n, row[5] * n, row[6] * n)


@numba.njit(cache=True)
def between_rows(rows, out):  # type: ignore[no-untyped-def]
    """Tangent of each increment between neighbouring pose rows, into ``out`` (N-1, dof)."""
    p, q = row_pose(rows[0])
    for k in range(1, len(rows)):
        p2, q2 = row_pose(rows[k])
        back = (-q[0], -q[1], -q[2], q[3])
        d = rotate(back, (p2[0] - p[0], p2[1] - p[1], p2[2] - p[2]))
        w, v = logarithm(d, multiply(back, q2))
        if out.shape[1] == 3:
            out[k - 1, 0], out[k - 1, 1], out[k - 1, 2] = v[0], v[1], w[2]
        else:
            out[k - 1, 0], out[k - 1, 1], out[k - 1, 2] = w
            out[k - 1, 3], out[k - 1, 4], out[k - 1, 5] = v
        p, q = p2, q2


@numba.njit(cache=True)
def chain(tangents, start, out):  # type: ignore[no-untyped-def]
    """Poses (M+1, 7) reached from ``start`` (7,) by following all tangents (M, dof)."""
    p, q = row_pose(start)
    out[0] = start
    for k in range(len(tangents)):
        w, v = split_tangent(tangents[k], 1.0)
        dp, dq = exponential(w, v)
        d = rotate(q, dp)
        p = (p[0] + d[0], p[1] + d[1], p[2] + d[2])
        q = multiply(q, dq)
        out[k + 1, 0], out[k + 1, 1], out[k + 1, 2] = p
        out[k + 1, 3], out[k + 1, 4], out[k + 1, 5], out[k + 1, 6] = q


@numba.njit(cache=True)
def follow(poses, tangents, edge, share, out):  # type: ignore[no-untyped-def]
    """Poses (Q, 7) at ``share`` of the interval that starts at ``edge``."""
    for k in range(len(edge)):
        p, q = row_pose(poses[edge[k]])
        if share[k] > 0.0:
            w, v = split_tangent(tangents[edge[k]], share[k])
            dp, dq = exponential(w, v)
            d = rotate(q, dp)
            p = (p[0] + d[0], p[1] + d[1], p[2] + d[2])
            q = multiply(q, dq)
        out[k, 0], out[k, 1], out[k, 2] = p
        out[k, 3], out[k, 4], out[k, 5], out[k, 6] = q

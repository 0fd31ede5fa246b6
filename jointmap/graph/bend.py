"""Compiled evaluation of the bridge: one pose and covariance per stamp.

The mathematics is in :mod:`jointmap.graph.bridge`; matrices here are (3, 3) in the plane and (6, 6)
in space, tangents in the order of :mod:`jointmap.frames`.
"""

from __future__ import annotations

import numba
import numpy as np

from jointmap.graph.steps import exponential, multiply, rotate, row_pose, split_tangent
from jointmap.graph.walk import matrix, transported


@numba.njit(cache=True)
def lever_covariance(moments, out):  # type: ignore[no-untyped-def]
    """Covariance (dof, dof) in the tangent of the last restart of moments (11,), into ``out``."""
    wt, wr = moments[0], moments[1]
    x, y, z = moments[2], moments[3], moments[4]
    xx, xy, xz, yy, yz, zz = moments[5:11]
    out[:] = 0.0
    if len(out) == 3:
        out[0, 0], out[1, 1], out[2, 2] = yy + wt, xx + wt, wr
        out[0, 1] = out[1, 0] = -xy
        out[0, 2] = out[2, 0] = y
        out[1, 2] = out[2, 1] = -x
        return
    for i in range(3):
        out[i, i] = wr
    out[3, 1], out[3, 2], out[4, 2] = -z, y, -x
    out[4, 0], out[5, 0], out[5, 1] = z, -y, x
    out[3, 3], out[4, 4], out[5, 5] = yy + zz + wt, xx + zz + wt, xx + yy + wt
    out[4, 3], out[5, 3], out[5, 4] = -xy, -xz, -yz
    for i in range(6):
        for j in range(i):
            out[j, i] = out[i, j]


@numba.njit(cache=True)
def half_jacobian(xi, out):  # type: ignore[no-untyped-def]
    """Left Jacobian of exp to first order, ``I + ad(xi) / 2``, into ``out`` (dof, dof)."""
    out[:] = 0.0
    for i in range(len(out)):
        out[i, i] = 1.0
    if len(out) == 3:
        out[0, 1], out[1, 0] = -0.5 * xi[2], 0.5 * xi[2]
        out[0, 2], out[1, 2] = 0.5 * xi[1], -0.5 * xi[0]
        return
    for row, column, part in ((0, 0, 0), (3, 3, 0), (3, 0, 3)):
        x, y, z = 0.5 * xi[part], 0.5 * xi[part + 1], 0.5 * xi[part + 2]
        out[row, column + 1] -= z
        out[row, column + 2] += y
        out[row + 1, column] += z
        out[row + 1, column + 2] -= x
        out[row + 2, column] -= y
        out[row + 2, column + 1] += x


@numba.njit(cache=True)
def product(a, b, out):  # type: ignore[no-untyped-def]
    """``out = a b`` of small square matrices; zeros of ``a`` are skipped."""
    n = len(a)
    out[:] = 0.0
    for i in range(n):
        for k in range(n):
            f = a[i, k]
            if f != 0.0:
                for j in range(n):
                    out[i, j] += f * b[k, j]


@numba.njit(cache=True)
def product_transposed(a, b, out):  # type: ignore[no-untyped-def]
    """``out = a b^T`` of small square matrices."""
    n = len(a)
    for i in range(n):
        for j in range(n):
            total = 0.0
            for k in range(n):
                total += a[i, k] * b[j, k]
            out[i, j] = total


@numba.njit(cache=True)
def planar_part(full, out):  # type: ignore[no-untyped-def]
    """Copy what ``out`` (dof, dof) keeps of a spatial matrix (6, 6), adding."""
    if len(out) == 6:
        out += full
        return
    place = (3, 4, 2)
    for i in range(3):
        for j in range(3):
            out[i, j] += full[place[i], place[j]]


@numba.njit(cache=True)
def evaluate(  # type: ignore[no-untyped-def]
    span, motion, moments, stated, own, base, root, sign, lean, bend, tie, bound, poses, covariance
):
    """Fill ``poses`` (Q, 7) and ``covariance`` (Q, dof, dof).

    ``span`` (Q,) names the stretch of each stamp; ``motion`` (Q, 7), ``moments`` (Q, 2, 11) and
    ``stated`` (Q, 6, 6) or empty are since its start. The others are the rules of
    :class:`jointmap.graph.spans.Spans`, ``base`` as rows of seven; ``own`` marks stretches whose
    rows state their noise, ``bound`` those between two keyframes.
    """
    n = covariance.shape[1]
    m, jacobian, jm = np.empty((n, n)), np.empty((n, n)), np.empty((n, n))
    one, two, adjoint = np.empty((n, n)), np.empty((n, n)), np.empty((n, n))
    bent = np.zeros(n)
    for k in range(len(span)):
        s = span[k]
        lever_covariance(moments[k, 1 if own[s] else 0], m)
        if own[s]:
            planar_part(stated[k], m)
        p, q = row_pose(motion[k])
        if bound[s]:
            for i in range(n):
                bent[i] = 0.0
                for j in range(n):
                    bent[i] += m[i, j] * lean[s, j]
            w, v = split_tangent(bent, 1.0)
            dp, dq = exponential(w, v)
            d = rotate(dq, p)
            p, q = (dp[0] + d[0], dp[1] + d[1], dp[2] + d[2]), multiply(dq, q)
            half_jacobian(bent, jacobian)
            product(jacobian, m, jm)
            # jm (bend jm^T + J^T + tie) + (jm tie)^T + root
            product_transposed(bend[s], jm, one)
            for i in range(n):
                for j in range(n):
                    one[i, j] += jacobian[j, i] + tie[s, i, j]
            product(jm, one, two)
            product(jm, tie[s], one)
            for i in range(n):
                for j in range(n):
                    two[i, j] += root[s, i, j] + one[j, i]
        else:
            for i in range(n):
                for j in range(n):
                    two[i, j] = root[s, i, j] + sign[s] * m[i, j]
        back = (-q[0], -q[1], -q[2], q[3])
        away = rotate(back, p)
        adjoint[:] = 0.0
        planar_part(transported(matrix(back), (-away[0], -away[1], -away[2])), adjoint)
        product(adjoint, two, one)
        product_transposed(one, adjoint, two)
        for i in range(n):
            for j in range(n):
                covariance[k, i, j] = 0.5 * (two[i, j] + two[j, i])
        bp, bq = row_pose(base[s])
        d = rotate(bq, p)
        poses[k, 0], poses[k, 1], poses[k, 2] = bp[0] + d[0], bp[1] + d[1], bp[2] + d[2]
        poses[k, 3], poses[k, 4], poses[k, 5], poses[k, 6] = multiply(bq, q)

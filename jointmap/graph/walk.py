"""Compiled loop that follows a robot's odometry and accumulates its noise.

Notes
-----
Between two edges the body twist is constant. Noise is a random walk along the path: isotropic
translation of variance ``wt`` and isotropic rotation of variance ``wr`` per piece of path. Seen
from the last restart, with lever ``t`` (position of the body), the accumulated covariance in that
frame's tangent is, with ``[t]`` the cross product matrix,

    sum_pieces [[wr I, wr [t]^T], [wr [t], wr [t][t]^T + wt I]],

because the adjoint of a pose turns isotropic blocks into themselves. Three moments of the lever
(1, t, t t^T) therefore carry the whole covariance, exactly to first order in the noise; there is no
matrix product per row. The moments are integrated along the chord of each piece, so that a heading
walk of variance q per metre gives the lateral variance q L^3 / 3 whatever the row rate, and cutting
a piece in two changes nothing.

Rows that state their own noise are added in full; see :func:`row_noise`.
"""

from __future__ import annotations

import numba
import numpy as np

from jointmap.graph.steps import cross, exponential, multiply, rotate, scaled_turn, split_tangent

#: Columns of the ``extra`` output of :func:`walk`.
PATH, TURN, LONGEST, GAP = 0, 1, 2, 3
#: Kinds of stated row noise, see :func:`row_noise`.
NO_NOISE, INCREMENT_SIGMA, TWIST_SIGMA, INCREMENT_COVARIANCE = 0, 1, 2, 3


@numba.njit(cache=True)
def matrix(q):  # type: ignore[no-untyped-def]
    """Rotation matrix (3, 3) of a unit quaternion (tuple)."""
    out = np.empty((3, 3))
    for j in range(3):
        axis = (1.0 if j == 0 else 0.0, 1.0 if j == 1 else 0.0, 1.0 if j == 2 else 0.0)
        out[0, j], out[1, j], out[2, j] = rotate(q, axis)
    return out


@numba.njit(cache=True)
def transported(rotation, t):  # type: ignore[no-untyped-def]
    """Adjoint (6, 6), rotation first, of a rotation matrix and a position (tuple)."""
    out = np.zeros((6, 6))
    for j in range(3):
        c = (rotation[0, j], rotation[1, j], rotation[2, j])
        m = cross(t, c)
        for i in range(3):
            out[i, j] = out[3 + i, 3 + j] = c[i]
            out[3 + i, j] = m[i]
    return out


@numba.njit(cache=True)
def row_noise(kind, noise, share, w, v, p, q, p2, q2, total):  # type: ignore[no-untyped-def]
    """Add ``share`` of a row's stated noise to ``total`` (6, 6), tangent of the last restart.

    Kinds, with the piece running from pose (p, q) to (p2, q2) by the tangent (w, v):

    * ``INCREMENT_SIGMA``: ``noise`` holds variances of the increment's position and of its rotation
      in the axes of the body before; the rotation does not move the position reached;
    * ``TWIST_SIGMA``: variances of the tangent itself. The right Jacobian of exp is, to second
      order, the adjoint of half the way back: the noise enters in the middle of the piece;
    * ``INCREMENT_COVARIANCE``: covariance in the body tangent at the end.
    """
    if kind == INCREMENT_COVARIANCE:
        full = np.zeros((6, 6))
        if noise.shape[0] == 3:
            place = (3, 4, 2)
            for i in range(3):
                for j in range(3):
                    full[place[i], place[j]] = noise[i, j]
        else:
            full[:] = noise
        a = transported(matrix(q2), p2)
    else:
        full = np.zeros((6, 6))
        if noise.shape[0] == 3:
            full[3, 3], full[4, 4], full[2, 2] = noise[0, 0], noise[1, 0], noise[2, 0]
        else:
            for i in range(3):
                full[3 + i, 3 + i] = noise[i, 0]
                full[i, i] = noise[3 + i, 0]
        if kind == TWIST_SIGMA:
            dp, dq = exponential(
                (0.5 * w[0], 0.5 * w[1], 0.5 * w[2]), (0.5 * v[0], 0.5 * v[1], 0.5 * v[2])
            )
            d = rotate(q, dp)
            a = transported(matrix(multiply(q, dq)), (p[0] + d[0], p[1] + d[1], p[2] + d[2]))
        else:
            a = transported(matrix(q), p2)
    total += share * (a @ full @ a.T)


@numba.njit(cache=True)
def walk(  # type: ignore[no-untyped-def]
    edges, tangents, stamps, restart, speed2, hole, per_piece, kind, noise
):
    """Follow the odometry through increasing ``stamps`` (Q,) and report at each of them.

    Parameters
    ----------
    edges : (M+1,) increasing seconds; ``tangents`` (M, dof) of the whole intervals
    stamps : (Q,) seconds, increasing; the walk begins at the first of them
    restart : (Q,) bool, whether the accumulation starts again after reporting
    speed2 : (2,) squared speed and turn rate that a robot may reach where no rows are
    hole : (M,) length in seconds of intervals that count as gaps, zero for all others
    per_piece : (C, 2, 5) for each channel the translation and rotation variance per unit of path,
        turn, time, and of the two squared displacements possible in a gap
    kind, noise : stated row noise, see :func:`row_noise`; (M, dof, 1 or dof)

    Returns
    -------
    pose : (Q, 7) motion since the last restart
    moments : (Q, C, 11) sums of wt, wr, wr t (3), wr t t^T (xx xy xz yy yz zz)
    stated : (Q, 6, 6) accumulated row noise (empty without), tangent of the last restart
    extra : (Q, 4) path in m, turn in rad, longest time without rows in s, 1 where a gap is touched
    slope : (Q, 6) derivative of rotation and position by a factor on all turns, axes of the last
        restart
    """
    n, channels, last = len(stamps), len(per_piece), len(edges) - 1
    pose, extra, slope = np.zeros((n, 7)), np.zeros((n, 4)), np.zeros((n, 6))
    moments = np.zeros((n, channels, 11))
    stated = np.zeros((n, 6, 6) if kind else (0, 6, 6))
    # what is settled up to ``now``, an edge or a restart; reports in between settle nothing, so
    # that one stamp's answer does not depend on which others were asked
    place, mom, total = np.zeros(7), np.zeros((channels, 11)), np.zeros((6, 6))
    tally, by_turn, amounts = np.zeros(4), np.zeros(6), np.zeros(5)
    place[6] = 1.0
    now = stamps[0] if n else 0.0
    e = np.searchsorted(edges, now, side="right") - 1
    for i in range(n):
        while e < last and edges[e + 1] <= stamps[i]:
            piece(
                e, now, edges[e + 1], edges, tangents, speed2, hole, amounts, place, tally, by_turn,
                per_piece, mom, kind, noise, total,
            )  # fmt: skip
            e += 1
            now = edges[e]
        pose[i], extra[i], slope[i], moments[i] = place, tally, by_turn, mom
        here = stated[i] if kind else total
        if kind:
            here[:] = total
        if stamps[i] > now:
            piece(
                e, now, stamps[i], edges, tangents, speed2, hole, amounts, pose[i], extra[i],
                slope[i], per_piece, moments[i], kind, noise, here,
            )  # fmt: skip
        if restart[i]:
            now = stamps[i]
            place[:], mom[:], total[:], tally[:], by_turn[:] = 0.0, 0.0, 0.0, 0.0, 0.0
            place[6] = 1.0
    return pose, moments, stated, extra, slope


@numba.njit(cache=True)
def piece(  # type: ignore[no-untyped-def]
    e, begin, end, edges, tangents, speed2, hole, amounts, place, tally, by_turn,
    per_piece, mom, kind, noise, total,
):  # fmt: skip
    """Carry all sums from time ``begin`` to ``end`` within interval ``e`` (-1, M: outside)."""
    last, h = len(edges) - 1, end - begin
    p, q = (place[0], place[1], place[2]), (place[3], place[4], place[5], place[6])
    p2 = p
    if e < 0 or e >= last:
        # nothing is known outside the span: the body is held, its uncertainty grows
        a, b = (begin - edges[last], end - edges[last]) if e >= last else (
            edges[0] - end, edges[0] - begin
        )  # fmt: skip
        wide = b * b - a * a
        amounts[0], amounts[1] = 0.0, 0.0
        tally[GAP] = 1.0
    else:
        length = edges[e + 1] - edges[e]
        share = h / length if length > 0.0 else 1.0
        w, v = split_tangent(tangents[e], share)
        dp, dq = exponential(w, v)
        d = rotate(q, dp)
        p2, q2 = (p[0] + d[0], p[1] + d[1], p[2] + d[2]), multiply(q, dq)
        add_slope(q, w, v, d, by_turn)
        wide = hole[e] * h
        if hole[e] > 0.0:
            tally[GAP] = 1.0
        amounts[0] = np.sqrt(v[0] * v[0] + v[1] * v[1] + v[2] * v[2])
        amounts[1] = np.sqrt(w[0] * w[0] + w[1] * w[1] + w[2] * w[2])
        if kind:
            row_noise(kind, noise[e], share, w, v, p, q, p2, q2, total)
        place[0], place[1], place[2] = p2
        place[3], place[4], place[5], place[6] = q2
    amounts[2], amounts[3], amounts[4] = h, speed2[0] * wide, speed2[1] * wide
    tally[PATH] += amounts[0]
    tally[TURN] += amounts[1]
    tally[LONGEST] = max(tally[LONGEST], h)
    add_moments(per_piece, amounts, p, p2, mom)


@numba.njit(cache=True)
def add_moments(per_piece, amounts, a, b, mom):  # type: ignore[no-untyped-def]
    """Add the noise of a piece from position ``a`` to ``b`` (tuples) to ``mom`` (C, 11)."""
    for c in range(len(per_piece)):
        wt = wr = 0.0
        for k in range(5):
            wt += per_piece[c, 0, k] * amounts[k]
            wr += per_piece[c, 1, k] * amounts[k]
        mom[c, 0] += wt
        if wr == 0.0:
            continue
        mom[c, 1] += wr
        k = 5
        for i in range(3):
            mom[c, 2 + i] += 0.5 * wr * (a[i] + b[i])
            for j in range(i, 3):
                same = a[i] * a[j] + b[i] * b[j]
                mom[c, k] += wr * (same / 3.0 + (a[i] * b[j] + b[i] * a[j]) / 6.0)
                k += 1


@numba.njit(cache=True)
def add_slope(q, w, v, d, by_turn):  # type: ignore[no-untyped-def]
    """Carry the derivative by a factor on all turns over one piece with displacement ``d``."""
    lever = cross((by_turn[0], by_turn[1], by_turn[2]), d)
    turned, moved = rotate(q, w), rotate(q, scaled_turn(w, v))
    for i in range(3):
        by_turn[i] += turned[i]
        by_turn[3 + i] += lever[i] + moved[i]

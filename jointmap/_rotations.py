"""Rotations in three dimensions and the series that keep their formulas exact near zero.

Private to :mod:`jointmap.frames`. Everything is vectorised over leading axes.

Notes
-----
With ``t`` the angle, all exponentials and Jacobians are built from the functions
``c_k(t) = sum_n (-1)^n t^(2n) / (2n + k)!``: ``c_1 = sin t / t``, ``c_2 = (1 - cos t) / t^2``,
``c_3 = (t - sin t) / t^3``, and ``c_(k+2) = (1/k! - c_k) / t^2``. The recursion cancels digits
below one radian, where the series needs nine terms only.
"""

from __future__ import annotations

from math import factorial
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]

_SERIES_TERMS = 10
#: (1 - h cot h) / t^2 with h = t / 2, by powers of t^2: |B_2k| / (2k)! (Bernoulli numbers).
_COTANGENT_SERIES = (
    1 / 12,
    1 / 720,
    1 / 30240,
    1 / 1209600,
    1 / 47900160,
    691 / 1307674368000,
    1 / 74724249600,
    3617 / 10670622842880000,
)


def wrap(angle: ArrayLike) -> Any:
    """Angle (…,) in radians brought into (-pi, pi]."""
    a = np.asarray(angle, dtype=np.float64)
    inside = (a > -np.pi) & (a <= np.pi)
    turned = np.pi - np.remainder(np.pi - a, 2 * np.pi)
    return np.where(inside, a, turned)[()]


def coefficient(k: int, angle: Floats) -> Floats:
    """``c_k`` of the module notes for angles (…,) in radians, ``k`` from 1 to 5."""
    square = angle * angle
    small = square < 1.0
    series = np.zeros_like(square)
    x = np.where(small, square, 0.0)
    for n in range(_SERIES_TERMS - 1, -1, -1):
        series = series * x + (-1) ** n / factorial(2 * n + k)
    t = np.where(small, 1.0, angle)
    closed = np.sin(t) / t if k % 2 else 2.0 * (np.sin(t / 2) / t) ** 2
    for j in range(2 - k % 2, k, 2):
        closed = (1 / factorial(j) - closed) / (t * t)
    return np.where(small, series, closed)


def cotangent_coefficient(angle: Floats) -> Floats:
    """``(1 - (t/2) cot(t/2)) / t^2`` for angles (…,) of magnitude below 2 pi."""
    square = angle * angle
    small = square < 0.25
    series = np.zeros_like(square)
    x = np.where(small, square, 0.0)
    for c in reversed(_COTANGENT_SERIES):
        series = series * x + c
    t = np.where(small, 1.0, angle)
    # cot(t/2) as a quotient of cosine and sine: exact zero slope at pi, no pole below 2 pi
    closed = (1 - 0.5 * t * np.cos(t / 2) / np.sin(t / 2)) / (t * t)
    return np.where(small, series, closed)


def skew(v: ArrayLike) -> Floats:
    """Matrix (…, 3, 3) with ``skew(v) @ w = v x w`` of vectors (…, 3)."""
    a = np.asarray(v, dtype=np.float64)
    out = np.zeros((*a.shape, 3))
    out[..., 2, 1], out[..., 0, 2], out[..., 1, 0] = a[..., 0], a[..., 1], a[..., 2]
    out[..., 1, 2], out[..., 2, 0], out[..., 0, 1] = -a[..., 0], -a[..., 1], -a[..., 2]
    return out


def quaternion_to_matrix(q: ArrayLike) -> Floats:
    """Rotation matrices (…, 3, 3) of quaternions ``x y z w`` (…, 4), normalised on the way."""
    a = np.asarray(q, dtype=np.float64)
    a = a / np.linalg.norm(a, axis=-1, keepdims=True)
    x, y, z, w = np.moveaxis(a, -1, 0)
    out = np.empty((*a.shape[:-1], 3, 3))
    out[..., 0, 0] = 1 - 2 * (y * y + z * z)
    out[..., 1, 1] = 1 - 2 * (x * x + z * z)
    out[..., 2, 2] = 1 - 2 * (x * x + y * y)
    out[..., 0, 1], out[..., 1, 0] = 2 * (x * y - z * w), 2 * (x * y + z * w)
    out[..., 0, 2], out[..., 2, 0] = 2 * (x * z + y * w), 2 * (x * z - y * w)
    out[..., 1, 2], out[..., 2, 1] = 2 * (y * z - x * w), 2 * (y * z + x * w)
    return out


def matrix_to_quaternion(rotation: ArrayLike) -> Floats:
    """Unit quaternions ``x y z w`` (…, 4) with w >= 0 of rotation matrices (…, 3, 3).

    Notes
    -----
    Four times the outer product of the quaternion with itself is linear in the matrix; its row
    with the largest diagonal entry is divided by nothing small, at any angle.

    References
    ----------
    Shepperd, S. W. (1978). Quaternion from rotation matrix. J. Guidance and Control 1(3), 223-224.
    """
    r = np.asarray(rotation, dtype=np.float64)
    d0, d1, d2 = r[..., 0, 0], r[..., 1, 1], r[..., 2, 2]
    outer = np.empty((*r.shape[:-2], 4, 4))
    outer[..., 0, 0], outer[..., 1, 1] = 1 + d0 - d1 - d2, 1 - d0 + d1 - d2
    outer[..., 2, 2], outer[..., 3, 3] = 1 - d0 - d1 + d2, 1 + d0 + d1 + d2
    for i, j in ((0, 1), (0, 2), (1, 2)):
        outer[..., i, j] = outer[..., j, i] = r[..., i, j] + r[..., j, i]
    for i, (a, b) in enumerate(((2, 1), (0, 2), (1, 0))):
        outer[..., i, 3] = outer[..., 3, i] = r[..., a, b] - r[..., b, a]
    best = np.argmax(np.einsum("...ii->...i", outer), axis=-1)
    q = np.take_along_axis(outer, best[..., None, None], axis=-2)[..., 0, :]
    q = q / np.linalg.norm(q, axis=-1, keepdims=True)
    return np.asarray(np.where(q[..., 3:] < 0, -q, q), dtype=np.float64)


def so3_exp(w: Floats) -> Floats:
    """Rotation matrices (…, 3, 3) of rotation vectors (…, 3) (Rodrigues' formula)."""
    half = 0.5 * np.linalg.norm(w, axis=-1, keepdims=True)
    # through the quaternion: the result is orthogonal to rounding at every angle
    return quaternion_to_matrix(
        np.concatenate([0.5 * w * np.sinc(half / np.pi), np.cos(half)], axis=-1)
    )


def so3_log(rotation: Floats) -> Floats:
    """Rotation vectors (…, 3) of length at most pi of rotation matrices (…, 3, 3)."""
    q = matrix_to_quaternion(rotation)
    sine = np.linalg.norm(q[..., :3], axis=-1, keepdims=True)
    angle = 2 * np.arctan2(sine, q[..., 3:])
    # for a vanishing sine the quotient angle / sine tends to 2
    return q[..., :3] * np.where(sine > 0, angle / np.where(sine > 0, sine, 1.0), 2.0)


def so3_left_jacobian(w: Floats) -> Floats:
    """Left Jacobian (…, 3, 3) of SO(3), ``I + c_2 W + c_3 W^2``; the right one is that of -w."""
    angle = np.linalg.norm(w, axis=-1)[..., None, None]
    m = skew(w)
    out = np.eye(3) + coefficient(2, angle) * m + coefficient(3, angle) * (m @ m)
    return np.asarray(out, dtype=np.float64)


def so3_left_jacobian_inverse(w: Floats) -> Floats:
    """Inverse (…, 3, 3) of :func:`so3_left_jacobian`, ``I - W/2 + k W^2``."""
    angle = np.linalg.norm(w, axis=-1)[..., None, None]
    m = skew(w)
    return np.asarray(
        np.eye(3) - 0.5 * m + cotangent_coefficient(angle) * (m @ m), dtype=np.float64
    )


def se3_left_coupling(w: Floats, v: Floats) -> Floats:
    """Lower left block (…, 3, 3) of the left Jacobian of SE(3), rotation first.

    References
    ----------
    Barfoot, T. D. (2017). State Estimation for Robotics. Cambridge, eq. (7.86).
    """
    angle = np.linalg.norm(w, axis=-1)[..., None, None]
    m, n = skew(w), skew(v)
    mn, nm = m @ n, n @ m
    mnm = mn @ m
    c4 = coefficient(4, angle)
    out = 0.5 * n + coefficient(3, angle) * (mn + nm + mnm)
    out += c4 * (m @ mn + nm @ m - 3 * mnm)
    out += 0.5 * (c4 - 3 * coefficient(5, angle)) * (mnm @ m + m @ mnm)
    return np.asarray(out, dtype=np.float64)

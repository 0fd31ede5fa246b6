"""Poses in two and three dimensions as arrays, with the tangent that the solver uses.

``SE2`` keeps a pose as a row ``(x, y, yaw)``, ``SE3`` as a matrix ``[R | t]`` of shape (3, 4).
Every method broadcasts over leading axes. A pose is written ``parent_T_child``.

Notes
-----
The tangent is that of the body, ``T exp(xi)``: in two dimensions ``(x, y, yaw)``, in three
rotation first, ``(rx, ry, rz, x, y, z)``. It equals ``Pose2.Expmap`` and ``Pose3.Expmap`` of
GTSAM 4.3 (a test compares them). Tables order position first and rotate about the fixed axes of
the frame that the pose is expressed in; ``covariance_to_table`` and its inverse convert.

References
----------
Sola, J., Deray, J., Atchuthan, D. (2018). A micro Lie theory for state estimation in robotics.
arXiv:1812.01537; Barfoot, T. D. (2017). State Estimation for Robotics. Cambridge.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from jointmap import _rotations as so3
from jointmap._group import Floats, Group, apply, floats
from jointmap._rotations import matrix_to_quaternion, quaternion_to_matrix, skew, wrap

__all__ = [
    "SE2",
    "SE3",
    "Group",
    "group",
    "matrix_to_quaternion",
    "quaternion_to_matrix",
    "skew",
    "wrap",
]


def _turn(angle: Floats, v: Floats) -> Floats:
    c, s = np.cos(angle), np.sin(angle)
    return np.stack([c * v[..., 0] - s * v[..., 1], s * v[..., 0] + c * v[..., 1]], axis=-1)


def _complex_matrix(re: ArrayLike, im: ArrayLike) -> Floats:
    """Matrix (…, 2, 2) that multiplies a plane vector by ``re + i im``."""
    a, b = np.broadcast_arrays(floats(re), floats(im))
    return np.stack([np.stack([a, -b], axis=-1), np.stack([b, a], axis=-1)], axis=-2)


class _Planar(Group):
    """Poses ``(x, y, yaw)``."""

    dim, dof, shape = 2, 3, (3,)

    @staticmethod
    def _pack(xy: Floats, yaw: Any) -> Floats:
        yaw = np.broadcast_to(yaw, xy.shape[:-1])
        return np.concatenate([xy, yaw[..., None]], axis=-1)

    def _table_axes(self, pose: Floats) -> Floats:
        out = np.zeros((*pose.shape[:-1], 3, 3))
        out[..., :2, :2] = self.rotation(pose)
        out[..., 2, 2] = 1.0
        return out

    def build(self, rotation: ArrayLike, translation: ArrayLike) -> Floats:
        r, t = floats(rotation), floats(translation)
        yaw = np.arctan2(r[..., 1, 0], r[..., 0, 0])
        lead = np.broadcast_shapes(yaw.shape, t.shape[:-1])
        return self._pack(np.broadcast_to(t, (*lead, 2)), yaw)

    def rotation(self, pose: ArrayLike) -> Floats:
        yaw = floats(pose)[..., 2]
        return _complex_matrix(np.cos(yaw), np.sin(yaw))

    def translation(self, pose: ArrayLike) -> Floats:
        return floats(pose)[..., :2]

    def compose(self, a: ArrayLike, b: ArrayLike) -> Floats:
        p, q = np.broadcast_arrays(floats(a), floats(b))
        xy = p[..., :2] + _turn(p[..., 2], q[..., :2])
        return self._pack(xy, wrap(p[..., 2] + q[..., 2]))

    def inverse(self, a: ArrayLike) -> Floats:
        p = floats(a)
        return self._pack(-_turn(-p[..., 2], p[..., :2]), wrap(-p[..., 2]))

    def exp(self, xi: ArrayLike) -> Floats:
        x = floats(xi)
        w = x[..., 2]
        v = _complex_matrix(so3.coefficient(1, w), w * so3.coefficient(2, w))
        return self._pack(apply(v, x[..., :2]), wrap(w))

    def log(self, pose: ArrayLike) -> Floats:
        p = floats(pose)
        w = np.asarray(wrap(p[..., 2]))
        v = _complex_matrix(1 - w * w * so3.cotangent_coefficient(w), -0.5 * w)
        return self._pack(apply(v, p[..., :2]), w)

    def adjoint(self, pose: ArrayLike) -> Floats:
        p = floats(pose)
        out = self._table_axes(p)
        out[..., 0, 2], out[..., 1, 2] = p[..., 1], -p[..., 0]
        return out

    def right_jacobian(self, xi: ArrayLike) -> Floats:
        x = floats(xi)
        w, out = x[..., 2], np.zeros((*x.shape, 3))
        c2, c3 = so3.coefficient(2, w), so3.coefficient(3, w)
        out[..., :2, :2] = _complex_matrix(so3.coefficient(1, w), -w * c2)
        out[..., :2, 2] = apply(_complex_matrix(w * c3, c2), x[..., :2])
        out[..., 2, 2] = 1.0
        return out

    def right_jacobian_inverse(self, xi: ArrayLike) -> Floats:
        x = floats(xi)
        w, out = x[..., 2], self.right_jacobian(x)
        v = _complex_matrix(1 - w * w * so3.cotangent_coefficient(w), 0.5 * w)
        out[..., :2, 2] = -apply(v, out[..., :2, 2])
        out[..., :2, :2] = v
        return out

    def from_rows(self, rows: ArrayLike) -> Floats:
        p = floats(rows)
        return self._pack(p[..., :2], wrap(p[..., 2]))

    def to_rows(self, pose: ArrayLike) -> Floats:
        return self.from_rows(pose)


class _Spatial(Group):
    """Poses ``[R | t]``."""

    dim, dof, shape = 3, 6, (3, 4)

    def _table_axes(self, pose: Floats) -> Floats:
        out = np.zeros((*pose.shape[:-2], 6, 6))
        out[..., :3, 3:] = out[..., 3:, :3] = pose[..., :3]
        return out

    @staticmethod
    def _blocks(corner: Floats, lower: Floats) -> Floats:
        """Matrix [[corner, 0], [lower, corner]]."""
        out = np.zeros((*corner.shape[:-2], 6, 6))
        out[..., :3, :3] = out[..., 3:, 3:] = corner
        out[..., 3:, :3] = lower
        return out

    def build(self, rotation: ArrayLike, translation: ArrayLike) -> Floats:
        r, t = floats(rotation), floats(translation)
        lead = np.broadcast_shapes(r.shape[:-2], t.shape[:-1])
        out = np.empty((*lead, 3, 4))
        out[..., :3], out[..., 3] = r, t
        return out

    def rotation(self, pose: ArrayLike) -> Floats:
        return floats(pose)[..., :3]

    def translation(self, pose: ArrayLike) -> Floats:
        return floats(pose)[..., 3]

    def compose(self, a: ArrayLike, b: ArrayLike) -> Floats:
        p, q = floats(a), floats(b)
        return self.build(p[..., :3] @ q[..., :3], apply(p[..., :3], q[..., 3]) + p[..., 3])

    def inverse(self, a: ArrayLike) -> Floats:
        p = floats(a)
        back = np.swapaxes(p[..., :3], -1, -2)
        return self.build(back, -apply(back, p[..., 3]))

    def exp(self, xi: ArrayLike) -> Floats:
        x = floats(xi)
        w, v = x[..., :3], x[..., 3:]
        return self.build(so3.so3_exp(w), apply(so3.so3_left_jacobian(w), v))

    def log(self, pose: ArrayLike) -> Floats:
        p = floats(pose)
        w = so3.so3_log(p[..., :3])
        v = apply(so3.so3_left_jacobian_inverse(w), p[..., 3])
        return np.concatenate([w, v], axis=-1)

    def adjoint(self, pose: ArrayLike) -> Floats:
        p = floats(pose)
        return self._blocks(p[..., :3], skew(p[..., 3]) @ p[..., :3])

    def right_jacobian(self, xi: ArrayLike) -> Floats:
        x = -floats(xi)
        corner = so3.so3_left_jacobian(x[..., :3])
        return self._blocks(corner, so3.se3_left_coupling(x[..., :3], x[..., 3:]))

    def right_jacobian_inverse(self, xi: ArrayLike) -> Floats:
        x = -floats(xi)
        corner = so3.so3_left_jacobian_inverse(x[..., :3])
        lower = -corner @ so3.se3_left_coupling(x[..., :3], x[..., 3:]) @ corner
        return self._blocks(corner, lower)

    def from_rows(self, rows: ArrayLike) -> Floats:
        p = floats(rows)
        return self.build(quaternion_to_matrix(p[..., 3:7]), p[..., :3])

    def to_rows(self, pose: ArrayLike) -> Floats:
        p = floats(pose)
        return np.concatenate([p[..., 3], matrix_to_quaternion(p[..., :3])], axis=-1)


SE2: Group = _Planar()
SE3: Group = _Spatial()


def group(dimension: int) -> Group:
    """The group of ``dimension`` 2 or 3; ``ValueError`` otherwise."""
    if dimension not in (2, 3):
        raise ValueError(f"dimension is 2 or 3, not {dimension}")
    return SE2 if dimension == 2 else SE3

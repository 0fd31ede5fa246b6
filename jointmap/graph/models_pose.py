"""Relative poses, absolute positions and tilt, with exact derivatives.

Relative pose, between the frames ``A`` of body ``X`` and ``B`` of body ``Y`` with observation ``Z``:

    T = Z^-1 (X A)^-1 (Y B),   r = log T,
    dr/dY = Jr^-1(r) Ad(B^-1),   dr/dX = -Jr^-1(r) Ad((Y B)^-1 X),

by ``(Y exp(d)) B = (Y B) exp(Ad(B^-1) d)`` and ``log(T exp(e)) = r + Jr^-1(r) e`` (Sola, Deray &
Atchuthan 2018, arXiv:1812.01537, eq. 32 and 69).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import Group
from jointmap.graph.models_point import at_lever

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Linearised:
    """Residual (n, m) of measurements and its derivatives by what they tie, nothing whitened.

    ``jac_a`` (n, m, dof) by the tangent of the pose that measures, ``jac_b`` (n, m, d_b) by the
    other end: ``dof`` for poses, ``dim`` for points. ``None``: no such end, or not asked for.
    """

    residual: Floats
    jac_a: Floats | None = None
    jac_b: Floats | None = None


def relative_pose(
    group: Group,
    obs: Floats,
    pose_a: Floats,
    frame_a: Floats,
    pose_b: Floats,
    frame_b: Floats,
    *,
    jacobians: bool = True,
) -> Linearised:
    """Residual ``log(obs^-1 predicted)`` of relative poses, body tangent of the predicted frame.

    Parameters
    ----------
    obs : (n, *group.shape)
        Frame b in frame a, as observed.
    pose_a, pose_b : (n, *group.shape)
        Bodies in the map.
    frame_a, frame_b : (n or 1, *group.shape)
        Frames in their bodies (identity for odometry).
    """
    end = group.compose(pose_b, frame_b)
    predicted = group.between(group.compose(pose_a, frame_a), end)
    residual = group.log(group.between(obs, predicted))
    if not jacobians:
        return Linearised(residual)
    by_end = group.right_jacobian_inverse(residual)
    jac_a = -by_end @ group.adjoint(group.between(end, pose_a))
    jac_b = by_end @ group.adjoint(group.inverse(frame_b))
    return Linearised(residual, jac_a, jac_b)


def absolute_position(group: Group, pose: Floats, frame_a: Floats) -> tuple[Floats, Floats]:
    """Position (n, dim) of an antenna, the translation of ``frame_a``, and d / d pose."""
    lever = group.translation(frame_a)
    return group.transform(pose, lever), at_lever(group.rotation(pose), lever)


def control_position(point: Floats) -> tuple[Floats, Floats]:
    """Position (n, dim) of a landmark and its derivative (n, dim, dim) by itself."""
    dim = point.shape[1]
    return point, np.broadcast_to(np.eye(dim), (len(point), dim, dim))


def carried_point(group: Group, rotation: Floats) -> Floats:
    """Derivative (n, dim, dof) of the position of a pose by its own tangent."""
    return at_lever(rotation, np.zeros((1, group.dim)))


def gravity_tilt(group: Group, pose: Floats, obs: Floats, *, jacobians: bool = True) -> Linearised:
    """Tilt of a body against the roll and pitch that its odometry keeps true.

    Parameters
    ----------
    pose, obs : (n, 3, 4)
        Body in the map and in its odometry frame, both with z up; the yaw of either is free.

    Returns
    -------
    Linearised
        Residual (n, 2): rotation about the horizontal axes of the odometry frame that takes the
        observed attitude to the predicted one, in radians for small angles, of length
        ``2 sin(angle / 2)`` in general (monotonic up to a body on its head, where the sine alone
        would call the attitude perfect). ``jac_a`` (n, 2, 6).

    Notes
    -----
    With ``u = R^T e_z`` (up, in the body, predicted) and ``v = R_obs u``, ``v = e_z`` without an
    error. Only the up direction enters, as in an attitude factor; the rows are laid in the
    odometry frame so that no turn of the map changes them.
    """
    turn, observed = group.rotation(pose), group.rotation(obs)
    up = turn[:, 2, :]
    v = np.einsum("nij,nj->ni", observed, up)
    flat = np.stack([v[:, 1], -v[:, 0]], axis=1)
    below = np.maximum(1.0 + v[:, 2], 1e-12)
    stretch = np.sqrt(2.0 / below)
    residual = stretch[:, None] * flat
    residual[below <= 1e-12] = [2.0, 0.0]
    if not jacobians:
        return Linearised(residual)
    # up moves by up x w, hence v by R_obs skew(up) w = -rows of at_lever's rotation part.
    dv = -at_lever(observed, up)[:, :, :3]
    by_flat = np.stack([dv[:, 1], -dv[:, 0]], axis=1)
    d_stretch = (-0.5 * stretch / below)[:, None] * dv[:, 2]
    jac = np.zeros((len(residual), 2, group.dof))
    jac[:, :, :3] = stretch[:, None, None] * by_flat + flat[:, :, None] * d_stretch[:, None, :]
    return Linearised(residual, jac)

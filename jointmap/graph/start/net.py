"""The small graph of chunks: anchor poses, landmarks, and what ties them, as arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.start.align import Form, point_jacobian

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Joints:
    """Relative poses: ``pose`` (n, *shape) of ``b`` in ``a`` with covariance of its tangent."""

    a: Ints
    b: Ints
    pose: Floats
    covariance: Floats


@dataclass(frozen=True)
class Seen:
    """Points seen from poses: ``at`` (n, d) in the frame of ``pose``, covariance likewise."""

    pose: Ints
    point: Ints
    at: Floats
    covariance: Floats


@dataclass(frozen=True)
class Touches:
    """A point fixed in frame ``b`` (``of``) seen at ``at`` in frame ``a``, covariance in a."""

    a: Ints
    b: Ints
    at: Floats
    of: Floats
    covariance: Floats


@dataclass(frozen=True)
class Pins:
    """Known coordinates ``at`` of a point ``of`` in frame ``pose``, covariance in the map frame."""

    pose: Ints
    of: Floats
    at: Floats
    covariance: Floats


@dataclass(frozen=True)
class Net:
    """All measurements of the graph of chunks; ``pinned`` are coordinates of point variables."""

    form: Form
    odometry: Joints
    closures: Joints
    seen: Seen
    touches: Touches
    pins: Pins
    pinned: Seen

    @property
    def dimension(self) -> int:
        """Two or three."""
        return 2 if self.form == "planar" else 3


@dataclass(frozen=True)
class Equation:
    """Whitened residuals (n, m) of one kind and their Jacobians by (variable columns, matrix).

    ``patience`` multiplies the scale at which the robust cost starts to doubt a row.
    """

    residual: Floats
    columns: tuple[Ints, ...]
    jacobians: tuple[Floats, ...]
    patience: float


def equations(net: Net, poses: Floats, points: Floats) -> list[Equation]:
    """Linearise every measurement at poses (C, *shape) and points (L, d).

    Columns: pose c takes dof columns from c * dof on, point l takes d after all poses. Poses are
    perturbed as T exp(xi), points by addition.
    """
    base = len(poses) * frames.group(net.dimension).dof
    result = [
        _joint(net.odometry, poses, net.dimension, 3.0),
        _joint(net.closures, poses, net.dimension, 1.0),
        _seen(net.seen, poses, points, base, net.dimension),
        _touch(net.touches, poses, net.dimension),
        _pin(net.pins, poses, net.dimension),
        _pinned(net.pinned, points, base),
    ]
    return [e for e in result if len(e.residual)]


def _white(covariance: Floats) -> Floats:
    return np.asarray(np.linalg.inv(np.linalg.cholesky(covariance)))


def _apply(matrix: Floats, *others: Floats) -> list[Floats]:
    return [np.asarray(matrix @ other) for other in others]


def _joint(joints: Joints, poses: Floats, dimension: int, patience: float) -> Equation:
    """Residual log(Z^-1 A^-1 B); by b: J_r^-1, by a: -J_r^-1 Ad(B^-1 A)."""
    lie = frames.group(dimension)
    relative = lie.between(poses[joints.a], poses[joints.b])
    residual = lie.log(lie.between(joints.pose, relative))
    by_b = lie.right_jacobian_inverse(residual)
    by_a = -by_b @ lie.adjoint(lie.inverse(relative))
    white = _white(joints.covariance)
    by_a, by_b = _apply(white, by_a, by_b)
    residual = np.einsum("nij,nj->ni", white, residual)
    return Equation(residual, (joints.a * lie.dof, joints.b * lie.dof), (by_a, by_b), patience)


def _seen(seen: Seen, poses: Floats, points: Floats, base: int, dimension: int) -> Equation:
    """Residual T^-1 p - z; by the pose: minus d(exp(xi) q)/d xi at q = T^-1 p; by p: R^T."""
    lie = frames.group(dimension)
    pose = poses[seen.pose]
    local = lie.inverse_transform(pose, points[seen.point])
    white = _white(seen.covariance)
    back = np.swapaxes(lie.rotation(pose), -1, -2)
    by_pose, by_point = _apply(white, -point_jacobian(local), back)
    residual = np.einsum("nij,nj->ni", white, local - seen.at)
    columns = (seen.pose * lie.dof, base + seen.point * dimension)
    return Equation(residual, columns, (by_pose, by_point), 1.0)


def _touch(touches: Touches, poses: Floats, dimension: int) -> Equation:
    """Residual A^-1 B p_b - z; by b: R_a^T R_b d(exp(xi) p_b)/d xi."""
    lie = frames.group(dimension)
    relative = lie.between(poses[touches.a], poses[touches.b])
    local = lie.transform(relative, touches.of)
    white = _white(touches.covariance)
    by_b = lie.rotation(relative) @ point_jacobian(touches.of)
    by_a, by_b = _apply(white, -point_jacobian(local), by_b)
    residual = np.einsum("nij,nj->ni", white, local - touches.at)
    return Equation(residual, (touches.a * lie.dof, touches.b * lie.dof), (by_a, by_b), 1.0)


def _pin(pins: Pins, poses: Floats, dimension: int) -> Equation:
    lie = frames.group(dimension)
    pose = poses[pins.pose]
    white = _white(pins.covariance)
    (by_pose,) = _apply(white, lie.rotation(pose) @ point_jacobian(pins.of))
    residual = np.einsum("nij,nj->ni", white, lie.transform(pose, pins.of) - pins.at)
    return Equation(residual, (pins.pose * lie.dof,), (by_pose,), 1.0)


def _pinned(pinned: Seen, points: Floats, base: int) -> Equation:
    white = _white(pinned.covariance)
    residual = np.einsum("nij,nj->ni", white, points[pinned.point] - pinned.at)
    return Equation(residual, (base + pinned.point * points.shape[1],), (white,), 1.0)

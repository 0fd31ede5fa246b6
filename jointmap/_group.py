"""What the groups of rigid motions have in common; private to :mod:`jointmap.frames`."""

from __future__ import annotations

from abc import ABC, abstractmethod

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]


def floats(a: ArrayLike) -> Floats:
    """Any array of numbers as float64."""
    return np.asarray(a, dtype=np.float64)


def apply(matrix: Floats, vector: Floats) -> Floats:
    """Matrices (…, n, m) times vectors (…, m)."""
    return np.asarray(np.einsum("...ij,...j->...i", matrix, vector), dtype=np.float64)


class Group(ABC):
    """Rigid motions of ``dim`` dimensions with ``dof`` degrees of freedom.

    A pose has the array shape ``shape``: (3,) or (3, 4). ``xi`` is a body tangent (…, dof).
    """

    dim: int
    dof: int
    shape: tuple[int, ...]

    @abstractmethod
    def build(self, rotation: ArrayLike, translation: ArrayLike) -> Floats:
        """Pose of a rotation (…, dim, dim) and a translation (…, dim) in metres."""

    @abstractmethod
    def rotation(self, pose: ArrayLike) -> Floats:
        """Rotation matrix (…, dim, dim)."""

    @abstractmethod
    def translation(self, pose: ArrayLike) -> Floats:
        """Translation (…, dim) in metres."""

    @abstractmethod
    def compose(self, a: ArrayLike, b: ArrayLike) -> Floats:
        """Product ``a b``: pose of b's child in a's parent."""

    @abstractmethod
    def inverse(self, a: ArrayLike) -> Floats:
        """Pose of the parent in the child."""

    @abstractmethod
    def exp(self, xi: ArrayLike) -> Floats:
        """Pose reached by following the constant body twist ``xi`` (…, dof) for a unit of time."""

    @abstractmethod
    def log(self, pose: ArrayLike) -> Floats:
        """Tangent (…, dof) with rotation at most pi whose ``exp`` is the pose."""

    @abstractmethod
    def adjoint(self, pose: ArrayLike) -> Floats:
        """Matrix (…, dof, dof) with ``T exp(xi) = exp(adjoint(T) xi) T``."""

    @abstractmethod
    def right_jacobian(self, xi: ArrayLike) -> Floats:
        """J (…, dof, dof) with ``exp(xi + d) = exp(xi) exp(J d)`` to first order in d."""

    @abstractmethod
    def right_jacobian_inverse(self, xi: ArrayLike) -> Floats:
        """Inverse of :meth:`right_jacobian`: derivative of ``log(exp(xi) exp(d))``."""

    @abstractmethod
    def from_rows(self, rows: ArrayLike) -> Floats:
        """Poses of table rows ``x y yaw`` (…, 3) or ``x y z qx qy qz qw`` (…, 7)."""

    @abstractmethod
    def to_rows(self, pose: ArrayLike) -> Floats:
        """Table rows of poses: (…, 3) with yaw in (-pi, pi], or (…, 7) with qw >= 0."""

    @abstractmethod
    def _table_axes(self, pose: Floats) -> Floats:
        """Orthogonal matrix (…, dof, dof) from the body tangent to the order of tables."""

    def identity(self, n: int | None = None) -> Floats:
        """Identity pose of ``shape``, or ``n`` of them."""
        one = self.build(np.eye(self.dim), np.zeros(self.dim))
        return one if n is None else np.repeat(one[None], n, axis=0)

    def between(self, a: ArrayLike, b: ArrayLike) -> Floats:
        """Pose of b in a, ``a^-1 b``."""
        return self.compose(self.inverse(a), b)

    def retract(self, pose: ArrayLike, xi: ArrayLike) -> Floats:
        """``T exp(xi)``."""
        return self.compose(pose, self.exp(xi))

    def local(self, a: ArrayLike, b: ArrayLike) -> Floats:
        """``log(a^-1 b)``, the inverse of :meth:`retract`."""
        return self.log(self.between(a, b))

    def interpolate(self, a: ArrayLike, b: ArrayLike, s: ArrayLike) -> Floats:
        """Pose on the geodesic ``a exp(s log(a^-1 b))`` for shares ``s`` (…,), 0 at a, 1 at b."""
        return self.retract(a, floats(s)[..., None] * self.local(a, b))

    def transform(self, pose: ArrayLike, point: ArrayLike) -> Floats:
        """Points (…, dim) given in the pose's frame, in its parent."""
        return apply(self.rotation(pose), floats(point)) + self.translation(pose)

    def inverse_transform(self, pose: ArrayLike, point: ArrayLike) -> Floats:
        """Points (…, dim) given in the pose's parent, in its own frame."""
        back = np.swapaxes(self.rotation(pose), -1, -2)
        return apply(back, floats(point) - self.translation(pose))

    def table_axes(self, pose: ArrayLike) -> Floats:
        """Orthogonal matrix (…, dof, dof) that turns body tangents into the order of tables."""
        return self._table_axes(floats(pose))

    def covariance_to_table(self, pose: ArrayLike, covariance: ArrayLike) -> Floats:
        """Covariance (…, dof, dof) of the body tangent, as tables state it.

        The result is of the position in the pose's parent and of the rotation about the parent's
        fixed axes (REP 103), in the order x, y, yaw or x, y, z, rx, ry, rz.
        """
        axes = self._table_axes(floats(pose))
        return axes @ floats(covariance) @ np.swapaxes(axes, -1, -2)

    def covariance_from_table(self, pose: ArrayLike, covariance: ArrayLike) -> Floats:
        """Inverse of :meth:`covariance_to_table`."""
        axes = self._table_axes(floats(pose))
        return np.swapaxes(axes, -1, -2) @ floats(covariance) @ axes

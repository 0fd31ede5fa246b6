"""What a sensor sees of a point, with exact derivatives.

With the body pose ``X``, the frame that measures ``A`` (from the body) and a point ``p``,

    b = X^-1 p,   q = A^-1 b,   value = h(q),

where ``h`` stacks any of bearing, elevation, range and Cartesian coordinates. A body that moves by
the tangent ``(v, w)`` moves a fixed point in it by ``-(v + w x b)``; the derivatives below are that
sentence and the chain rule. Tangents are GTSAM's (plane: x, y, yaw; space: rotation first).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import Group, wrap

Floats = NDArray[np.float64]

#: Components that wrap at pi.
ANGLES = ("bearing_rad", "elevation_rad")
_AXES = {"x_m": 0, "y_m": 1, "z_m": 2}
#: Below this distance (m) there is no direction to speak of.
_NO_DIRECTION = 1e-9


@dataclass(frozen=True)
class Prediction:
    """Predicted components (n, m) and their derivatives; ``None`` where not asked for.

    ``d_pose`` (n, m, dof) by the tangent of the body that measures, ``d_target`` by what is seen:
    (n, m, dim) for a point, (n, m, dof) for the tangent of the body that carries it;
    ``d_frame_a`` (n, m, dof) by the tangent of the frame that measures (a mounting).
    """

    value: Floats
    d_pose: Floats | None = None
    d_target: Floats | None = None
    d_frame_a: Floats | None = None

    def d_lag(self, twist: Floats) -> Floats:
        """Derivative (n, m) by a shift of the instant in seconds; ``twist`` (n, dof) of the body.

        What is measured ``dt`` later is measured from ``X exp(twist dt)``; the target stands still.
        """
        if self.d_pose is None:
            raise ValueError("the prediction carries no derivatives")
        return np.asarray((self.d_pose @ twist[..., None])[..., 0])


def observe_point(
    group: Group,
    components: Sequence[str],
    pose: Floats,
    frame_a: Floats,
    point: Floats,
    *,
    jacobians: bool = True,
    frame_jacobian: bool = False,
) -> Prediction:
    """Predict what a sensor measures of points.

    Parameters
    ----------
    group : Group
        ``SE2`` or ``SE3``.
    components : sequence of str
        Any of ``bearing_rad``, ``elevation_rad``, ``range_m``, ``x_m``, ``y_m``, ``z_m``, in the
        order of the rows wanted.
    pose : (n, *group.shape)
        Body that measures, in the map.
    frame_a : (n or 1, *group.shape)
        Frame that measures, in the body.
    point : (n, dim)
        In the map, metres.
    jacobians, frame_jacobian : bool
        Whether to return ``d_pose`` and ``d_target``; whether to return ``d_frame_a``.
    """
    turn, mount = group.rotation(pose), group.rotation(frame_a)
    body = _back(turn, point - group.translation(pose))
    local = _back(mount, body - group.translation(frame_a))
    value = component_values(components, local)
    if not (jacobians or frame_jacobian):
        return Prediction(value)
    by_local = component_jacobian(components, local)
    d_frame = -at_lever(by_local, local) if frame_jacobian else None
    if not jacobians:
        return Prediction(value, d_frame_a=d_frame)
    by_body = by_local @ np.swapaxes(mount, -1, -2)
    by_point = by_body @ np.swapaxes(turn, -1, -2)
    return Prediction(value, -at_lever(by_body, body), by_point, d_frame)


def observe_robot(
    group: Group,
    components: Sequence[str],
    pose_a: Floats,
    frame_a: Floats,
    pose_b: Floats,
    frame_b: Floats,
    *,
    jacobians: bool = True,
    frame_jacobian: bool = False,
) -> Prediction:
    """Predict what body ``a`` measures of the point that body ``b`` carries.

    The point is the translation of ``frame_b`` (n or 1, *group.shape) in body ``b``; the rest as
    :func:`observe_point`. ``d_target`` is by the tangent of ``pose_b``.
    """
    lever = group.translation(frame_b)
    seen = observe_point(
        group,
        components,
        pose_a,
        frame_a,
        group.transform(pose_b, lever),
        jacobians=jacobians,
        frame_jacobian=frame_jacobian,
    )
    if seen.d_target is None:
        return seen
    by_b = at_lever(seen.d_target @ group.rotation(pose_b), lever)
    return Prediction(seen.value, seen.d_pose, by_b, seen.d_frame_a)


def point_in_sensor(
    group: Group, pose: Floats, frame_a: Floats, point: Floats
) -> tuple[Floats, Floats, Floats]:
    """A point in the frame that measures: (n, dim), by the body's tangent, by the point."""
    seen = observe_point(group, ("x_m", "y_m", "z_m")[: group.dim], pose, frame_a, point)
    assert seen.d_pose is not None and seen.d_target is not None
    return seen.value, seen.d_pose, seen.d_target


def component_values(components: Sequence[str], local: Floats) -> Floats:
    """Components (n, m) of points (n, dim) in the frame that measures."""
    out = np.empty((len(local), len(components)))
    for column, name in enumerate(components):
        if name in _AXES:
            out[:, column] = local[:, _AXES[name]]
        elif name == "bearing_rad":
            out[:, column] = np.arctan2(local[:, 1], local[:, 0])
        elif name == "range_m":
            out[:, column] = np.sqrt(np.einsum("ni,ni->n", local, local))
        elif name == "elevation_rad":
            out[:, column] = np.arctan2(local[:, 2], np.hypot(local[:, 0], local[:, 1]))
        else:
            raise ValueError(f"unknown component {name!r}")
    return out


def component_jacobian(components: Sequence[str], local: Floats) -> Floats:
    """Derivative (n, m, dim) of :func:`component_values` by the points.

    Where a component has no derivative, something finite stands in its place: at range zero a
    bearing and an elevation do not react at all and a range reacts along x, so that a point that
    starts in the sensor is pushed out; straight above or below, an elevation reacts along x.
    """
    dim = local.shape[1]
    out = np.zeros((len(local), len(components), dim))
    for column, name in enumerate(components):
        if name in _AXES:
            out[:, column, _AXES[name]] = 1.0
        elif name == "bearing_rad":
            flat2 = local[:, 0] ** 2 + local[:, 1] ** 2
            inverse = np.where(flat2 > _NO_DIRECTION**2, 1.0 / np.maximum(flat2, 1e-300), 0.0)
            out[:, column, 0] = -local[:, 1] * inverse
            out[:, column, 1] = local[:, 0] * inverse
        elif name == "range_m":
            out[:, column] = unit(local)[0]
        else:
            out[:, column] = _elevation_jacobian(local)
    return out


def _elevation_jacobian(local: Floats) -> Floats:
    """Derivative (n, 3) of atan2(z, hypot(x, y)): (-z e, rho) / r^2 with e = (x, y) / rho."""
    outward, flat = unit(local[:, :2])
    square = flat**2 + local[:, 2] ** 2
    inverse = np.where(square > _NO_DIRECTION**2, 1.0 / np.maximum(square, 1e-300), 0.0)
    return np.column_stack([-outward * (local[:, 2] * inverse)[:, None], flat * inverse])


def unit(vector: Floats) -> tuple[Floats, Floats]:
    """Direction (n, d), the first axis where there is none, and length (n,) of vectors (n, d)."""
    length = np.sqrt(np.einsum("ni,ni->n", vector, vector))
    none = length <= _NO_DIRECTION
    direction = vector / np.where(none, 1.0, length)[:, None]
    direction[none] = np.eye(vector.shape[1])[0]
    return direction, length


def residual(components: Sequence[str], observed: Floats, predicted: Floats) -> Floats:
    """``predicted - observed`` (n, m), the sign of GTSAM's errors; angles in (-pi, pi]."""
    out = np.asarray(predicted - observed, dtype=np.float64)
    for column, name in enumerate(components):
        if name in ANGLES:
            out[:, column] = wrap(out[:, column])
    return out


def at_lever(rows: Floats, lever: Floats) -> Floats:
    """The linear map ``(v, w) -> rows (v + w x lever)`` as a matrix (n, m, dof) on the tangent.

    Parameters
    ----------
    rows : (n or 1, m, dim)
    lever : (n or 1, dim)
        Point of the moving frame, in that frame.
    """
    m, dim = rows.shape[1:]
    out = np.empty((max(len(rows), len(lever)), m, 3 if dim == 2 else 6))
    t = lever[:, None, :]
    if dim == 2:
        out[..., :2] = rows
        out[..., 2] = rows[..., 1] * t[..., 0] - rows[..., 0] * t[..., 1]
        return out
    out[..., 3:] = rows
    for i, j, k in ((0, 1, 2), (1, 2, 0), (2, 0, 1)):
        out[..., i] = t[..., j] * rows[..., k] - t[..., k] * rows[..., j]
    return out


def _back(rotation: Floats, vector: Floats) -> Floats:
    """``rotation^T vector``; either may have length one."""
    return np.asarray((np.swapaxes(rotation, -1, -2) @ vector[..., None])[..., 0])

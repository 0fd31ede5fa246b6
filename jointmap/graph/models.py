"""Measurement models: residuals and Jacobians of whole blocks of measurements.

The formulas are in :mod:`jointmap.graph.models_point` (what is seen of a point) and
:mod:`jointmap.graph.models_pose` (relative poses, fixes, tilt); :func:`linearise_block` chooses.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import Group
from jointmap.graph.models_point import (
    Prediction,
    observe_point,
    observe_robot,
    point_in_sensor,
    residual,
)
from jointmap.graph.models_pose import (
    Linearised,
    absolute_position,
    carried_point,
    control_position,
    gravity_tilt,
    relative_pose,
)
from jointmap.graph.problem import Block

__all__ = [
    "Linearised",
    "Prediction",
    "absolute_position",
    "carried_point",
    "control_position",
    "gravity_tilt",
    "linearise_block",
    "observe_point",
    "observe_robot",
    "point_in_sensor",
    "relative_pose",
    "residual",
]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class _Landmarks:
    """Landmarks of the rows of one block: position, rotation (identity: a point), ``oriented``."""

    position: Floats
    rotation: Floats | None
    oriented: Bools


def linearise_block(
    group: Group,
    block: Block,
    poses: Floats,
    landmarks: Floats,
    orientations: Floats | None,
    landmark_of_track: Ints,
    oriented: Bools | None = None,
    *,
    jacobians: bool = True,
) -> Linearised:
    """Residuals and Jacobians of a block at a state, not whitened.

    Parameters
    ----------
    group : Group
        ``SE2`` or ``SE3``.
    block : Block
    poses : (P, *group.shape)
    landmarks : (L, dim)
    orientations : (L, dim, dim) or None
        Rotations of oriented landmarks.
    landmark_of_track : (T,) int
        Landmark that each track is (``Assignment.landmark``).
    oriented : (L,) bool or None
        Which landmarks are poses; None: none of them.
    jacobians : bool
        False: only the residual.

    Returns
    -------
    Linearised
        Sign of GTSAM: predicted minus observed. ``jac_b`` by the tangent (n, m, dof) of a pose or
        of an oriented landmark, or (n, m, dim) of a point. Where one block sees both kinds, it has
        ``dof`` columns and rows of points use the first ``dim``, the rest being zero.

    Raises
    ------
    ValueError
        A pose was observed of a landmark that is a point.
    """
    if block.kind in ("sighting", "control"):
        index = landmark_of_track[block.b] if block.kind == "sighting" else block.b
        known = _Landmarks(
            landmarks[index],
            None if orientations is None else orientations[index],
            np.zeros(len(index), dtype=bool) if oriented is None else oriented[index],
        )
        return _landmark_block(group, block, poses, known, jacobians)
    if block.kind == "gravity":
        return gravity_tilt(group, poses[block.a], block.obs, jacobians=jacobians)
    if block.kind == "fix":
        value, jac = absolute_position(group, poses[block.a], block.frame_a)
        return Linearised(value - block.obs, jac if jacobians else None)
    ends = (poses[block.a], block.frame_a, poses[block.b], block.frame_b)
    if block.components == ("pose",):
        return relative_pose(group, block.obs, *ends, jacobians=jacobians)
    return _compare(block, observe_robot(group, block.components, *ends, jacobians=jacobians))


def _landmark_block(
    group: Group, block: Block, poses: Floats, known: _Landmarks, jacobians: bool
) -> Linearised:
    """Sightings and control points."""
    if block.components == ("pose",):
        if known.rotation is None or not known.oriented.all():
            raise ValueError("a pose was observed of a landmark that has no orientation")
        tag = group.build(known.rotation, known.position)
        return relative_pose(
            group,
            block.obs,
            poses[block.a],
            block.frame_a,
            tag,
            group.identity(1),
            jacobians=jacobians,
        )
    if block.kind == "control":
        value, by_point = control_position(known.position)
        lin = Linearised(value - block.obs, None, by_point if jacobians else None)
    else:
        seen = observe_point(
            group,
            block.components,
            poses[block.a],
            block.frame_a,
            known.position,
            jacobians=jacobians,
        )
        lin = _compare(block, seen)
    if lin.jac_b is None or not known.oriented.any():
        return lin
    return Linearised(lin.residual, lin.jac_a, _by_tangent(group, lin.jac_b, known))


def _compare(block: Block, seen: Prediction) -> Linearised:
    """Residual of a prediction against what the block observed."""
    return Linearised(residual(block.components, block.obs, seen.value), seen.d_pose, seen.d_target)


def _by_tangent(group: Group, by_point: Floats, known: _Landmarks) -> Floats:
    """From the derivative by a position to that by the tangent of an oriented landmark."""
    assert known.rotation is not None
    out = by_point @ carried_point(group, known.rotation)
    point = ~known.oriented
    out[point] = 0.0
    out[point, :, : group.dim] = by_point[point]
    return out

"""Connected components of the graph, and the minimal rows that take out their free motion.

A component without absolute data may move as a whole: 3 degrees of freedom in the plane, 6 in
space, 4 when gravity holds roll and pitch. Fixes and control points may hold some or all of them.
What is left free is held at the component's first keyframe by rows with residual zero: a minimal
datum, which changes no residual and no relative quantity (the covariance is moved to
the datum asked for afterwards).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from jointmap import frames
from jointmap.graph.problem import Problem
from jointmap.solve.linear import Rows

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Square-root information of the rows that hold the gauge; any positive value gives one answer.
GAUGE_WEIGHT = 100.0
#: A direction counts as held by absolute data when the data's own sigma along it is below this
#: many metres or radians.
HELD_BELOW = 100.0


@dataclass(frozen=True)
class Gauge:
    """``component`` (n,) of each variable; ``free`` (C,) degrees of freedom held artificially;
    ``anchor`` (C,) the keyframe that holds them, ``rows`` the linear rows that do it,
    ``directions`` per component: (q, free) global motions that absolute data leave open.
    """

    component: Ints
    anchor: Ints
    free: Ints
    directions: tuple[Floats, ...]
    rows: tuple[Rows, ...]


def components(n: int, pairs: list[tuple[Ints, Ints]]) -> Ints:
    """Connected component (n,) of variables tied by pairs of keys."""
    i = np.concatenate([p[0] for p in pairs] or [np.zeros(0, dtype=np.int64)])
    j = np.concatenate([p[1] for p in pairs] or [np.zeros(0, dtype=np.int64)])
    graph = coo_array((np.ones(len(i), dtype=np.int8), (i, j)), shape=(n, n))
    return np.asarray(connected_components(graph, directed=False)[1], dtype=np.int64)


def motion_basis(dimension: int, gravity_aligned: bool) -> Floats:
    """Columns of global motions (dof, q) that leave all relative measurements alone.

    Tangent order as everywhere: x, y, yaw in the plane; rotation first in space.
    """
    if dimension == 2:
        return np.eye(3)
    if gravity_aligned:
        return np.eye(6)[:, [2, 3, 4, 5]]
    return np.eye(6)


def pose_motion(dimension: int, pose: Floats, basis: Floats) -> Floats:
    """Body-frame motion (n, dof, q) of poses (n, *shape) under global motions ``basis``.

    ``exp(xi) T = T exp(Ad(T^-1) xi)``.
    """
    group = frames.group(dimension)
    return np.asarray(group.adjoint(group.inverse(pose)) @ basis)


def point_motion(dimension: int, point: Floats, basis: Floats) -> Floats:
    """Motion (n, dim, q) of points (n, dim) under global motions ``basis``."""
    n = len(point)
    full = np.zeros((n, dimension, 3 if dimension == 2 else 6))
    if dimension == 2:
        full[:, [0, 1], [0, 1]] = 1.0
        full[:, 0, 2], full[:, 1, 2] = -point[:, 1], point[:, 0]
    else:
        full[:, :, :3] = -frames.skew(point)
        full[:, :, 3:] = np.eye(3)
    return full @ basis


def make_gauge(
    problem: Problem,
    poses: Floats,
    component: Ints,
    absolute: list[tuple[Ints, Floats]],
) -> Gauge:
    """Find what absolute data leave free in each component and hold it.

    Parameters
    ----------
    poses : (K, *shape) keyframes at the linearisation point
    component : (n,) component of each variable
    absolute : list of (component (m,), whitened rows times the motion of their variable (m, q))
    """
    basis = motion_basis(problem.dimension, problem.gravity_aligned)
    k = len(poses)
    anchors = np.full(int(component.max()) + 1 if len(component) else 0, -1, dtype=np.int64)
    order = np.arange(k)[::-1]
    anchors[component[order]] = order
    directions, rows, free = [], [], []
    for c, anchor in enumerate(anchors):
        stacked = np.concatenate(
            [a[part == c] for part, a in absolute] + [np.zeros((1, basis.shape[1]))]
        )
        _, s, vt = np.linalg.svd(stacked, full_matrices=True)
        held = np.zeros(basis.shape[1], dtype=bool)
        held[: len(s)] = s > 1.0 / HELD_BELOW
        open_motion = vt[~held].T
        directions.append(open_motion)
        free.append(open_motion.shape[1])
        if open_motion.shape[1] and anchor >= 0:
            body = (
                pose_motion(problem.dimension, poses[anchor : anchor + 1], basis)[0] @ open_motion
            )
            jacobian = GAUGE_WEIGHT * np.linalg.pinv(body)[None]
            rows.append(Rows([np.array([anchor])], [jacobian], np.zeros((1, open_motion.shape[1]))))
    return Gauge(component, anchors, np.array(free, dtype=np.int64), tuple(directions), tuple(rows))

"""Joint covariance of features within each run, from the relaxed graph of chunks."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from jointmap import frames
from jointmap.graph.start.align import point_jacobian
from jointmap.graph.start.features import Features
from jointmap.graph.start.net import Net
from jointmap.graph.start.relax import factorised, free_columns, normal_equations

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Weight that holds the middle chunk of a run in place.
_HELD = 1e12


def feature_covariance(
    features: Features, net: Net, poses: Floats, points: Floats, unit: Ints, point_unit: Ints
) -> list[tuple[Ints, Floats]]:
    """Return for each unit its features and their joint covariance (m, m, d, d).

    The middle chunk of every run is held, so that absolute covariances stay small; differences
    of positions do not depend on the choice. ``unit`` (C,) of the chunks, ``point_unit`` (L,) of
    the landmarks; nothing in ``net`` may tie two units.
    """
    lie = frames.group(net.dimension)
    normal, _ = normal_equations(net, poses, points, 1.0)
    held = np.zeros(normal.shape[0])
    for u in np.unique(unit):
        chunk = np.flatnonzero(unit == u)
        middle = int(chunk[len(chunk) // 2])
        held[middle * lie.dof : (middle + 1) * lie.dof] = _HELD
    held[~free_columns(net, len(poses), len(points))] = _HELD
    lifted = (normal + sparse.diags(held)).tocsr()
    owner = np.concatenate([np.repeat(unit, lie.dof), np.repeat(point_unit, lie.dim)])
    result = []
    for u in range(int(features.unit.max(initial=-1)) + 1):
        mine = np.flatnonzero(features.unit == u)
        columns = np.flatnonzero(owner == u)
        rows = _jacobian(features, mine, poses, len(points))[:, columns]
        spread = np.zeros((rows.shape[0], rows.shape[0]))
        if len(columns) and len(mine):
            factor = factorised(lifted[columns][:, columns].tocsc(), 0.0)
            spread = np.asarray(rows @ factor.solve(rows.T.toarray()))
        result.append((mine, _as_blocks(spread, features.own[mine])))
    return result


def _as_blocks(spread: Floats, own: Floats) -> Floats:
    """Reshape (m d, m d) to (m, m, d, d) and add each feature's own covariance."""
    m, d = own.shape[:2]
    joint = spread.reshape(m, d, m, d).transpose(0, 2, 1, 3).copy()
    index = np.arange(m)
    joint[index, index] += own + 1e-8 * np.eye(d)
    return joint


def _jacobian(features: Features, mine: Ints, poses: Floats, points: int) -> sparse.csr_matrix:
    """Derivative of feature positions (m * d rows) by all variables."""
    lie = frames.group(features.position.shape[1])
    d = lie.dim
    base = len(poses) * lie.dof
    carried = features.variable[mine] >= 0
    posed = np.flatnonzero(carried & features.is_pose[mine])
    free = np.flatnonzero(carried & ~features.is_pose[mine])
    chunk = features.variable[mine[posed]]
    block = lie.rotation(poses[chunk]) @ point_jacobian(features.local[mine[posed]])
    row = posed[:, None, None] * d + np.arange(d)[None, :, None]
    column = chunk[:, None, None] * lie.dof + np.arange(lie.dof)[None, None, :]
    row_p = free[:, None] * d + np.arange(d)
    column_p = base + features.variable[mine[free]][:, None] * d + np.arange(d)
    values = np.concatenate([block.ravel(), np.ones(row_p.size)])
    rows = np.concatenate([np.broadcast_to(row, block.shape).ravel(), row_p.ravel()])
    columns = np.concatenate([np.broadcast_to(column, block.shape).ravel(), column_p.ravel()])
    return sparse.csr_matrix((values, (rows, columns)), shape=(len(mine) * d, base + points * d))

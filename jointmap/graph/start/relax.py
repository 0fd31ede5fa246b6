"""Robust relaxation of the graph of chunks: Levenberg-Marquardt with Cauchy weights.

The robust scale starts wide and narrows (every measurement speaks while the graph is still bent,
only the agreeing ones once it lies straight). Rotations that gravity fixes stay out.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.sparse.linalg import SuperLU, splu

from jointmap import frames
from jointmap.graph.start.net import Equation, Net, equations

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Cauchy constant squared per residual component (95 % efficiency).
_CAUCHY2 = 2.3849**2
#: Robust scale in turn, and iterations at each.
_SCHEDULE = ((10.0, 8), (3.0, 6), (1.0, 10))
#: Relative drop of the cost that ends a stage.
_SETTLED = 1e-4


@dataclass(frozen=True)
class Relaxed:
    """Poses (C, *shape) and points (L, d) after relaxation, and the robust cost."""

    poses: Floats
    points: Floats
    cost: float


def relax(
    net: Net, poses: Floats, points: Floats, schedule: tuple[tuple[float, int], ...] = _SCHEDULE
) -> Relaxed:
    """Return the poses and points that fit the measurements best, from a start near them.

    Variables that nothing measures, and the frame of each connected part, stay where they are.
    """
    cost = np.inf
    for scale, steps in schedule:
        damping = 1e-6
        cost = _cost(equations(net, poses, points), scale)
        for _ in range(steps):
            normal, gradient = normal_equations(net, poses, points, scale)
            moved = False
            while damping < 1e6 and not moved:
                step = _solve(normal, gradient, damping)
                new_poses, new_points = _update(net, poses, points, step)
                fresh = _cost(equations(net, new_poses, new_points), scale)
                moved = fresh <= cost
                damping = max(damping * (0.2 if moved else 10.0), 1e-9)
            if not moved:
                break
            settled = cost - fresh < _SETTLED * cost
            poses, points, cost = new_poses, new_points, fresh
            if settled:
                break
    return Relaxed(poses, points, float(cost))


def normal_equations(
    net: Net, poses: Floats, points: Floats, scale: float
) -> tuple[sparse.csc_matrix, Floats]:
    """Return J^T W J over all columns and -J^T W r, W the Cauchy weights at ``scale``."""
    width = len(poses) * frames.group(net.dimension).dof + len(points) * net.dimension
    rows, columns, values, right = [], [], [], []
    offset = 0
    for e in equations(net, poses, points):
        n, m = e.residual.shape
        root = np.sqrt(_weights(e, scale))
        right.append((root[:, None] * e.residual).ravel())
        row = offset + np.arange(n * m).reshape(n, m)
        for base, jacobian in zip(e.columns, e.jacobians, strict=True):
            k = jacobian.shape[2]
            rows.append(np.broadcast_to(row[:, :, None], (n, m, k)).ravel())
            at = base[:, None, None] + np.arange(k)
            columns.append(np.broadcast_to(at, (n, m, k)).ravel())
            values.append((root[:, None, None] * jacobian).ravel())
        offset += n * m
    if not rows:
        return sparse.csc_matrix((width, width)), np.zeros(width)
    entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    keep = sparse.diags(free_columns(net, len(poses), len(points)).astype(float))
    whole = sparse.csr_matrix(entries, shape=(offset, width)) @ keep
    return (whole.T @ whole).tocsc(), -(whole.T @ np.concatenate(right))


def free_columns(net: Net, poses: int, points: int) -> Bools:
    """Tell which columns may move: with true vertical, roll and pitch may not."""
    dof = frames.group(net.dimension).dof
    one = np.ones(dof, dtype=bool)
    if net.form == "yaw":
        one[:2] = False
    return np.concatenate([np.tile(one, poses), np.ones(points * net.dimension, dtype=bool)])


def factorised(normal: sparse.csc_matrix, damping: float) -> SuperLU:
    """Factorise the normal equations, lifted where nothing holds a column."""
    diagonal = normal.diagonal()
    lift = damping * diagonal + 1e-9 * max(float(diagonal.max(initial=0.0)), 1.0) * 1e-3
    lift[diagonal <= 0.0] += 1.0
    return splu(
        (normal + sparse.diags(lift)).tocsc(),
        permc_spec="MMD_AT_PLUS_A",
        diag_pivot_thresh=0.0,
        options={"SymmetricMode": True},
    )


def _solve(normal: sparse.csc_matrix, gradient: Floats, damping: float) -> Floats:
    return np.asarray(factorised(normal, damping).solve(gradient))


def _weights(e: Equation, scale: float) -> Floats:
    limit = _CAUCHY2 * e.residual.shape[1] * (scale * e.patience) ** 2
    return np.asarray(1.0 / (1.0 + np.sum(e.residual**2, axis=1) / limit))


def _cost(system: list[Equation], scale: float) -> float:
    total = 0.0
    for e in system:
        limit = _CAUCHY2 * e.residual.shape[1] * (scale * e.patience) ** 2
        total += float(np.sum(limit * np.log1p(np.sum(e.residual**2, axis=1) / limit)))
    return total


def _update(net: Net, poses: Floats, points: Floats, step: Floats) -> tuple[Floats, Floats]:
    lie = frames.group(net.dimension)
    split = len(poses) * lie.dof
    moved = lie.retract(poses, step[:split].reshape(-1, lie.dof))
    return moved, points + step[split:].reshape(points.shape)

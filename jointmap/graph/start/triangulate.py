"""Landmark positions from many sightings at known sensor poses, all landmarks at once.

A sighting has any of bearing, elevation, range, x, y, z in the sensor frame. Every group of
sightings (one landmark) gets several candidate positions; the one with the least robust cost
sum log(1 + s / c) (s: squared normalised residual of a row) starts Gauss-Newton with the matching
Cauchy weights. Ranges alone leave mirror images: the best candidate away from the first is
improved too, and when it explains the ranges as well the position counts as undetermined.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.start.candidates import candidate_points
from jointmap.graph.start.rows import (
    SightingRows,
    normal_equations,
    residuals,
    robust_cost,
    sum_by_group,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Sightings of one landmark from one stretch of driving share errors; more than this many do not
#: make its position better.
INDEPENDENT = 5
#: A position less certain than this share of its distance is undetermined.
RELATIVE_LIMIT = 0.3
#: Mirror images closer in cost than this (chi-square, one degree, 0.99) are not told apart.
_MIRROR_COST = 6.635


@dataclass(frozen=True)
class Triangulation:
    """Result by group: position (G, d), covariance (G, d, d), what is known about it.

    ``alternative`` (G, d) is the mirror image that explains the ranges as well, NaN where none.
    ``rows`` (G,) counts sightings; ``fit`` (G,) is the median squared residual per component.
    """

    position: Floats
    covariance: Floats
    determined: Bools
    alternative: Floats
    rows: Ints
    fit: Floats


def triangulate(rows: SightingRows, groups: int, steps: int = 12) -> Triangulation:
    """Return the position of every group (0 .. groups-1) of sightings.

    Groups without rows, without parallax or with an unresolved mirror image are not
    ``determined``; their position is the best guess, NaN when there is none.
    """
    order = np.argsort(rows.group, kind="stable")
    rows = rows.take(order)
    count = np.bincount(rows.group, minlength=groups)
    first, second = candidate_points(rows, count)
    best, cost, information = _descend(rows, first, groups, steps)
    alternative = np.full_like(best, np.nan)
    twin = np.flatnonzero(np.isfinite(second).all(axis=1))
    if len(twin):
        other, other_cost, other_information = _descend(rows, second, groups, steps)
        swap = np.isfinite(other_cost) & (other_cost < cost)
        best, other = _exchange(best, other, swap)
        cost, other_cost = _exchange(cost, other_cost, swap)
        information, _ = _exchange(information, other_information, swap)
        distance = np.linalg.norm(best - other, axis=1)
        covariance = _covariance(information, count)
        apart = distance**2 > 9.0 * np.trace(covariance, axis1=1, axis2=2)
        alike = np.isfinite(other_cost) & (other_cost - cost < _MIRROR_COST) & apart
        alternative[alike] = other[alike]
    covariance = _covariance(information, count)
    determined = _determined(rows, best, covariance, count) & np.isnan(alternative[:, 0])
    return Triangulation(best, covariance, determined, alternative, count, _fit(rows, best, groups))


def _descend(
    rows: SightingRows, start: Floats, groups: int, steps: int
) -> tuple[Floats, Floats, Floats]:
    """Improve all groups together; return best positions, their cost and information."""
    d = start.shape[1]
    point = start.copy()
    damping = np.full(groups, 1e-3)
    best, best_cost = point.copy(), np.full(groups, np.inf)
    normal, gradient = np.zeros((groups, d, d)), np.zeros((groups, d))
    best_normal = normal.copy()
    for _ in range(steps + 1):
        cost = sum_by_group(rows.group, robust_cost(rows, point[rows.group]), groups)
        better = cost < best_cost
        best[better], best_cost[better] = point[better], cost[better]
        fresh_normal, fresh_gradient = normal_equations(rows, best)
        normal, gradient = fresh_normal, fresh_gradient
        best_normal[better] = normal[better]
        damping = np.where(better, damping * 0.2, damping * 8.0)
        point = best + _bounded(_solve(normal, gradient, damping), rows, best, groups)
    empty = np.isnan(start).any(axis=1)
    best[empty], best_cost[empty] = np.nan, np.inf
    return best, best_cost, best_normal


def _solve(normal: Floats, gradient: Floats, damping: Floats) -> Floats:
    d = normal.shape[-1]
    size = np.maximum(np.trace(normal, axis1=1, axis2=2), 1e-9) / d
    lifted = normal + (damping * size)[:, None, None] * np.eye(d)
    return np.asarray(np.linalg.solve(lifted, gradient[..., None])[..., 0])


def _bounded(step: Floats, rows: SightingRows, points: Floats, groups: int) -> Floats:
    """Limit a step to half the mean distance from the sensors: bearings know no scale."""
    distance = np.linalg.norm(points[rows.group] - rows.origin, axis=1)
    count = np.maximum(np.bincount(rows.group, minlength=groups), 1)
    reach = 0.5 * sum_by_group(rows.group, np.nan_to_num(distance), groups) / count + 1e-3
    length = np.maximum(np.linalg.norm(step, axis=1), 1e-12)
    return np.asarray(step * np.minimum(1.0, reach / length)[:, None])


def _covariance(information: Floats, count: Ints) -> Floats:
    """Invert, with no more than INDEPENDENT sightings counted as such."""
    inflate = np.maximum(count / INDEPENDENT, 1.0)
    covariance = np.linalg.pinv(information, rcond=1e-12, hermitian=True)
    smallest = np.linalg.eigvalsh(information)[:, 0]
    blind = smallest <= 1e-12 * np.maximum(np.trace(information, axis1=1, axis2=2), 1e-12)
    covariance[blind] = 1e12 * np.eye(information.shape[-1])
    return np.asarray(covariance * inflate[:, None, None])


def _determined(rows: SightingRows, points: Floats, covariance: Floats, count: Ints) -> Bools:
    distance = np.linalg.norm(points[rows.group] - rows.origin, axis=1)
    mean = sum_by_group(rows.group, np.nan_to_num(distance), len(points)) / np.maximum(count, 1)
    worst = np.sqrt(np.maximum(np.linalg.eigvalsh(covariance)[:, -1], 0.0))
    known = np.isfinite(points).all(axis=1) & (count > 0)
    return np.asarray(known & (worst <= RELATIVE_LIMIT * np.maximum(mean, 1e-3)))


def _fit(rows: SightingRows, points: Floats, groups: int) -> Floats:
    """Median over a group's rows of the squared normalised residual per component."""
    residual, _ = residuals(rows, points[rows.group])
    used = np.maximum(np.isfinite(rows.value).sum(axis=1), 1)
    square = np.nan_to_num(np.sum(residual**2, axis=1) / used)
    order = np.lexsort((square, rows.group))
    count = np.bincount(rows.group, minlength=groups)
    start = np.concatenate([[0], np.cumsum(count)[:-1]])
    middle = np.minimum(start + count // 2, max(len(order) - 1, 0))
    if len(order) == 0:
        return np.full(groups, np.nan)
    return np.where(count > 0, square[order][middle], np.nan)


def _exchange(a: Floats, b: Floats, swap: Bools) -> tuple[Floats, Floats]:
    pick = swap.reshape(-1, *([1] * (a.ndim - 1)))
    return np.where(pick, b, a), np.where(pick, a, b)

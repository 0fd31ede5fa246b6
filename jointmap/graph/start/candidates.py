"""Candidate positions of landmarks: sighted points, crossing rays, circles of equal range."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.start.rows import SightingRows, robust_cost

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Candidates per landmark from points and rays, and directions tried around a range.
_FEW = 12
_DIRECTIONS = {2: 60, 3: 200}
#: Rows of one landmark that judge its candidates.
_JUDGES = 24
#: Rows times candidates evaluated in one go.
_BATCH = 200_000


def candidate_points(rows: SightingRows, count: Ints) -> tuple[Floats, Floats]:
    """Return the best start (G, d) of every group and the best one away from it, NaN where none.

    ``rows`` are sorted by group, ``count`` (G,) rows each. The second is given only for groups
    that know nothing but ranges.
    """
    d = rows.origin.shape[1]
    groups = len(count)
    first, second = np.full((groups, d), np.nan), np.full((groups, d), np.nan)
    kind = row_kind(rows)
    has = [np.bincount(rows.group[kind == k], minlength=groups) for k in range(3)]
    by_point = has[0] > 0
    by_rays = ~by_point & (has[1] >= 2)
    by_range = ~by_point & ~by_rays & (has[2] > 0)
    for mine, maker, twins in (
        (by_point, _sighted_points, False),
        (by_rays, _crossing_rays, False),
        (by_range, _circles, True),
    ):
        which = np.flatnonzero(mine)
        which = which[np.argsort(count[which], kind="stable")]
        width = _DIRECTIONS[d] if twins else _FEW
        size = max(1, _BATCH // (_JUDGES * width))
        for start in range(0, len(which), size):
            batch = which[start : start + size]
            points = maker(rows, kind, batch)
            cost = _judge(rows, count, batch, points)
            best = np.argmin(cost, axis=1)
            index = np.arange(len(batch))
            first[batch] = points[index, best]
            if twins:
                second[batch] = _second(points, cost, best)
    return first, second


def row_kind(rows: SightingRows) -> Ints:
    """Return for each row 0: a whole position, 1: a ray, 2: a range, 3: of no help to start."""
    seen = np.isfinite(rows.value)
    flat = rows.origin.shape[1] == 2
    polar = seen[:, 0] & seen[:, 2] & (flat | seen[:, 1])
    cartesian = seen[:, 3] & seen[:, 4] & (flat | seen[:, 5])
    ray = seen[:, 0] & ~seen[:, 2]
    return np.where(polar | cartesian, 0, np.where(seen[:, 2], 2, np.where(ray, 1, 3))).astype(
        np.int64
    )


def local_points(rows: SightingRows) -> Floats:
    """Return positions (n, d) in the sensor frame of rows that observe them wholly."""
    d = rows.origin.shape[1]
    bearing, elevation, distance = rows.value[:, 0], rows.value[:, 1], rows.value[:, 2]
    elevation = np.zeros_like(bearing) if d == 2 else elevation
    flat = distance * np.cos(elevation)
    polar = np.stack(
        [flat * np.cos(bearing), flat * np.sin(bearing), distance * np.sin(elevation)], axis=1
    )[:, :d]
    cartesian = rows.value[:, 3 : 3 + d]
    whole = np.isfinite(cartesian).all(axis=1, keepdims=True)
    return np.where(whole, cartesian, polar)


def _pick(rows: SightingRows, usable: Bools, batch: Ints, number: int, shift: float) -> Ints:
    """Return row indices (B, number) spread evenly over each group's usable rows.

    ``shift`` (share of the group) turns the choice, so that a second call pairs early rows with
    late ones.
    """
    index = np.flatnonzero(usable)
    group = rows.group[index]
    start = np.searchsorted(group, batch, side="left")
    size = np.searchsorted(group, batch, side="right") - start
    step = (np.arange(number) / number + shift) % 1.0
    return np.asarray(index[start[:, None] + (step[None, :] * size[:, None]).astype(np.int64)])


def _sighted_points(rows: SightingRows, kind: Ints, batch: Ints) -> Floats:
    some = rows.take(_pick(rows, kind == 0, batch, _FEW, 0.0).ravel())
    points = np.einsum("nij,nj->ni", some.rotation, local_points(some)) + some.origin
    return np.asarray(points.reshape(len(batch), _FEW, -1))


def _crossing_rays(rows: SightingRows, kind: Ints, batch: Ints) -> Floats:
    """Midpoints of the shortest connection of two rays (their crossing in two dimensions)."""
    a = rows.take(_pick(rows, kind == 1, batch, _FEW, 0.0).ravel())
    b = rows.take(_pick(rows, kind == 1, batch, _FEW, 0.5).ravel())
    u, v = _directions(a), _directions(b)
    between = b.origin - a.origin
    cosine = np.sum(u * v, axis=1)
    sine2 = np.maximum(1.0 - cosine**2, 1e-4)
    along_u = np.sum(between * u, axis=1)
    along_v = np.sum(between * v, axis=1)
    s = (along_u - cosine * along_v) / sine2
    t = (cosine * along_u - along_v) / sine2
    # Rays that barely part meet far away; a bounded guess is enough to start.
    reach = 50.0 * np.linalg.norm(between, axis=1) + 1.0
    s, t = np.clip(s, 0.1, reach), np.clip(t, 0.1, reach)
    points = 0.5 * (a.origin + s[:, None] * u + b.origin + t[:, None] * v)
    return np.asarray(points.reshape(len(batch), _FEW, -1))


def _directions(rows: SightingRows) -> Floats:
    d = rows.origin.shape[1]
    bearing = rows.value[:, 0]
    elevation = np.zeros_like(bearing) if d == 2 else np.nan_to_num(rows.value[:, 1])
    local = np.stack(
        [np.cos(elevation) * np.cos(bearing), np.cos(elevation) * np.sin(bearing),
         np.sin(elevation)], axis=1,
    )[:, :d]  # fmt: skip
    return np.asarray(np.einsum("nij,nj->ni", rows.rotation, local))


def _circles(rows: SightingRows, kind: Ints, batch: Ints) -> Floats:
    """Points all around the sensor at the measured range (of the group's median range)."""
    d = rows.origin.shape[1]
    some = rows.take(_pick(rows, kind == 2, batch, 9, 0.0).ravel())
    distance = some.value[:, 2].reshape(len(batch), 9)
    middle = np.argsort(distance, axis=1)[:, 4]
    index = np.arange(len(batch))
    origin = some.origin.reshape(len(batch), 9, d)[index, middle]
    unit = unit_directions(d, _DIRECTIONS[d])
    return np.asarray(origin[:, None] + distance[index, middle][:, None, None] * unit[None])


def unit_directions(dimension: int, number: int) -> Floats:
    """Return evenly spread unit vectors (number, d); on the sphere a golden-angle spiral."""
    if dimension == 2:
        angle = 2.0 * np.pi * np.arange(number) / number
        return np.stack([np.cos(angle), np.sin(angle)], axis=1)
    z = 1.0 - (2.0 * np.arange(number) + 1.0) / number
    angle = np.pi * (3.0 - np.sqrt(5.0)) * np.arange(number)
    flat = np.sqrt(1.0 - z**2)
    return np.stack([flat * np.cos(angle), flat * np.sin(angle), z], axis=1)


def _judge(rows: SightingRows, count: Ints, batch: Ints, points: Floats) -> Floats:
    """Robust cost (B, M) of candidates (B, M, d), judged by some rows of each group."""
    size = np.minimum(count[batch], _JUDGES)
    number = int(size.max())
    judges = _pick(rows, np.ones(len(rows.group), dtype=bool), batch, number, 0.0)
    flat = rows.take(np.repeat(judges.ravel(), points.shape[1]))
    at = np.repeat(points[:, None], number, axis=1).reshape(-1, points.shape[2])
    cost = robust_cost(flat, at).reshape(len(batch), number, points.shape[1])
    # Small groups repeat rows in the even choice; the mean is not disturbed by that.
    return np.asarray(cost.mean(axis=1) * size[:, None])


def _second(points: Floats, cost: Floats, best: Ints) -> Floats:
    """Return the best candidate at least a third of the circle's width away from the best."""
    index = np.arange(len(points))
    away = np.linalg.norm(points - points[index, best][:, None], axis=2)
    far = away > 0.35 * away.max(axis=1, keepdims=True)
    other = np.argmin(np.where(far, cost, np.inf), axis=1)
    return np.asarray(points[index, other])

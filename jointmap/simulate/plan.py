"""Plan of the quarry: galleries on an irregular grid, their walls, and the plates on them.

The plan is laid out on right angles, where the union of galleries and chambers is a matter of
cells; everything is then bent by one smooth map (:meth:`Plan.warp`), so that no wall of the world
is straight and no two corners are alike. Coordinates before the map are called ``u, v``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Rise between neighbouring benches in the three-dimensional world, metres.
BENCH_RISE_M = 2.0
#: Half width of the level part of a bench, metres; ramps lie between.
BENCH_HALF_WIDTH_M = 1.5
#: Distance that a plate stands off its wall, metres: sight lines end before the wall.
PLATE_STANDOFF_M = 0.03
#: Walls are cut to at most this length so that they can bend, metres.
WALL_PIECE_M = 1.5
_BEND_M = 0.8
_TURN_RAD = 0.3


@dataclass(frozen=True)
class Plan:
    """Galleries and walls.

    Parameters
    ----------
    dimension : int
        2 or 3; in three the rows of the grid are benches at rising levels.
    nodes : (n, 2) float
        Crossings of galleries, ``u, v`` in metres.
    edges : (m, 2) int
        Galleries between crossings.
    rows : (r,) float
        ``v`` of each row of crossings, increasing.
    phase : (2,) float
        Phases of the bending map, radians.
    outline : (w, 2, 2) float
        Straight walls, ``u, v`` of both ends, free space on the left, in the order in which one
        meets them when following each wall round.
    """

    dimension: int
    nodes: Floats
    edges: Ints
    rows: Floats
    phase: Floats
    outline: Floats

    def warp(self, uv: Floats) -> Floats:
        """Bend plan coordinates (..., 2) into world coordinates x, y (..., 2), metres."""
        u, v = uv[..., 0], uv[..., 1]
        x = u + _BEND_M * np.sin(2 * np.pi * v / 41.0 + self.phase[0])
        y = v + _BEND_M * np.sin(2 * np.pi * u / 37.0 + self.phase[1])
        c, s = np.cos(_TURN_RAD), np.sin(_TURN_RAD)
        return np.stack([c * x - s * y, s * x + c * y], axis=-1)

    def floor(self, uv: Floats) -> Floats:
        """Height of the floor (...,) at plan coordinates (..., 2), metres; zero in 2-D."""
        v = uv[..., 1]
        if self.dimension == 2 or len(self.rows) < 2:
            return np.zeros_like(v)
        low = np.clip(np.searchsorted(self.rows, v, side="right") - 1, 0, len(self.rows) - 2)
        start = self.rows[low] + BENCH_HALF_WIDTH_M
        stop = self.rows[low + 1] - BENCH_HALF_WIDTH_M
        s = np.clip((v - start) / (stop - start), 0.0, 1.0)
        return np.asarray(BENCH_RISE_M * (low + s * s * (3 - 2 * s)), dtype=np.float64)

    def walls(self) -> Floats:
        """Pieces of wall in the world, (k, 2, 2): x, y of both ends, free space on the left."""
        a, b = self.outline[:, 0], self.outline[:, 1]
        n = np.ceil(np.linalg.norm(b - a, axis=1) / WALL_PIECE_M).astype(np.int64)
        which = np.repeat(np.arange(len(n)), n)
        step = np.arange(len(which)) - np.repeat(np.cumsum(n) - n, n)
        ends = [a[which] + (b - a)[which] * ((step + k) / n[which])[:, None] for k in (0, 1)]
        return self.warp(np.stack(ends, axis=1))


@dataclass(frozen=True)
class Plates:
    """Landmarks: numbered plates on the walls, numbers rising along each wall.

    ``position`` (L, dimension) metres in the world; ``yaw`` (L,) direction that the plate faces,
    radians; ``tag`` (L,) bool whether its orientation can be seen.
    """

    names: tuple[str, ...]
    position: Floats
    yaw: Floats
    tag: NDArray[np.bool_]


def make_plan(dimension: int, landmarks: int, rng: np.random.Generator) -> Plan:
    """Lay out as many galleries as the plates need (about one per five metres of wall).

    Parameters
    ----------
    dimension : int
        2 or 3.
    landmarks : int
        Number of plates that the walls will carry.
    rng : numpy.random.Generator
        Stream of the world.
    """
    n_edges = max(9, int(np.ceil(landmarks * 4.5 / 24.0 / 0.8)))
    columns = max(3, int(np.ceil((1 + np.sqrt(1 + 2 * n_edges)) / 2)))
    rows = max(3, int(np.ceil((n_edges + columns) / (2 * columns - 1))))
    shortest = 9.0 if dimension == 2 else 12.5
    u = np.cumsum(rng.uniform(9.0, 15.0, columns))
    v = np.cumsum(rng.uniform(shortest, shortest + 5.0, rows))
    nodes = np.stack(np.meshgrid(u, v), axis=-1).reshape(-1, 2)
    edges = _galleries(rows, columns, rng)
    outline = _outline(nodes, edges, rng)
    return Plan(dimension, nodes, edges, v, rng.uniform(0, 2 * np.pi, 2), outline)


def _galleries(rows: int, columns: int, rng: np.random.Generator) -> Ints:
    """Edges of the grid: a random spanning tree and two thirds of the others."""
    index = np.arange(rows * columns).reshape(rows, columns)
    across = np.stack([index[:, :-1].ravel(), index[:, 1:].ravel()], axis=1)
    along = np.stack([index[:-1].ravel(), index[1:].ravel()], axis=1)
    edges = rng.permutation(np.concatenate([across, along]))
    group = np.arange(rows * columns)
    keep = rng.random(len(edges)) < 0.67
    for k, (a, b) in enumerate(edges):
        if group[a] != group[b]:
            group[group == group[b]] = group[a]
            keep[k] = True
    return np.asarray(edges[keep], dtype=np.int64)


def _outline(nodes: Floats, edges: Ints, rng: np.random.Generator) -> Floats:
    """Walls round the union of galleries (rectangles along edges) and chambers (at crossings)."""
    chamber = np.where(rng.random(len(nodes)) < 0.3, rng.uniform(2.5, 3.6, len(nodes)), 1.8)
    width = rng.uniform(1.3, 2.1, len(edges))[:, None]
    ends = nodes[edges]
    low = np.concatenate([ends.min(axis=1) - width, nodes - chamber[:, None]])
    high = np.concatenate([ends.max(axis=1) + width, nodes + chamber[:, None]])
    cuts = [np.unique(np.concatenate([low[:, k], high[:, k]])) for k in (0, 1)]
    free = np.zeros((len(cuts[0]) + 1, len(cuts[1]) + 1), dtype=bool)
    for a, b in zip(low, high, strict=True):
        i, j = np.searchsorted(cuts[0], [a[0], b[0]]), np.searchsorted(cuts[1], [a[1], b[1]])
        free[i[0] + 1 : i[1] + 1, j[0] + 1 : j[1] + 1] = True
    return _trace(free, cuts[0], cuts[1])


def _trace(free: NDArray[np.bool_], u: Floats, v: Floats) -> Floats:
    """Follow the border of the free cells (free on the left) and join what is straight.

    Cell ``i, j`` lies below cut ``u[i]``, ``v[j]``. Where two free cells touch at a corner only,
    the border turns left, which keeps them apart.
    """
    steps: dict[tuple[int, int], list[tuple[int, int]]] = {}

    def add(a: tuple[int, int], b: tuple[int, int]) -> None:
        steps.setdefault(a, []).append(b)

    for i, j in np.argwhere(free[1:] != free[:-1]):
        ends = ((int(i), int(j) - 1), (int(i), int(j)))
        add(*(ends if free[i, j] else ends[::-1]))
    for i, j in np.argwhere(free[:, 1:] != free[:, :-1]):
        ends = ((int(i) - 1, int(j)), (int(i), int(j)))
        add(*(ends if free[i, j + 1] else ends[::-1]))
    walls: list[tuple[tuple[int, int], tuple[int, int]]] = []
    while steps:
        corners = _loop(steps)
        walls += list(zip(corners, corners[1:] + corners[:1], strict=True))
    index = np.array(walls)
    return np.stack([u[index[..., 0]], v[index[..., 1]]], axis=-1)


def _loop(steps: dict[tuple[int, int], list[tuple[int, int]]]) -> list[tuple[int, int]]:
    """Take one closed border out of ``steps``; its corners in order."""
    first = here = min(steps)
    heading = (0, 0)
    corners: list[tuple[int, int]] = []
    while True:
        options = steps[here]
        # the cross product with the heading is largest for a left turn
        options.sort(key=lambda p: heading[0] * (p[1] - here[1]) - heading[1] * (p[0] - here[0]))
        there = options.pop()
        if not options:
            del steps[here]
        turned = (int(np.sign(there[0] - here[0])), int(np.sign(there[1] - here[1])))
        if turned != heading:
            corners.append(here)
        here, heading = there, turned
        if here == first:
            return corners


def hang_plates(plan: Plan, count: int, tags: float, rng: np.random.Generator) -> Plates:
    """Hang plates with irregular spacing along all walls.

    Parameters
    ----------
    count : int
        Number of plates.
    tags : float
        Share of plates that are tags, met exactly to rounding.
    """
    a, b = plan.outline[:, 0], plan.outline[:, 1]
    length = np.linalg.norm(b - a, axis=1)
    gaps = rng.gamma(2.5, size=count)
    place = np.cumsum(gaps) / gaps.sum() * length.sum() - rng.uniform(0, 1) * length.sum() / count
    place = np.sort(np.mod(place, length.sum()))
    wall = np.clip(np.searchsorted(np.cumsum(length), place), 0, len(length) - 1)
    along = (place - (np.cumsum(length) - length)[wall]) / length[wall]
    along = np.clip(along, 0.3 / length[wall], np.maximum(0.5, 1 - 0.3 / length[wall]))
    uv = a[wall] + along[:, None] * (b - a)[wall]
    ahead = plan.warp(uv + 1e-4 * (b - a)[wall]) - plan.warp(uv)
    yaw = np.arctan2(ahead[:, 1], ahead[:, 0]) + np.pi / 2
    xy = plan.warp(uv) + PLATE_STANDOFF_M * np.stack([np.cos(yaw), np.sin(yaw)], axis=1)
    height = plan.floor(uv) + rng.uniform(0.5, 2.3, count)
    position = xy if plan.dimension == 2 else np.column_stack([xy, height])
    tag = np.zeros(count, dtype=bool)
    tag[rng.permutation(count)[: round(tags * count)]] = True
    width = max(3, len(str(count)))
    names = tuple(f"plate-{k + 1:0{width}d}" for k in range(count))
    return Plates(names, np.round(position, 6), np.angle(np.exp(1j * yaw)), tag)

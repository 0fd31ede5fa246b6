"""Points that two runs (or a run and the site) both know: the material of links.

Everything that can tie two frames is put as pairs of points, one in each frame:

* a shared landmark: the position in both maps;
* an encounter: where the observer sees the other's target point, and where the other has it;
* a closure or full-pose encounter: d + 1 points rigidly tied to the other's body, by the observed
  relative pose and by the other's own;
* a fix or a control point: position in the run's map, coordinates in the site frame.

Pairs of one *node* hold or fall together. Nodes with one *key* (a landmark, a meeting) support a
link once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.start.align import point_jacobian
from jointmap.graph.start.condense import Condensed
from jointmap.graph.start.gather import Absolute, Met

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

LANDMARK, ENCOUNTER, CLOSURE, FIX, CONTROL = range(5)
KIND_NAMES = ("landmarks", "encounters", "closures", "fixes", "control points")
#: How much each kind says: a link needs three. A landmark's identity may be wrong as a whole; a
#: meeting names its robot; a relative pose fixes the whole transform.
KIND_WEIGHT = np.array([1.0, 1.5, 2.0, 1.5, 1.5])
#: Lever of the points that stand for a relative pose, metres.
_LEVER = (0.5, 10.0)
#: Meetings and closures between the same two runs that are looked at.
_MOST_NODES = {2: 100, 3: 60}


@dataclass(frozen=True)
class Features:
    """Points known in the frame of a unit (a run, or the site, the last unit).

    ``variable``: index of the chunk (``is_pose``) or the landmark that carries it, -1 when known;
    ``local`` its place in the chunk frame; ``own`` (n, d, d) covariance beyond that of the
    variable, in the frame of the unit.
    """

    unit: Ints
    position: Floats
    own: Floats
    variable: Ints
    is_pose: Bools
    local: Floats

    @property
    def n(self) -> int:
        """Number of features."""
        return len(self.unit)


@dataclass(frozen=True)
class Pairings:
    """Pairs of features (``left``, ``right``) by ``node``; per node its kind and key."""

    left: Ints
    right: Ints
    node: Ints
    kind: Ints
    key: Ints


class Collector:
    """Gathers features and pairings; :meth:`done` gives the arrays."""

    def __init__(self, dimension: int) -> None:
        self.lie = frames.group(dimension)
        self._features: list[tuple[Floats, ...]] = []
        self._pairs: list[tuple[Ints, Ints, Ints]] = []
        self._kind: list[Ints] = []
        self._key: list[Ints] = []
        self._count = 0
        self._nodes = 0
        self._keys = 0

    def add(
        self,
        unit: Ints,
        position: Floats,
        own: Floats | None = None,
        variable: Ints | None = None,
        local: Floats | None = None,
    ) -> Ints:
        """Add features; with ``local`` the variable is a chunk. Return their indices."""
        n, d = len(unit), self.lie.dim
        self._features.append(
            (
                unit.astype(float),
                position,
                np.zeros((n, d, d)) if own is None else own,
                np.full(n, -1.0) if variable is None else variable.astype(float),
                np.full(n, float(local is not None)),
                np.zeros((n, d)) if local is None else local,
            )
        )
        index = self._count + np.arange(n)
        self._count += n
        return index

    def pair(self, left: Ints, right: Ints, node: Ints, kind: int, key: Ints) -> None:
        """Add pairs; ``node`` counts from 0 here, ``key`` (nodes,) likewise."""
        if not len(left):
            return
        self._pairs.append((left, right, self._nodes + node))
        self._kind.append(np.full(len(key), kind))
        self._key.append(self._keys + key)
        self._nodes += len(key)
        self._keys += int(key.max(initial=-1)) + 1

    def done(self) -> tuple[Features, Pairings]:
        """Return the arrays."""
        d = self.lie.dim
        none = (np.zeros(0), np.zeros((0, d)), np.zeros((0, d, d)), np.zeros(0), np.zeros(0))
        unit, position, own, variable, is_pose, local = (
            np.concatenate(c) for c in zip((*none, np.zeros((0, d))), *self._features, strict=True)
        )
        features = Features(
            unit.astype(np.int64), position, own, variable.astype(np.int64), is_pose > 0.5, local
        )
        empty = np.zeros(0, dtype=np.int64)
        left, right, node = (
            np.concatenate(c) for c in zip((empty, empty, empty), *self._pairs, strict=True)
        )
        kind, key = np.concatenate([empty, *self._kind]), np.concatenate([empty, *self._key])
        return features, Pairings(left, right, node, kind, key)


def add_landmarks(
    collect: Collector, unit: Ints, key: Ints, position: Floats, control: Ints, site: Floats,
    site_sigma: Floats, site_unit: int,
) -> None:  # fmt: skip
    """Pair the landmarks of equal key (n,) in different units, and with control points.

    ``position`` (n, d) of point variable 0 .. n-1, NaN where not known; key -1: not shared.
    """
    good = np.flatnonzero(np.isfinite(position).all(axis=1) & (key >= 0))
    index = collect.add(unit[good], position[good], variable=good)
    feature = np.full(len(unit), -1, dtype=np.int64)
    feature[good] = index
    order = good[np.argsort(key[good], kind="stable")]
    bounds = np.flatnonzero(np.diff(key[order])) + 1
    left: list[Ints] = []
    right: list[Ints] = []
    for members in np.split(order, bounds):
        i, j = np.triu_indices(len(members), 1)
        other = unit[members[i]] != unit[members[j]]
        left.append(members[i[other]])
        right.append(members[j[other]])
    a = np.concatenate(left) if left else np.zeros(0, np.int64)
    b = np.concatenate(right) if right else np.zeros(0, np.int64)
    collect.pair(feature[a], feature[b], np.arange(len(a)), LANDMARK, key[a])
    where = np.full(max(int(key.max(initial=-1)), int(control.max(initial=-1))) + 1, -1)
    where[control] = np.arange(len(control))
    mine = good[where[key[good]] >= 0]
    row = where[key[mine]]
    own = site_sigma[row][:, :, None] ** 2 * np.eye(position.shape[1])
    known = collect.add(np.full(len(mine), site_unit), site[row], own)
    collect.pair(feature[mine], known, np.arange(len(mine)), CONTROL, key[mine])


def add_meetings(
    collect: Collector, condensed: Condensed, met: Met, unit: Ints, poses: Floats, moment: Ints
) -> None:
    """Pair the points of encounters between chunks of different units, one per moment.

    ``moment`` (K,) numbers the stretches of time that count as one occasion.
    """
    lie, touches = collect.lie, condensed.touches
    apart = np.flatnonzero(unit[touches.a] != unit[touches.b])
    source = condensed.touch_row[apart]
    code = np.stack(
        [touches.a[apart], touches.b[apart], met.burst[source], moment[met.a[source]]], axis=1
    )
    row = apart[_middle_of_groups(code)]
    row = row[_thin(np.stack([unit[touches.a[row]], unit[touches.b[row]]], axis=1), lie.dim)]
    a, b = touches.a[row], touches.b[row]
    turn = lie.rotation(poses[a])
    own = turn @ touches.covariance[row] @ np.swapaxes(turn, -1, -2)
    left = collect.add(unit[a], lie.transform(poses[a], touches.at[row]), own, a, touches.at[row])
    right = collect.add(unit[b], lie.transform(poses[b], touches.of[row]), None, b, touches.of[row])
    key = _occasion(met, condensed.touch_row[row], unit[a], unit[b], moment)
    collect.pair(left, right, np.arange(len(row)), ENCOUNTER, key)


def add_closures(
    collect: Collector, condensed: Condensed, met: Met, unit: Ints, poses: Floats, moment: Ints
) -> None:
    """Stand-in points of relative poses between chunks of different units."""
    lie, closures = collect.lie, condensed.closures
    apart = np.flatnonzero(unit[closures.a] != unit[closures.b])
    row = apart[
        _thin(np.stack([unit[closures.a[apart]], unit[closures.b[apart]]], axis=1), lie.dim)
    ]
    n, d = len(row), lie.dim
    if not n:
        return
    a, b, pose = closures.a[row], closures.b[row], closures.pose[row]
    spread = np.sqrt(np.einsum("nii->ni", closures.covariance[row]))
    angular = spread[:, 2:] if d == 2 else spread[:, :3]
    linear = spread[:, :2] if d == 2 else spread[:, 3:]
    lever = np.clip(linear.max(axis=1) / np.maximum(angular.max(axis=1), 1e-6), *_LEVER)
    corner = np.concatenate([np.zeros((1, d)), np.eye(d)])
    of = (lever[:, None, None] * corner).reshape(-1, d)
    repeat = np.repeat(np.arange(n), d + 1)
    at = lie.transform(pose[repeat], of)
    jacobian = lie.rotation(poses[a][repeat]) @ lie.rotation(pose[repeat]) @ point_jacobian(of)
    own = jacobian @ closures.covariance[row][repeat] @ np.swapaxes(jacobian, -1, -2)
    ua, ub = unit[a][repeat], unit[b][repeat]
    left = collect.add(ua, lie.transform(poses[a][repeat], at), own, a[repeat], at)
    right = collect.add(ub, lie.transform(poses[b][repeat], of), None, b[repeat], of)
    key = _occasion(met, condensed.closure_row[row], unit[a], unit[b], moment)
    collect.pair(left, right, repeat, CLOSURE, key)


def add_fixes(
    collect: Collector, condensed: Condensed, absolute: Absolute, unit: Ints, poses: Floats,
    site_unit: int,
) -> None:  # fmt: skip
    """Pair antenna positions with their fixes, some per chunk."""
    lie, pins = collect.lie, condensed.pins
    if not len(pins.pose):
        return
    # Fixes at one place say little about the heading: neighbours are thinned by keyframe order.
    order = np.lexsort((absolute.fix_keyframe, pins.pose))
    row = order[
        _thin(np.stack([unit[pins.pose[order]], np.zeros(len(order), int)], axis=1), lie.dim)
    ]
    chunk = pins.pose[row]
    left = collect.add(
        unit[chunk], lie.transform(poses[chunk], pins.of[row]), None, chunk, pins.of[row]
    )
    right = collect.add(np.full(len(row), site_unit), pins.at[row], pins.covariance[row])
    collect.pair(left, right, np.arange(len(row)), FIX, np.arange(len(row)))


def _occasion(met: Met, row: Ints, unit_a: Ints, unit_b: Ints, moment: Ints) -> Ints:
    """Number the occasions: same two units at the same two moments, whoever saw whom."""
    code = np.stack([unit_a, moment[met.a[row]], unit_b, moment[met.b[row]]], axis=1)
    swap = unit_a > unit_b
    code[swap] = code[swap][:, [2, 3, 0, 1]]
    _, key = np.unique(code, axis=0, return_inverse=True)
    return np.asarray(key.ravel(), dtype=np.int64)


def _middle_of_groups(code: Ints) -> Ints:
    """Return the middle row of each group of equal codes (n, k)."""
    if not len(code):
        return np.zeros(0, dtype=np.int64)
    _, inverse, count = np.unique(code, axis=0, return_inverse=True, return_counts=True)
    order = np.argsort(inverse.ravel(), kind="stable")
    start = np.cumsum(count) - count
    return np.asarray(order[start + count // 2])


def _thin(code: Ints, dimension: int) -> Ints:
    """Return at most _MOST_NODES evenly spread rows of each group of equal codes (n, k)."""
    if not len(code):
        return np.zeros(0, dtype=np.int64)
    code = np.sort(code, axis=1)
    _, inverse, count = np.unique(code, axis=0, return_inverse=True, return_counts=True)
    inverse = inverse.ravel()
    order = np.argsort(inverse, kind="stable")
    rank = np.empty(len(order), dtype=np.int64)
    rank[order] = np.arange(len(order)) - np.repeat(np.cumsum(count) - count, count)
    size = count[inverse]
    share = np.minimum(_MOST_NODES[dimension] / size, 1.0)
    keep = np.floor((rank + 1) * share) > np.floor(rank * share)
    return np.flatnonzero(keep)

"""Runs grow together into teams: the surest link first, then again with what it brought.

Two groups that merge pool their maps, so that the next link is judged by all of it. Links whose
runner-up is as good wait until nothing else is left; then each reading is followed to the end and
the one with more agreement among all runs wins. Groups without an acceptable link stay apart.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.start.align import Form, point_jacobian
from jointmap.graph.start.consistency import PointSet
from jointmap.graph.start.features import KIND_NAMES, Features, Pairings
from jointmap.graph.start.links import (
    Hypothesis,
    Ties,
    agreement,
    hypotheses,
    is_ambiguous,
    weight_of,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Ambiguous links that are followed in more than one reading.
_MOST_FORKS = 3


@dataclass(frozen=True)
class UnitLink:
    """One accepted merge: the two units that share most of what agreed, and its report.

    ``agreed`` of ``offered`` nodes agree with weight ``weight``; ``runner_up`` is the weight of
    the best contradicting transform; ``accidents`` how many such sets chance would form.
    """

    unit_a: int
    unit_b: int
    kind: str
    agreed: int
    offered: int
    weight: float
    runner_up: float
    accidents: float
    ambiguous: bool


@dataclass(frozen=True)
class Teams:
    """Group of each unit (U,), pose (U, *shape) of each unit in its group with the covariance
    (U, dof, dof) that the links to it leave (body tangent), links made.
    """

    group: Ints
    pose: Floats
    covariance: Floats
    links: tuple[UnitLink, ...] = ()


@dataclass(frozen=True)
class Material:
    """Features, pairings and joint covariances (per unit: feature indices, (m, m, d, d))."""

    features: Features
    pairings: Pairings
    joint: list[tuple[Ints, Floats]]
    form: Form

    @property
    def lie(self) -> frames.Group:
        """Group of the poses."""
        return frames.group(2 if self.form == "planar" else 3)


def ties_between(material: Material, teams: Teams, g: int, h: int) -> tuple[Ties, Ints] | None:
    """Return what groups g and h both know (in their group frames) and the pairs it is made of."""
    f, p = material.features, material.pairings
    left, right = teams.group[f.unit[p.left]], teams.group[f.unit[p.right]]
    forward, backward = (left == g) & (right == h), (left == h) & (right == g)
    rows = np.flatnonzero(forward | backward)
    if not len(rows):
        return None
    a = np.where(forward[rows], p.left[rows], p.right[rows])
    b = np.where(forward[rows], p.right[rows], p.left[rows])
    nodes, node = np.unique(p.node[rows], return_inverse=True)
    ties = Ties(
        _points(material, teams, a),
        _points(material, teams, b),
        node.ravel(),
        p.kind[nodes],
        p.key[nodes],
    )
    return ties, rows


def _points(material: Material, teams: Teams, index: Ints) -> PointSet:
    """Features in their group frame; the joint covariance of some of them when asked for."""
    f = material.features
    return PointSet(
        material.lie.transform(teams.pose[f.unit[index]], f.position[index]),
        _own_covariance(material, teams, index),
        lambda some: _joint_covariance(material, teams, index[some]),
    )


def _own_covariance(material: Material, teams: Teams, index: Ints) -> Floats:
    """Covariance (n, d, d) of each feature in its group frame."""
    f, lie = material.features, material.lie
    own = np.empty((len(index), lie.dim, lie.dim))
    for u in np.unique(f.unit[index]):
        members, block = material.joint[u]
        mine = np.flatnonzero(f.unit[index] == u)
        place = np.searchsorted(members, index[mine])
        own[mine] = block[place, place]
    jacobian = point_jacobian(f.position[index])
    own += jacobian @ teams.covariance[f.unit[index]] @ np.swapaxes(jacobian, -1, -2)
    turn = lie.rotation(teams.pose[f.unit[index]])
    return np.asarray(turn @ own @ np.swapaxes(turn, -1, -2))


def _joint_covariance(material: Material, teams: Teams, index: Ints) -> Floats:
    """Joint covariance (n, n, d, d) of features in their group frame, zero between units."""
    f, lie = material.features, material.lie
    n, d = len(index), lie.dim
    joint = np.zeros((n, n, d, d))
    for u in np.unique(f.unit[index]):
        members, block = material.joint[u]
        mine = np.flatnonzero(f.unit[index] == u)
        place = np.searchsorted(members, index[mine])
        turn = lie.rotation(teams.pose[u])
        flat = point_jacobian(f.position[index[mine]]).reshape(-1, lie.dof)
        common = flat @ teams.covariance[u] @ flat.T
        common = common.reshape(len(mine), d, len(mine), d).swapaxes(1, 2)
        part = block[place[:, None], place[None, :]] + common
        joint[mine[:, None], mine[None, :]] = turn @ part @ turn.T
    return joint


def grow(material: Material, teams: Teams, seed: int = 0) -> Teams:
    """Merge groups until no acceptable link is left."""
    return _grow(material, teams, np.random.default_rng(seed), {}, _MOST_FORKS)


def _grow(
    material: Material,
    teams: Teams,
    rng: np.random.Generator,
    known: dict[tuple[int, int], list[Hypothesis]],
    forks: int,
) -> Teams:
    while True:
        groups = np.unique(teams.group)
        for i, g in enumerate(groups):
            for h in groups[i + 1 :]:
                if (int(g), int(h)) not in known:
                    known[int(g), int(h)] = _judge(material, teams, int(g), int(h), rng)
        usable = {k: v for k, v in known.items() if v and v[0].acceptable}
        if not usable:
            return teams
        clear = {k: v for k, v in usable.items() if not is_ambiguous(v)}
        pick = max(clear or usable, key=lambda k: usable[k][0].weight)
        found = usable[pick]
        if clear or forks == 0:
            teams = _merge(material, teams, pick, found, 0)
            known = _forget(known, pick)
            continue
        readings = [i for i in range(len(found)) if found[i].acceptable][:2]
        ends = [
            _grow(
                material,
                _merge(material, teams, pick, found, i),
                rng,
                _forget(known, pick),
                forks - 1,
            )
            for i in readings
        ]
        return max(ends, key=lambda t: total_agreement(material, t))


def _judge(
    material: Material, teams: Teams, g: int, h: int, rng: np.random.Generator
) -> list[Hypothesis]:
    found = ties_between(material, teams, g, h)
    return [] if found is None else hypotheses(found[0], material.form, rng)


def _forget(
    known: dict[tuple[int, int], list[Hypothesis]], pair: tuple[int, int]
) -> dict[tuple[int, int], list[Hypothesis]]:
    return {k: v for k, v in known.items() if not set(k) & set(pair)}


def _merge(
    material: Material, teams: Teams, pair: tuple[int, int], found: list[Hypothesis], which: int
) -> Teams:
    """Express group g in the frame of group h, or the other way: the lower number's frame stays.

    The transform leads from g (lower) to h; the site is the last unit, and its frame stays.
    """
    g, h = pair
    lie, best = material.lie, found[which]
    link = lie.build(best.rotation, best.translation)
    site = teams.group[-1]
    keep, moved = (h, g) if h == site else (g, h)
    link = link if keep == h else lie.inverse(link)
    mine = teams.group == moved
    # T exp(xi) P = T P exp(Ad(P^-1) xi); of the inverse, xi' = -Ad(T) xi.
    spread = best.covariance
    if keep != h:
        move = lie.adjoint(lie.inverse(link))
        spread = move @ spread @ move.T
    carry = lie.adjoint(lie.inverse(teams.pose[mine]))
    covariance = teams.covariance.copy()
    covariance[mine] += carry @ spread @ np.swapaxes(carry, -1, -2)
    pose = teams.pose.copy()
    pose[mine] = lie.compose(link, pose[mine])
    group = np.where(mine, keep, teams.group)
    report = _report(material, teams, pair, found, which)
    links = (*teams.links, report)
    return replace(teams, group=group, pose=pose, covariance=covariance, links=links)


def _report(
    material: Material, teams: Teams, pair: tuple[int, int], found: list[Hypothesis], which: int
) -> UnitLink:
    made = ties_between(material, teams, *pair)
    assert made is not None
    ties, rows = made
    best = found[which]
    f, p = material.features, material.pairings
    good = rows[best.agrees[ties.node]]
    units = np.stack([f.unit[p.left[good]], f.unit[p.right[good]]], axis=1)
    units = np.sort(units, axis=1)
    values, count = np.unique(units, axis=0, return_counts=True)
    a, b = values[int(np.argmax(count))]
    kinds = np.bincount(ties.kind[best.agrees], minlength=len(KIND_NAMES))
    others = [h.weight for i, h in enumerate(found) if i != which]
    return UnitLink(
        int(a),
        int(b),
        KIND_NAMES[int(np.argmax(kinds))],
        int(best.agrees.sum()),
        ties.nodes,
        best.weight,
        max(others, default=0.0),
        best.accidents,
        is_ambiguous(found),
    )


def total_agreement(material: Material, teams: Teams) -> float:
    """Weight of all nodes between different units of one group that agree with its frame."""
    f, p = material.features, material.pairings
    same = teams.group[f.unit[p.left]] == teams.group[f.unit[p.right]]
    rows = np.flatnonzero(same)
    if not len(rows):
        return 0.0
    nodes, node = np.unique(p.node[rows], return_inverse=True)
    sides = [_points(material, teams, index) for index in (p.left[rows], p.right[rows])]
    ties = Ties(sides[0], sides[1], node.ravel(), p.kind[nodes], p.key[nodes])
    d = material.lie.dim
    return weight_of(ties, agreement(ties, np.eye(d), np.zeros(d)))

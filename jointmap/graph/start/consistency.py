"""Which associations between two maps agree with each other: pairwise consistency and cliques.

Two associations i, j are consistent when the distance between their landmarks is the same in both
maps, within the uncertainty of the *pair*:

    | |a_i - a_j| - |b_i - b_j| |  <=  z sqrt(u_a' C_a u_a + u_b' C_b u_b),

C the covariance of the difference of the two positions in one map, u the unit vectors between
them. With true vertical in both frames the horizontal distance (rotation about the vertical keeps
it) and the height difference are tested together, chi-square with two degrees of freedom. The
largest set of mutually consistent associations is a maximum clique (Mangelson et al., Pairwise
consistent measurement set maximization, ICRA 2018).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.graph.start.align import Form

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Probability that a pair of right associations passes the test (0.95 as in catalogued gates
#: loses one right pair in twenty and with it the larger clique).
GATE = 0.997
#: Nodes that the exact search may visit before the best clique so far is taken.
NODE_CAP = 200_000
#: Vertices that a greedy clique is grown from.
_SEEDS = 10


@dataclass(frozen=True)
class PointSet:
    """Positions (N, d) in one map, their covariance (N, d, d), optionally jointly (N, N, d, d).

    ``joint[i, j]`` is the covariance between positions i and j; without it the positions are
    taken as independent, which overstates the uncertainty of a pair. A function of the indices
    stands for it where only some of many points will be asked for.
    """

    position: Floats
    covariance: Floats
    joint: Floats | Callable[[Ints], Floats] | None = None

    @property
    def n(self) -> int:
        """Number of points."""
        return len(self.position)

    def take(self, index: Ints) -> PointSet:
        """Some of the points, in the order of ``index`` (repetitions allowed)."""
        joint = None if self.joint is None else self._joint(index)
        return PointSet(self.position[index], self.covariance[index], joint)

    def _joint(self, index: Ints) -> Floats:
        assert self.joint is not None
        if callable(self.joint):
            return self.joint(index)
        return self.joint[index[:, None], index[None, :]]

    def pair_covariance(self) -> Floats:
        """Covariance (N, N, d, d) of every difference of two positions."""
        own = self.covariance[:, None] + self.covariance[None, :]
        if self.joint is None:
            return np.asarray(own)
        joint = self._joint(np.arange(self.n)) if callable(self.joint) else self.joint
        return np.asarray(own - joint - np.swapaxes(joint, -1, -2))


def consistency_matrix(a: PointSet, b: PointSet, form: Form, gate: float = GATE) -> Bools:
    """Tell which associations (a_i, b_i) and (a_j, b_j) can both hold, (N, N), diagonal false."""
    statistic, dof = consistency_statistic(a, b, form)
    adjacency = statistic <= chi2.ppf(gate, dof)
    np.fill_diagonal(adjacency, False)
    return np.asarray(adjacency & adjacency.T)


def consistency_statistic(a: PointSet, b: PointSet, form: Form) -> tuple[Floats, int]:
    """Squared normalised contradiction (N, N) of every two associations, and its dof."""
    horizontal = slice(0, 2 if form == "yaw" else a.position.shape[1])
    da, va = _distance(a, horizontal)
    db, vb = _distance(b, horizontal)
    statistic = (da - db) ** 2 / np.maximum(va + vb, 1e-18)
    if form != "yaw":
        return np.asarray(statistic), 1
    za, zb = a.position[:, 2], b.position[:, 2]
    height = (za[:, None] - za[None, :]) - (zb[:, None] - zb[None, :])
    variance = a.pair_covariance()[..., 2, 2] + b.pair_covariance()[..., 2, 2]
    return np.asarray(statistic + height**2 / np.maximum(variance, 1e-18)), 2


def _distance(points: PointSet, axes: slice) -> tuple[Floats, Floats]:
    """Return distances (N, N) and their variances; of coincident points the larger eigenvalue."""
    difference = points.position[:, None, axes] - points.position[None, :, axes]
    distance = np.linalg.norm(difference, axis=-1)
    covariance = points.pair_covariance()[..., axes, axes]
    unit = difference / np.maximum(distance, 1e-12)[..., None]
    variance = np.einsum("ijk,ijkl,ijl->ij", unit, covariance, unit)
    # Close points: the distance of two noisy points is not normal; its spread is then that of
    # the position itself.
    whole = np.trace(covariance, axis1=-2, axis2=-1)
    near = distance**2 < 4.0 * whole
    return distance, np.where(near, whole, variance)


def maximum_clique(
    adjacency: Bools, weights: Floats | None = None, node_cap: int = NODE_CAP
) -> tuple[Ints, bool]:
    """Return the heaviest clique (sorted indices) and whether it is proven to be the heaviest.

    Branch and bound over bit sets: vertices are coloured greedily, the sum over colours of the
    heaviest vertex bounds what a branch can reach (Tomita & Kameda, J. Global Optim. 37, 2007).
    A greedy clique over the densest vertices starts it, and is what remains at ``node_cap``.
    """
    n = len(adjacency)
    w = np.ones(n) if weights is None else np.asarray(weights, dtype=float)
    if n == 0:
        return np.zeros(0, dtype=np.int64), True
    best = greedy_clique(adjacency, w)
    order = np.argsort(-adjacency.sum(axis=1), kind="stable")
    search = _Search(adjacency[np.ix_(order, order)], w[order], float(w[best].sum()), node_cap)
    search.run()
    if search.best:
        best = order[np.array(search.best, dtype=np.int64)]
    return np.sort(best).astype(np.int64), search.visited < node_cap


def greedy_clique(adjacency: Bools, weights: Floats) -> Ints:
    """Return a maximal clique: from each of the densest seeds, always the best-connected next."""
    dense = adjacency.astype(float)
    best: Ints = np.zeros(0, dtype=np.int64)
    for seed in np.argsort(-(dense @ weights), kind="stable")[:_SEEDS]:
        members = [int(seed)]
        open_ = adjacency[seed].copy()
        while open_.any():
            inside = dense @ (weights * open_) + weights
            pick = int(np.argmax(np.where(open_, inside, -1.0)))
            members.append(pick)
            open_ &= adjacency[pick]
        if not len(best) or weights[members].sum() > weights[best].sum():
            best = np.array(members, dtype=np.int64)
    return best


class _Search:
    """State of one branch and bound; bit i of a set stands for vertex i."""

    def __init__(self, adjacency: Bools, weights: Floats, floor: float, cap: int) -> None:
        packed = np.packbits(adjacency, axis=1, bitorder="little")
        self.neighbours = [int.from_bytes(row.tobytes(), "little") for row in packed]
        self.weights = [float(x) for x in weights]
        self.floor = floor
        self.cap = cap
        self.visited = 0
        self.best: list[int] = []

    def run(self) -> None:
        self._expand([], 0.0, (1 << len(self.weights)) - 1)

    def _expand(self, members: list[int], total: float, candidates: int) -> None:
        self.visited += 1
        if self.visited >= self.cap:
            return
        if not candidates:
            if total > self.floor + 1e-12:
                self.floor, self.best = total, list(members)
            return
        for vertex, bound in reversed(self._coloured(candidates)):
            if total + bound <= self.floor + 1e-12 or self.visited >= self.cap:
                return
            self._expand(
                [*members, vertex],
                total + self.weights[vertex],
                candidates & self.neighbours[vertex],
            )
            candidates &= ~(1 << vertex)

    def _coloured(self, candidates: int) -> list[tuple[int, float]]:
        """List the vertices colour by colour with the weight that they and earlier ones bound."""
        result: list[tuple[int, float]] = []
        bound = 0.0
        while candidates:
            free, heaviest = candidates, 0.0
            members: list[int] = []
            while free:
                vertex = (free & -free).bit_length() - 1
                members.append(vertex)
                heaviest = max(heaviest, self.weights[vertex])
                free &= ~(self.neighbours[vertex] | (1 << vertex))
                candidates &= ~(1 << vertex)
            bound += heaviest
            result.extend((vertex, bound) for vertex in members)
        return result


def runner_up(adjacency: Bools, weights: Floats, best: Ints, node_cap: int = NODE_CAP) -> Ints:
    """Return the heaviest clique that shares less than half of its members with ``best``.

    Found by taking the members of ``best`` out but for one at a time is too dear; instead edges
    between two members of ``best`` are cut, so that at most one of them can be in the answer.
    """
    cut = adjacency.copy()
    cut[np.ix_(best, best)] = False
    second, _ = maximum_clique(cut, weights, node_cap)
    return second

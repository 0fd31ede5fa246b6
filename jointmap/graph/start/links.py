"""One link: the transform between two groups of runs that most of what both know agrees on.

Hypotheses come from the heaviest consistent set, from the heaviest set that contradicts it (the
runner-up) and from random samples. Each is refitted to what agrees with it and weighed by the
distinct landmarks, meetings and closures that do. A link is accepted when that weight is three or
more, the geometry determines the transform, and wrong associations alone would hardly (fewer than
0.001 expected times) agree as well.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.graph.start.align import Form, align, minimal_points, refine
from jointmap.graph.start.consistency import (
    GATE,
    PointSet,
    consistency_statistic,
    maximum_clique,
    runner_up,
)
from jointmap.graph.start.features import CLOSURE, CONTROL, ENCOUNTER, FIX, KIND_WEIGHT, LANDMARK
from jointmap.graph.start.ransac import (
    chance_of_agreement,
    expected_accidents,
    ransac,
    residual_statistic,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Weight of agreement that a link needs.
LEAST_WEIGHT = 3.0
#: Accidental sets of the same size that may be expected.
ACCIDENTS = 0.001
#: Standard deviation of the rotation above which the geometry does not determine it.
LOOSE_RAD = 0.3
#: The runner-up makes a link ambiguous from this share of its weight on.
CLOSE = 0.75
#: Nodes that a clique is sought among.
_MOST_NODES = 350
_SAMPLED = 400


@dataclass(frozen=True)
class Ties:
    """What two groups both know: points ``a``, ``b`` (N, d) by ``node``, per node kind and key."""

    a: PointSet
    b: PointSet
    node: Ints
    kind: Ints
    key: Ints

    @property
    def nodes(self) -> int:
        """Number of nodes."""
        return len(self.kind)

    def take(self, keep: Ints) -> Ties:
        """Some of the nodes."""
        place = np.full(self.nodes, -1)
        place[keep] = np.arange(len(keep))
        points = np.flatnonzero(place[self.node] >= 0)
        return Ties(
            self.a.take(points),
            self.b.take(points),
            place[self.node[points]],
            self.kind[keep],
            self.key[keep],
        )


@dataclass(frozen=True)
class Hypothesis:
    """A transform from a to b, the nodes that agree, their weight, and how accidental it is.

    ``covariance`` (dof, dof) is of the transform's body tangent.
    """

    rotation: Floats
    translation: Floats
    covariance: Floats
    agrees: Bools
    weight: float
    accidents: float
    determined: bool

    @property
    def acceptable(self) -> bool:
        """Whether it may tie two groups."""
        enough = self.weight >= LEAST_WEIGHT and self.accidents <= ACCIDENTS
        return enough and self.determined


def hypotheses(ties: Ties, form: Form, rng: np.random.Generator) -> list[Hypothesis]:
    """Return the distinct hypotheses about a link, the best first."""
    full, some = ties, np.arange(ties.nodes)
    if ties.nodes > _MOST_NODES:
        some = np.sort(rng.permutation(ties.nodes)[:_MOST_NODES])
    ties = ties.take(some)
    adjacency = node_consistency(ties, form)
    weights = KIND_WEIGHT[ties.kind]
    first, _ = maximum_clique(adjacency, weights, node_cap=20_000)
    second = runner_up(adjacency, weights, first, node_cap=20_000)
    starts = [_fit(ties, members, form) for members in (first, second)]
    points = adjacency[ties.node[:, None], ties.node[None, :]]
    sampled = ransac(ties.a, ties.b, points, form, rng, trials=_SAMPLED)
    if sampled is not None:
        starts.append((sampled.rotation, sampled.translation))
    rate = _chance_of_a_pair(ties, form, rng)
    found = [_weigh(full, s, form, rate) for s in starts if s is not None]
    found.sort(key=lambda h: (-h.determined * h.weight, h.accidents))
    return _distinct(found)


def node_consistency(ties: Ties, form: Form) -> Bools:
    """Tell which nodes can hold together: all their points pairwise."""
    statistic, dof = consistency_statistic(ties.a, ties.b, form)
    worst = np.zeros((ties.nodes, ties.nodes))
    np.maximum.at(worst, (ties.node[:, None], ties.node[None, :]), statistic)
    adjacency = worst <= chi2.ppf(GATE, dof)
    adjacency &= adjacency.T
    # One landmark of one map cannot be at two places of the other: such nodes exclude each other
    # through the distance test itself; a node with itself is no pair.
    np.fill_diagonal(adjacency, False)
    return np.asarray(adjacency)


def weight_of(ties: Ties, agrees: Bools) -> float:
    """Weight of the distinct landmarks, meetings and closures among some nodes."""
    _, index = np.unique(
        np.stack([ties.kind[agrees], ties.key[agrees]], axis=1), axis=0, return_index=True
    )
    return float(KIND_WEIGHT[ties.kind[agrees][index]].sum())


def agreement(ties: Ties, rotation: Floats, translation: Floats) -> Bools:
    """Tell which nodes agree with a transform: every one of their points."""
    statistic = residual_statistic(ties.a, ties.b, rotation, translation)
    worst = np.zeros(ties.nodes)
    np.maximum.at(worst, ties.node, statistic)
    return np.asarray(worst <= chi2.ppf(GATE, ties.a.position.shape[1]))


def _fit(ties: Ties, members: Ints, form: Form) -> tuple[Floats, Floats] | None:
    points = np.flatnonzero(np.isin(ties.node, members))
    if len(points) < minimal_points(form):
        return None
    trace = np.trace(ties.a.covariance + ties.b.covariance, axis1=1, axis2=2)[points]
    fit = align(ties.a.position[points], ties.b.position[points], 1.0 / trace, form)
    return None if bool(fit.degenerate) else (fit.rotation, fit.translation)


def _weigh(ties: Ties, start: tuple[Floats, Floats], form: Form, rate: float) -> Hypothesis:
    """Refit a hypothesis to the nodes that agree with it and weigh it."""
    rotation, translation = start
    limit = chi2.ppf(GATE, ties.a.position.shape[1])
    covariance = None
    for width in (4.0, 2.0, 1.0, 1.0):
        statistic = residual_statistic(ties.a, ties.b, rotation, translation)
        worst = np.zeros(ties.nodes)
        np.maximum.at(worst, ties.node, statistic)
        points = worst[ties.node] <= width * limit
        if np.count_nonzero(points) < minimal_points(form):
            break
        turned = rotation @ ties.a.covariance[points] @ rotation.T
        spread = ties.b.covariance[points] + turned
        fit = refine(
            ties.a.position[points], ties.b.position[points], spread, rotation, translation, form, 2
        )
        if bool(fit.degenerate):
            break
        rotation, translation, covariance = fit.rotation, fit.translation, fit.covariance
    agrees = agreement(ties, rotation, translation)
    dof = 3 if form == "planar" else 6
    return Hypothesis(
        rotation,
        translation,
        np.zeros((dof, dof)) if covariance is None else covariance,
        agrees,
        weight_of(ties, agrees),
        _accidents(ties, agrees, rotation, translation, form, rate),
        covariance is not None and _turn_sigma(covariance) < LOOSE_RAD,
    )


def _turn_sigma(covariance: Floats) -> float:
    angular = covariance[2:, 2:] if len(covariance) == 3 else covariance[:3, :3]
    return float(np.sqrt(max(np.linalg.eigvalsh(angular)[-1], 0.0)))


def _chance_of_a_pair(ties: Ties, form: Form, rng: np.random.Generator) -> float:
    """Return how often two wrong associations are consistent: landmarks shuffled among themselves."""
    points = np.flatnonzero((ties.kind == LANDMARK)[ties.node] | (ties.kind == CONTROL)[ties.node])
    if len(points) < 3:
        return 1.0
    a, rate = ties.a.take(points), 0.0
    for _ in range(3):
        b = ties.b.take(points[np.roll(rng.permutation(len(points)), 1)])
        statistic, dof = consistency_statistic(a, b, form)
        off = ~np.eye(len(points), dtype=bool)
        rate += float((statistic[off] <= chi2.ppf(GATE, dof)).mean()) / 3.0
    return max(rate, 1.0 / len(points) ** 2)


def _accidents(
    ties: Ties, agrees: Bools, rotation: Floats, translation: Floats, form: Form, rate: float
) -> float:
    """Return how many sets of this size wrong associations alone would be expected to form.

    Meetings, closures, fixes and control points name what they are: a weight of three from more
    than half of them is no accident.
    """
    named = np.isin(ties.kind, (ENCOUNTER, CLOSURE, FIX, CONTROL))
    alone = weight_of(ties, agrees & named)
    if alone >= LEAST_WEIGHT and np.count_nonzero(agrees & named) > 0.5 * named.sum():
        return 0.0
    named = np.isin(ties.kind, (ENCOUNTER, CLOSURE, FIX))
    landmarks = np.flatnonzero(~named)
    points = np.flatnonzero(~named[ties.node])
    chance = chance_of_agreement(ties.a.take(points), ties.b.take(points), rotation, translation)
    support = len(np.unique(ties.key[agrees & ~named]))
    # Every landmark can be paired once only, however many tracks claim it.
    n = max(len(np.unique(ties.key[landmarks])), 1)
    several = len(landmarks) / n
    chance = min(1.0, chance * several)
    extra = np.unique(ties.key[agrees & named])
    # A meeting or a closure that agrees as well is one more coincidence that chance would need.
    factor = chance ** min(len(extra), 3)
    return factor * expected_accidents(n, support, chance, rate, minimal_points(form))


def _distinct(found: list[Hypothesis]) -> list[Hypothesis]:
    """Keep hypotheses that share less than half of what supports them."""
    kept: list[Hypothesis] = []
    for h in found:
        size = max(int(h.agrees.sum()), 1)
        if all(int((h.agrees & k.agrees).sum()) < 0.5 * size for k in kept):
            kept.append(h)
    return kept


def is_ambiguous(found: list[Hypothesis]) -> bool:
    """Tell whether the runner-up is as good as the best: close in weight, and no accident itself."""
    if len(found) < 2 or not found[1].determined:
        return False
    close = found[1].weight >= CLOSE * found[0].weight
    return bool(close and found[1].accidents <= 10.0 * ACCIDENTS)

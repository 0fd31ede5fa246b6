"""Cliques against networkx, and planted inliers among many wrong associations."""

from __future__ import annotations

import networkx as nx
import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from jointmap.graph.start.align import Form
from jointmap.graph.start.consistency import (
    PointSet,
    consistency_matrix,
    greedy_clique,
    maximum_clique,
    runner_up,
)
from jointmap.graph.start.links import ACCIDENTS
from jointmap.graph.start.ransac import (
    chance_of_agreement,
    expected_accidents,
    ransac,
    trials_needed,
)


def test_karate_club() -> None:
    # W. W. Zachary's club: clique number 5, two maximum cliques (networkx lists all 36 maximal).
    graph = nx.karate_club_graph()
    adjacency = nx.to_numpy_array(graph, weight=None).astype(bool)
    clique, proven = maximum_clique(adjacency)
    assert proven
    assert set(clique.tolist()) in ({0, 1, 2, 3, 7}, {0, 1, 2, 3, 13})


def test_petersen_graph() -> None:
    adjacency = nx.to_numpy_array(nx.petersen_graph()).astype(bool)
    clique, _ = maximum_clique(adjacency)
    assert len(clique) == 2 and adjacency[clique[0], clique[1]]


@pytest.mark.parametrize("seed", range(12))
def test_random_graphs_against_networkx(seed: int) -> None:
    rng = np.random.default_rng(seed)
    n = int(rng.integers(5, 45))
    upper = np.triu(rng.random((n, n)) < rng.uniform(0.2, 0.8), 1)
    adjacency = upper | upper.T
    weights = rng.integers(1, 6, size=n)
    graph = nx.from_numpy_array(adjacency)
    nx.set_node_attributes(graph, {i: int(w) for i, w in enumerate(weights)}, "weight")
    for key, w in (("weight", weights), (None, np.ones(n))):
        _, expected = nx.max_weight_clique(graph, weight=key)
        clique, proven = maximum_clique(adjacency, w.astype(float))
        assert proven
        inside = adjacency[np.ix_(clique, clique)]
        assert inside.sum() == len(clique) * (len(clique) - 1)
        assert w[clique].sum() == expected


def test_node_cap_still_returns_a_clique() -> None:
    rng = np.random.default_rng(1)
    upper = np.triu(rng.random((200, 200)) < 0.8, 1)
    adjacency = upper | upper.T
    clique, proven = maximum_clique(adjacency, node_cap=50)
    assert not proven
    assert adjacency[np.ix_(clique, clique)].sum() == len(clique) * (len(clique) - 1)
    assert len(clique) >= len(greedy_clique(adjacency, np.ones(200)))


def test_runner_up_is_the_other_structure() -> None:
    adjacency = np.zeros((11, 11), dtype=bool)
    adjacency[:6, :6] = adjacency[6:, 6:] = True
    adjacency[0, 6:] = adjacency[6:, 0] = True
    np.fill_diagonal(adjacency, False)
    best, _ = maximum_clique(adjacency)
    assert len(best) == 6
    second = runner_up(adjacency, np.ones(11), best)
    assert len(set(second.tolist()) & set(best.tolist())) <= 1
    assert len(second) >= 5


@pytest.mark.parametrize(
    ("share", "sample", "trials"),
    [
        (0.9, 2, 3), (0.9, 3, 4), (0.7, 2, 7), (0.7, 3, 11), (0.5, 2, 17),
        (0.5, 3, 35), (0.3, 2, 49), (0.3, 3, 169), (0.2, 2, 113), (0.2, 3, 574),
    ],
)  # fmt: skip
def test_ransac_trial_counts(share: float, sample: int, trials: int) -> None:
    # Table of the number of trials at 99 % (R. Hartley & A. Zisserman, Multiple View Geometry,
    # 2nd ed., table 4.3, the same formula; 0.3 and 0.2 computed with it).
    assert trials_needed(share, sample) == trials


def _planted(
    form: Form, wrong: float, seed: int, n: int = 40, sigma: float = 0.05
) -> tuple[PointSet, PointSet, np.ndarray, np.ndarray, np.ndarray]:
    """Two noisy maps of one world; the share ``wrong`` of the associations is shuffled."""
    rng = np.random.default_rng(seed)
    d = 2 if form == "planar" else 3
    world = rng.uniform(-15, 15, size=(n, d)) * ([1, 1, 0.2][:d])
    if form == "full":
        turn = Rotation.random(rng=rng).as_matrix()
    else:
        turn = Rotation.from_euler("z", rng.uniform(-np.pi, np.pi)).as_matrix()[:d, :d]
    move = rng.uniform(-50, 50, size=d)
    target = world @ turn.T + move
    right = np.ones(n, dtype=bool)
    bad = rng.permutation(n)[: round(wrong * n)]
    right[bad] = False
    target[bad] = target[np.roll(bad, 1)]
    cov = np.broadcast_to(sigma**2 * np.eye(d), (n, d, d))
    a = PointSet(world + rng.normal(scale=sigma, size=(n, d)), cov)
    b = PointSet(target + rng.normal(scale=sigma, size=(n, d)), cov)
    return a, b, right, turn, move


@pytest.mark.parametrize("form", ["planar", "yaw", "full"])
@pytest.mark.parametrize("wrong", [0.0, 0.6, 0.7, 0.8])
@pytest.mark.parametrize("seed", range(5))
def test_planted_inliers_are_found(form: Form, wrong: float, seed: int) -> None:
    a, b, right, turn, move = _planted(form, wrong, seed)
    adjacency = consistency_matrix(a, b, form)
    clique, _ = maximum_clique(adjacency)
    # A right association is lost with probability 0.003 per pair; a wrong one rarely slips in.
    assert right[clique].sum() >= 0.75 * right.sum()
    assert (~right[clique]).sum() <= 1
    check = ransac(a, b, adjacency, form, np.random.default_rng(seed))
    assert check is not None
    assert (
        np.array_equal(check.inliers & right, check.inliers) or (check.inliers & ~right).sum() <= 1
    )
    assert (check.inliers & right).sum() >= 0.9 * right.sum()
    assert check.rotation == pytest.approx(turn, abs=0.02)
    assert check.rotation @ a.position.mean(axis=0) + check.translation == pytest.approx(
        turn @ a.position.mean(axis=0) + move, abs=0.2
    )


def test_height_is_tested_apart_from_the_horizontal_distance() -> None:
    # Equal 3-D distance, but one pair is upright and the other lies: no yaw turns one into the
    # other, a free rotation does.
    a = PointSet(np.array([[0.0, 0, 0], [3, 0, 0]]), np.full((2, 3, 3), 1e-4) * np.eye(3))
    b = PointSet(np.array([[0.0, 0, 0], [0, 0, 3]]), a.covariance)
    assert not consistency_matrix(a, b, "yaw").any()
    assert consistency_matrix(a, b, "full").any()


def test_common_error_of_a_pair_does_not_loosen_the_gate() -> None:
    # Both positions drifted together by metres: their distance is still known to 1 cm.
    own = np.broadcast_to(4.0 * np.eye(2), (2, 2, 2))
    joint = np.broadcast_to((4.0 - 0.5e-4) * np.eye(2), (2, 2, 2, 2)).copy()
    joint[[0, 1], [0, 1]] = own
    a = PointSet(np.array([[0.0, 0], [5, 0]]), own, joint)
    b = PointSet(np.array([[0.0, 0], [5.2, 0]]), own, joint)
    assert not consistency_matrix(a, b, "planar").any()
    assert consistency_matrix(PointSet(a.position, own), PointSet(b.position, own), "planar").any()


def test_wrong_associations_alone_are_recognised_as_chance() -> None:
    # Thirty unrelated maps of 40 landmarks: the best clique of each must not count as evidence by
    # the level that links use; the planted ones must (16 right of 40).
    for seed in range(30):
        a, b, _, _, _ = _planted("planar", 1.0, seed)
        assert _accidents(a, b) > ACCIDENTS
    for seed in range(10):
        a, b, _, _, _ = _planted("planar", 0.6, seed)
        assert _accidents(a, b) < 1e-6


def _accidents(a: PointSet, b: PointSet) -> float:
    adjacency = consistency_matrix(a, b, "planar")
    found = ransac(a, b, adjacency, "planar", np.random.default_rng(0))
    assert found is not None
    chance = chance_of_agreement(a, b, found.rotation, found.translation)
    shifted = b.take(np.roll(np.arange(b.n), 7))
    rate = consistency_matrix(a, shifted, "planar").sum() / (a.n * (a.n - 1))
    return expected_accidents(a.n, int(found.inliers.sum()), chance, rate, 2)

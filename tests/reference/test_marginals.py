"""Selected inversion against gtsam.Marginals, dense inverses and published marginals."""

from __future__ import annotations

import io

import gtsam
import numpy as np
import pytest
from adjustment_networks import landmark_graph, planar_slam, sphere2500

from jointmap.trust.elimination import SingularSystemError, clique_tree, eliminate, loose_keys
from jointmap.trust.marginals import selected_inverse, selected_inverse_of
from jointmap.trust.solve_pairs import SquareRootFactor

#: Two exact algorithms in double precision on systems of condition 1e8: eight digits remain.
RELATIVE = 1e-6


def relative_error(ours, theirs):
    """Largest deviation as a share of the block's largest entry."""
    scale = np.abs(theirs).max(axis=(-2, -1))
    return float((np.abs(ours - theirs).max(axis=(-2, -1)) / scale).max())


def test_planar_slam_published_marginals():
    """Printed digits of gtsam testMarginals.cpp."""
    graph, values, dims = planar_slam()
    inverse = selected_inverse(eliminate(graph.linearize(values)), dims)
    poses, points = inverse.diagonal([0, 1, 2]), inverse.diagonal([3, 4])
    x2 = [
        [0.120967742, -0.00129032258, 0.00451612903],
        [-0.00129032258, 0.158387097, 0.0206451613],
        [0.00451612903, 0.0206451613, 0.0177419355],
    ]
    x3 = [
        [0.160967742, 0.00774193548, 0.00451612903],
        [0.00774193548, 0.351935484, 0.0561290323],
        [0.00451612903, 0.0561290323, 0.0277419355],
    ]
    np.testing.assert_allclose(poses[1], x2, rtol=0, atol=5e-10)
    np.testing.assert_allclose(poses[2], x3, rtol=0, atol=5e-10)
    np.testing.assert_allclose(
        points[0], [[0.168709677, -0.0477419355], [-0.0477419355, 0.163548387]], rtol=0, atol=5e-10
    )
    np.testing.assert_allclose(
        points[1], [[0.293870968, -0.104516129], [-0.104516129, 0.391935484]], rtol=0, atol=5e-10
    )


def test_odometry_chain_published_marginals():
    """Dellaert & Kaess, Factor Graphs and GTSAM tutorial: three poses of dead reckoning."""
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    sigma = gtsam.noiseModel.Diagonal.Sigmas
    graph.add(gtsam.PriorFactorPose2(0, gtsam.Pose2(), sigma(np.array([0.3, 0.3, 0.1]))))
    for i in (0, 1):
        noise = sigma(np.array([0.2, 0.2, 0.1]))
        graph.add(gtsam.BetweenFactorPose2(i, i + 1, gtsam.Pose2(2, 0, 0), noise))
    for i in range(3):
        values.insert(i, gtsam.Pose2(2.0 * i, 0, 0))
    blocks = selected_inverse(eliminate(graph.linearize(values)), [3, 3, 3]).diagonal([1, 2])
    np.testing.assert_allclose(blocks[0].diagonal(), [0.13, 0.17, 0.02], atol=1e-12)
    np.testing.assert_allclose(blocks[1].diagonal(), [0.17, 0.37, 0.03], atol=1e-12)
    np.testing.assert_allclose([blocks[0, 1, 2], blocks[1, 1, 2]], [0.02, 0.06], atol=1e-12)


@pytest.mark.parametrize("dimension", [2, 3])
def test_landmark_graph_equals_gtsam_marginals(dimension):
    graph, values, dims = landmark_graph(dimension)
    inverse = selected_inverse(eliminate(graph.linearize(values)), dims)
    marginals = gtsam.Marginals(graph, values)
    for kind in np.unique(dims):
        keys = np.flatnonzero(dims == kind)
        theirs = np.array([marginals.marginalCovariance(int(k)) for k in keys])
        assert relative_error(inverse.diagonal(keys), theirs) < RELATIVE
    measured = np.array([graph.at(f).keys() for f in range(1, graph.size())])
    for chosen in (dims[measured[:, 1]] == dims[0], dims[measured[:, 1]] == dimension):
        a, b = measured[chosen].T
        for i, j in ((a, b), (b, a)):
            theirs = np.array(
                [
                    marginals.jointMarginalCovariance([int(p), int(q)]).at(int(p), int(q))
                    for p, q in zip(i, j, strict=True)
                ]
            )
            assert relative_error(inverse.pairs(i, j), theirs) < RELATIVE


def test_sphere2500_equals_gtsam_marginals():
    """A sample of keys and edges; the last pose's sigmas as computed with gtsam 4.3.0."""
    graph, values = sphere2500()
    dims = np.full(2500, 6)
    inverse = selected_inverse(eliminate(graph.linearize(values)), dims)
    marginals = gtsam.Marginals(graph, values)
    sample = np.random.default_rng(0).choice(2499, 12, replace=False) + 1
    theirs = np.array([marginals.marginalCovariance(int(k)) for k in sample])
    assert relative_error(inverse.diagonal(sample), theirs) < RELATIVE
    sigma = np.sqrt(np.diagonal(inverse.diagonal([2499])[0]))
    printed = [0.01631, 0.01711, 0.05134, 1.18852, 1.13867, 0.25981]
    np.testing.assert_allclose(sigma, printed, rtol=0, atol=1e-5)
    edges = [tuple(graph.at(int(f)).keys()) for f in np.random.default_rng(1).choice(4949, 6)]
    for i, j in edges:
        theirs = marginals.jointMarginalCovariance([i, j]).at(i, j)
        assert relative_error(inverse.pairs([i], [j]), theirs[None]) < RELATIVE


@pytest.mark.parametrize("ordering", ["metis", "colamd", "natural"])
def test_every_ordering_gives_the_dense_inverse(ordering):
    """The natural order of a chain makes a tree as deep as the graph is long."""
    graph, values, dims = landmark_graph(2)
    linear = graph.linearize(values)
    order = {
        "metis": gtsam.Ordering.MetisGaussianFactorGraph,
        "colamd": gtsam.Ordering.ColamdGaussianFactorGraph,
        "natural": gtsam.Ordering.NaturalGaussianFactorGraph,
    }[ordering](linear)
    tree = clique_tree(eliminate(linear, order), dims)
    dense = np.linalg.inv(linear.hessian()[0])
    start = np.cumsum(dims) - dims
    poses = np.flatnonzero(dims == 3)
    theirs = np.array([dense[s : s + 3, s : s + 3] for s in start[poses]])
    assert relative_error(selected_inverse_of(tree).diagonal(poses), theirs) < 1e-9
    factor = SquareRootFactor(tree)
    rhs = np.random.default_rng(3).standard_normal((len(dense), 5))
    np.testing.assert_allclose(factor.solve(rhs), dense @ rhs, rtol=1e-9, atol=1e-10)
    np.testing.assert_allclose(factor.solve(rhs[:, 0]), dense @ rhs[:, 0], rtol=1e-9, atol=1e-10)
    i, j = np.array([0, 7, 59, 7, 12]), np.array([80, 61, 60, 84, 70])
    joint = factor.joint(i, j)
    for block, a, b in zip(joint, i, j, strict=True):
        at = np.concatenate([np.arange(start[k], start[k] + dims[k]) for k in (a, b)])
        assert relative_error(block, dense[np.ix_(at, at)]) < 1e-9
    same = factor.joint([5], [5])[0]
    np.testing.assert_allclose(same[:3, 3:], same[:3, :3], rtol=1e-12)


def test_square_root_factor_survives_storage():
    graph, values, dims = landmark_graph(3)
    factor = SquareRootFactor(clique_tree(eliminate(graph.linearize(values)), dims))
    buffer = io.BytesIO()
    np.savez(buffer, **factor.to_arrays())
    buffer.seek(0)
    with np.load(buffer, allow_pickle=False) as stored:
        again = SquareRootFactor.from_arrays(stored)
    np.testing.assert_array_equal(again.relative(3, 70), factor.relative(3, 70))


def test_what_is_not_there_is_refused():
    graph, values, dims = landmark_graph(2)
    inverse = selected_inverse(eliminate(graph.linearize(values)), np.append(dims, 3))
    apart = [(i, j) for i in range(60) for j in range(i) if not inverse.shares_clique([i], [j])[0]]
    assert apart
    with pytest.raises(KeyError, match="share no clique"):
        inverse.pairs([apart[0][0]], [apart[0][1]])
    with pytest.raises(KeyError):
        inverse.diagonal([85])  # listed with a dimension, but no factor holds it
    with pytest.raises(KeyError):
        inverse.diagonal([86])
    with pytest.raises(ValueError, match="different dimensions"):
        inverse.diagonal([0, 60])
    with pytest.raises(ValueError, match="do not fit"):
        selected_inverse(eliminate(graph.linearize(values)), np.full(85, 3))


def test_components_without_ties_are_both_solved():
    """Two separate chains: the Bayes tree is a forest."""
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    noise = gtsam.noiseModel.Isotropic.Sigma(3, 0.1)
    for first in (0, 10):
        graph.add(gtsam.PriorFactorPose2(first, gtsam.Pose2(), noise))
        for i in range(first, first + 9):
            graph.add(gtsam.BetweenFactorPose2(i, i + 1, gtsam.Pose2(1, 0, 0.1), noise))
    pose = gtsam.Pose2()
    for i in range(20):
        values.insert(i, pose)
        pose = pose.compose(gtsam.Pose2(1, 0, 0.1)) if i != 9 else gtsam.Pose2()
    tree = clique_tree(eliminate(graph.linearize(values)), np.full(20, 3))
    inverse = selected_inverse_of(tree)
    np.testing.assert_allclose(inverse.diagonal([9]), inverse.diagonal([19]), rtol=1e-12)
    np.testing.assert_array_equal(SquareRootFactor(tree).pairs([3], [13])[0], np.zeros((3, 3)))


def _unheld(poses: int = 30, cut: int | None = None):
    """A held chain of poses; with ``cut`` the poses after it hang on nothing."""
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    noise = gtsam.noiseModel.Isotropic.Sigma(3, 0.1)
    graph.add(gtsam.PriorFactorPose2(0, gtsam.Pose2(), noise))
    for i in range(poses):
        values.insert(i, gtsam.Pose2(i, 0.1 * i, 0.01 * i))
        if i and i != cut:
            motion = values.atPose2(i - 1).between(values.atPose2(i))
            graph.add(gtsam.BetweenFactorPose2(i - 1, i, motion, noise))
    return graph.linearize(values)


def test_free_gauge_is_an_error_with_a_key():
    linear = _unheld(cut=24)
    with pytest.raises(SingularSystemError) as caught:
        clique_tree(eliminate(linear), np.full(30, 3))
    assert 24 <= caught.value.key < 30


def test_loose_variable_is_found_even_when_elimination_blames_a_neighbour():
    """Landmark 20 is sighted once, by range alone: its direction is free, nothing else is."""
    graph = _unheld(20)
    noise = gtsam.noiseModel.Unit.Create(1)
    sighting = gtsam.JacobianFactor(
        7, np.array([[-1.0, 0.1, 0.3]]), 20, np.array([[0.8, 0.6]]), np.zeros(1), noise
    )
    graph.add(sighting)
    dims = np.append(np.full(20, 3), 2)
    with pytest.raises(SingularSystemError):
        clique_tree(eliminate(graph), dims)
    assert loose_keys(graph, dims).tolist() == [20]


def test_stiff_but_determined_chain_is_solved():
    """Precise steps, poor heading: GTSAM's own test of pivots calls this one singular."""
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    sigma = np.array([1e-6, 1e-6, 1e-2])
    noise = gtsam.noiseModel.Diagonal.Sigmas(sigma)
    graph.add(gtsam.PriorFactorPose2(0, gtsam.Pose2(), gtsam.noiseModel.Isotropic.Sigma(3, 0.01)))
    for i in range(200):
        values.insert(i, gtsam.Pose2(i, 0, 0))
        if i:
            graph.add(gtsam.BetweenFactorPose2(i - 1, i, gtsam.Pose2(1, 0, 0), noise))
    linear = graph.linearize(values)
    order = gtsam.Ordering.NaturalGaussianFactorGraph(linear)
    with pytest.raises(RuntimeError, match="ndetermina"):
        linear.eliminateMultifrontal(order)
    end = selected_inverse(eliminate(linear, order), np.full(200, 3)).diagonal([199])[0]
    # Step k (1 .. 199) turns what follows it; a straight line, so the sums are exact.
    arms = 199.0 - np.arange(200)
    heading = 1e-4 + 199 * sigma[2] ** 2
    across = 1e-4 + 1e-4 * 199.0**2 + sigma[2] ** 2 * np.sum(arms[1:] ** 2) + 199 * sigma[1] ** 2
    along = 1e-4 + 199 * sigma[0] ** 2
    # R's diagonal spans 1e9, and the recursion loses that many digits of sixteen.
    np.testing.assert_allclose(np.diagonal(end), [along, across, heading], rtol=1e-6)


def test_variance_of_a_tight_difference_keeps_its_digits() -> None:
    """Two variables tied by sigma 1e-4, each known to 1 by itself: redundancy in closed form.

    The tie's residual variance is sigma^2 v / (sigma^2 + v) with v = 2 the difference's variance
    without it (a product of two Gaussians), so 1 - J Sigma J' = sigma^2 / (sigma^2 + v) = 5e-9.
    """
    sigma = 1e-4
    graph = gtsam.GaussianFactorGraph()
    unit = gtsam.noiseModel.Unit.Create(2)
    for key in (0, 1):
        graph.add(key, np.eye(2), np.zeros(2), unit)
    graph.add(0, np.eye(2) / sigma, 1, -np.eye(2) / sigma, np.zeros(2), unit)
    ordering = gtsam.Ordering()
    ordering.push_back(0)
    ordering.push_back(1)
    inverse = selected_inverse(graph.eliminateMultifrontal(ordering, gtsam.EliminateQR), [2, 2])
    jacobian = np.eye(2)[None] / sigma
    left = 1.0 - inverse.row_covariance([0], [1], jacobian, -jacobian)[0, 0, 0]
    assert left == pytest.approx(sigma**2 / (sigma**2 + 2.0), rel=1e-5)


def test_rows_on_pairs_equal_the_sum_of_blocks() -> None:
    inverse = selected_inverse(*_small_tree())
    jac_i, jac_j = np.arange(6.0).reshape(1, 2, 3), np.arange(6.0, 0.0, -1.0).reshape(1, 2, 3)
    blocks = (
        jac_i @ inverse.diagonal([0]) @ jac_i.swapaxes(1, 2)
        + jac_j @ inverse.diagonal([1]) @ jac_j.swapaxes(1, 2)
        + jac_i @ inverse.pairs([0], [1]) @ jac_j.swapaxes(1, 2)
        + jac_j @ inverse.pairs([1], [0]) @ jac_i.swapaxes(1, 2)
    )
    assert np.allclose(inverse.row_covariance([0], [1], jac_i, jac_j), blocks, rtol=1e-9)


def _small_tree() -> tuple[gtsam.GaussianBayesTree, list[int]]:
    rng = np.random.default_rng(5)
    graph = gtsam.GaussianFactorGraph()
    unit = gtsam.noiseModel.Unit.Create(3)
    for a, b in ((0, 1), (1, 2), (2, 3), (3, 0), (1, 3)):
        graph.add(a, rng.normal(size=(3, 3)), b, rng.normal(size=(3, 3)), np.zeros(3), unit)
    graph.add(3, np.eye(3), np.zeros(3), unit)
    ordering = gtsam.Ordering()
    for key in (0, 2, 1, 3):
        ordering.push_back(key)
    return graph.eliminateMultifrontal(ordering), [3, 3, 3, 3]

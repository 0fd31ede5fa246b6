"""The datum of pose graphs: selected blocks against transformations by dense matrices."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest
from adjustment_networks import landmark_graph

from jointmap.errors import GaugeError
from jointmap.frames import group
from jointmap.trust.datum import (
    datum_transform,
    null_space,
    pose_weights,
    position_weights,
    restrict,
)
from jointmap.trust.elimination import clique_tree, eliminate
from jointmap.trust.marginals import selected_inverse_of
from jointmap.trust.solve_pairs import SquareRootFactor


class Map:
    """A landmark graph with its free motions, and its covariance by dense matrices."""

    def __init__(self, dimension: int, gravity: bool = False, shift: float = 0.0) -> None:
        graph, values, self.dims = landmark_graph(dimension)
        n = len(self.dims)
        self.pose_keys = np.flatnonzero(self.dims != dimension)
        self.point_keys = np.flatnonzero(self.dims == dimension)
        if gravity:
            for k in self.pose_keys.tolist():
                down = values.atPose3(k).rotation().inverse().rotate(gtsam.Point3(0, 0, 1))
                noise = gtsam.noiseModel.Isotropic.Sigma(2, 0.02)
                graph.add(
                    gtsam.AttitudeFactorPose3(
                        k, gtsam.Unit3(gtsam.Point3(0, 0, 1)), noise, gtsam.Unit3(down)
                    )
                )
        if dimension == 2:
            at = [values.atPose2(int(k)) for k in self.pose_keys]
            poses = np.array([[p.x(), p.y(), p.theta()] for p in at])
            points = np.array([values.atPoint2(int(k)) for k in self.point_keys])
        else:
            poses = np.array([values.atPose3(int(k)).matrix()[:3] for k in self.pose_keys])
            points = np.array([values.atPoint3(int(k)) for k in self.point_keys])
        self.poses, self.points, self.dimension = poses, points, dimension
        linear = graph.linearize(values)
        self.factor = SquareRootFactor(clique_tree(eliminate(linear), self.dims))
        self.inverse = selected_inverse_of(self.factor.tree)
        hessian = linear.hessian()[0]
        held = graph.at(0).linearize(values)  # the prior, here the only datum
        self.hessian = hessian - _padded(held, self.dims)
        self.sigma = np.linalg.inv(hessian)
        self.null = null_space(
            self.dims, dimension, gravity, (self.pose_keys, poses), (self.point_keys, points)
        )
        self.component = np.zeros(n, int)
        self.start = np.cumsum(self.dims) - self.dims

    def dense(self, weights):
        """S Sigma S' by full matrices."""
        b = weights[:, None] * self.null
        s = np.eye(len(b)) - self.null @ np.linalg.solve(b.T @ self.null, b.T)
        return s @ self.sigma @ s.T

    def block(self, matrix, i, j):
        """One block of a full matrix."""
        rows = self.start[i] + np.arange(self.dims[i])
        return matrix[np.ix_(rows, self.start[j] + np.arange(self.dims[j]))]


def _padded(held, dims):
    out = np.zeros((dims.sum(), dims.sum()))
    information = held.information()
    out[: len(information), : len(information)] = information
    return out


MAPS = [(2, False, 3), (3, False, 6), (3, True, 4)]


@pytest.mark.parametrize(("dimension", "gravity", "motions"), MAPS)
def test_free_motions_span_the_null_space(dimension, gravity, motions):
    """Moving the whole map changes no relative measurement: H G = 0, and nothing else is free."""
    net = Map(dimension, gravity)
    assert net.null.shape[1] == motions
    scale = np.linalg.norm(net.hessian, 2) * np.linalg.norm(net.null, 2)
    # The prior's information of 1e6 is taken out again, which leaves its rounding.
    assert np.linalg.norm(net.hessian @ net.null, 2) < 1e-9 * scale
    values = np.linalg.eigvalsh(net.hessian)
    assert np.sum(values < 1e-6 * np.median(values)) == motions


@pytest.mark.parametrize(("dimension", "gravity", "motions"), MAPS)
@pytest.mark.parametrize("kind", ["landmarks", "keyframes", "pose"])
def test_datum_blocks_equal_dense_transformation(dimension, gravity, motions, kind):
    net = Map(dimension, gravity)
    weights = {
        "landmarks": position_weights(net.dims, dimension, net.point_keys),
        "keyframes": position_weights(net.dims, dimension, net.pose_keys),
        "pose": pose_weights(net.dims, [17]),
    }[kind]
    move = datum_transform(net.factor, net.component, net.null, weights)
    dense = net.dense(weights)
    scale = np.abs(dense).max()
    for keys in (net.pose_keys, net.point_keys):
        ours = move.diagonal(keys, net.inverse.diagonal(keys))
        theirs = np.array([net.block(dense, k, k) for k in keys])
        np.testing.assert_allclose(ours, theirs, atol=1e-9 * scale)
        assert np.linalg.eigvalsh(ours).min() > -1e-9 * scale
    i, j = net.pose_keys[:20], np.resize(net.point_keys, 20)
    joint = move.joint(i, j, net.factor.joint(i, j))
    for a, b, block in zip(i, j, joint, strict=True):
        d = net.dims[a]
        np.testing.assert_allclose(block[:d, d:], net.block(dense, a, b), atol=1e-9 * scale)
        np.testing.assert_allclose(block[d:, d:], net.block(dense, b, b), atol=1e-9 * scale)
    if kind == "pose" and not gravity:
        np.testing.assert_allclose(
            move.diagonal([17], net.inverse.diagonal([17])), 0.0, atol=1e-9 * scale
        )


@pytest.mark.parametrize(("dimension", "gravity", "motions"), MAPS)
def test_inner_constraint_has_the_smallest_trace(dimension, gravity, motions):
    """Over the landmarks, against holding any pose; and it is the pseudo-inverse's property."""
    net = Map(dimension, gravity)
    inner = position_weights(net.dims, dimension, net.point_keys)
    diagonal = net.inverse.diagonal(net.point_keys)

    def trace(weights):
        move = datum_transform(net.factor, net.component, net.null, weights)
        return np.trace(move.diagonal(net.point_keys, diagonal), axis1=1, axis2=2).sum()

    least = trace(inner)
    others = [trace(pose_weights(net.dims, [k])) for k in (0, 20, 59)]
    others.append(trace(position_weights(net.dims, dimension, net.pose_keys)))
    others.append(trace(position_weights(net.dims, dimension, net.point_keys[:4])))
    assert min(others) > 1.0001 * least


@pytest.mark.parametrize(("dimension", "gravity", "motions"), MAPS)
def test_relative_poses_do_not_depend_on_the_datum(dimension, gravity, motions):
    """Covariance of ``A^-1 B``: J = [-Ad(between^-1), I] in body tangents."""
    net = Map(dimension, gravity)
    i, j = net.pose_keys[[0, 5, 30]], net.pose_keys[[59, 40, 2]]
    frame = group(dimension)
    between = frame.between(net.poses[i], net.poses[j])
    dof = frame.dof
    jac = np.concatenate(
        [-frame.adjoint(frame.inverse(between)), np.broadcast_to(np.eye(dof), (3, dof, dof))], 2
    )
    joint = net.factor.joint(i, j)
    before = jac @ joint @ jac.swapaxes(1, 2)
    for weights in (
        position_weights(net.dims, dimension, net.point_keys),
        pose_weights(net.dims, [30]),
    ):
        move = datum_transform(net.factor, net.component, net.null, weights)
        after = jac @ move.joint(i, j, joint) @ jac.swapaxes(1, 2)
        np.testing.assert_allclose(after, before, rtol=1e-7, atol=1e-9 * np.abs(before).max())


def test_gravity_datum_holds_position_and_heading_of_the_pose():
    net = Map(3, gravity=True)
    move = datum_transform(net.factor, net.component, net.null, pose_weights(net.dims, [17]))
    body = move.diagonal([17], net.inverse.diagonal([17]))[0]
    turn = np.kron(np.eye(2), net.poses[17][:, :3])  # both halves of the tangent to map axes
    fixed_axes = turn @ body @ turn.T
    np.testing.assert_allclose(fixed_axes[2:], 0.0, atol=1e-12)
    assert np.diagonal(fixed_axes)[:2].min() > 1e-6


def test_from_inner_back_to_a_fixed_pose():
    """The way by the inner datum ends where the direct one does."""
    net = Map(2)
    inner = position_weights(net.dims, 2, net.point_keys)
    dense = net.dense(inner)
    b = pose_weights(net.dims, [0])[:, None] * net.null
    s = np.eye(len(b)) - net.null @ np.linalg.solve(b.T @ net.null, b.T)
    move = datum_transform(net.factor, net.component, net.null, pose_weights(net.dims, [0]))
    ours = move.diagonal(net.pose_keys, net.inverse.diagonal(net.pose_keys))
    back = s @ dense @ s.T
    theirs = np.array([net.block(back, k, k) for k in net.pose_keys])
    np.testing.assert_allclose(ours, theirs, atol=1e-9 * np.abs(theirs).max())


def test_datum_far_from_the_origin():
    """Coordinates as large as a national grid's cost digits, not the answer."""
    net = Map(2)
    far = np.array([5e5, 4e6])
    poses = net.poses + np.append(far, 0.0)
    null = null_space(
        net.dims, 2, False, (net.pose_keys, poses), (net.point_keys, net.points + far)
    )
    weights = position_weights(net.dims, 2, net.point_keys)
    near = datum_transform(net.factor, net.component, net.null, weights)
    away = datum_transform(net.factor, net.component, null, weights)
    blocks = net.inverse.diagonal(net.point_keys)
    np.testing.assert_allclose(
        away.diagonal(net.point_keys, blocks), near.diagonal(net.point_keys, blocks), rtol=1e-6
    )


def test_one_landmark_is_no_datum():
    net = Map(2)
    with pytest.raises(GaugeError, match=r"component\(s\) 0"):
        datum_transform(
            net.factor, net.component, net.null, position_weights(net.dims, 2, [net.point_keys[0]])
        )
    space = Map(3)
    with pytest.raises(GaugeError):
        datum_transform(
            space.factor, space.component, space.null, position_weights(space.dims, 3, [60, 61])
        )


def test_motions_that_absolute_data_hold_stay_held():
    """Only the turn about the origin is free: the transformation takes out that one alone."""
    net = Map(2)
    turn = restrict(net.null, net.dims, net.component, [np.array([[0.0], [0.0], [1.0]])])
    weights = position_weights(net.dims, 2, net.point_keys)
    move = datum_transform(net.factor, net.component, turn, weights)
    g = net.null[:, 2:]
    b = weights[:, None] * g
    s = np.eye(len(b)) - g @ np.linalg.solve(b.T @ g, b.T)
    dense = s @ net.sigma @ s.T
    ours = move.diagonal(net.point_keys, net.inverse.diagonal(net.point_keys))
    theirs = np.array([net.block(dense, k, k) for k in net.point_keys])
    np.testing.assert_allclose(ours, theirs, atol=1e-9 * np.abs(dense).max())
    nothing = restrict(net.null, net.dims, net.component, [np.zeros((3, 0))])
    still = datum_transform(net.factor, net.component, nothing, weights)
    blocks = net.inverse.diagonal(net.point_keys)
    np.testing.assert_array_equal(still.diagonal(net.point_keys, blocks), blocks)


@pytest.mark.parametrize("shared", [False, True])
def test_two_components_each_have_their_datum(shared):
    """Two chains, with and without a bias that both feel (then they are correlated)."""
    rng = np.random.default_rng(5)
    graph, unit = gtsam.GaussianFactorGraph(), gtsam.noiseModel.Unit.Create(1)
    n = 12
    for i in [*range(5), *range(6, 11)]:
        parts = [i, -np.eye(1), i + 1, np.eye(1)]
        if shared:
            parts += [12, np.array([[rng.uniform(0.5, 1.5)]])]
        graph.add(gtsam.JacobianFactor(*parts, np.zeros(1), unit))
        graph.add(gtsam.JacobianFactor(i, -np.eye(1), i + 1, np.eye(1), np.zeros(1), unit))
    for k in (2, 9):
        graph.add(gtsam.JacobianFactor(k, np.eye(1), np.zeros(1), unit))
    size = n + shared
    component = np.array([0] * 6 + [1] * 6 + [-1] * shared)
    null, weights = np.ones((size, 1)), np.ones(size)
    null[n:], weights[n:] = 0.0, 0.0
    tree = clique_tree(eliminate(graph), np.ones(size, int))
    factor = SquareRootFactor(tree)
    move = datum_transform(factor, component, null, weights)
    keys = np.arange(size)
    ours = move.diagonal(keys, selected_inverse_of(tree).diagonal(keys))[:, 0, 0]
    g = (component[:, None] == [0, 1]).astype(float)
    s = np.eye(size) - g @ np.linalg.solve(g.T @ g, g.T)
    dense = s @ np.linalg.inv(graph.hessian()[0]) @ s.T
    np.testing.assert_allclose(ours, np.diagonal(dense), rtol=1e-10)
    with pytest.raises(ValueError, match="no common datum"):
        move.pairs([0], [7], np.zeros((1, 1, 1)))

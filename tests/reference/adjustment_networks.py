"""Graphs and linear networks that several reference tests adjust."""

from __future__ import annotations

from dataclasses import dataclass

import gtsam
import gtsam_unstable
import numpy as np

from jointmap.trust.elimination import clique_tree, eliminate
from jointmap.trust.marginals import SelectedInverse, selected_inverse, selected_inverse_of
from jointmap.trust.redundancy import redundancy_matrices
from jointmap.trust.solve_pairs import SquareRootFactor


@dataclass(frozen=True)
class Adjusted:
    """A linear model ``y = A x + e`` with one scalar key per unknown, solved by the package.

    ``v`` (n,) observation minus fit, in the unit of the observation; ``redundancy`` (n,).
    """

    x: np.ndarray
    v: np.ndarray
    redundancy: np.ndarray
    inverse: SelectedInverse
    factor: SquareRootFactor


def adjust(a, y, sigma=1.0, held=(), elimination=None):
    """Least squares of ``y = A x`` with sigmas, through elimination and selected inversion.

    Every unknown is a key of its own where no row involves more than three; otherwise all are one
    key. ``held`` unknowns are kept at zero by a unit row (a minimal datum).
    """
    a, y = np.asarray(a, float), np.asarray(y, float)
    sigma = np.broadcast_to(np.asarray(sigma, float), y.shape)
    n = a.shape[1]
    apart = np.count_nonzero(a, axis=1).max() <= 3
    keys, jacobians, dims = [], [], np.ones(n, int) if apart else np.array([n])
    for row, s in zip(a, sigma, strict=True):
        used = np.flatnonzero(row) if apart else np.zeros(1, int)
        keys.append([int(k) for k in used])
        jacobians.append([row[[k]][None] / s for k in used] if apart else [row[None] / s])
    graph, unit = gtsam.GaussianFactorGraph(), gtsam.noiseModel.Unit.Create(1)
    for ends, parts, value in zip(keys, jacobians, y / sigma, strict=True):
        terms = [term for pair in zip(ends, parts, strict=True) for term in pair]
        graph.add(gtsam.JacobianFactor(*terms, np.array([value]), unit))
    for k in held:
        graph.add(gtsam.JacobianFactor(int(k), np.eye(1), np.zeros(1), unit))
    if elimination is None:
        bayes_tree = eliminate(graph)
    else:
        order = gtsam.Ordering.MetisGaussianFactorGraph(graph)
        bayes_tree = graph.eliminateMultifrontal(order, elimination)
    tree = clique_tree(bayes_tree, dims)
    factor, inverse = SquareRootFactor(tree), selected_inverse_of(tree)
    x = np.zeros(n)
    for _ in range(4):  # repeated: one solve by normal equations loses digits
        x = x + factor.solve((a / sigma[:, None]).T @ ((y - a @ x) / sigma))
    redundancy = [
        redundancy_matrices([np.array([k]) for k in ends], [j[None] for j in parts], inverse)[
            0, 0, 0
        ]
        for ends, parts in zip(keys, jacobians, strict=True)
    ]
    return Adjusted(x, y - a @ x, np.array(redundancy), inverse, factor)


def sphere2500():
    """sphere2500 read as square-root information (source: gtsam/Data).

    The first pose is held by a prior of sigma 1e-4; a tighter one takes a hundred metres times
    1e-4 rad out of the last pose's printed sigmas.
    """
    path = gtsam.findExampleDataFile("sphere2500.txt")
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    upper = np.triu_indices(6)
    order = np.array([3, 4, 5, 0, 1, 2])  # file: translation first; gtsam: rotation first
    values.insert(0, gtsam.Pose3())
    with open(path) as lines:
        for line in lines:
            word = line.split()
            if word[0] != "EDGE3":
                continue
            i, j = int(word[1]), int(word[2])
            number = np.array(word[3:], float)
            motion = gtsam.Pose3(gtsam.Rot3.RzRyRx(*number[3:6]), gtsam.Point3(*number[:3]))
            root = np.zeros((6, 6))
            root[upper] = number[6:]
            information = (root.T @ root)[np.ix_(order, order)]
            model = gtsam.noiseModel.Gaussian.Information(information)
            graph.add(gtsam.BetweenFactorPose3(i, j, motion, model))
            if j == i + 1:
                values.insert(j, values.atPose3(i).compose(motion))
    graph.add(gtsam.PriorFactorPose3(0, gtsam.Pose3(), gtsam.noiseModel.Isotropic.Sigma(6, 1e-4)))
    params = gtsam.LevenbergMarquardtParams()
    params.setRelativeErrorTol(1e-14)
    params.setAbsoluteErrorTol(1e-14)
    return graph, gtsam.LevenbergMarquardtOptimizer(graph, values, params).optimize()


def planar_slam():
    """Three poses 0 1 2 and two landmarks 3 4 (source: gtsam testMarginals.cpp)."""
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    sigma = gtsam.noiseModel.Diagonal.Sigmas
    graph.add(gtsam.PriorFactorPose2(0, gtsam.Pose2(), sigma(np.array([0.3, 0.3, 0.1]))))
    odometry = sigma(np.array([0.2, 0.2, 0.1]))
    for i in (0, 1):
        graph.add(gtsam.BetweenFactorPose2(i, i + 1, gtsam.Pose2(2, 0, 0), odometry))
    sighting = sigma(np.array([0.1, 0.2]))
    for pose, landmark, degrees, distance in (
        (0, 3, 45, np.sqrt(8)),
        (1, 3, 90, 2.0),
        (2, 4, 90, 2.0),
    ):
        graph.add(
            gtsam.BearingRangeFactor2D(
                pose, landmark, gtsam.Rot2.fromDegrees(degrees), distance, sighting
            )
        )
    for i in range(3):
        values.insert(i, gtsam.Pose2(2.0 * i, 0, 0))
    values.insert(3, gtsam.Point2(2, 2))
    values.insert(4, gtsam.Point2(4, 2))
    return graph, values, np.array([3, 3, 3, 2, 2])


def landmark_graph(dimension: int, poses: int = 60, landmarks: int = 25):
    """A random walk that sights landmarks around it, at its linearisation point."""
    rng = np.random.default_rng(dimension)
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    dof = 3 if dimension == 2 else 6
    Pose, between, prior, bearing_range = (
        (gtsam.Pose2, gtsam.BetweenFactorPose2, gtsam.PriorFactorPose2, gtsam.BearingRangeFactor2D)
        if dimension == 2
        else (
            gtsam.Pose3,
            gtsam.BetweenFactorPose3,
            gtsam.PriorFactorPose3,
            gtsam.BearingRangeFactor3D,
        )
    )
    step = np.zeros(dof)
    step[-dimension if dimension == 3 else 0] = 1.0
    pose = Pose()
    points = rng.uniform(-15, 15, (landmarks, dimension))
    for k, point in enumerate(points):
        values.insert(poses + k, point)
    graph.add(prior(0, pose, gtsam.noiseModel.Isotropic.Sigma(dof, 1e-3)))
    for i in range(poses):
        values.insert(i, pose)
        for k in rng.choice(landmarks, 3, replace=False):
            noise = gtsam.noiseModel.Isotropic.Sigma(dimension, 0.1)
            graph.add(
                bearing_range(
                    i, poses + int(k), pose.bearing(points[k]), pose.range(points[k]), noise
                )
            )
        motion = Pose.Expmap(step + 0.2 * rng.standard_normal(dof))
        if i + 1 < poses:
            noise = gtsam.noiseModel.Isotropic.Sigma(dof, 0.05)
            graph.add(between(i, i + 1, motion, noise))
        pose = pose.compose(motion)
    return graph, values, np.repeat([dof, dimension], [poses, landmarks])


def redundancies(graph, values, dims):
    """Selected inverse, and the redundancy matrix of every factor of a nonlinear graph."""
    linear = graph.linearize(values)
    inverse = selected_inverse(eliminate(linear), dims)
    matrices = []
    for index in range(linear.size()):
        factor = linear.at(index)
        keys = factor.keys()
        whole = np.asarray(factor.jacobian()[0])
        parts = np.split(whole[None], np.cumsum(dims[keys])[:-1], axis=2)
        matrices.append(redundancy_matrices([np.array([k]) for k in keys], parts, inverse)[0])
    return inverse, matrices


def landmark_file(name: str):
    """Odometry and Cartesian sightings with square-root information, at the optimum.

    Lines EDGE_SE2 and LANDMARK2 of a file of gtsam/Data; poses come first in the key order.
    """
    with open(gtsam.findExampleDataFile(name)) as lines:
        words = [line.split() for line in lines]
    edges = [w for w in words if w[0] == "EDGE_SE2"]
    sightings = [w for w in words if w[0] == "LANDMARK2"]
    pose = {k: n for n, k in enumerate(sorted({int(k) for w in edges for k in w[1:3]}))}
    point = {k: len(pose) + n for n, k in enumerate(sorted({int(w[2]) for w in sightings}))}
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    values.insert(0, gtsam.Pose2())
    for w in edges:
        i, j, motion = pose[int(w[1])], pose[int(w[2])], gtsam.Pose2(*map(float, w[3:6]))
        if not values.exists(j):
            values.insert(j, values.atPose2(i).compose(motion))
        graph.add(gtsam.BetweenFactorPose2(i, j, motion, _root_noise(w[6:], 3)))
    for w in sightings:
        i, j, seen = pose[int(w[1])], point[int(w[2])], np.array(w[3:5], float)
        if not values.exists(j):
            values.insert(j, values.atPose2(i).transformFrom(seen))
        graph.add(gtsam_unstable.DeltaFactor(i, j, seen, _root_noise(w[5:], 2)))
    held = gtsam.noiseModel.Isotropic.Sigma(3, 1e-3)
    graph.add(gtsam.PriorFactorPose2(0, gtsam.Pose2(), held))
    params = gtsam.LevenbergMarquardtParams()
    params.setRelativeErrorTol(1e-12)
    params.setAbsoluteErrorTol(1e-12)
    values = gtsam.LevenbergMarquardtOptimizer(graph, values, params).optimize()
    return graph, values, np.repeat([3, 2], [len(pose), len(point)])


def _root_noise(words, dim):
    root = np.zeros((dim, dim))
    root[np.triu_indices(dim)] = np.array(words, float)
    return gtsam.noiseModel.Gaussian.Information(root.T @ root)

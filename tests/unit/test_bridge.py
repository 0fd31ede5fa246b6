"""The bridge against a batch solution in which every odometry row is a variable."""

from __future__ import annotations

from dataclasses import replace

import gtsam
import numpy as np
import pytest

from jointmap import frames
from jointmap.graph.bridge import SolvedKeyframes, bridge, prepare_bridge
from jointmap.graph.odometry import cumulative, increments
from jointmap.ingest.survey import Odometry, Provenance

THETA = np.array([0.03, 0.02, 0.03, 0.01, 0.008])
KEYS = (12, 35, 60)
ROWS = 80


def _odometry(dimension, form, sigma=False, seed=3):
    rng = np.random.default_rng(seed)
    t = 1.6e9 + np.cumsum(rng.uniform(0.06, 0.14, ROWS))
    dof = 3 if dimension == 2 else 6
    twist = rng.normal(0.0, 0.3, (ROWS, dof))
    twist[:, 0] += 1.0
    twist[:, -1] += 0.5
    none = Provenance(("odometry.csv",), np.zeros(ROWS, int), np.arange(ROWS))
    given = rng.uniform(0.01, 0.03, (ROWS, dof)) if sigma else None
    made = Odometry("twist", t, None, twist, given, None, none)
    if form == "pose":
        group = frames.group(dimension)
        rows = group.to_rows(cumulative(made, t, dimension).at(t))
        made = Odometry("pose", t, rows, None, given, None, none)
    return made, t


def _pose(dimension, pose):
    return gtsam.Pose2(*pose) if dimension == 2 else gtsam.Pose3(np.vstack([pose, [0, 0, 0, 1]]))


def _array(dimension, pose):
    if dimension == 2:
        return np.array([pose.x(), pose.y(), pose.theta()])
    return pose.matrix()[:3]


def _batch(dimension, start, deltas, covariances, measured):
    """Values and marginals of a chain with absolute poses ``measured`` at some of its nodes."""
    group = frames.group(dimension)
    between = gtsam.BetweenFactorPose2 if dimension == 2 else gtsam.BetweenFactorPose3
    prior = gtsam.PriorFactorPose2 if dimension == 2 else gtsam.PriorFactorPose3
    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    pose = start
    values.insert(0, _pose(dimension, pose))
    for k, (delta, covariance) in enumerate(zip(deltas, covariances, strict=True)):
        noise = gtsam.noiseModel.Gaussian.Covariance(covariance)
        graph.add(between(k, k + 1, _pose(dimension, delta), noise))
        pose = group.compose(pose, delta)
        values.insert(k + 1, _pose(dimension, pose))
    for node, (where, sigma) in measured.items():
        noise = gtsam.noiseModel.Diagonal.Sigmas(sigma)
        graph.add(prior(node, _pose(dimension, where), noise))
    params = gtsam.LevenbergMarquardtParams()
    params.setRelativeErrorTol(1e-14)
    params.setAbsoluteErrorTol(1e-14)
    solved = gtsam.LevenbergMarquardtOptimizer(graph, values, params).optimize()
    return solved, gtsam.Marginals(graph, solved)


def _get(dimension, values, k):
    return _array(dimension, values.atPose2(k) if dimension == 2 else values.atPose3(k))


def _covariance(made, dimension):
    """Noise per increment as the bridge has it: the rows' own, otherwise the terms."""
    dof = 3 if dimension == 2 else 6
    model = np.tensordot(made.basis, THETA**2, axes=(1, 0)) + made.gap_cov
    own = np.isfinite(made.row_cov).all(axis=(1, 2))
    return np.where(own[:, None, None], np.nan_to_num(made.row_cov), model) + 1e-13 * np.eye(dof)


def _setting(dimension, form, sigma, pull):
    """Keyframe batch, full batch, odometry, for the same measured poses."""
    odometry, t = _odometry(dimension, form, sigma)
    group = frames.group(dimension)
    path = cumulative(odometry, t, dimension).at(t)
    rng = np.random.default_rng(5)
    keys = list(KEYS)
    measured = {
        k: (group.retract(path[k], rng.normal(0.0, pull, group.dof)), s * np.ones(group.dof))
        for k, s in zip(keys, (0.02, 0.05, 0.03), strict=True)
    }
    rows = increments(odometry, t, t, dimension)
    full = _batch(dimension, path[0], rows.delta, _covariance(rows, dimension), measured)
    made = increments(odometry, t, t[keys], dimension)
    few = _batch(
        dimension,
        path[keys[0]],
        made.delta,
        _covariance(made, dimension),
        {i: measured[k] for i, k in enumerate(keys)},
    )
    return odometry, t, few, full


def _solved(dimension, t, few):
    values, marginals = few
    n = len(KEYS)
    cross = []
    for i in range(n - 1):
        joint = marginals.jointMarginalCovariance([i, i + 1])
        cross.append(joint.at(i, i + 1))
    return SolvedKeyframes(
        t[list(KEYS)],
        np.array([_get(dimension, values, i) for i in range(n)]),
        np.array([marginals.marginalCovariance(i) for i in range(n)]),
        np.array(cross),
    )


@pytest.mark.parametrize("dimension", [2, 3])
@pytest.mark.parametrize("form", ["pose", "twist"])
@pytest.mark.parametrize("sigma", [False, True])
def test_equals_the_batch_with_every_row_as_a_keyframe(dimension, form, sigma):
    # A pull of a milliradian leaves second-order terms of 1e-6 of a metre.
    odometry, t, few, (values, marginals) = _setting(dimension, form, sigma, 1e-3)
    group = frames.group(dimension)
    got = bridge(odometry, t, _solved(dimension, t, few), THETA, dimension)
    want = np.array([_get(dimension, values, k) for k in range(ROWS)])
    covariance = np.array([marginals.marginalCovariance(k) for k in range(ROWS)])
    assert np.abs(group.local(want, got.poses)).max() < 3e-6
    scale = np.sqrt(np.einsum("nii->ni", covariance))
    relative = (got.covariance - covariance) / (scale[:, :, None] * scale[:, None, :])
    # the covariance is linearised elsewhere by the size of the pull
    assert np.abs(relative).max() < 3e-3


@pytest.mark.parametrize("dimension", [2, 3])
def test_the_difference_to_the_batch_is_of_second_order(dimension):
    worst = []
    for pull in (1e-2, 1e-3):
        odometry, t, few, (values, _) = _setting(dimension, "twist", False, pull)
        group = frames.group(dimension)
        got = bridge(odometry, t, _solved(dimension, t, few), THETA, dimension)
        want = np.array([_get(dimension, values, k) for k in range(ROWS)])
        worst.append(np.abs(group.local(want, got.poses)).max())
    assert worst[1] < worst[0] / 50


@pytest.mark.parametrize("dimension", [2, 3])
def test_is_exact_at_keyframes_and_continuous_around_them(dimension):
    # corrections of a decimetre and six degrees: exactness must not depend on their size
    odometry, t, few, _ = _setting(dimension, "twist", False, 0.1)
    solved = _solved(dimension, t, few)
    group = frames.group(dimension)
    ready = prepare_bridge(odometry, t, solved, THETA, dimension)
    at = ready.at(solved.t_s)
    assert np.abs(group.local(solved.poses, at.poses)).max() < 1e-12
    np.testing.assert_allclose(at.covariance, solved.covariance, rtol=0, atol=1e-15)
    for side in (-1e-6, 1e-6):
        near = ready.at(solved.t_s + side)
        assert np.abs(group.local(solved.poses, near.poses)).max() < 1e-5
        np.testing.assert_allclose(near.covariance, solved.covariance, rtol=0, atol=1e-8)


def test_order_and_number_of_stamps_do_not_matter():
    odometry, t, few, _ = _setting(3, "pose", False, 1e-2)
    ready = prepare_bridge(odometry, t, _solved(3, t, few), THETA, 3)
    stamps = np.random.default_rng(0).uniform(t[0], t[-1], 50)
    together = ready.at(stamps)
    for k in range(0, 50, 7):
        alone = ready.at(stamps[k : k + 1])
        np.testing.assert_allclose(alone.poses[0], together.poses[k], rtol=0, atol=1e-13)
        np.testing.assert_allclose(alone.covariance[0], together.covariance[k], rtol=0, atol=1e-14)


def test_long_logs_are_answered_in_parts_without_a_trace(monkeypatch):
    odometry, t, few, _ = _setting(2, "twist", False, 1e-2)
    ready = prepare_bridge(odometry, t, _solved(2, t, few), THETA, 2)
    whole = ready.at(t)
    monkeypatch.setattr("jointmap.graph.bridge._CHUNK", 7)
    parts = ready.at(t)
    np.testing.assert_allclose(parts.poses, whole.poses, rtol=0, atol=1e-14)
    np.testing.assert_allclose(parts.covariance, whole.covariance, rtol=0, atol=1e-16)


def test_a_row_without_its_own_noise_leaves_its_pair_to_the_terms():
    odometry, t, few, _ = _setting(2, "pose", True, 1e-2)
    solved = _solved(2, t, few)
    stated = bridge(odometry, t, solved, THETA, 2)
    modelled = bridge(replace(odometry, sigma=None), t, solved, THETA, 2)
    sigma = np.array(odometry.sigma)
    sigma[KEYS[0] + 5] = np.nan
    mixed = bridge(replace(odometry, sigma=sigma), t, solved, THETA, 2)
    first, second = slice(KEYS[0], KEYS[1]), slice(KEYS[1], KEYS[2])
    np.testing.assert_array_equal(mixed.covariance[first], modelled.covariance[first])
    np.testing.assert_array_equal(mixed.covariance[second], stated.covariance[second])
    assert (stated.covariance[first][5, 2, 2]) != modelled.covariance[first][5, 2, 2]


def test_a_gap_takes_the_correction_and_its_uncertainty():
    """Ten seconds at 1 m/s with two seconds missing; the keyframes say 0.5 m less was driven."""
    t = np.concatenate([np.arange(0.0, 4.0, 0.1), np.arange(6.0, 10.05, 0.1)])
    none = Provenance(("odometry.csv",), np.zeros(len(t), int), np.arange(len(t)))
    odometry = Odometry("twist", t, None, np.tile([1.0, 0.0, 0.0], (len(t), 1)), None, None, none)
    small = 1e-6 * np.eye(3)
    solved = SolvedKeyframes(
        np.array([0.0, 10.0]),
        np.array([[0.0, 0.0, 0.0], [9.5, 0.0, 0.0]]),
        np.array([small, small]),
        np.zeros((1, 3, 3)),
    )
    ready = prepare_bridge(odometry, t, solved, THETA, 2)
    before, middle, after = ready.at([3.9, 4.95, 6.0]).poses[:, 0] - [3.9, 4.95, 6.0]
    # variance along the way: 0.001 per second, and (2.1 m)^2 in the gap; a bridge has a quarter of
    # it halfway
    assert before == pytest.approx(0.0, abs=1e-3)
    assert middle == pytest.approx(-0.25, abs=1e-3)
    assert after == pytest.approx(-0.5, abs=1e-3)
    variance = (2.1**2 + 0.001 * 10) / 4
    assert ready.at([4.95]).covariance[0, 0, 0] == pytest.approx(variance, rel=1e-5)


def test_a_cut_lets_both_sides_drift_away_from_their_keyframes():
    odometry, t, few, _ = _setting(2, "pose", False, 1e-2)
    solved = _solved(2, t, few)
    cut = 0.5 * (t[20] + t[21])
    ready = prepare_bridge(odometry, t, solved, THETA, 2, cuts=(cut,))
    rows = cumulative(odometry, t, 2).at(t)
    got = ready.at(t)
    group = frames.group(2)
    first, second = KEYS[0], KEYS[1]
    for k, held, pose in ((20, first, solved.poses[0]), (21, second, solved.poses[1])):
        want = group.compose(pose, group.between(rows[held], rows[k]))
        assert np.abs(group.local(want, got.poses[k])).max() < 1e-12
    heading = got.covariance[:, 2, 2]
    assert (np.diff(heading[first:21]) > 0).all()
    assert (np.diff(heading[21 : second + 1]) < 0).all()


def test_a_robot_at_rest_takes_its_correction_evenly():
    # No motion, no noise per second: nothing but time can decide where the correction goes.
    t = np.linspace(0.0, 1.0, 11)
    none = Provenance(("odometry.csv",), np.zeros(11, int), np.arange(11))
    odometry = Odometry("twist", t, None, np.zeros((11, 3)), None, None, none)
    small = 1e-6 * np.eye(3)
    solved = SolvedKeyframes(
        np.array([0.0, 1.0]),
        np.array([[0.0, 0.0, 0.0], [1e-3, 0.0, 0.0]]),
        np.array([small, small]),
        small[None],
    )
    got = bridge(odometry, t, solved, np.array([0.1, 0.1, 0.1, 0.0, 0.0]), 2)
    np.testing.assert_allclose(got.poses[:, 0], 1e-3 * t, rtol=0, atol=1e-12)


def test_stamps_far_outside_are_not_answered():
    odometry, t, few, _ = _setting(2, "pose", False, 1e-2)
    got = prepare_bridge(odometry, t, _solved(2, t, few), THETA, 2).at([t[0] - 70.0, t[-1] + 70.0])
    assert np.isnan(got.poses).all() and np.isnan(got.covariance).all()

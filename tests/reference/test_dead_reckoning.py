"""Growth of dead-reckoning errors against closed forms, simulation and a published chain."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest

from jointmap import frames
from jointmap.graph.odometry import increments
from jointmap.ingest.survey import Odometry, Provenance

HEADING_SIGMA = 0.01
STEPS = 100


def _odometry(form, t, rows, sigma=None):
    n = len(t)
    source = Provenance(("odometry.csv",), np.zeros(n, int), np.arange(n))
    pose, twist = (rows, None) if form == "pose" else (None, rows)
    return Odometry(form, t, pose, twist, sigma, None, source)


def test_heading_walk_of_hundred_steps():
    """Turn by a random error, then move one metre, a hundred times.

    Var(yaw) = N s^2, Var(y) = s^2 N (N + 1) (2 N + 1) / 6, Cov(y, yaw) = s^2 N (N + 1) / 2.
    """
    # Row 1 is the first turn on the spot; each later row moves a metre and then turns, but for the
    # last one, which only moves.
    x = np.concatenate([[0.0], np.arange(STEPS + 1.0)])
    rows = np.stack([x, np.zeros_like(x), np.zeros_like(x)], axis=1)
    sigma = np.zeros_like(rows)
    sigma[1:-1, 2] = HEADING_SIGMA
    t = np.arange(len(x), dtype=float)
    made = increments(_odometry("pose", t, rows, sigma), t, t[[0, -1]], 2)
    covariance = made.row_cov[0]
    assert covariance[2, 2] == pytest.approx(0.01, rel=1e-12)
    assert covariance[1, 1] == pytest.approx(33.835, rel=1e-12)
    assert covariance[1, 2] == pytest.approx(0.505, rel=1e-12)
    assert covariance[0, 0] == pytest.approx(0.0, abs=1e-12)


def test_heading_walk_of_hundred_steps_simulated():
    rng = np.random.default_rng(4)
    runs = 20_000
    heading = np.cumsum(rng.normal(0.0, HEADING_SIGMA, (runs, STEPS)), axis=1)
    x, y = np.cos(heading).sum(axis=1), np.sin(heading).sum(axis=1)
    # exact mean: sum of exp(-k s^2 / 2) = 99.7479; its sampling error is below 0.002
    assert x.mean() == pytest.approx(99.7479, abs=0.01)
    # relative error of a variance from n runs: sqrt(2 / n) = 0.01, three of them
    assert y.var() == pytest.approx(33.835, rel=0.03)
    t = np.arange(STEPS + 1.0) * 10
    rows = np.tile([0.1, 0.0, 0.0], (len(t), 1))
    made = increments(_odometry("twist", t, rows), t, t[[0, -1]], 2)
    model = made.basis[0, 1] * HEADING_SIGMA**2
    # the walk along the path is continuous, that of the simulation starts every metre: 1.5 / N
    assert model[1, 1] == pytest.approx(y.var(), rel=0.03 + 1.5 / STEPS)


@pytest.mark.parametrize("per_row_m", [50.0, 1.0, 0.01])
@pytest.mark.parametrize("dimension", [2, 3])
def test_heading_walk_per_metre_does_not_depend_on_the_row_rate(per_row_m, dimension):
    """Continuous heading walk of q per metre: lateral variance q L^3 / 3, covariance q L^2 / 2."""
    length = 100.0
    rows = np.zeros((round(length / per_row_m) + 1, 3 if dimension == 2 else 6))
    rows[:, 0] = 1.0
    t = np.arange(len(rows)) * per_row_m
    made = increments(
        _odometry("twist", t, rows), t, np.array([0.0, length]), dimension, max_gap_s=1e9
    )
    covariance = made.basis[0, 1] * HEADING_SIGMA**2 / 1.0
    y, yaw = (1, 2) if dimension == 2 else (4, 2)
    assert covariance[y, y] == pytest.approx(33.3333333333, rel=1e-10)
    assert covariance[yaw, yaw] == pytest.approx(0.01, rel=1e-10)
    assert covariance[y, yaw] == pytest.approx(0.5, rel=1e-10)
    # 5.77350 m after 100 m: the printed lateral standard deviation
    assert np.sqrt(covariance[y, y]) == pytest.approx(5.77350, abs=5e-6)
    # and 0.18257 m after 10 m
    early = increments(
        _odometry("twist", t, rows), t, np.array([0.0, length / 10]), dimension, max_gap_s=1e9
    )
    short = early.basis[0, 1] * HEADING_SIGMA**2
    assert np.sqrt(short[y, y]) == pytest.approx(0.18257, abs=5e-6)


def test_slopes_of_error_growth():
    """Log-log slopes of sigma over length: 3/2 for a heading walk, 1/2 for a position walk."""
    t = np.arange(0.0, 1001.0)
    rows = np.tile([1.0, 0.0, 0.0], (len(t), 1))
    odometry = _odometry("twist", t, rows)
    sigma = [
        np.sqrt(increments(odometry, t, np.array([0.0, length]), 2).basis[0, :, 1, 1])
        for length in (10.0, 1000.0)
    ]
    slope = np.log10(sigma[1][[0, 1]] / sigma[0][[0, 1]]) / 2
    np.testing.assert_allclose(slope, [0.5, 1.5], rtol=0, atol=1e-12)


def test_chain_of_the_gtsam_tutorial():
    """Dellaert (2012), Factor Graphs and GTSAM, section 2: odometry (2, 0, 0), sigmas .2 .2 .1.

    After the prior (.3, .3, .1) the printed marginals are diag(.13, .17, .02) with cov(y, yaw) .02
    and diag(.17, .37, .03) with .06.
    """
    t = np.arange(3.0)
    rows = np.stack([2 * t, 0 * t, 0 * t], axis=1)
    sigma = np.tile([0.2, 0.2, 0.1], (3, 1))
    made = increments(_odometry("pose", t, rows, sigma), t, t, 2)
    covariance = np.diag([0.3, 0.3, 0.1]) ** 2
    for k, (diagonal, coupling) in enumerate(
        (((0.13, 0.17, 0.02), 0.02), ((0.17, 0.37, 0.03), 0.06))
    ):
        back = frames.SE2.adjoint(frames.SE2.inverse(made.delta[k]))
        covariance = back @ covariance @ back.T + made.row_cov[k]
        np.testing.assert_allclose(np.diag(covariance), diagonal, rtol=0, atol=1e-14)
        assert covariance[1, 2] == pytest.approx(coupling, abs=1e-14)
    both = increments(_odometry("pose", t, rows, sigma), t, t[[0, 2]], 2)
    back = frames.SE2.adjoint(frames.SE2.inverse(both.delta[0]))
    once = back @ np.diag([0.3, 0.3, 0.1]) ** 2 @ back.T + both.row_cov[0]
    np.testing.assert_allclose(once, covariance, rtol=0, atol=1e-14)


@pytest.mark.parametrize("dimension", [2, 3])
def test_stated_noise_equals_the_marginal_of_a_chain_of_factors(dimension):
    """Row sigmas in the axes of the body before, against gtsam's marginal over every row."""
    rng = np.random.default_rng(8)
    group, n = frames.group(dimension), 25
    poses = group.identity(n)
    for k in range(1, n):
        poses[k] = group.retract(poses[k - 1], rng.normal(0.0, 0.4, group.dof))
    sigma = rng.uniform(0.01, 0.05, (n, group.dof))
    between = gtsam.BetweenFactorPose2 if dimension == 2 else gtsam.BetweenFactorPose3
    prior = gtsam.PriorFactorPose2 if dimension == 2 else gtsam.PriorFactorPose3

    def native(pose):
        if dimension == 2:
            return gtsam.Pose2(*pose)
        return gtsam.Pose3(np.vstack([pose, [0, 0, 0, 1]]))

    graph, values = gtsam.NonlinearFactorGraph(), gtsam.Values()
    graph.add(prior(0, native(poses[0]), gtsam.noiseModel.Isotropic.Sigma(group.dof, 1e-6)))
    values.insert(0, native(poses[0]))
    for k in range(1, n):
        step = group.between(poses[k - 1], poses[k])
        body = group.covariance_from_table(step, np.diag(sigma[k] ** 2))
        noise = gtsam.noiseModel.Gaussian.Covariance(body)
        graph.add(between(k - 1, k, native(step), noise))
        values.insert(k, native(poses[k]))
    want = gtsam.Marginals(graph, values).marginalCovariance(n - 1)
    t = np.arange(float(n))
    rows = group.to_rows(poses)
    made = increments(_odometry("pose", t, rows, sigma), t, t[[0, -1]], dimension)
    # the prior of a micron squared reaches the end through levers of metres
    np.testing.assert_allclose(made.row_cov[0], want, rtol=0, atol=1e-10)

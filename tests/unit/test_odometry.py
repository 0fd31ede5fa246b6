"""Integration of odometry rows, its noise shapes, gaps and sensitivities."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.spatial.transform import Rotation, Slerp

from jointmap import frames
from jointmap.errors import SurveyError
from jointmap.graph.odometry import cumulative, dead_reckon, increment_jacobians, increments
from jointmap.ingest.survey import Odometry, Provenance

DIMENSIONS = (2, 3)
START = 1.7e9


def _source(n):
    return Provenance(("odometry.csv",), np.zeros(n, int), np.arange(n))


def _twist(t, rows, sigma=None):
    return Odometry("twist", t, None, rows, sigma, None, _source(len(t)))


def _pose(t, rows, sigma=None, acc_cov=None):
    return Odometry("pose", t, rows, None, sigma, acc_cov, _source(len(t)))


def _wander(dimension, n=60, seed=1):
    """Stamps, twist rows and the same motion as pose rows, with the pose at the last row's stamp."""
    rng = np.random.default_rng(seed)
    t = START + np.cumsum(rng.uniform(0.05, 0.15, n))
    rows = rng.normal(size=(n, 3 if dimension == 2 else 6))
    tangent = rows if dimension == 2 else rows[:, [3, 4, 5, 0, 1, 2]]
    kind = gtsam.Pose2 if dimension == 2 else gtsam.Pose3
    poses = [kind()]
    for k in range(n - 1):
        poses.append(poses[-1] * kind.Expmap(tangent[k] * (t[k + 1] - t[k])))
    if dimension == 2:
        table = np.array([[p.x(), p.y(), p.theta()] for p in poses])
    else:
        table = np.array(
            [
                [*p.translation(), *Rotation.from_matrix(p.rotation().matrix()).as_quat()]
                for p in poses
            ]
        )
    return t, rows, table


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_twists_give_the_poses_that_gtsam_multiplies(dimension):
    t, rows, table = _wander(dimension)
    group = frames.group(dimension)
    got = dead_reckon(_twist(t, rows), t, t, dimension)
    assert np.abs(group.local(group.from_rows(table), got)).max() < 1e-13


def test_a_twist_holds_until_the_next_row_as_a_differential_equation_does():
    rng = np.random.default_rng(3)
    t = np.cumsum(rng.uniform(0.5, 1.5, 6))
    rows = rng.normal(size=(6, 3))
    stamps = np.sort(rng.uniform(t[0], t[-1], 20))

    def slope(now, state):
        vx, vy, wz = rows[max(np.searchsorted(t, now, side="right") - 1, 0)]
        c, s = np.cos(state[2]), np.sin(state[2])
        return [c * vx - s * vy, s * vx + c * vy, wz]

    solved = solve_ivp(
        slope, (t[0], t[-1]), np.zeros(3), t_eval=stamps, rtol=1e-10, atol=1e-11, max_step=0.01
    )
    got = dead_reckon(_twist(t, rows), t, stamps, 2)
    # the solver steps over the jumps of the twist, which costs it most of its digits
    np.testing.assert_allclose(got[:, :2], solved.y[:2].T, rtol=0, atol=1e-6)
    np.testing.assert_allclose(frames.wrap(got[:, 2] - solved.y[2]), 0.0, rtol=0, atol=1e-6)


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_pose_form_follows_the_geodesic_between_rows(dimension):
    t, _, table = _wander(dimension)
    group = frames.group(dimension)
    stamps = np.random.default_rng(0).uniform(t[0], t[-1], 100)
    got = dead_reckon(_pose(t, table), t, stamps, dimension)
    k = np.searchsorted(t, stamps, side="right") - 1
    share = (stamps - t[k]) / (t[k + 1] - t[k])
    rows = group.from_rows(table)
    want = group.interpolate(rows[k], rows[k + 1], share)
    assert np.abs(group.local(want, got)).max() < 1e-13
    if dimension == 3:
        slerp = Slerp(t - START, Rotation.from_quat(table[:, 3:]))(stamps - START).as_matrix()
        assert np.abs(got[:, :, :3] - slerp).max() < 1e-12


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_both_forms_agree_and_outside_is_clamped(dimension):
    t, rows, table = _wander(dimension)
    group = frames.group(dimension)
    stamps = np.array([t[0] - 100.0, t[0], t[7] + 0.01, t[-1]])
    a = dead_reckon(_twist(t, rows), t, stamps, dimension)
    b = dead_reckon(_pose(t, table), t, stamps, dimension)
    assert np.abs(group.local(a, b)).max() < 1e-13
    assert np.abs(group.local(a[0], a[1])).max() == 0.0
    # pose form ends at the last row; a twist holds for one median period, no longer
    late = np.array([t[-1], t[-1] + np.median(np.diff(t)), t[-1] + 100.0])
    b = dead_reckon(_pose(t, table), t, late, dimension)
    assert np.abs(group.local(b[0], b[1:])).max() < 1e-13
    a = dead_reckon(_twist(t, rows), t, late, dimension)
    tangent = rows[-1] if dimension == 2 else rows[-1, [3, 4, 5, 0, 1, 2]]
    want = tangent * (late[1] - late[0])
    np.testing.assert_allclose(group.local(a[0], a[1]), want, rtol=0, atol=1e-13)
    assert np.abs(group.local(a[1], a[2])).max() < 1e-13


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_increments_tie_dead_reckoned_poses(dimension):
    t, rows, table = _wander(dimension)
    group = frames.group(dimension)
    key = np.sort(np.random.default_rng(2).uniform(t[0], t[-1], 12))
    for odometry in (_twist(t, rows), _pose(t, table)):
        path = dead_reckon(odometry, t, key, dimension)
        made = increments(odometry, t, key, dimension)
        want = group.between(path[:-1], path[1:])
        assert np.abs(group.local(want, made.delta)).max() < 1e-13
        np.testing.assert_array_equal(made.duration_s, np.diff(key))
        assert np.isnan(made.row_cov).all()


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_scales_multiply_translation_and_turning(dimension):
    t, rows, table = _wander(dimension)
    group = frames.group(dimension)
    moved, turned = slice(0, dimension), slice(dimension, None)
    scaled = rows.copy()
    scaled[:, moved] *= 0.9
    scaled[:, turned] *= 1.1
    want = dead_reckon(_twist(t, scaled), t, t, dimension)
    for odometry in (_twist(t, rows), _pose(t, table)):
        got = dead_reckon(odometry, t, t, dimension, 0.9, 1.1)
        assert np.abs(group.local(want, got)).max() < 1e-12


def test_scaled_pose_form_starts_where_the_first_row_says():
    t, _, table = _wander(2)
    table = table + [5.0, -3.0, 0.0]
    got = dead_reckon(_pose(t, table), t, t[:1], 2, 0.5, 1.0)
    np.testing.assert_allclose(got[0], table[0], rtol=0, atol=1e-15)


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_noise_of_a_long_increment_is_that_of_its_parts(dimension):
    """P(a, c) = Ad(D_bc^-1) P(a, b) Ad^T + P(b, c), for every term and the rows' own noise."""
    t, rows, table = _wander(dimension)
    group = frames.group(dimension)
    sigma = np.random.default_rng(5).uniform(0.01, 0.1, (len(t), group.dof))
    for odometry in (_twist(t, rows, sigma), _pose(t, table, sigma)):
        whole = increments(odometry, t, t[[3, 41]], dimension)
        parts = increments(odometry, t, t[[3, 17, 41]], dimension)
        back = group.adjoint(group.inverse(parts.delta[1]))
        want = back @ parts.basis[0] @ back.T + parts.basis[1]
        np.testing.assert_allclose(whole.basis[0], want, rtol=1e-12, atol=1e-14)
        want = back @ parts.row_cov[0] @ back.T + parts.row_cov[1]
        np.testing.assert_allclose(whole.row_cov[0], want, rtol=1e-12, atol=1e-14)
        assert whole.path_m[0] == pytest.approx(parts.path_m.sum(), rel=1e-13)
        assert whole.turn_rad[0] == pytest.approx(parts.turn_rad.sum(), rel=1e-13)


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_noise_shapes_match_a_simulated_random_walk(dimension):
    """Terms against 4,000 noisy walks of 60 rows, each row cut in eight with noise at the joints."""
    t, rows, _ = _wander(dimension)
    group = frames.group(dimension)
    rng = np.random.default_rng(9)
    tangent = rows if dimension == 2 else rows[:, [3, 4, 5, 0, 1, 2]]
    turns, moves = (slice(2, 3), slice(0, 2)) if dimension == 2 else (slice(0, 3), slice(3, 6))
    theta = np.array([0.004, 0.003, 0.002, 0.003, 0.002])
    runs, cuts = 4_000, 8
    pose = group.identity(runs)
    for k in range(len(t) - 1):
        step = tangent[k] * (t[k + 1] - t[k]) / cuts
        path, turn = np.linalg.norm(step[moves]), np.linalg.norm(step[turns])
        h = (t[k + 1] - t[k]) / cuts
        spread = np.empty(group.dof)
        spread[moves] = np.sqrt(theta[0] ** 2 * path + theta[3] ** 2 * h)
        spread[turns] = np.sqrt(theta[1] ** 2 * path + theta[2] ** 2 * turn + theta[4] ** 2 * h)
        for _ in range(cuts):
            pose = group.retract(pose, step)
            pose = group.retract(pose, spread * rng.normal(size=(runs, group.dof)))
    made = increments(_twist(t, rows), t, t[[0, -1]], dimension)
    error = group.local(made.delta[0], pose)
    want = np.tensordot(made.basis[0], theta**2, axes=(0, 0))
    root = np.linalg.cholesky(want)
    white = np.linalg.solve(root, error.T)
    got = white @ white.T / runs
    # sampling error of a variance: sqrt(2 / 4000) = 0.022; four of them
    assert np.abs(got - np.eye(group.dof)).max() < 0.09


def test_white_twist_noise_matches_simulation():
    t, rows, _ = _wander(2, n=20)
    rng = np.random.default_rng(10)
    sigma = rng.uniform(0.02, 0.05, rows.shape)
    runs = 4_000
    pose = frames.SE2.identity(runs)
    for k in range(len(t) - 1):
        noisy = rows[k] + sigma[k] * rng.normal(size=(runs, 3))
        pose = frames.SE2.retract(pose, noisy * (t[k + 1] - t[k]))
    made = increments(_twist(t, rows, sigma), t, t[[0, -1]], 2)
    white = np.linalg.solve(
        np.linalg.cholesky(made.row_cov[0]), frames.SE2.local(made.delta[0], pose).T
    )
    assert np.abs(white @ white.T / runs - np.eye(3)).max() < 0.09


def test_a_keyframe_inside_a_row_divides_its_noise_by_time():
    t = np.array([0.0, 1.0])
    rows = np.array([[0.0, 0.0, 0.0], [0.0, 0.0, 0.0]])
    sigma = np.full((2, 3), 0.2)
    made = increments(_pose(t, rows, sigma), t, np.array([0.0, 0.25, 1.0]), 2)
    np.testing.assert_allclose(made.row_cov[0], 0.25 * 0.04 * np.eye(3), rtol=0, atol=1e-15)
    np.testing.assert_allclose(made.row_cov[1], 0.75 * 0.04 * np.eye(3), rtol=0, atol=1e-15)


def test_a_sideways_sigma_that_is_not_given_is_that_of_the_forward_speed():
    t = np.array([0.0, 1.0, 2.0])
    rows = np.array([[1.0, np.nan, 0.0]] * 3)
    sigma = np.array([[0.1, np.nan, 0.05]] * 3)
    made = increments(_twist(t, rows, sigma), t, t[:2], 2)
    np.testing.assert_allclose(made.delta[0], [1.0, 0.0, 0.0], rtol=0, atol=1e-15)
    # heading rate wrong by s during one second at 1 m/s: half a metre of lever
    assert made.row_cov[0][1, 1] == pytest.approx(0.1**2 + (0.5 * 0.05) ** 2, rel=1e-12)


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_accumulated_covariance_gives_back_what_was_accumulated(dimension):
    """A chain of factors in gtsam accumulates; its table covariance is what a log would carry."""
    t, _, table = _wander(dimension, n=12)
    group = frames.group(dimension)
    rng = np.random.default_rng(6)
    poses = group.from_rows(table)
    body = np.zeros((len(t), group.dof, group.dof))
    noise = []
    for k in range(1, len(t)):
        root = rng.normal(0.0, 0.05, (group.dof, group.dof))
        noise.append(root @ root.T + 1e-4 * np.eye(group.dof))
        back = group.adjoint(group.between(poses[k], poses[k - 1]))
        body[k] = back @ body[k - 1] @ back.T + noise[-1]
    odometry = _pose(t, table, acc_cov=group.covariance_to_table(poses, body))
    made = increments(odometry, t, t, dimension)
    assert made.n_ignored == 0
    np.testing.assert_allclose(made.row_cov, noise, rtol=0, atol=1e-12)
    whole = increments(odometry, t, t[[0, -1]], dimension)
    np.testing.assert_allclose(whole.row_cov[0], body[-1], rtol=0, atol=1e-11)


def test_accumulated_covariance_that_does_not_grow_is_ignored_and_counted():
    t, _, table = _wander(2, n=6)
    acc = np.tile(np.eye(3), (6, 1, 1))
    acc[3:] += np.diag([9.0, 9.0, 1.0])
    made = increments(_pose(t, table, acc_cov=acc), t, t, 2)
    assert made.n_ignored == 4
    assert np.isfinite(made.row_cov[2]).all()
    assert np.isnan(made.row_cov[[0, 1, 3, 4]]).all()


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_gaps_are_found_and_priced_by_the_robots_own_speed(dimension):
    group = frames.group(dimension)
    t = np.concatenate([np.arange(0.0, 10.0, 0.1), np.arange(12.0, 20.0, 0.1)])
    rows = np.zeros((len(t), group.dof))
    rows[:, 0], rows[:, -1] = 2.0, 0.3
    made = increments(_twist(t, rows), t, np.array([0.0, 5.0, 15.0, 19.0]), dimension)
    np.testing.assert_array_equal(made.gap, [False, True, False])
    np.testing.assert_allclose(made.gap_s, [0.1, 2.1, 0.1], rtol=0, atol=1e-9)
    assert (made.gap_cov[[0, 2]] == 0.0).all()
    turn = 2 if dimension == 2 else 0
    assert made.gap_cov[1, turn, turn] == pytest.approx((0.3 * 2.1) ** 2, rel=1e-9)
    assert np.linalg.eigvalsh(made.gap_cov[1]).min() > 0.0
    # a keyframe within the gap divides the variance, it does not lessen it
    cut = increments(_twist(t, rows), t, np.array([5.0, 11.0, 15.0]), dimension)
    assert cut.gap.all()
    assert cut.gap_cov[:, turn, turn].sum() == pytest.approx((0.3 * 2.1) ** 2, rel=1e-9)
    wide = increments(_twist(t, rows), t, np.array([0.0, 19.0]), dimension, max_gap_s=3.0)
    assert not wide.gap.any() and (wide.gap_cov == 0.0).all()


def test_time_outside_the_rows_is_a_gap():
    t = np.arange(0.0, 10.0, 0.1)
    rows = np.tile([1.0, 0.0, 0.2], (len(t), 1))
    made = increments(_twist(t, rows), t, np.array([-2.0, 5.0, 13.0]), 2)
    assert made.gap.all()
    # the last row holds for one period, until 10.0
    np.testing.assert_allclose(made.gap_cov[:, 2, 2], [(0.2 * 2) ** 2, (0.2 * 3) ** 2], rtol=1e-9)


@pytest.mark.parametrize("dimension", DIMENSIONS)
@pytest.mark.parametrize("scales", [(1.0, 1.0), (0.9, 1.2)])
def test_sensitivities_are_the_finite_differences(dimension, scales):
    t, rows, table = _wander(dimension)
    t = t - START  # a lag of a microsecond must not be lost in the stamps
    group = frames.group(dimension)
    key = np.sort(np.random.default_rng(4).uniform(t[0], t[-1], 9))
    for odometry in (_twist(t, rows), _pose(t, table)):
        got = increment_jacobians(odometry, t, key, dimension, *scales)
        for k in range(3):
            ends = []
            for sign in (-1, 1):
                a, b, lag = (v + sign * 1e-6 * (k == i) for i, v in enumerate((*scales, 0.0)))
                ends.append(increments(odometry, t + lag, key, dimension, a, b).delta)
            want = group.local(*ends) / 2e-6
            # rounding of unit quantities over the step: 2e-16 / 1e-6, times the way
            np.testing.assert_allclose(got[..., k], want, rtol=0, atol=3e-9)


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_a_million_rows_return_to_the_start(dimension):
    """A circle driven a thousand times, in steps that a float cannot hold exactly."""
    n, turns = 1_000_000, 1000
    t = np.arange(n + 1.0)
    rows = np.zeros((n + 1, 3 if dimension == 2 else 6))
    rows[:, 0], rows[:, -1] = 0.01, 2 * np.pi * turns / n
    made = cumulative(_twist(t, rows), t, dimension)
    end = made.at(t[-1:])
    group = frames.group(dimension)
    # a million roundings of 1e-16 in yaw, over a radius of 1.6 m
    assert np.abs(group.log(end)).max() < 1e-9
    if dimension == 3:
        assert np.abs(end[0, :, :3] @ end[0, :, :3].T - np.eye(3)).max() < 1e-15


def test_equal_stamps_lose_no_motion():
    t = np.array([0.0, 1.0, 1.0, 2.0])
    rows = np.array([[0.0, 0, 0], [1.0, 0, 0], [1.5, 0, 0], [2.5, 0, 0]])
    made = increments(_pose(t, rows), t, np.array([0.5, 1.5]), 2)
    np.testing.assert_allclose(made.delta[0], [1.5, 0.0, 0.0], rtol=0, atol=1e-15)


def test_one_row_stands_still():
    t = np.array([3.0])
    for odometry in (_twist(t, np.ones((1, 3))), _pose(t, np.ones((1, 3)))):
        made = increments(odometry, t, np.array([2.0, 3.0, 4.0]), 2)
        np.testing.assert_array_equal(made.delta, np.zeros((2, 3)))


@pytest.mark.parametrize(
    "t", [np.zeros(0), np.array([0.0, 2.0, 1.0]), np.array([0.0, np.nan, 1.0])]
)
def test_rows_that_cannot_be_used_are_refused(t):
    with pytest.raises(SurveyError, match="mend"):
        dead_reckon(_twist(t, np.zeros((len(t), 3))), t, np.zeros(1), 2)

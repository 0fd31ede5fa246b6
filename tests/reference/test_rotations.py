"""Rotations and frame conventions against values computed by other libraries or stated by others."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from jointmap import frames

# Values printed to eight digits by scipy.spatial.transform and by gtsam.Rot3, which agree.
EXP_123 = np.array(
    [
        [0.9357548, -0.28316496, 0.21019171],
        [0.30293271, 0.95058062, -0.06803132],
        [-0.18054008, 0.12733457, 0.97529031],
    ]
)


def _turn(vector):
    return frames.SE3.exp(np.append(vector, np.zeros(3)))[:, :3]


def test_exp_of_a_rotation_vector():
    got = _turn([0.1, 0.2, 0.3])
    np.testing.assert_allclose(got, EXP_123, rtol=0, atol=5.1e-9)
    np.testing.assert_allclose(got, Rotation.from_rotvec([0.1, 0.2, 0.3]).as_matrix(), atol=1e-15)
    np.testing.assert_allclose(got, gtsam.Rot3.Expmap([0.1, 0.2, 0.3]).matrix(), atol=1e-15)


def test_quaternion_of_one_radian_about_1_2_3():
    got = frames.matrix_to_quaternion(_turn(np.array([1.0, 2.0, 3.0]) / np.sqrt(14.0)))
    want = [0.12813186, 0.25626373, 0.38439559, 0.87758256]
    np.testing.assert_allclose(got, want, rtol=0, atol=5.1e-9)


@pytest.mark.parametrize(
    ("diagonal", "vector"), [((-1, -1, 1), (0, 0, np.pi)), ((1, -1, -1), (np.pi, 0, 0))]
)
def test_log_of_half_turns(diagonal, vector):
    pose = frames.SE3.build(np.diag(diagonal), np.zeros(3))
    np.testing.assert_allclose(frames.SE3.log(pose)[:3], vector, rtol=0, atol=1e-15)


@pytest.mark.parametrize("angle", [0.0, 1e-8, 1e-4, np.pi - 1e-6, np.pi])
def test_identities_at_critical_angles(angle):
    w = angle * np.array([2.0, -1.0, 2.0]) / 3.0
    other = _turn([0.4, -1.1, 0.7])
    r = _turn(w)
    assert np.abs(r @ _turn(-w) - np.eye(3)).max() < 1e-15
    assert np.abs(other @ r @ other.T - _turn(other @ w)).max() < 2e-15
    left, right = (frames.SE3.right_jacobian(np.append(s * w, np.zeros(3))) for s in (-1, 1))
    # J_l(w) = J_r(-w) = R J_r(w)
    assert np.abs(left[:3, :3] - r @ right[:3, :3]).max() < 2e-15
    back = frames.SE3.log(frames.SE3.build(r, np.zeros(3)))[:3]
    assert np.cos(np.linalg.norm(back)) == pytest.approx((np.trace(r) - 1) / 2, abs=1e-15)
    assert np.linalg.norm(back) == pytest.approx(angle, abs=1e-15)


def test_tangent_of_space_is_rotation_first():
    # gtsam 4.3: Pose3.Expmap([0, 0, pi/2, 1, 0, 0]) moves to (2/pi, 2/pi, 0).
    xi = np.array([0.0, 0.0, np.pi / 2, 1.0, 0.0, 0.0])
    got = frames.SE3.exp(xi)[:, 3]
    np.testing.assert_allclose(got, [2 / np.pi, 2 / np.pi, 0.0], rtol=0, atol=1e-15)
    np.testing.assert_allclose(got, gtsam.Pose3.Expmap(xi).translation(), rtol=0, atol=1e-15)


def test_retraction_of_the_plane_is_the_exponential():
    # Other builds of gtsam retract to (1, 0, pi/2); the tangent of this package must be theirs.
    xi = np.array([1.0, 0.0, np.pi / 2])
    theirs = gtsam.Pose2().retract(xi)
    got = frames.SE2.retract(frames.SE2.identity(), xi)
    np.testing.assert_allclose(got, [2 / np.pi, 2 / np.pi, np.pi / 2], rtol=0, atol=1e-15)
    np.testing.assert_allclose(got, [theirs.x(), theirs.y(), theirs.theta()], rtol=0, atol=1e-15)


@pytest.mark.parametrize("dimension", [2, 3])
def test_table_covariance_is_about_fixed_axes(dimension):
    """REP 103: covariance of x, y, z and rotation about fixed axes. Sampled, not derived."""
    group = frames.group(dimension)
    rng = np.random.default_rng(11)
    pose = group.exp(rng.normal(0.0, 1.5, group.dof))
    root = rng.normal(0.0, 1e-4, (group.dof, group.dof))
    body = root @ root.T
    sample = group.retract(pose, rng.normal(size=(200_000, group.dof)) @ root.T)
    moved = group.translation(sample) - group.translation(pose)
    if dimension == 2:
        turned = frames.wrap(sample[:, 2] - pose[2])[:, None]
    else:
        # the rotation that takes the pose to the sample, about axes that do not turn with the body
        turned = Rotation.from_matrix(sample[:, :, :3] @ pose[:, :3].T).as_rotvec()
    got = np.cov(np.concatenate([moved, turned], axis=1).T)
    want = group.covariance_to_table(pose, body)
    sigma = np.sqrt(np.diag(want))
    # correlation-like scaling; the sampling error of a covariance is below 1.5 / sqrt(n) = 0.0034,
    # five of them for the largest of 36 entries
    assert np.abs((got - want) / np.outer(sigma, sigma)).max() < 0.017

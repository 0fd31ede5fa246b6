"""Joint covariances from the stored state against gtsam.Marginals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from graph_reference import made

from jointmap import frames
from jointmap.errors import SurveyError
from jointmap.products.joint import JointState, joint_covariance
from jointmap.trust.draws import draw

#: Two exact algorithms in double precision, one of them through stored tables.
RELATIVE = 1e-7


@pytest.fixture(scope="module", params=[2, 3])
def small(request):
    return request.param, made(request.param, poses=60)


def test_relative_pose_covariance_equals_gtsam_joint_marginals(small):
    dimension, case = small
    group = frames.group(dimension)
    a_s, b_s = np.array([0.0, 3.0, 7.0]), np.array([5.0, 1.0, 7.0])
    answer = case.reference.relative(("heron", a_s), ("otter", b_s))
    for n, (i, j) in enumerate(zip(a_s.astype(int), b_s.astype(int) + 30, strict=True)):
        between = group.between(case.moved[i], case.moved[j])
        h_i, h_j = -group.adjoint(group.inverse(between)), np.eye(group.dof)
        joint = case.marginals.jointMarginalCovariance([i, j])
        wanted = h_i @ joint.at(i, i) @ h_i.T + h_j @ joint.at(j, j) @ h_j.T
        wanted += h_i @ joint.at(i, j) @ h_j.T + h_j @ joint.at(i, j).T @ h_i.T
        table = group.covariance_to_table(between, wanted)
        np.testing.assert_allclose(answer.cov[n], table, rtol=0, atol=RELATIVE * table.max())
        np.testing.assert_allclose(answer.pose[n], group.to_rows(between), rtol=0, atol=1e-12)


def test_joint_covariance_of_poses_and_landmarks_equals_the_dense_one(small):
    dimension, case = small
    group = frames.group(dimension)
    joint = case.reference.joint
    where = joint.locate(np.array([0, 1, 1]), np.array([2.0, 0.0, 6.0]))
    names = ("plate-003", "plate-011")
    found = joint_covariance(joint, where, names)
    keys = [2, 30, 36, 60 + 3, 60 + 11]
    turn = group.rotation(case.reference.state["map_shift"])[0]
    axes = [group.table_axes(case.moved[k]) for k in keys[:3]] + [turn, turn]
    wanted = np.block(
        [
            [axes[p] @ case.block(i, j) @ axes[q].T for q, j in enumerate(keys)]
            for p, i in enumerate(keys)
        ]
    )
    np.testing.assert_allclose(found, wanted, rtol=0, atol=RELATIVE * wanted.max())


def test_between_keyframes_every_marginal_is_the_trajectorys(small):
    _, case = small
    joint = case.reference.joint
    stamps = np.array([0.0, 0.25, 0.5, 3.9, 7.0])
    where = joint.locate("otter", stamps)
    np.testing.assert_allclose(joint.cross_covariance(where, where), where.cov, rtol=0, atol=1e-12)


def test_covariance_of_many_stamps_is_positive_semi_definite(small):
    _, case = small
    joint = case.reference.joint
    stamps = np.linspace(0.0, 7.0, 15)
    whole = joint_covariance(joint, joint.locate("heron", stamps), ("plate-000",))
    assert np.linalg.eigvalsh(whole)[0] > -1e-9 * np.trace(whole)


def test_a_pose_relative_to_itself_is_exact(small):
    _, case = small
    answer = case.reference.relative(("heron", 4.5), ("heron", 4.5))
    assert np.abs(answer.cov).max() < 1e-12


def test_trajectory_of_another_scale_keeps_correlations(small):
    """An enlarged trajectory covariance enlarges every relative one alike."""
    _, case = small
    plain = case.reference

    wider = {n: replace(t, cov=4.0 * t.cov) for n, t in plain.trajectories.items()}
    other = replace(plain, trajectories=wider)
    np.testing.assert_allclose(other.joint.scale, 4.0, rtol=1e-6)
    a = plain.relative(("heron", 1.0), ("otter", 5.0)).cov
    b = other.relative(("heron", 1.0), ("otter", 5.0)).cov
    np.testing.assert_allclose(b, 4.0 * a, rtol=1e-5, atol=1e-9 * a.max())


def test_unknown_stamps_and_robots(small):
    _, case = small
    answer = case.reference.relative(("heron", [0.0, 99.0]), ("otter", 1.0))
    assert np.isnan(answer.cov[1]).all() and answer.reason[1] and not answer.reason[0]
    with pytest.raises(KeyError, match="wren"):
        case.reference.relative(("wren", 0.0), ("otter", 1.0))


def test_reference_without_state_says_so(small):

    _, case = small
    with pytest.raises(SurveyError, match="jointmap fuse"):
        JointState.of(replace(case.reference, state={}))


def test_draws_have_the_factors_covariance(small):
    """R^-1 times the identity, squared, is the whole covariance: no statistics needed."""
    _, case = small
    factor = case.reference.joint.factor
    root = draw(factor, np.eye(factor.tree.n_scalars))
    covariance = factor.solve(np.eye(factor.tree.n_scalars))
    np.testing.assert_allclose(root @ root.T, covariance, rtol=0, atol=1e-10 * covariance.max())


def test_many_pairs_by_columns_equal_pairs_by_paths(small):
    """Both ways to a cross-covariance: one solve per column, one path per pair."""
    _, case = small
    joint = case.reference.joint
    first = joint.locate("heron", np.full(60, 0.5))
    others = joint.locate("otter", np.linspace(0.0, 29.0, 60))
    many = joint.cross_covariance(first, others)
    for k in (0, 17, 59):
        one = joint.cross_covariance(first.take([k]), others.take([k]))[0]
        np.testing.assert_allclose(many[k], one, rtol=0, atol=1e-9 * np.abs(one).max())

"""Laws of the groups of rigid motions, near zero, near half a turn and in between."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import expm
from scipy.spatial.transform import Rotation

from jointmap import frames

# Positions stay within ten metres: an absolute 1e-12 is then some thousand roundings.
TOLERANCE = 1e-12
ANGLES = (0.0, 1e-12, 1e-8, 1e-4, 1e-2, 0.5, 0.999999, 1.0, 1.000001, 2.0, np.pi - 1e-6, np.pi)
GROUPS = (frames.SE2, frames.SE3)

angles = st.one_of(
    st.sampled_from(ANGLES),
    st.floats(0.0, float(np.pi), allow_subnormal=False),
    st.floats(1e-15, 1e-3),
    st.floats(1e-15, 1e-3).map(lambda a: float(np.pi) - a),
)
numbers = st.floats(-10.0, 10.0, allow_subnormal=False)


@st.composite
def tangents(draw, group, largest=np.pi):
    """Body tangents with a rotation of at most ``largest``."""
    angle = min(draw(angles), largest)
    moved = np.array(draw(st.tuples(*[numbers] * group.dim)))
    if group.dim == 2:
        return np.append(moved, draw(st.sampled_from((-1.0, 1.0))) * angle)
    axis = np.array(draw(st.tuples(*[numbers] * 3)))
    length = np.linalg.norm(axis)
    axis = axis / length if length > 1e-3 else np.array([0.0, 0.0, 1.0])
    return np.concatenate([angle * axis, moved])


def on_both(test):
    """Run a law that takes a group and a function from Hypothesis' data on both groups."""
    # no deadline: a busy machine is no fault of the law
    law = settings(deadline=None)(given(st.data())(test))
    return pytest.mark.parametrize("group", GROUPS, ids=("SE2", "SE3"))(law)


def same(group, a, b, tolerance=TOLERANCE):
    """Whether two poses are equal as motions (yaw may differ by whole turns)."""
    move = np.abs(group.translation(a) - group.translation(b)).max()
    turn = np.abs(group.rotation(a) - group.rotation(b)).max()
    return max(move, turn) < tolerance


def hat(group, xi):
    """Matrix of a tangent, of which the exponential is the homogeneous pose matrix."""
    n = group.dim
    out = np.zeros((n + 1, n + 1))
    if n == 2:
        out[:2, :2] = [[0.0, -xi[2]], [xi[2], 0.0]]
        out[:2, 2] = xi[:2]
    else:
        out[:3, :3], out[:3, 3] = frames.skew(xi[:3]), xi[3:]
    return out


def homogeneous(group, pose):
    n = group.dim
    out = np.eye(n + 1)
    out[:n, :n], out[:n, n] = group.rotation(pose), group.translation(pose)
    return out


@on_both
def test_products_are_products_of_matrices(group, data):
    a, b = (group.exp(data.draw(tangents(group))) for _ in range(2))
    want = homogeneous(group, a) @ homogeneous(group, b)
    assert np.abs(homogeneous(group, group.compose(a, b)) - want).max() < 1e-13
    assert same(group, group.compose(a, group.inverse(a)), group.identity(), 1e-13)
    assert same(group, group.compose(a, group.between(a, b)), b, 1e-13)


@on_both
def test_exp_is_the_matrix_exponential(group, data):
    xi = data.draw(tangents(group))
    want = expm(hat(group, xi))
    assert np.abs(homogeneous(group, group.exp(xi)) - want).max() < TOLERANCE


@on_both
def test_exp_undoes_log_and_log_undoes_exp(group, data):
    xi = data.draw(tangents(group))
    pose = group.exp(xi)
    assert same(group, group.exp(group.log(pose)), pose)
    assert same(group, group.compose(pose, group.exp(-xi)), group.identity())
    turn = np.abs(xi[2]) if group.dim == 2 else np.linalg.norm(xi[:3])
    if turn < np.pi - 1e-3:
        # nearer to half a turn the translation depends on the angle's last digits through cot
        assert np.abs(group.log(pose) - xi).max() < TOLERANCE


@on_both
def test_adjoint_moves_a_tangent_across_a_pose(group, data):
    pose, xi = group.exp(data.draw(tangents(group))), data.draw(tangents(group, 1.0)) / 10
    left = group.compose(pose, group.exp(xi))
    right = group.compose(group.exp(group.adjoint(pose) @ xi), pose)
    assert same(group, left, right)
    other = group.exp(data.draw(tangents(group)))
    product = group.adjoint(pose) @ group.adjoint(other)
    assert np.abs(group.adjoint(group.compose(pose, other)) - product).max() < TOLERANCE * 10


@on_both
def test_right_jacobian_is_the_integral_of_adjoints(group, data):
    # J_r(xi) = integral over s in [0, 1] of Ad(exp(-s xi)); Gauss-Legendre with 20 nodes is exact
    # to rounding for half a turn.
    xi = data.draw(tangents(group))
    nodes, weights = np.polynomial.legendre.leggauss(20)
    steps = group.exp(-0.5 * (nodes[:, None] + 1) * xi)
    want = np.einsum("k,kij->ij", 0.5 * weights, group.adjoint(steps))
    jacobian = group.right_jacobian(xi)
    assert np.abs(jacobian - want).max() < TOLERANCE
    product = jacobian @ group.right_jacobian_inverse(xi)
    assert np.abs(product - np.eye(group.dof)).max() < 10 * TOLERANCE


@on_both
def test_interpolation_divides_the_way(group, data):
    a, b = group.exp(data.draw(tangents(group))), group.exp(data.draw(tangents(group, 3.0)))
    s = data.draw(st.floats(0.0, 1.0))
    b = group.compose(a, b)
    assert same(group, group.interpolate(a, b, 0.0), a)
    assert same(group, group.interpolate(a, b, 1.0), b)
    half = group.interpolate(a, b, s)
    assert np.abs(group.local(a, half) - s * group.local(a, b)).max() < 10 * TOLERANCE


@on_both
def test_points_go_there_and_back(group, data):
    pose = group.exp(data.draw(tangents(group)))
    point = np.array(data.draw(st.tuples(*[numbers] * group.dim)))
    there = group.transform(pose, point)
    want = homogeneous(group, pose) @ np.append(point, 1.0)
    assert np.abs(there - want[:-1]).max() < 1e-13
    assert np.abs(group.inverse_transform(pose, there) - point).max() < 1e-13


@on_both
def test_rows_and_covariances_go_there_and_back(group, data):
    pose = group.exp(data.draw(tangents(group)))
    assert same(group, group.from_rows(group.to_rows(pose)), pose)
    root = np.array(data.draw(st.lists(numbers, min_size=36, max_size=36)))
    root = root[: group.dof**2].reshape(group.dof, group.dof)
    covariance = root @ root.T
    back = group.covariance_from_table(pose, group.covariance_to_table(pose, covariance))
    assert np.abs(back - covariance).max() < 1e-11  # entries reach 600


@given(st.floats(-1e3, 1e3))
def test_wrap_keeps_the_direction(angle):
    wrapped = frames.wrap(angle)
    assert -np.pi < wrapped <= np.pi
    assert abs(np.exp(1j * wrapped) - np.exp(1j * angle)) < TOLERANCE
    assert frames.wrap(wrapped) == wrapped


@settings(deadline=None)
@given(angles, st.tuples(numbers, numbers, numbers))
def test_quaternions_agree_with_scipy(angle, axis):
    length = np.linalg.norm(axis)
    vector = angle * (np.array(axis) / length if length > 1e-3 else np.array([1.0, 0.0, 0.0]))
    rotation = Rotation.from_rotvec(vector)
    q = frames.matrix_to_quaternion(rotation.as_matrix())
    assert abs(abs(q @ rotation.as_quat()) - 1.0) < 1e-14
    assert q[3] >= 0
    assert np.abs(frames.quaternion_to_matrix(q) - rotation.as_matrix()).max() < 1e-14


@pytest.mark.parametrize("group", GROUPS, ids=("SE2", "SE3"))
@pytest.mark.parametrize("angle", [0.3, 1.0, 2.5, np.pi - 1e-6])
def test_agrees_with_gtsam(group, angle):
    rng = np.random.default_rng(7)
    kind = gtsam.Pose2 if group.dim == 2 else gtsam.Pose3
    for _ in range(20):
        xi = rng.normal(size=group.dof)
        turn = slice(2, 3) if group.dim == 2 else slice(0, 3)
        xi[turn] *= angle / np.linalg.norm(xi[turn])
        theirs, ours = kind.Expmap(xi), group.exp(xi)
        assert np.abs(homogeneous(group, ours) - theirs.matrix()).max() < 1e-12
        assert np.abs(group.log(ours) - kind.Logmap(theirs)).max() < 1e-9
        assert np.abs(group.adjoint(ours) - theirs.AdjointMap()).max() < 1e-12
        assert np.abs(group.right_jacobian(xi) - kind.ExpmapDerivative(xi)).max() < 1e-12
        step = rng.normal(0.0, 0.1, group.dof)
        moved = homogeneous(group, group.retract(ours, step))
        assert np.abs(moved - theirs.retract(step).matrix()).max() < 1e-12


@pytest.mark.parametrize("group", GROUPS, ids=("SE2", "SE3"))
def test_broadcasts_over_leading_axes(group):
    rng = np.random.default_rng(2)
    a = group.exp(rng.normal(size=(4, 1, group.dof)))
    b = group.exp(rng.normal(size=(1, 5, group.dof)))
    many = group.compose(a, b)
    assert many.shape == (4, 5, *group.shape)
    assert same(group, many[2, 3], group.compose(a[2, 0], b[0, 3]), 1e-15)
    points = rng.normal(size=(5, group.dim))
    assert group.transform(a, points).shape == (4, 5, group.dim)
    assert group.identity().shape == group.shape
    assert group.identity(3).shape == (3, *group.shape)


def test_group_of_other_dimensions_is_refused():
    with pytest.raises(ValueError, match="2 or 3"):
        frames.group(4)

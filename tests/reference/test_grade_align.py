"""Alignment against published and independently computed values."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from jointmap.grade.align import align, projection

# Umeyama 1991, example of section IV: three points in the plane and their mirrored image.
UMEYAMA_X = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 2.0]])
UMEYAMA_Y = np.array([[0.0, 0.0], [-1.0, 0.0], [0.0, 2.0]])
# Four points; three of them moved exactly by yaw 30 degrees and (1, 2, 3), the last perturbed.
POINTS = np.array([[0.0, 0, 0], [4, 0, 1], [0, 3, 2], [5, 5, 0.5]])
MOVED = np.array(
    [[1.0, 2, 3], [4.46410162, 4, 4], [-0.5, 4.59807621, 5], [2.83012702, 8.83012702, 3.5]]
)
EQUAL = np.ones(4)


def test_umeyama_example_with_scale():
    """R, t and c as in the paper (rotation .832 / .555, c .721)."""
    found = align(UMEYAMA_X, UMEYAMA_Y, np.ones(3), 3, scale=True)
    np.testing.assert_allclose(found.rotation, [[0.83205, 0.5547], [-0.5547, 0.83205]], atol=5e-6)
    np.testing.assert_allclose(found.translation, [-0.8, 0.4], atol=1e-12)
    assert found.scale == pytest.approx(0.721110, abs=5e-7)
    assert found.dof == 4
    residual = UMEYAMA_Y - found.points(UMEYAMA_X)
    assert (residual**2).sum(axis=1).mean() == pytest.approx(8 / 15, abs=1e-12)


def test_umeyama_example_rigid():
    found = align(UMEYAMA_X, UMEYAMA_Y, np.ones(3), 3)
    np.testing.assert_allclose(found.translation, [-0.98048, 0.29687], atol=5e-6)
    residual = UMEYAMA_Y - found.points(UMEYAMA_X)
    assert (residual**2).sum(axis=1).mean() == pytest.approx(0.619755, abs=5e-7)


def test_no_reflection():
    """Mirrored points in space: the best orthogonal matrix is a reflection, ours is a rotation."""
    mirrored = POINTS * [1, 1, -1]
    found = align(POINTS, mirrored, EQUAL, 6)
    assert np.linalg.det(found.rotation) == pytest.approx(1.0)


@pytest.mark.parametrize("dof", [4, 6])
def test_exact_motion_comes_back(dof):
    found = align(POINTS, MOVED, EQUAL, dof)
    angle = Rotation.from_matrix(found.rotation).as_rotvec(degrees=True)
    np.testing.assert_allclose(angle, [0, 0, 30], atol=1e-6)
    np.testing.assert_allclose(found.translation, [1, 2, 3], atol=1e-7)


def test_perturbed_points_four_and_six_degrees_of_freedom():
    """Values computed with SciPy (six) and by the closed form for heading (four)."""
    y = MOVED.copy()
    y[3] += [0.3, -0.2, 0.1]
    four = align(POINTS, y, EQUAL, 4)
    rotvec = Rotation.from_matrix(four.rotation).as_rotvec(degrees=True)
    np.testing.assert_allclose(rotvec, [0, 0, 27.949738], atol=5e-7)
    np.testing.assert_allclose(four.translation, [0.973393, 1.985765, 3.025], atol=5e-7)
    rms = np.sqrt(((y - four.points(POINTS)) ** 2).sum(axis=1).mean())
    assert rms == pytest.approx(0.118358, abs=5e-7)
    six = align(POINTS, y, EQUAL, 6)
    rotvec = Rotation.from_matrix(six.rotation).as_rotvec(degrees=True)
    np.testing.assert_allclose(rotvec, [0.58290, -0.75280, 27.89823], atol=5e-6)
    np.testing.assert_allclose(six.translation, [0.980051, 1.998300, 2.977969], atol=5e-7)
    own, _ = Rotation.align_vectors(y - y.mean(axis=0), POINTS - POINTS.mean(axis=0))
    np.testing.assert_allclose(six.rotation, own.as_matrix(), atol=1e-12)


@pytest.mark.parametrize(
    ("count", "dof", "scale"),
    [(4, 6, False), (4, 4, False), (4, 6, True), (10, 6, False), (10, 4, False), (50, 6, True)],
)
def test_alignment_spends_its_degrees_of_freedom(count, dof, scale):
    """E[SSE] = 3 K - q for unit noise, from 1500 samples (three standard errors)."""
    rng = np.random.default_rng(count + dof)
    y = rng.uniform(-10, 10, (count, 3))
    total = []
    for _ in range(1500):
        x = y + 0.01 * rng.standard_normal(y.shape)
        found = align(x, y, np.ones(count), dof, scale=scale)
        total.append((((y - found.points(x)) / 0.01) ** 2).sum())
    wanted = 3 * count - dof - int(scale)
    assert np.mean(total) == pytest.approx(wanted, abs=3 * np.sqrt(2 * wanted / 1500))


def test_projection_is_the_linear_part_of_the_alignment():
    rng = np.random.default_rng(3)
    y, weight = rng.uniform(-5, 5, (30, 3)), rng.uniform(0.5, 2.0, 30)
    small = 1e-5 * rng.standard_normal(y.shape)
    found = align(y + small, y, weight, 6)
    linear = projection(y, weight, 6)
    kept = linear.remove(small, linear.fit(small))
    np.testing.assert_allclose(found.points(y + small) - y, kept, atol=2e-9)


def test_points_that_fix_no_rotation_align_nothing():
    line = np.linspace(0, 1, 5)[:, None] * [[1.0, 2.0, 3.0]]
    assert align(line, line, np.ones(5), 6) is None
    assert align(line[:1], line[:1], np.ones(1), 6) is None
    still = np.zeros((5, 2))
    assert align(still, still, np.ones(5), 3) is None

"""Alignment of point sets against published examples, scipy and its own statistics."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from jointmap.graph.start.align import align, minimal_points, refine

# S. Umeyama, IEEE PAMI 13(4), 1991, section III: the worked example. R, t and c are the paper's;
# the residual 8/15 follows by hand from them.
UMEYAMA_A = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 2.0]])
UMEYAMA_B = np.array([[0.0, 0.0], [-1.0, 0.0], [0.0, 2.0]])

# Four points turned by 30 degrees about the vertical and moved by (1, 2, 3), after the problem of
# B. K. P. Horn, JOSA A 4(4), 1987; the expected digits were computed with scipy 1.17.1.
HORN_P = np.array([[0, 0, 0], [4, 0, 1], [0, 3, 2], [5, 5, 0.5]], dtype=float)
HORN_Q = np.array(
    [
        [1.0, 2.0, 3.0],
        [4.46410162, 4.0, 4.0],
        [-0.5, 4.59807621, 5.0],
        [2.83012702, 8.83012702, 3.5],
    ]
)


def test_umeyama_similarity() -> None:
    fit = align(UMEYAMA_A, UMEYAMA_B, form="planar", with_scale=True)
    assert fit.rotation == pytest.approx(
        np.array([[0.83205, 0.5547], [-0.5547, 0.83205]]), abs=1e-5
    )
    assert fit.translation == pytest.approx([-0.8, 0.4], abs=1e-12)
    assert float(fit.scale) == pytest.approx(0.721110, abs=1e-6)
    assert float(fit.mean_square) == pytest.approx(8.0 / 15.0, abs=1e-12)
    assert np.linalg.det(fit.rotation) == pytest.approx(1.0)


def test_umeyama_rigid() -> None:
    fit = align(UMEYAMA_A, UMEYAMA_B, form="planar")
    assert fit.translation == pytest.approx([-0.98048, 0.29687], abs=1e-5)
    assert float(fit.mean_square) == pytest.approx(0.619755, abs=1e-6)


def test_a_reflection_is_never_returned() -> None:
    rng = np.random.default_rng(5)
    points = rng.normal(size=(7, 3))
    mirrored = points * [1.0, 1.0, -1.0]
    fit = align(points, mirrored, form="full")
    assert np.linalg.det(fit.rotation) == pytest.approx(1.0, abs=1e-12)
    expected, rssd = Rotation.align_vectors(
        mirrored - mirrored.mean(axis=0), points - points.mean(axis=0)
    )
    assert fit.rotation == pytest.approx(expected.as_matrix(), abs=1e-9)
    assert float(fit.mean_square) == pytest.approx(rssd**2 / 7, rel=1e-9)


@pytest.mark.parametrize("form", ["yaw", "full"])
def test_four_points_exact(form: str) -> None:
    fit = align(HORN_P, HORN_Q, form=form)  # type: ignore[arg-type]
    expected = Rotation.from_euler("z", 30, degrees=True).as_matrix()
    assert fit.rotation == pytest.approx(expected, abs=1e-8)
    assert fit.translation == pytest.approx([1.0, 2.0, 3.0], abs=1e-7)


def test_four_points_perturbed() -> None:
    moved = HORN_Q.copy()
    moved[3] += [0.3, -0.2, 0.1]
    fit = align(HORN_P, moved, form="yaw")
    yaw = np.degrees(np.arctan2(fit.rotation[1, 0], fit.rotation[0, 0]))
    assert yaw == pytest.approx(27.949738, abs=1e-6)
    assert fit.translation == pytest.approx([0.973393, 1.985765, 3.025], abs=1e-6)
    assert np.sqrt(fit.mean_square) == pytest.approx(0.118358, abs=1e-6)
    fit = align(HORN_P, moved, form="full")
    rotvec = np.degrees(Rotation.from_matrix(fit.rotation).as_rotvec())
    assert rotvec == pytest.approx([0.58290, -0.75280, 27.89823], abs=1e-5)
    assert fit.translation == pytest.approx([0.980051, 1.998300, 2.977969], abs=1e-6)
    assert np.sqrt(fit.mean_square) == pytest.approx(0.110225, abs=1e-6)


def test_weighted_full_alignment_equals_scipy() -> None:
    rng = np.random.default_rng(11)
    a = rng.normal(size=(40, 9, 3))
    turn = Rotation.random(40, rng=rng).as_matrix()
    b = np.einsum("kij,knj->kni", turn, a) + rng.normal(scale=0.2, size=a.shape)
    w = rng.uniform(0.2, 3.0, size=(40, 9))
    fit = align(a, b, w, form="full")
    for k in range(40):
        ca = a[k] - np.average(a[k], axis=0, weights=w[k])
        cb = b[k] - np.average(b[k], axis=0, weights=w[k])
        expected, _ = Rotation.align_vectors(cb, ca, weights=w[k])
        assert fit.rotation[k] == pytest.approx(expected.as_matrix(), abs=1e-9)


@pytest.mark.parametrize(("form", "used"), [("full", 6), ("yaw", 4)])
@pytest.mark.parametrize("count", [4, 10, 50])
def test_alignment_consumes_degrees_of_freedom(form: str, used: int, count: int) -> None:
    # E[SSE / sigma^2] = 3 K - q. The sum over M runs is chi-square with M (3 K - q) degrees of
    # freedom; five of its standard deviations are the bound (a fixed seed, one chance in 2e6).
    rng = np.random.default_rng(100 + count)
    trials = 4000
    a = rng.uniform(-5.0, 5.0, size=(trials, count, 3))
    sigma = 0.01
    b = a + rng.normal(scale=sigma, size=a.shape)
    fit = align(a, b, form=form)  # type: ignore[arg-type]
    total = float(np.mean(fit.mean_square * count) / sigma**2)
    dof = 3 * count - used
    assert total == pytest.approx(dof, abs=5.0 * np.sqrt(2.0 * dof / trials))


@pytest.mark.parametrize(("form", "dimension"), [("planar", 2), ("yaw", 3), ("full", 3)])
def test_covariance_is_that_of_the_estimate(form: str, dimension: int) -> None:
    rng = np.random.default_rng(17)
    trials, count, sigma = 6000, 6, 0.02
    a = np.broadcast_to(rng.uniform(-4, 4, size=(count, dimension)), (trials, count, dimension))
    b = a + rng.normal(scale=sigma, size=a.shape)
    weights = np.full((trials, count), sigma**-2)
    fit = align(a, b, weights, form=form)  # type: ignore[arg-type]
    yaw = np.arctan2(fit.rotation[:, 1, 0], fit.rotation[:, 0, 0])
    linear = np.einsum("kji,kj->ki", fit.rotation, fit.translation)
    if dimension == 2:
        xi = np.column_stack([linear, yaw])
    else:
        xi = np.column_stack([Rotation.from_matrix(fit.rotation).as_rotvec(), linear])
    free = np.diag(fit.covariance[0]) > 0
    assert np.count_nonzero(free) == {"planar": 3, "yaw": 4, "full": 6}[form]
    claimed = fit.covariance[0][np.ix_(free, free)]
    xi = xi[:, free]
    nees = np.einsum("ki,ij,kj->k", xi, np.linalg.inv(claimed), xi)
    # Mean of a chi-square of n degrees over the trials, five standard deviations.
    n = np.count_nonzero(free)
    assert nees.mean() == pytest.approx(n, abs=5 * np.sqrt(2 * n / trials))


@pytest.mark.parametrize(
    ("form", "points", "flat"),
    [
        ("planar", [[1, 1], [1, 1]], True),
        ("planar", [[1, 1], [2, 1]], False),
        ("planar", [[1, 1]], True),
        ("yaw", [[0, 0, 0], [0, 0, 5]], True),
        ("yaw", [[0, 0, 0], [1, 0, 5]], False),
        ("full", [[0, 0, 0], [1, 1, 1], [2, 2, 2]], True),
        ("full", [[0, 0, 0], [1, 1, 1], [2, 2, 2.5]], False),
        ("full", [[0, 0, 0], [1, 1, 1]], True),
    ],
)
def test_degenerate_sets_are_flagged(form: str, points: list[list[float]], flat: bool) -> None:
    array = np.array(points, dtype=float)
    fit = align(array, array + 3.0, form=form)  # type: ignore[arg-type]
    assert bool(fit.degenerate) is flat
    assert minimal_points(form) == (3 if form == "full" else 2)  # type: ignore[arg-type]


def test_refine_weighs_by_full_covariance() -> None:
    # Against scipy's general least squares on the same whitened residuals.
    from scipy.optimize import least_squares

    rng = np.random.default_rng(3)
    a = rng.uniform(-5, 5, size=(8, 3))
    root = rng.normal(size=(8, 3, 3)) * 0.2
    cov = root @ root.transpose(0, 2, 1) + 1e-3 * np.eye(3)
    noise = np.einsum("nij,nj->ni", np.linalg.cholesky(cov), rng.normal(size=(8, 3)))
    b = a @ Rotation.from_rotvec([0.2, -0.1, 1.0]).as_matrix().T + [1, 2, 3] + noise
    white = np.linalg.cholesky(np.linalg.inv(cov))

    def residual(x: np.ndarray) -> np.ndarray:
        r = b - a @ Rotation.from_rotvec(x[:3]).as_matrix().T - x[3:]
        return np.asarray(np.einsum("nji,nj->ni", white, r)).ravel()

    start = align(a, b, form="full")
    best = least_squares(residual, np.r_[0.2, -0.1, 1.0, 1, 2, 3], xtol=1e-14, ftol=1e-14)
    fit = refine(a, b, cov, start.rotation, start.translation, "full", steps=8)
    assert fit.rotation == pytest.approx(Rotation.from_rotvec(best.x[:3]).as_matrix(), abs=1e-6)
    assert fit.translation == pytest.approx(best.x[3:], abs=1e-6)

"""Triangulation of simulated landmarks with every mix of components."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation

from jointmap.graph.start.rows import COMPONENTS, SightingRows, residuals
from jointmap.graph.start.triangulate import triangulate

SIGMA = np.array([0.02, 0.02, 0.05, 0.05, 0.05, 0.05])


def _sight(
    landmarks: np.ndarray,
    origin: np.ndarray,
    rotation: np.ndarray,
    components: tuple[str, ...],
    rng: np.random.Generator,
    gross: float = 0.0,
) -> SightingRows:
    """Every landmark is seen from every pose."""
    n, m = len(landmarks), len(origin)
    d = origin.shape[1]
    group = np.tile(np.arange(n), m)
    at, turn = np.repeat(origin, n, axis=0), np.repeat(rotation, n, axis=0)
    local = np.einsum("nji,nj->ni", turn, landmarks[group] - at)
    x, y = local[:, 0], local[:, 1]
    z = local[:, 2] if d == 3 else np.zeros(len(x))
    exact = np.stack(
        [np.arctan2(y, x), np.arctan2(z, np.hypot(x, y)), np.sqrt(x**2 + y**2 + z**2), x, y, z],
        axis=1,
    )
    value = exact + rng.normal(size=exact.shape) * SIGMA
    bad = rng.random(len(value)) < gross
    value[bad] += rng.normal(size=(bad.sum(), 6)) * [1.0, 0.5, 5, 5, 5, 5]
    value[:, 0] = np.remainder(value[:, 0] + np.pi, 2 * np.pi) - np.pi
    value[:, [c not in components for c in COMPONENTS]] = np.nan
    return SightingRows(group, at, turn, value, np.broadcast_to(SIGMA, value.shape))


def _poses(d: int, m: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    s = np.linspace(0, 3.0, m)
    origin = np.stack([4 * s, 3 * np.sin(1.5 * s), 1.5 * np.cos(2.0 * s)], axis=1)[:, :d]
    yaw = rng.uniform(-np.pi, np.pi, size=m)
    if d == 2:
        return origin, np.stack([_turn(a) for a in yaw])
    tilt = np.column_stack([yaw, rng.normal(scale=0.2, size=(m, 2))])
    return origin, Rotation.from_euler("zyx", tilt).as_matrix()


def _turn(angle: float) -> np.ndarray:
    return np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])


CASES = [
    (2, ("bearing_rad", "range_m")),
    (2, ("bearing_rad",)),
    (2, ("range_m",)),
    (2, ("x_m", "y_m")),
    (3, ("bearing_rad", "elevation_rad", "range_m")),
    (3, ("bearing_rad", "elevation_rad")),
    (3, ("range_m",)),
    (3, ("x_m", "y_m", "z_m")),
    (3, ("bearing_rad", "range_m")),
]


@pytest.mark.parametrize(("d", "components"), CASES)
@pytest.mark.parametrize("gross", [0.0, 0.15])
def test_landmarks_are_found(d: int, components: tuple[str, ...], gross: float) -> None:
    rng = np.random.default_rng(7)
    landmarks = rng.uniform(-3, 14, size=(25, d)) * ([1, 1, 0.3][:d])
    origin, rotation = _poses(d, 40, rng)
    rows = _sight(landmarks, origin, rotation, components, rng, gross)
    found = triangulate(rows, 25)
    error = np.linalg.norm(found.position - landmarks, axis=1)
    # Tilted sensors and a curved path determine every landmark; nothing may be silently wrong:
    # the claim is inflated to 5 independent sightings of 40, so 4 sigma is generous.
    assert found.determined.mean() >= 0.9
    sigma = np.sqrt(np.trace(found.covariance, axis1=1, axis2=2))
    assert (error[found.determined] < 4.0 * sigma[found.determined]).all()
    assert np.median(error) < 0.1


def test_result_is_the_least_squares_optimum() -> None:
    # Without gross errors, Cauchy weighted: against scipy's loss of the same form.
    rng = np.random.default_rng(2)
    landmark = np.array([[5.0, 6.0]])
    origin, rotation = _poses(2, 15, rng)
    rows = _sight(landmark, origin, rotation, ("bearing_rad",), rng)
    found = triangulate(rows, 1, steps=40)

    def whitened(p: np.ndarray) -> np.ndarray:
        residual, _ = residuals(rows, np.broadcast_to(p, (15, 2)))
        return residual[:, 0]

    best = least_squares(whitened, [4.0, 5.0], loss="cauchy", f_scale=2.3849, xtol=1e-14)
    assert found.position[0] == pytest.approx(best.x, abs=1e-5)


def test_jacobian_against_differences() -> None:
    rng = np.random.default_rng(4)
    landmarks = rng.uniform(-5, 5, size=(6, 3))
    origin, rotation = _poses(3, 4, rng)
    rows = _sight(landmarks, origin, rotation, COMPONENTS, rng)
    at = landmarks[rows.group] + 0.1
    _, jacobian = residuals(rows, at)
    h = 1e-6
    for k in range(3):
        step = np.zeros(3)
        step[k] = h
        numeric = (residuals(rows, at + step)[0] - residuals(rows, at - step)[0]) / (2 * h)
        assert jacobian[:, :, k] == pytest.approx(numeric, abs=1e-5)


def test_straight_path_leaves_the_mirror_image() -> None:
    rng = np.random.default_rng(1)
    origin = np.stack([np.linspace(0, 8, 20), np.zeros(20)], axis=1)
    rotation = np.broadcast_to(np.eye(2), (20, 2, 2))
    landmark = np.array([[3.0, 4.0], [3.0, 0.0]])
    found = triangulate(_sight(landmark, origin, rotation, ("range_m",), rng), 2)
    assert not found.determined[0]
    pair = np.stack([found.position[0], found.alternative[0]])
    assert np.sort(pair[:, 1]) == pytest.approx([-4.0, 4.0], abs=0.15)
    assert pair[:, 0] == pytest.approx([3.0, 3.0], abs=0.15)


def test_no_parallax_is_undetermined_and_empty_groups_are_nan() -> None:
    rng = np.random.default_rng(1)
    origin = np.stack([np.linspace(0, 0.05, 20), np.zeros(20)], axis=1)
    rotation = np.broadcast_to(np.eye(2), (20, 2, 2))
    rows = _sight(np.array([[20.0, 1.0]]), origin, rotation, ("bearing_rad",), rng)
    found = triangulate(rows, 3)
    assert not found.determined.any()
    assert np.isnan(found.position[1:]).all()


def test_components_may_differ_by_row() -> None:
    rng = np.random.default_rng(9)
    landmarks = rng.uniform(-3, 14, size=(10, 2))
    origin, rotation = _poses(2, 30, rng)
    rows = _sight(landmarks, origin, rotation, ("bearing_rad", "range_m"), rng)
    value = rows.value.copy()
    value[::3, 0] = np.nan
    value[1::3, 2] = np.nan
    mixed = SightingRows(rows.group, rows.origin, rows.rotation, value, rows.sigma)
    found = triangulate(mixed, 10)
    assert found.determined.all()
    assert np.linalg.norm(found.position - landmarks, axis=1).max() < 0.15

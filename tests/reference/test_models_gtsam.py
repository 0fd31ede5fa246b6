"""Our residuals and Jacobians against GTSAM 4.3's own factors, row by row and as whole graphs."""

from __future__ import annotations

from dataclasses import replace

import gtsam
import gtsam_unstable
import numpy as np
import pytest
import scipy.linalg

from jointmap.frames import Group, group
from jointmap.graph.models import Linearised, linearise_block, relative_pose
from jointmap.graph.native import (
    NativeBlock,
    expressible,
    native_graph,
    native_values,
    noise_models,
)
from jointmap.graph.problem import Block, State
from jointmap.ingest.survey import Provenance
from jointmap.solve.kernels import Kernel, to_gtsam

ROWS, POSES, LANDMARKS = 20, 6, 5
LANDMARK_OF_TRACK = np.array([4, 2, 0, 1, 3, 2])
POLAR = ("bearing_rad", "range_m")
SPHERICAL = ("bearing_rad", "elevation_rad", "range_m")
XYZ = ("x_m", "y_m", "z_m")

# dimension, kind, components, oriented landmarks: all that GTSAM says in the same words.
SAME = [
    (2, "odometry", ("pose",), False),
    (3, "odometry", ("pose",), False),
    (2, "closure", ("pose",), False),
    (3, "closure", ("pose",), False),
    (2, "sighting", ("pose",), True),
    (3, "sighting", ("pose",), True),
    (2, "encounter", ("pose",), False),
    (2, "sighting", POLAR, False),
    (2, "sighting", POLAR, True),
    (2, "sighting", ("bearing_rad",), False),
    (2, "sighting", ("bearing_rad",), True),
    (2, "sighting", ("range_m",), False),
    (3, "sighting", ("range_m",), False),
    (3, "sighting", ("range_m",), True),
    (2, "encounter", POLAR, False),
    (2, "encounter", ("bearing_rad",), False),
    (2, "encounter", ("range_m",), False),
    (3, "encounter", ("range_m",), False),
    (2, "fix", XYZ[:2], False),
    (3, "fix", XYZ, False),
    (2, "control", XYZ[:2], False),
    (3, "control", XYZ, False),
    (2, "control", XYZ[:2], True),
    (3, "control", XYZ, True),
]


def _poses(g: Group, rng: np.random.Generator, n: int) -> np.ndarray:
    turn = g.rotation(g.exp(rng.normal(size=(n, g.dof)) * 1.5))
    return g.build(turn, rng.normal(size=(n, g.dim)) * 5.0)


def _state(g: Group, rng: np.random.Generator) -> State:
    turns = g.rotation(_poses(g, rng, LANDMARKS))
    return State(_poses(g, rng, POSES), rng.normal(size=(LANDMARKS, g.dim)) * 5.0, turns)


def _block(
    g: Group,
    rng: np.random.Generator,
    state: State,
    kind: str,
    components: tuple[str, ...],
    tags: bool,
) -> Block:
    """Rows between random ends whose observations are off by some tenths."""
    a = rng.integers(0, POSES, ROWS)
    tied = {"sighting": len(LANDMARK_OF_TRACK), "control": LANDMARKS}
    b = rng.integers(0, tied.get(kind, POSES), ROWS)
    if kind not in tied:
        b = (a + 1 + b % (POSES - 1)) % POSES
    posed = components == ("pose",)
    frame = g.identity(1)
    if kind == "fix" and g.dim == 3:
        frame = g.build(g.rotation(_poses(g, rng, ROWS)), rng.normal(size=(ROWS, 3)))
    obs = g.identity(ROWS) if posed else np.zeros((ROWS, len(components)))
    bare = Block(
        kind, 0, "", components, a, b, obs, frame, g.identity(1), np.zeros((ROWS, 1)), None, None,
        np.zeros(ROWS), Provenance((), np.zeros(ROWS, int), np.arange(ROWS)), a,
    )  # fmt: skip
    seen = _linearise(g, bare, state, tags).residual
    noise = rng.normal(size=seen.shape) * 0.2
    if posed and g.dim == 2:
        # GTSAM's derivative of the logarithm in the plane loses digits below (see further down).
        noise[:, 2] = rng.choice([-1.0, 1.0], ROWS) * rng.uniform(0.2, 0.6, ROWS)
    obs = g.retract(g.exp(seen), noise) if posed else seen + noise
    return replace(bare, obs=obs)


def _linearise(g: Group, block: Block, state: State, tags: bool) -> Linearised:
    return linearise_block(
        g, block, state.poses, state.landmarks, state.orientations, LANDMARK_OF_TRACK,
        np.full(LANDMARKS, tags),
    )  # fmt: skip


def _roots(rng: np.random.Generator, m: int) -> np.ndarray:
    """Lower triangular whitening (n, m, m) with correlations, the form of the solver."""
    return np.tril(rng.normal(size=(ROWS, m, m))) + 3.0 * np.eye(m)


def _keys(block: Block, side: str) -> np.ndarray:
    if side == "a":
        return block.a
    if block.kind == "sighting":
        return POSES + LANDMARK_OF_TRACK[block.b]
    return POSES + block.b if block.kind == "control" else block.b


def _dense(block: Block, lin: Linearised, whiten: np.ndarray, dims: np.ndarray) -> np.ndarray:
    """Augmented information [A b]^T [A b], keys in order, with b = -r."""
    start = np.concatenate([[0], np.cumsum(dims)])
    m = lin.residual.shape[1]
    rows = np.zeros((block.n, m, start[-1] + 1))
    for side, jac in (("a", lin.jac_a), ("b", lin.jac_b)):
        if jac is not None:
            for row, key in enumerate(_keys(block, side)):
                rows[row, :, start[key] : start[key] + dims[key]] += whiten[row] @ jac[row]
    rows[:, :, -1] = -(whiten @ lin.residual[:, :, None])[:, :, 0]
    flat = rows.reshape(-1, rows.shape[2])
    return flat.T @ flat


def _information(graph: gtsam.GaussianFactorGraph, dims: np.ndarray) -> np.ndarray:
    """GTSAM's augmented information, with zeros for keys that it does not have."""
    keys = sorted({key for i in range(graph.size()) for key in graph.at(i).keys()})  # noqa: SIM118
    ordering = gtsam.Ordering()
    for key in keys:
        ordering.push_back(key)
    part = graph.augmentedHessian(ordering)
    start = np.concatenate([[0], np.cumsum(dims)])
    at = np.concatenate([start[k] + np.arange(dims[k]) for k in keys] + [start[-1:]])
    out = np.zeros((start[-1] + 1, start[-1] + 1))
    out[np.ix_(at, at)] = part
    return out


@pytest.mark.parametrize(("dimension", "kind", "components", "tags"), SAME)
@pytest.mark.parametrize("seed", [0, 1])
def test_same_system_as_gtsam(
    dimension: int, kind: str, components: tuple[str, ...], tags: bool, seed: int
) -> None:
    g, rng = group(dimension), np.random.default_rng(seed)
    state = _state(g, rng)
    block = _block(g, rng, state, kind, components, tags)
    lin = _linearise(g, block, state, tags)
    whiten = _roots(rng, lin.residual.shape[1])
    oriented = np.full(LANDMARKS, tags)
    assert expressible(g, block, oriented, LANDMARK_OF_TRACK)
    native = native_graph(g, [NativeBlock(block, whiten)], LANDMARK_OF_TRACK, POSES, oriented)
    values = native_values(g, state, oriented)
    theirs = np.stack([native.at(i).unwhitenedError(values) for i in range(ROWS)])
    np.testing.assert_allclose(lin.residual, theirs, atol=1e-12)
    dims = np.array([g.dof] * POSES + [g.dof if tags else g.dim] * LANDMARKS)
    ours = _dense(block, lin, whiten, dims)
    expected = _information(native.linearize(values), dims)
    np.testing.assert_allclose(ours, expected, rtol=1e-9, atol=1e-9 * np.abs(expected).max())


def test_whole_graph_with_robust_noise() -> None:
    """Odometry and robust sightings in one graph: GTSAM's error and system are ours."""
    g, rng = group(2), np.random.default_rng(8)
    state = _state(g, rng)
    kernel, dims = Kernel("cauchy"), np.array([3] * POSES + [2] * LANDMARKS)
    ours, cost, native = 0.0, 0.0, []
    for kind, components, robust in (("odometry", ("pose",), None), ("sighting", POLAR, kernel)):
        block = _block(g, rng, state, kind, components, False)
        lin = _linearise(g, block, state, False)
        m = lin.residual.shape[1]
        sigma = rng.uniform(0.02, 0.1, (ROWS, m))
        whiten = np.eye(m) / sigma[:, :, None]
        norm = np.linalg.norm(lin.residual / sigma, axis=1)
        weight = np.ones(ROWS) if robust is None else robust.weight(norm, m)
        cost += float((0.5 * norm**2).sum() if robust is None else robust.loss(norm, m).sum())
        ours = ours + _dense(block, lin, whiten * np.sqrt(weight)[:, None, None], dims)
        made = None if robust is None else to_gtsam(robust, m)
        native.append(NativeBlock(block, sigma, made))
    graph = native_graph(g, native, LANDMARK_OF_TRACK, POSES)
    values = native_values(g, state)
    assert graph.error(values) == pytest.approx(cost, rel=1e-12)
    expected = _information(graph.linearize(values), dims)
    np.testing.assert_allclose(ours, expected, rtol=1e-9, atol=1e-9 * np.abs(expected).max())


@pytest.mark.parametrize("turn", [0.0, 1e-9, 1e-6, 1e-4, 1e-3, 0.1, 3.0])
def test_relative_pose_near_zero_turn_keeps_its_digits(turn: float) -> None:
    """The derivative of the logarithm by the matrix exponential (scipy).

    GTSAM 4.3's own is off by up to 1e-4 (at a turn of 1e-4 rad), so it is no judge here.

    With ``d log(T exp(e)) = Jr^-1 e``, ``Jr`` is the integral of ``exp(-s ad)`` over [0, 1], a
    corner of one matrix exponential (Van Loan 1978).
    """
    g = group(2)
    x, y = 1.5, -2.0
    minus_ad = -np.array([[0.0, -turn, y], [turn, 0.0, -x], [0.0, 0.0, 0.0]])
    corner = np.block([[minus_ad, np.eye(3)], [np.zeros((3, 6))]])
    expected = np.linalg.inv(scipy.linalg.expm(corner)[:3, 3:])
    at = g.exp(np.array([[x, y, turn]]))
    lin = relative_pose(g, g.identity(1), g.identity(1), g.identity(1), at, g.identity(1))
    np.testing.assert_allclose(lin.jac_b[0], expected, atol=1e-14)


def test_equal_rows_share_one_noise_model() -> None:
    models = noise_models(np.array([[0.1, 0.2], [0.1, 0.2], [0.1, 0.3]]))
    assert models[0] is models[1]
    assert models[0] is not models[2]
    np.testing.assert_allclose(models[2].sigmas(), [0.1, 0.3])


@pytest.mark.parametrize(
    ("dimension", "kind", "components"),
    [(3, "sighting", SPHERICAL), (2, "sighting", XYZ[:2]), (2, "encounter", XYZ[:2])],
)
def test_what_gtsam_says_differently_is_refused(
    dimension: int, kind: str, components: tuple[str, ...]
) -> None:
    g, rng = group(dimension), np.random.default_rng(1)
    block = _block(g, rng, _state(g, rng), kind, components, False)
    assert not expressible(g, block, None, LANDMARK_OF_TRACK)
    with pytest.raises(ValueError, match=kind):
        native_graph(g, [NativeBlock(block, np.ones((ROWS, 2)))], LANDMARK_OF_TRACK, POSES)


def test_mounted_sensors_and_mixed_landmarks_are_not_expressible() -> None:
    g, rng = group(2), np.random.default_rng(1)
    block = _block(g, rng, _state(g, rng), "sighting", POLAR, False)
    mounted = replace(block, frame_a=np.array([[0.1, 0.0, 0.0]]))
    assert expressible(g, block, None, LANDMARK_OF_TRACK)
    assert not expressible(g, mounted, None, LANDMARK_OF_TRACK)
    assert not expressible(g, block, np.arange(LANDMARKS) < 2, LANDMARK_OF_TRACK)
    assert not expressible(g, replace(block, components=("pose",)), None, LANDMARK_OF_TRACK)


def test_mounted_range_equals_the_factor_with_transform() -> None:
    g, rng = group(3), np.random.default_rng(6)
    state = _state(g, rng)
    block = replace(
        _block(g, rng, state, "sighting", ("range_m",), False), frame_a=_poses(g, rng, ROWS)
    )
    lin = _linearise(g, block, state, False)
    values = native_values(g, state)
    for row in range(ROWS):
        frame = block.frame_a[row]
        factor = gtsam.RangeFactorWithTransform3D(
            int(block.a[row]), int(_keys(block, "b")[row]), block.obs[row, 0],
            gtsam.noiseModel.Unit.Create(1), gtsam.Pose3(gtsam.Rot3(frame[:, :3]), frame[:, 3]),
        )  # fmt: skip
        jacobian, rhs = factor.linearize(values).jacobian()
        np.testing.assert_allclose(lin.residual[row], -rhs, atol=1e-12)
        np.testing.assert_allclose(lin.jac_a[row], jacobian[:, :6], atol=1e-12)
        np.testing.assert_allclose(lin.jac_b[row], jacobian[:, 6:], atol=1e-12)


def test_cartesian_sighting_equals_delta_factor() -> None:
    g, rng = group(2), np.random.default_rng(2)
    state = _state(g, rng)
    block = _block(g, rng, state, "sighting", XYZ[:2], False)
    lin = _linearise(g, block, state, False)
    values = native_values(g, state)
    for row in range(ROWS):
        factor = gtsam_unstable.DeltaFactor(
            int(block.a[row]), int(_keys(block, "b")[row]), block.obs[row],
            gtsam.noiseModel.Unit.Create(2),
        )  # fmt: skip
        jacobian, rhs = factor.linearize(values).jacobian()
        np.testing.assert_allclose(lin.residual[row], -rhs, atol=1e-12)
        np.testing.assert_allclose(lin.jac_a[row], jacobian[:, :3], atol=1e-12)
        np.testing.assert_allclose(lin.jac_b[row], jacobian[:, 3:], atol=1e-12)


@pytest.mark.parametrize("dimension", [2, 3])
def test_cartesian_sighting_equals_known_landmark_factor(dimension: int) -> None:
    """The pose side of a Cartesian sighting, the landmark given."""
    g, rng = group(dimension), np.random.default_rng(9)
    state = _state(g, rng)
    block = _block(g, rng, state, "sighting", XYZ[:dimension], False)
    lin = _linearise(g, block, state, False)
    kind = gtsam.KnownLandmarkFactorPose2 if dimension == 2 else gtsam.KnownLandmarkFactorPose3
    values, model = native_values(g, state), gtsam.noiseModel.Unit.Create(dimension)
    for row in range(ROWS):
        point = state.landmarks[LANDMARK_OF_TRACK[block.b[row]]]
        factor = kind(int(block.a[row]), point, block.obs[row], model)
        jacobian, rhs = factor.linearize(values).jacobian()
        np.testing.assert_allclose(lin.residual[row], -rhs, atol=1e-12)
        np.testing.assert_allclose(lin.jac_a[row], jacobian, atol=1e-12)


def test_bearing_elevation_range_equals_gtsam_to_first_order() -> None:
    """GTSAM's bearing in space is a direction with an isotropic tangent.

    Without error, weights ``cos^2(elevation)`` for the bearing and 1 for the elevation make the two
    parametrisations one: the information matrices agree, though no row does.
    """
    g, rng = group(3), np.random.default_rng(4)
    state = _state(g, rng)
    block = _block(g, rng, state, "sighting", SPHERICAL, False)
    exact = replace(block, obs=block.obs + _linearise(g, block, state, False).residual)
    lin = _linearise(g, exact, state, False)
    values, model = native_values(g, state), gtsam.noiseModel.Unit.Create(3)
    for row in range(ROWS):
        bearing, elevation, distance = exact.obs[row]
        flat = np.cos(elevation)
        direction = np.array([flat * np.cos(bearing), flat * np.sin(bearing), np.sin(elevation)])
        factor = gtsam.BearingRangeFactor3D(
            int(exact.a[row]), int(_keys(exact, "b")[row]), gtsam.Unit3(direction), distance, model
        )
        jacobian, rhs = factor.linearize(values).jacobian()
        np.testing.assert_allclose(rhs, 0.0, atol=1e-12)
        ours = np.diag([flat, 1.0, 1.0]) @ np.concatenate([lin.jac_a[row], lin.jac_b[row]], axis=1)
        np.testing.assert_allclose(ours.T @ ours, jacobian.T @ jacobian, atol=1e-11)

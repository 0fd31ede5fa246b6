"""Measurement models against finite differences, for every kind of block."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from jointmap.frames import Group, group
from jointmap.graph.models import (
    Linearised,
    linearise_block,
    observe_point,
    observe_robot,
    point_in_sensor,
    residual,
)
from jointmap.graph.models_point import component_jacobian, component_values
from jointmap.graph.problem import Block, Kind
from jointmap.ingest.survey import Provenance

Floats = np.ndarray
ROWS, POSES, LANDMARKS = 6, 5, 4
STEP = 1e-6
#: Central differences of step 1e-6 on values below 100: rounding 1e-8 at most, truncation less.
NUMERIC = 1e-7
#: Landmark of each track: two tracks are one landmark.
LANDMARK_OF_TRACK = np.array([2, 0, 3, 1, 2])
POLAR = {2: ("bearing_rad", "range_m"), 3: ("bearing_rad", "elevation_rad", "range_m")}
CARTESIAN = {2: ("x_m", "y_m"), 3: ("x_m", "y_m", "z_m")}

# (kind, components by name, oriented landmarks)
CASES = [
    ("odometry", "pose", False),
    ("closure", "pose", False),
    ("encounter", "pose", False),
    ("encounter", "polar", False),
    ("encounter", "cartesian", False),
    ("sighting", "polar", False),
    ("sighting", "cartesian", False),
    ("sighting", "range", False),
    ("sighting", "polar", True),
    ("sighting", "pose", True),
    ("fix", "cartesian", False),
    ("control", "cartesian", False),
    ("control", "cartesian", True),
    ("gravity", "tilt", False),
]


def _components(name: str, dim: int) -> tuple[str, ...]:
    table = {"polar": POLAR[dim], "cartesian": CARTESIAN[dim], "range": ("range_m",)}
    return table.get(name, (name,))


def _random_pose(g: Group, rng: np.random.Generator, n: int, spread: float) -> Floats:
    turn = g.rotation(g.exp(rng.normal(size=(n, g.dof)) * 2.0))
    return g.build(turn, rng.normal(size=(n, g.dim)) * spread)


def _scene(g: Group, rng: np.random.Generator, kind: Kind, name: str) -> dict[str, Floats | Block]:
    """A random state and a block of measurements that are off by some tenths."""
    poses = _random_pose(g, rng, POSES, 4.0)
    landmarks = rng.normal(size=(LANDMARKS, g.dim)) * 4.0
    orientations = g.rotation(_random_pose(g, rng, LANDMARKS, 1.0))
    components = _components(name, g.dim)
    b = rng.integers(0, LANDMARKS if kind == "control" else len(LANDMARK_OF_TRACK), ROWS)
    a = rng.integers(0, POSES, ROWS)
    if kind not in ("sighting", "control"):
        b = (a + 1 + rng.integers(0, POSES - 1, ROWS)) % POSES
    bare = kind == "odometry"
    frame_a = g.identity(1) if bare else _random_pose(g, rng, ROWS, 0.5)
    frame_b = g.identity(1) if bare else _random_pose(g, rng, ROWS, 0.5)
    pose_valued = name in ("pose", "tilt")
    empty = np.zeros((ROWS, *g.shape)) if pose_valued else np.zeros((ROWS, len(components)))
    if pose_valued:
        empty = np.broadcast_to(g.identity(1), empty.shape).copy()
    block = Block(
        kind, 0, "front", components, a, b, empty, frame_a, frame_b, np.zeros((ROWS, 1)), None,
        None, np.zeros(ROWS), Provenance((), np.zeros(ROWS, int), np.arange(ROWS)), b,
    )  # fmt: skip
    scene = {"poses": poses, "landmarks": landmarks, "orientations": orientations, "block": block}
    if name == "tilt":
        off = g.exp(rng.normal(size=(ROWS, g.dof)) * 0.3)
        return {**scene, "block": replace(block, obs=g.compose(poses[a], off))}
    if name == "pose":
        ends = poses[b] if kind != "sighting" else _tags(g, scene)[LANDMARK_OF_TRACK[b]]
        carried = g.identity(1) if kind == "sighting" else frame_b
        exact = g.between(g.compose(poses[a], frame_a), g.compose(ends, carried))
        return {**scene, "block": replace(block, obs=g.retract(exact, _noise(rng, g.dof)))}
    plain = _linearise(g, scene, np.zeros(LANDMARKS, dtype=bool), jacobians=False).residual
    obs = plain + _noise(rng, len(components))
    return {**scene, "block": replace(block, obs=obs)}


def _noise(rng: np.random.Generator, columns: int) -> Floats:
    return rng.normal(size=(ROWS, columns)) * 0.3


def _tags(g: Group, scene: dict) -> Floats:
    return g.build(scene["orientations"], scene["landmarks"])


def _linearise(g: Group, scene: dict, oriented: Floats, *, jacobians: bool = True) -> Linearised:
    return linearise_block(
        g, scene["block"], scene["poses"], scene["landmarks"], scene["orientations"],
        LANDMARK_OF_TRACK, oriented, jacobians=jacobians,
    )  # fmt: skip


def _angle_safe(block: Block, difference: Floats) -> Floats:
    """Differences of residuals across the cut of an angle."""
    if block.components in (("pose",), ("tilt",)):
        return difference
    return residual(block.components, np.zeros_like(difference), difference)


def _numeric(g: Group, scene: dict, oriented: Floats, end: str, columns: int) -> Floats:
    """Central differences (n, m, columns) by what each row ties at ``end``."""
    block = scene["block"]
    out = []
    for column in range(columns):
        sides = []
        for sign in (1.0, -1.0):
            step = np.zeros(columns)
            step[column] = sign * STEP
            sides.append(_linearise(g, _moved(g, scene, oriented, end, step), oriented).residual)
        out.append(_angle_safe(block, sides[0] - sides[1]) / (2.0 * STEP))
    return np.stack(out, axis=2)


def _moved(g: Group, scene: dict, oriented: Floats, end: str, step: Floats) -> dict:
    """The scene with every pose, or every landmark, moved by one and the same step.

    Each row ties two different poses, so the end that must stay gets its own copy.
    """
    block, poses = scene["block"], scene["poses"]
    if end == "b" and block.kind in ("sighting", "control"):
        if not oriented.any():
            return {**scene, "landmarks": scene["landmarks"] + step}
        moved = g.retract(_tags(g, scene), step)
        return {**scene, "landmarks": g.translation(moved), "orientations": g.rotation(moved)}
    both = np.concatenate([poses, g.retract(poses, step)])
    index = block.a if end == "a" else block.b
    return {**scene, "poses": both, "block": replace(block, **{end: index + POSES})}


@pytest.mark.parametrize(
    ("dimension", "kind", "name", "tags"),
    [(d, *case) for d in (2, 3) for case in CASES if (d, case[0]) != (2, "gravity")],
)
@settings(max_examples=12, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_jacobians_equal_central_differences(
    dimension: int, kind: Kind, name: str, tags: bool, seed: int
) -> None:
    g, rng = group(dimension), np.random.default_rng(seed)
    scene = _scene(g, rng, kind, name)
    oriented = np.full(LANDMARKS, tags)
    lin = _linearise(g, scene, oriented)
    assert np.isfinite(lin.residual).all()
    assert (lin.jac_a is None) == (kind == "control")
    assert (lin.jac_b is None) == (kind in ("fix", "gravity"))
    for end, jacobian in (("a", lin.jac_a), ("b", lin.jac_b)):
        if jacobian is None:
            continue
        numeric = _numeric(g, scene, oriented, end, jacobian.shape[2])
        # Derivatives of angles grow with nearness: the tolerance is relative to the row's own.
        scale = np.maximum(1.0, np.abs(numeric).max(axis=(1, 2), keepdims=True)) ** 3
        assert (np.abs(jacobian - numeric) <= NUMERIC * scale).all()
    bare = _linearise(g, scene, oriented, jacobians=False)
    np.testing.assert_array_equal(bare.residual, lin.residual)
    assert bare.jac_a is None
    assert bare.jac_b is None


@pytest.mark.parametrize("dimension", [2, 3])
def test_mixed_landmarks_use_the_columns_they_have(dimension: int) -> None:
    g = group(dimension)
    scene = _scene(g, np.random.default_rng(7), "sighting", "polar")
    some = np.array([True, False, True, False])
    mixed = _linearise(g, scene, some).jac_b
    points = _linearise(g, scene, np.zeros(LANDMARKS, dtype=bool)).jac_b
    tags = _linearise(g, scene, np.ones(LANDMARKS, dtype=bool)).jac_b
    of_row = some[LANDMARK_OF_TRACK[scene["block"].b]]
    np.testing.assert_array_equal(mixed[of_row], tags[of_row])
    np.testing.assert_array_equal(mixed[~of_row][:, :, :dimension], points[~of_row])
    assert not mixed[~of_row][:, :, dimension:].any()


@pytest.mark.parametrize("dimension", [2, 3])
def test_mounting_and_lag_derivatives(dimension: int) -> None:
    g, rng = group(dimension), np.random.default_rng(3)
    pose, frame = _random_pose(g, rng, ROWS, 4.0), _random_pose(g, rng, ROWS, 0.5)
    point, twist = rng.normal(size=(ROWS, dimension)) * 4.0, rng.normal(size=(ROWS, g.dof))
    names = POLAR[dimension] + CARTESIAN[dimension]

    def seen(body: Floats, mount: Floats) -> Floats:
        return observe_point(g, names, body, mount, point, jacobians=False).value

    exact = observe_point(g, names, pose, frame, point, frame_jacobian=True)
    later, sooner = (seen(g.retract(pose, twist * s), frame) for s in (STEP, -STEP))
    np.testing.assert_allclose(exact.d_lag(twist), (later - sooner) / (2 * STEP), atol=1e-6)
    for column in range(g.dof):
        step = STEP * np.eye(g.dof)[column]
        up, down = seen(pose, g.retract(frame, step)), seen(pose, g.retract(frame, -step))
        np.testing.assert_allclose(
            exact.d_frame_a[:, :, column], (up - down) / (2 * STEP), atol=1e-6
        )


@pytest.mark.parametrize("dimension", [2, 3])
def test_point_in_sensor_is_the_group_action(dimension: int) -> None:
    g, rng = group(dimension), np.random.default_rng(4)
    pose, frame = _random_pose(g, rng, ROWS, 4.0), _random_pose(g, rng, ROWS, 0.5)
    point = rng.normal(size=(ROWS, dimension))
    local, _, by_point = point_in_sensor(g, pose, frame, point)
    sensor = g.compose(pose, frame)
    np.testing.assert_allclose(local, g.inverse_transform(sensor, point), atol=1e-13)
    np.testing.assert_allclose(by_point, np.swapaxes(g.rotation(sensor), 1, 2), atol=1e-14)


def test_encounter_without_frames_sees_the_other_body() -> None:
    g = group(2)
    a, b = np.array([[1.0, 2.0, np.pi / 2]]), np.array([[1.0, 5.0, 0.3]])
    seen = observe_robot(g, POLAR[2], a, g.identity(1), b, g.identity(1))
    np.testing.assert_allclose(seen.value, [[0.0, 3.0]], atol=1e-15)


def test_angles_wrap_and_other_components_do_not() -> None:
    names = ("bearing_rad", "range_m")
    out = residual(names, np.array([[3.1, 1.0]]), np.array([[-3.1, 9.0]]))
    np.testing.assert_allclose(out, [[2 * np.pi - 6.2, 8.0]], atol=1e-12)


@pytest.mark.parametrize("dimension", [2, 3])
def test_nothing_but_numbers_where_geometry_degenerates(dimension: int) -> None:
    local = np.zeros((3, dimension))
    local[1, 0] = 1e-200
    local[2, -1] = 5.0
    values = component_values(POLAR[dimension], local)
    slopes = component_jacobian(POLAR[dimension], local)
    assert np.isfinite(values).all()
    assert np.isfinite(slopes).all()
    assert (np.linalg.norm(slopes[:2, -1], axis=1) == 1.0).all()
    if dimension == 3:
        np.testing.assert_allclose(values[2], [0.0, np.pi / 2, 5.0])
        assert np.linalg.norm(slopes[2, 1]) == pytest.approx(1 / 5.0)


def test_a_pose_seen_of_a_point_is_refused() -> None:
    g = group(2)
    scene = _scene(g, np.random.default_rng(1), "sighting", "pose")
    with pytest.raises(ValueError, match="no orientation"):
        _linearise(g, scene, np.zeros(LANDMARKS, dtype=bool))


def test_unknown_component_is_refused() -> None:
    with pytest.raises(ValueError, match="colour"):
        component_values(("colour",), np.zeros((1, 2)))

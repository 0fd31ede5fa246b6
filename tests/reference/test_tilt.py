"""Tilt against gravity: GTSAM's attitude factor, names of the axes, a body on its head."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest

from jointmap.frames import group
from jointmap.graph.models import Linearised, linearise_block
from jointmap.graph.problem import Block
from jointmap.ingest.survey import Provenance

UP = np.array([0.0, 0.0, 1.0])


def _linearise(poses: np.ndarray, obs: np.ndarray) -> Linearised:
    """One gravity row per pose."""
    g, n = group(3), len(poses)
    index = np.arange(n)
    block = Block(
        "gravity", 0, "", ("tilt",), index, np.full(n, -1), obs, g.identity(1), g.identity(1),
        np.zeros((n, 2)), None, None, np.zeros(n), Provenance((), np.zeros(n, int), index), index,
    )  # fmt: skip
    return linearise_block(g, block, poses, np.zeros((0, 3)), None, np.zeros(0, int))


def _against_gtsam(size: float) -> tuple[Linearised, list[gtsam.JacobianFactor], np.ndarray]:
    """Random attitudes seen with an error; the odometry frames have yaws of their own."""
    g, rng, n = group(3), np.random.default_rng(3), 20
    poses = g.exp(rng.normal(size=(n, 6)))
    obs = g.retract(poses, rng.normal(size=(n, 6)) * size)
    turned = g.exp(np.column_stack([np.zeros((n, 2)), rng.normal(size=(n, 4))]))
    model, native = gtsam.noiseModel.Unit.Create(2), []
    for pose, z in zip(poses, obs, strict=True):
        factor = gtsam.AttitudeFactorPose3(0, gtsam.Unit3(UP), model, gtsam.Unit3(z[2, :3]))
        values = gtsam.Values()
        values.insert(0, gtsam.Pose3(gtsam.Rot3(np.ascontiguousarray(pose[:, :3])), pose[:, 3]))
        native.append(factor.linearize(values))
    cosine = np.einsum("ni,ni->n", obs[:, 2, :3], poses[:, 2, :3])
    return _linearise(poses, g.compose(turned, obs)), native, np.arccos(np.clip(cosine, -1, 1))


@pytest.mark.parametrize("size", [0.02, 0.3, 1.5])
def test_tilt_against_attitude_factor(size: float) -> None:
    """GTSAM's error is the sine of the tilt, ours twice the sine of its half; no yaw enters."""
    lin, native, angle = _against_gtsam(size)
    ours = np.linalg.norm(lin.residual, axis=1)
    theirs = [np.linalg.norm(f.jacobian()[1]) for f in native]
    np.testing.assert_allclose(ours, 2 * np.sin(angle / 2), atol=1e-9)
    np.testing.assert_allclose(theirs, np.sin(angle), atol=1e-9)


def test_tilt_without_error_has_the_information_of_the_attitude_factor() -> None:
    lin, native, _ = _against_gtsam(0.0)
    np.testing.assert_allclose(lin.residual, 0.0, atol=1e-12)
    for row, factor in enumerate(native):
        theirs = factor.jacobian()[0]
        ours = lin.jac_a[row]
        np.testing.assert_allclose(ours.T @ ours, theirs.T @ theirs, atol=1e-12)


@pytest.mark.parametrize("yaw", [0.0, 2.0])
def test_rows_are_roll_and_pitch(yaw: float) -> None:
    """Against a level odometry, 0.01 rad about its x axis and -0.02 about its y axis."""
    g = group(3)
    heading = g.exp(np.array([[0.0, 0.0, yaw, 0.0, 0.0, 0.0]]))
    off = g.exp(np.array([[0.01, -0.02, 0.0, 0.0, 0.0, 0.0]]))
    lin = _linearise(g.compose(heading, off), g.identity(1))
    # Second-order terms of a turn of 0.022 rad are 2.5e-4 of it.
    np.testing.assert_allclose(lin.residual, [[0.01, -0.02]], atol=5e-6)


def test_body_on_its_head_is_not_called_level() -> None:
    g = group(3)
    roll = np.zeros((2, 6))
    roll[:, 0] = np.pi, np.pi - 1e-3
    lin = _linearise(g.exp(roll), g.identity(2))
    np.testing.assert_allclose(np.linalg.norm(lin.residual, axis=1), 2.0, atol=1e-6)
    assert np.isfinite(lin.jac_a).all()

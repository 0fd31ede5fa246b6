"""Observation rows on their way into blocks: tags whose position is seen by range and angles."""

from __future__ import annotations

from collections.abc import Callable

import gtsam
import numpy as np
import pytest
from numpy.typing import NDArray

from jointmap.graph.observed import split_by_components
from jointmap.ingest.survey import SIGMA_COLUMNS, VALUE_COLUMNS, Observations, Provenance

Floats = NDArray[np.float64]

#: bearing, elevation, range and the rotation vector of a tag as seen, with their sigmas.
SEEN = np.array([0.7, -0.3, 4.0, 0.2, -0.4, 1.1])
SPREAD = np.array([0.02, 0.03, 0.15, 0.04, 0.05, 0.06])
NO_ROTATION = np.zeros(3)


def _tag(dimension: int, v: Floats, error: Floats) -> gtsam.Pose2 | gtsam.Pose3:
    """Tag in the sensor frame; ``error`` rotates it about the sensor's own axes."""
    if dimension == 2:
        xy = v[2] * np.array([np.cos(v[0]), np.sin(v[0])])
        return gtsam.Pose2(gtsam.Rot2(SEEN[5] + error[2]), xy)
    flat = v[2] * np.cos(v[1])
    place = np.array([flat * np.cos(v[0]), flat * np.sin(v[0]), v[2] * np.sin(v[1])])
    turn = gtsam.Rot3.Expmap(error).compose(gtsam.Rot3.Expmap(SEEN[3:]))
    return gtsam.Pose3(turn, place)


def _expected(dimension: int, spread: Floats) -> Floats:
    """Covariance of gtsam's body tangent by central differences of the measurement itself."""
    centre = _tag(dimension, SEEN[:3], NO_ROTATION)
    columns, h = [], 1e-6
    for k in range(6):
        step = h * np.eye(6)[k]
        ahead = _tag(dimension, SEEN[:3] + step[:3], step[3:])
        behind = _tag(dimension, SEEN[:3] - step[:3], -step[3:])
        columns.append((centre.localCoordinates(ahead) - centre.localCoordinates(behind)) / (2 * h))
    jacobian = np.array(columns).T
    return np.asarray(jacobian @ np.diag(spread**2) @ jacobian.T)


def _observed(dimension: int, sigmas: dict[str, float]) -> Observations:
    tag = _tag(dimension, SEEN[:3], NO_ROTATION)
    value = {"bearing_rad": SEEN[0], "range_m": SEEN[2]}
    if dimension == 2:
        value["yaw_rad"] = tag.theta()
    else:
        q = tag.rotation().toQuaternion()
        value |= {"elevation_rad": SEEN[1], "qx": q.x(), "qy": q.y(), "qz": q.z(), "qw": q.w()}
    one = np.zeros(1, dtype=np.int64)
    return Observations(
        t_s=np.zeros(1),
        sensors=("front",),
        sensor=one,
        targets=("plate-017",),
        target=one,
        value=np.array([[value.get(n, np.nan) for n in VALUE_COLUMNS]]),
        sigma=np.array([[sigmas.get(n, np.nan) for n in SIGMA_COLUMNS]]),
        cov=None,
        source=Provenance(("sightings.csv",), one, one + 2),
    )


def _names(dimension: int) -> list[str]:
    if dimension == 2:
        return ["bearing_rad", "", "range_m", "", "", "rz_rad"]
    return ["bearing_rad", "elevation_rad", "range_m", "rx_rad", "ry_rad", "rz_rad"]


def _covariance(dimension: int, rows: dict[str, float], sensor: dict[str, float]) -> Floats:
    table = _observed(dimension, rows)
    made = split_by_components(table, np.ones(1, bool), dimension, "sighting", {"front": sensor})
    (part,) = made.parts
    assert part.components == ("pose",)
    assert part.covariance is not None
    return part.covariance[0]


@pytest.mark.parametrize("dimension", [2, 3])
@pytest.mark.parametrize(
    "share",
    [lambda s: (s, {}), lambda s: ({}, s)],
    ids=["the row states them", "the sensor states them"],
)
def test_sigmas_of_range_and_angles_become_those_of_the_position(
    dimension: int,
    share: Callable[[dict[str, float]], tuple[dict[str, float], dict[str, float]]],
) -> None:
    stated = {n: s for n, s in zip(_names(dimension), SPREAD, strict=True) if n}
    found = _covariance(dimension, *share(stated))
    np.testing.assert_allclose(found, _expected(dimension, SPREAD), rtol=0, atol=1e-9)


@pytest.mark.parametrize("dimension", [2, 3])
def test_a_range_sigma_that_grows(dimension: int) -> None:
    stated = {n: s for n, s in zip(_names(dimension), SPREAD, strict=True) if n}
    found = _covariance(dimension, {}, stated | {"range_per_m": 0.05})
    spread = SPREAD.copy()
    spread[2] = np.hypot(SPREAD[2], 0.05 * SEEN[2])
    np.testing.assert_allclose(found, _expected(dimension, spread), rtol=0, atol=1e-9)


@pytest.mark.parametrize("dimension", [2, 3])
def test_without_a_sigma_of_the_orientation_the_noise_model_decides(dimension: int) -> None:
    stated = dict(zip(_names(dimension)[:3], SPREAD[:3], strict=True))
    assert np.isnan(_covariance(dimension, stated, {})).all()

"""Without noise every measurement follows from the truth, by formulas other than ours."""

from __future__ import annotations

import json
from functools import reduce
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.linalg import expm
from scipy.spatial.transform import Rotation
from simulated_files import (
    config,
    matrices,
    polar,
    row_matrix,
    table,
    truth_at,
)

from jointmap.simulate import SimulationSettings, simulate

#: Values are rounded to 1e-6; pose, landmark and stamp add a few of these, divided by the shortest
#: range (0.3 m) for angles.
ROUNDING = 1.2e-5


@pytest.fixture(scope="module", params=["quarry-2d", "quarry-3d"])
def survey(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A survey without errors, but with lags, clocks, tags, fixes and closures."""
    out = tmp_path_factory.mktemp("truth") / request.param
    settings = SimulationSettings.preset(
        "none",
        duration_s=240.0,
        landmarks=40,
        sensors=2,
        tags=0.3,
        odometry_scale=(0.9, 1.0, 1.1),
        odometry_rotation_scale=(0.95, 1.0),
        odometry_lag_s=(0.25, 0.0, -0.1),
        sensor_lag_s=(0.0, 0.08),
        clock_offset_s=(0.0, 12.5, -3.0),
        clock_drift_ppm=(0.0, 40.0),
        fixes=("otter",),
        control_points=5,
        closures=40,
    )
    simulate(request.param, out, settings, seed=11)
    return out


def survey_time(stamps: pd.Series, robot: str, folder: Path) -> np.ndarray:
    """Survey time by the convention of survey.toml, from what truth/settings.json states."""
    clock = json.loads((folder / "truth/settings.json").read_text())["robots"][robot]["clock"]
    first = table(folder, f"{robot}/odometry.csv")["t_s"].iloc[0]
    drift = clock["drift_ppm"] * 1e-6
    return np.asarray(stamps - clock["offset_s"] - drift * (stamps - first))


LAGS = {"heron": 0.25, "otter": 0.0, "vole": -0.1, "swift": 0.25}
SENSOR_LAGS = {"heron": 0.0, "otter": 0.08, "vole": 0.0, "swift": 0.08}
SCALES = {"heron": (0.9, 0.95), "otter": (1.0, 1.0), "vole": (1.1, 0.95), "swift": (0.9, 1.0)}


@pytest.mark.parametrize("robot", ["heron", "otter", "vole", "swift"])
def test_sightings_follow_from_truth(survey: Path, robot: str) -> None:
    seen = table(survey, f"{robot}/sightings.csv").sample(80, random_state=1)
    truth = table(survey, f"truth/{robot}.csv")
    plates = table(survey, "truth/landmarks.csv").set_index("landmark")
    when = survey_time(seen["t_s"], robot, survey) + SENSOR_LAGS[robot]
    sensors = config(survey)["robots"][robot]["sensors"]
    checked = 0
    for (_, row), t in zip(seen.iterrows(), when, strict=True):
        eye = truth_at(truth, t) @ row_matrix(sensors[row["sensor"]]["body_T_sensor"])
        plate = matrices(plates.loc[[row["landmark"]]])[0]
        local = np.linalg.solve(eye, plate)
        expected = polar(local[:-1, -1])
        for column, value in expected.items():
            if column in row and np.isfinite(row[column]):
                assert row[column] == pytest.approx(value, abs=ROUNDING)
                checked += 1
        if "yaw_rad" in row and np.isfinite(row["yaw_rad"]):
            error = row["yaw_rad"] - np.arctan2(local[1, 0], local[0, 0])
            assert np.sin(error) == pytest.approx(0, abs=ROUNDING)
        if "qw" in row and np.isfinite(row["qw"]):
            turn = Rotation.from_quat(row[["qx", "qy", "qz", "qw"]].to_numpy(float))
            error = (turn.inv() * Rotation.from_matrix(local[:3, :3])).magnitude()
            assert error == pytest.approx(0, abs=ROUNDING)
    assert checked >= 160


@pytest.mark.parametrize("robot", ["heron", "swift"])
def test_encounters_follow_from_both_truths(survey: Path, robot: str) -> None:
    met = table(survey, f"{robot}/encounters.csv")
    met = met.sample(min(40, len(met)), random_state=1)
    setup = config(survey)["robots"]
    when = survey_time(met["t_s"], robot, survey) + SENSOR_LAGS[robot]
    truth = {name: table(survey, f"truth/{name}.csv") for name in setup}
    for (_, row), t in zip(met.iterrows(), when, strict=True):
        mount = row_matrix(setup[robot]["sensors"][row["sensor"]]["body_T_sensor"])
        target = np.append(setup[row["robot"]]["target_point"], 1.0)
        point = truth_at(truth[row["robot"]], t) @ target
        local = np.linalg.solve(truth_at(truth[robot], t) @ mount, point)[:-1]
        for column, value in polar(local).items():
            if column in row and np.isfinite(row[column]):
                assert row[column] == pytest.approx(value, abs=ROUNDING)
    assert len(met) > 10


@pytest.mark.parametrize("robot", ["heron", "otter", "vole", "swift"])
def test_dead_reckoning_follows_truth_with_scale_and_lag(survey: Path, robot: str) -> None:
    odometry = table(survey, f"{robot}/odometry.csv")
    truth = table(survey, f"truth/{robot}.csv")
    when = survey_time(odometry["t_s"], robot, survey) + LAGS[robot]
    assert np.abs(when - truth["t_s"]).max() < 2e-6
    true = matrices(truth)
    ends = true[0], true[-1]
    true = np.linalg.solve(true[:-1], true[1:])
    n = true.shape[-1] - 1
    scale, turn_scale = SCALES[robot]
    span = np.diff(when)
    if "wz_radps" in odometry:
        columns = (
            ["vx_mps", "vy_mps", "wz_radps"] if "vy_mps" in odometry else ["vx_mps", "wz_radps"]
        )
        twist = odometry[columns].to_numpy()[:-1]
        if twist.shape[1] == 2:
            twist = np.insert(twist, 1, 0.0, axis=1)
        generator = np.zeros((len(span), 3, 3))
        generator[:, 0, 1] = -twist[:, 2] * turn_scale
        generator[:, 1, 0] = twist[:, 2] * turn_scale
        generator[:, :2, 2] = twist[:, :2] * scale
        reported = expm(generator * span[:, None, None])
        assert np.abs(reported - true).max() < 4e-6
        # rounding walks on by chance: 1e-9 rad/s in the twist, 1e-6 in the true poses
        assert np.abs(reduce(np.matmul, reported) - np.linalg.solve(*ends)).max() < 1e-3
        return
    own = matrices(odometry)
    assert own[0, :n, n] == pytest.approx(0, abs=1e-9)
    reported = np.linalg.solve(own[:-1], own[1:])
    # the length of each step scales, whatever the axes
    moved = np.linalg.norm(reported[:, :n, n], axis=1) * scale
    slow = np.linalg.norm(true[:, :n, n], axis=1)
    assert np.abs(moved - slow).max() < 1e-4
    if turn_scale == 1.0:
        assert np.abs(reported[:, :n, :n] - true[:, :n, :n]).max() < 4e-6


def test_odometry_of_level_robots_keeps_roll_and_pitch(survey: Path) -> None:
    if config(survey)["survey"]["dimension"] == 2:
        assert "gravity_aligned" not in config(survey)["survey"]
        return
    assert config(survey)["survey"]["gravity_aligned"] is True
    for robot in ("heron", "swift"):
        down = [
            matrices(table(survey, name))[:, 2, :3]
            for name in (f"{robot}/odometry.csv", f"truth/{robot}.csv")
        ]
        assert np.abs(down[0] - down[1]).max() < 1e-6
        tilt = np.arccos(down[1][:, 2])
        assert tilt.max() > 0.05


def test_fixes_control_points_and_closures(survey: Path) -> None:
    setup = config(survey)["robots"]
    fixes = table(survey, "otter/fixes.csv")
    truth = {name: table(survey, f"truth/{name}.csv") for name in setup}
    axes = [a for a in ("x_m", "y_m", "z_m") if a in fixes]
    antenna = np.append(setup["otter"]["antenna"], 1.0)
    for t, place in zip(
        survey_time(fixes["t_s"], "otter", survey), fixes[axes].to_numpy(), strict=True
    ):
        at = (truth_at(truth["otter"], t) @ antenna)[:-1]
        assert place == pytest.approx(at, abs=ROUNDING)
    control = table(survey, "control_points.csv").set_index("landmark")
    plates = table(survey, "truth/landmarks.csv").set_index("landmark")
    assert len(control) == 5
    assert control[axes].to_numpy() == pytest.approx(plates.loc[control.index, axes].to_numpy())
    closures = table(survey, "closures.csv")
    assert len(closures) == 40
    stamps = {
        side: np.concatenate(
            [
                survey_time(pd.Series([row[f"t_{side}_s"]]), row[f"robot_{side}"], survey)
                for _, row in closures.iterrows()
            ]
        )
        for side in "ab"
    }
    for k, seen in enumerate(matrices(closures)):
        a, b = (truth_at(truth[closures[f"robot_{s}"][k]], stamps[s][k]) for s in "ab")
        assert np.abs(np.linalg.solve(a, b) - seen).max() < ROUNDING

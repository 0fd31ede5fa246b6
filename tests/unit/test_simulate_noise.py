"""The noise that comes out is the noise that was asked for."""

from __future__ import annotations

import json
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from simulated_files import config, matrices, table

from jointmap.frames import group, wrap
from jointmap.simulate import Simulation, SimulationSettings, build, simulate
from jointmap.simulate.observe import Observed
from jointmap.simulate.processes import gauss_markov, white_noise

SETTINGS = SimulationSettings(
    duration_s=900.0,
    landmarks=40,
    state_noise=True,
    noise_spread=3.0,
    range_per_m=0.03,
    odometry_form="twist",
)


def chi2_band(dof: int, confidence: float = 0.9999) -> tuple[float, float]:
    """Band of chi-square / dof."""
    tail = (1 - confidence) / 2
    low, high = stats.chi2.ppf([tail, 1 - tail], dof) / dof
    return float(low), float(high)


def assert_unit_variance(z: np.ndarray) -> None:
    """The mean square of independent standard normal values lies in its band."""
    low, high = chi2_band(z.size)
    assert low < np.mean(z**2) < high


def clean_twin(world: str, settings: SimulationSettings, seed: int) -> Simulation:
    """The same survey with the sighting noise off: everything else is unchanged."""
    quiet = replace(settings, sighting_noise=0.0, gross_errors=0.0, correlated=0.0, student_dof=0.0)
    return build(world, quiet, seed)


def errors(noisy: Observed, clean: Observed, column: str) -> np.ndarray:
    """Errors of one component."""
    assert np.array_equal(noisy.log_s, clean.log_s)
    difference = noisy.values[column] - clean.values[column]
    return np.asarray(wrap(difference) if column.endswith("rad") else difference)


@pytest.mark.parametrize("world", ["quarry-2d", "quarry-3d"])
def test_stated_sighting_noise_is_true(world: str, tmp_path: Path) -> None:
    simulate(world, tmp_path / "s", SETTINGS, seed=3)
    noisy, clean = build(world, SETTINGS, 3), clean_twin(world, SETTINGS, 3)
    setup = config(tmp_path / "s")["robots"]
    for robot in noisy.team:
        seen, true = noisy.sightings[robot.name], clean.sightings[robot.name]
        for k, sensor in enumerate(robot.sensors):
            stated = setup[robot.name]["sensors"][sensor.name]
            rows = seen.sensor == k
            for column in sensor.columns:
                sigma = np.full(int(rows.sum()), stated[f"sigma_{column}"])
                if column == "range_m":
                    far = true.values["range_m"][rows]
                    sigma = np.hypot(sigma, stated["sigma_range_per_m"] * far)
                z = errors(seen, true, column)[rows] / sigma
                assert z.size > 500
                assert_unit_variance(z)
                assert abs(z.mean()) < 4.5 / np.sqrt(z.size)


def test_noise_differs_by_robot_within_the_spread() -> None:
    factors = [robot.factor for robot in build("quarry-2d", SETTINGS, 3).team]
    assert max(factors) / min(factors) <= 3.0
    assert len(set(factors)) == 4
    fixed = SimulationSettings(duration_s=20.0, noise_factors=(1.0, 2.5))
    assert [r.factor for r in build("quarry-2d", fixed, 3).team] == [1.0, 2.5, 1.0, 2.5]


@pytest.mark.parametrize("world", ["quarry-2d", "quarry-3d"])
def test_stated_odometry_noise_is_true(world: str, tmp_path: Path) -> None:
    simulate(world, tmp_path / "s", SETTINGS, seed=4)
    setup = config(tmp_path / "s")["robots"]
    space = group(2 if world == "quarry-2d" else 3)
    for robot in setup:
        noise = setup[robot]["odometry_noise"]
        truth = table(tmp_path / "s", f"truth/{robot}.csv")
        pose = space.from_rows(truth.drop(columns="t_s").to_numpy())
        true = space.log(space.between(pose[:-1], pose[1:]))
        span = np.diff(truth["t_s"])
        odometry = table(tmp_path / "s", f"{robot}/odometry.csv").iloc[:-1]
        shift, turn = ([0, 1], [2]) if space.dim == 2 else ([3, 4, 5], [0, 1, 2])
        metres = np.linalg.norm(true[:, shift], axis=1)
        radians = np.linalg.norm(true[:, turn], axis=1)
        line = noise["translation_per_sqrt_m"] ** 2 * metres
        line += noise["translation_per_sqrt_s"] ** 2 * span
        arc = noise["rotation_per_sqrt_m"] ** 2 * metres
        arc += noise["rotation_per_sqrt_rad"] ** 2 * radians
        arc += noise["rotation_per_sqrt_s"] ** 2 * span
        names = ["vx_mps", "vy_mps", "wz_radps"]
        if space.dim == 3:
            names = ["wx_radps", "wy_radps", "wz_radps", "vx_mps", "vy_mps", "vz_mps"]
        for k, name in enumerate(names):
            reported = odometry[name] * span if name in odometry else 0.0
            variance = arc if name.startswith("w") else line
            # a moving robot only: at rest the rounding of the written truth would dominate
            moving = metres > 0.02
            z = (np.asarray(reported) - true[:, k])[moving] / np.sqrt(variance[moving])
            if name not in odometry:
                # slip to the side has no part that grows with time
                z *= np.sqrt(
                    variance[moving] / (line - noise["translation_per_sqrt_s"] ** 2 * span)[moving]
                )
            assert_unit_variance(z)


def test_gauss_markov_equals_its_recursion() -> None:
    rng = np.random.default_rng(5)
    t, series = rng.uniform(0, 60, 400), rng.integers(0, 5, 400)
    white = rng.normal(size=(400, 2))
    got = gauss_markov(t, series, 4.0, white)
    for k in range(5):
        rows = np.flatnonzero(series == k)
        rows = rows[np.argsort(t[rows])]
        x = white[rows[0]]
        assert got[rows[0]] == pytest.approx(x)
        for before, row in pairwise(rows):
            phi = np.exp(-(t[row] - t[before]) / 4.0)
            x = phi * x + np.sqrt(1 - phi**2) * white[row]
            assert got[row] == pytest.approx(x, abs=1e-12)


def test_gauss_markov_is_stationary_and_forgets() -> None:
    # 4000 independent series of three samples: variance 1, covariance exp(-dt / tau)
    rng = np.random.default_rng(6)
    t = np.tile([0.0, 1.0, 4.0], 4000)
    x = gauss_markov(t, np.repeat(np.arange(4000), 3), 2.0, rng.normal(size=(12000, 1)))
    got = np.corrcoef(x.reshape(4000, 3).T)
    for i, j, gap in ((0, 1, 1.0), (1, 2, 3.0), (0, 2, 4.0)):
        # sd of a correlation coefficient is below 1 / sqrt(n)
        assert got[i, j] == pytest.approx(np.exp(-gap / 2.0), abs=4.5 / np.sqrt(4000))
    for k in range(3):
        assert_unit_variance(x.reshape(4000, 3)[:, k])


def test_correlated_errors_belong_to_robot_sensor_and_target() -> None:
    settings = SimulationSettings(
        duration_s=900.0, landmarks=40, correlated=2.0, correlation_time_s=3.0, sighting_rate_hz=5.0
    )
    noisy, clean = build("quarry-2d", settings, 9), clean_twin("quarry-2d", settings, 9)
    pairs: dict[bool, list[np.ndarray]] = {True: [], False: []}
    for name, seen in noisy.sightings.items():
        e = errors(seen, clean.sightings[name], "bearing_rad") / 0.010
        order = np.lexsort((seen.log_s, seen.target))
        near = np.diff(seen.log_s[order]) < 0.3
        same = np.diff(seen.target[order]) == 0
        pairs[True].append(np.stack([e[order][:-1], e[order][1:]])[:, near & same])
        by_time = np.argsort(seen.log_s, kind="stable")
        other = (np.diff(seen.log_s[by_time]) == 0) & (np.diff(seen.target[by_time]) != 0)
        pairs[False].append(np.stack([e[by_time][:-1], e[by_time][1:]])[:, other])
    same_target, other_target = (np.concatenate(pairs[k], axis=1) for k in (True, False))
    # white 1 and correlated 4 at gaps near 0.2 s: rho = 0.8 exp(-0.2 / 3) = 0.75
    assert np.corrcoef(same_target)[0, 1] == pytest.approx(0.75, abs=0.05)
    assert abs(np.corrcoef(other_target)[0, 1]) < 0.1
    assert np.var(same_target) == pytest.approx(5.0, rel=0.15)


def test_heavy_tails_are_student_t() -> None:
    x = white_noise((20000,), 4.0, np.random.default_rng(8))
    assert stats.kstest(x * np.sqrt(2.0), stats.t(4).cdf).pvalue > 0.001
    assert stats.kstest(x, "norm").pvalue < 1e-6


def test_gross_errors_are_the_stated_share_and_large(tmp_path: Path) -> None:
    settings = SimulationSettings(duration_s=300.0, landmarks=40, gross_errors=0.04)
    simulate("quarry-2d", tmp_path / "s", settings, seed=2)
    told = json.loads((tmp_path / "s/truth/settings.json").read_text())["robots"]
    noisy, clean = build("quarry-2d", settings, 2), clean_twin("quarry-2d", settings, 2)
    for name, seen in noisy.sightings.items():
        assert seen.gross.sum() == round(0.04 * len(seen.gross))
        assert np.flatnonzero(seen.gross).tolist() == [
            row - 2 for row in told[name]["gross_sighting_rows"]
        ]
        e = errors(seen, clean.sightings[name], "range_m")
        assert np.abs(e[~seen.gross]).max() < 0.5
        assert np.mean(np.abs(e[seen.gross]) > 0.3) > 0.8


@pytest.mark.parametrize(
    ("option", "value"), [("bias_walk", 3.0), ("slow_drift", 3.0), ("angle_error", 3.0)]
)
def test_processes_outside_the_model_change_only_the_values(option: str, value: float) -> None:
    plain = SimulationSettings(duration_s=120.0, landmarks=30)
    other = SimulationSettings(duration_s=120.0, landmarks=30, **{option: value})
    a, b = build("quarry-2d", plain, 5), build("quarry-2d", other, 5)
    for name, seen in a.sightings.items():
        assert np.array_equal(seen.log_s, b.sightings[name].log_s)
        extra = errors(b.sightings[name], seen, "bearing_rad") / 0.010
        assert 0.3 < np.sqrt(np.mean(extra**2)) < 10.0
        # smooth in time or in the angle: far less change from row to row than white noise
        if option != "angle_error":
            assert np.std(np.diff(extra)) < 0.3


def test_odometry_correlation_gaps_and_slips() -> None:
    plain = SimulationSettings.preset("none", duration_s=600.0, landmarks=30)
    for option, check in (
        ({"odometry_slips": 3}, "slips"),
        ({"odometry_gaps_per_h": 60.0}, "gaps"),
    ):
        settings = SimulationSettings.preset("none", duration_s=600.0, landmarks=30, **option)
        before = build("quarry-2d", plain, 7).odometry["heron"]
        after = build("quarry-2d", settings, 7).odometry["heron"]
        events = getattr(after, check)
        assert len(events) == (3 if check == "slips" else 10)
        inside = np.zeros(len(before.log_s), dtype=bool)
        for first, last in events:
            inside |= (before.log_s >= first - 1e-6) & (before.log_s < last - 1e-6)
        if check == "gaps":
            inside[[0, -1]] = False
            assert np.array_equal(after.log_s, before.log_s[~inside])
        else:
            changed = after.values["vx_mps"] != before.values["vx_mps"]
            assert np.array_equal(changed, inside)
            added = np.sum(after.values["vx_mps"] - before.values["vx_mps"]) * 0.1
            assert 0.9 < added < 3.0
    settings = SimulationSettings.preset(
        "none", duration_s=3000.0, odometry_correlated=0.05, landmarks=30
    )
    exact = SimulationSettings.preset("none", duration_s=3000.0, landmarks=30)
    v = [build("quarry-2d", s, 7).odometry["heron"].values["vx_mps"] for s in (settings, exact)]
    moving = v[1] > 0.1
    ratio = v[0][moving] / v[1][moving] - 1
    # 300 correlation times: the standard deviation is known to about 1 / sqrt(2 * 150)
    assert np.std(ratio) == pytest.approx(0.05, rel=0.25)
    assert np.corrcoef(ratio[:-1], ratio[1:])[0, 1] > 0.97


def test_matrices_helper_reads_back(tmp_path: Path) -> None:
    frame = pd.DataFrame({"x_m": [1.0], "y_m": [2.0], "yaw_rad": [np.pi / 2]})
    assert matrices(frame)[0] @ [1.0, 0.0, 1.0] == pytest.approx([1.0, 3.0, 1.0])

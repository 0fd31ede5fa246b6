"""Errors that sightings share: their chain, their correlation, and claims that are enlarged."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import jointmap
from jointmap.graph.noise import row_range
from jointmap.graph.problem import Block
from jointmap.ingest.survey import Provenance
from jointmap.simulate import SimulationSettings, simulate
from jointmap.solve.shared import Extras, SharedModel, chain_rows, group_rows, make_chain
from jointmap.trust.correlation import Curve, _empty, _gather, fit_curve


def block(t_s: np.ndarray, distance: np.ndarray | None = None) -> Block:
    n = len(t_s)
    obs = np.stack([np.zeros(n), np.linspace(2.0, 6.0, n)], axis=1)
    return Block(
        "sighting",
        0,
        "front",
        ("bearing_rad", "range_m"),
        np.arange(n),
        np.zeros(n, dtype=np.int64),
        obs,
        np.zeros((1, 3)),
        np.zeros((1, 3)),
        np.full((n, 2), np.nan),
        None,
        None,
        t_s,
        Provenance(("s.csv",), np.zeros(n, dtype=np.int64), np.arange(n)),
        np.zeros(n, dtype=np.int64),
        distance,
    )


def test_chain_is_the_gauss_markov_process() -> None:
    """Its rows invert to A_i A_j exp(-|dt| / tau), the covariance of the process (Gelb 1974)."""
    t_s = np.array([0.0, 1.2, 4.0, 9.0, 11.5])
    sigma = np.stack([np.full(5, 0.01), np.linspace(0.05, 0.2, 5)], axis=1)
    time = np.array([2.0, 7.0])
    chain = make_chain(
        block(t_s), np.zeros(5, dtype=np.int64), SharedModel(sigma, time, -1), 10, -1
    )
    extras = Extras((), 10, np.full(5, 2), 2 * np.arange(6), np.ones(3))
    information = np.zeros((10, 10))
    for rows in chain_rows(extras, chain, None, np.zeros((5, 2, 3))):
        for n in range(len(rows.rhs)):
            full = np.zeros((2, 10))
            for key, jacobian in zip(rows.keys, rows.jacobians, strict=True):
                at = 2 * (key[n] - 10)
                full[:, at : at + 2] = jacobian[n]
            information += full.T @ full
    covariance = np.linalg.inv(information)
    apart = np.abs(t_s[:, None] - t_s)
    for i in range(2):
        expected = np.outer(sigma[:, i], sigma[:, i]) * np.exp(-apart / time[i])
        assert np.allclose(covariance[i::2, i::2], expected, rtol=1e-9, atol=1e-15)


def test_rows_within_a_second_share_a_state_and_targets_do_not() -> None:
    t_s = np.array([0.0, 0.3, 0.9, 1.1, 0.2, 5.0])
    state, target, mean = group_rows(np.array([7, 7, 7, 7, 8, 7]), t_s)
    assert state[0] == state[1] == state[2] != state[3]
    assert len({state[3], state[4], state[5]}) == 3
    assert target[state[4]] == 8
    assert mean[state[0]] == pytest.approx(0.4)


def test_correlation_is_found_again() -> None:
    """A simulated process with a known shared part and correlation time."""
    rng = np.random.default_rng(3)
    curve = _empty()
    for target in range(60):
        t_s = np.sort(rng.uniform(0.0, 120.0, 200))
        shared = np.empty(200)
        shared[0] = rng.normal()
        for i in range(1, 200):
            phi = np.exp(-(t_s[i] - t_s[i - 1]) / 6.0)
            shared[i] = phi * shared[i - 1] + np.sqrt(1 - phi**2) * rng.normal()
        unit = np.sqrt(0.7) * shared + np.sqrt(0.3) * rng.normal(size=200)
        _gather(curve, unit, np.full(200, target), t_s)
    fit = fit_curve(curve)
    assert fit is not None
    assert fit.part == pytest.approx(0.7, abs=0.06)
    assert fit.time_s == pytest.approx(6.0, rel=0.2)


def test_white_noise_shares_nothing() -> None:
    rng = np.random.default_rng(4)
    curve: Curve = _empty()
    for target in range(60):
        _gather(
            curve, rng.normal(size=200), np.full(200, target), np.sort(rng.uniform(0, 120, 200))
        )
    fit = fit_curve(curve)
    assert fit is not None and fit.part == 0.0


def test_noise_grows_with_the_range_of_the_solution() -> None:
    t_s = np.arange(4.0)
    assert np.array_equal(row_range(block(t_s)), block(t_s).obs[:, 1])
    solved = replace(block(t_s), distance=np.full(4, 3.0))
    assert np.array_equal(row_range(solved), np.full(4, 3.0))


@pytest.mark.parametrize(("errors", "enlarged"), [("white", False), ("field", True)])
def test_claims_are_enlarged_only_where_left_out_sightings_say_so(
    tmp_path: Path, errors: str, enlarged: bool
) -> None:
    settings = SimulationSettings.preset(errors, duration_s=240.0)
    simulate("quarry-2d", tmp_path / "survey", settings, seed=1)
    reference = jointmap.fuse(jointmap.read_survey(tmp_path / "survey"))
    table: pd.DataFrame = reference.holdout
    team = table[table["fold_kind"] == "team"].iloc[0]
    factor = reference.meta["evidence"]["holdout"]["sigma_factor"]
    assert set(table["fold_kind"]) == {"team", "robot", "landmark"}
    assert (factor > 1.0) == enlarged
    assert (team["normalized_square"] > team["upper"]) == enlarged
    if not enlarged:
        used = reference.calibration.set_index("parameter").loc["range_scale", "used"]
        assert not np.any(used)

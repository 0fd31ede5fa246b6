"""Steps of the odometry that a closure contradicts, and the test of rows as if left out."""

from __future__ import annotations

import importlib
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from tiny_survey import World, pose_columns, write_survey

import jointmap
from jointmap.graph.build import BuildSettings, build_problem
from jointmap.graph.disputes import disputed_steps
from jointmap.graph.noise import block_covariance, initial_noise
from jointmap.graph.problem import Block
from jointmap.settings import Settings
from jointmap.trust.deleted import deleted_statistic

Floats = NDArray[np.float64]

SIGMA = 0.01


def _closures(world: World, spans: list[tuple[int, int]], shift: list[float]) -> pd.DataFrame:
    """True relative poses of heron, moved along x by ``shift``, with small sigmas."""
    true = world.truth["heron"]
    moved = []
    for (i, j), s in zip(spans, shift, strict=True):
        relative = np.linalg.solve(true[i], true[j])
        relative[0, -1] += s
        moved.append(relative)
    turns = ("yaw_rad",) if world.dimension == 2 else ("rx_rad", "ry_rad", "rz_rad")
    axes = ("x_m", "y_m", "z_m")[: world.dimension]
    return pd.DataFrame(
        {
            "robot_a": "heron",
            "t_a_s": [world.t_s[i] for i, _ in spans],
            "robot_b": "heron",
            "t_b_s": [world.t_s[j] for _, j in spans],
            **pose_columns(np.array(moved)),
            **{f"sigma_{name}": SIGMA for name in (*axes, *turns)},
        }
    )


@pytest.mark.parametrize("dimension", [2, 3])
def test_only_what_contradicts_one_step_is_in_dispute(dimension: int, tmp_path: Path) -> None:
    world = World(dimension, robots=("heron",), duration_s=20.0, noise=0.0)
    spans = [(10, 11), (21, 20), (30, 31), (40, 41), (50, 60)]
    table = _closures(world, spans, [0.0, 0.5, 0.0, -0.3, 0.8])
    survey = jointmap.read_survey(
        write_survey(
            tmp_path,
            dimension,
            {"heron": {"odometry": world.odometry("heron")}},
            wide={"closures": table},
        )
    )
    problem = build_problem(survey, BuildSettings(spacing_s=1.0 / world.rate_hz))
    noise = initial_noise(survey, problem)
    found = disputed_steps(problem, [block_covariance(b, problem, noise) for b in problem.blocks])
    steps = problem.blocks[int(found.block[0])]
    stamps = steps.t_s[found.row]
    # Row 4 spans ten steps: it is vetted as any closure is.
    np.testing.assert_allclose(np.sort(stamps), world.t_s[[20, 40]], atol=1e-9)
    linear = slice(0, 2) if dimension == 2 else slice(3, 6)
    apart = np.linalg.norm(found.apart[np.argsort(stamps), linear], axis=1)
    np.testing.assert_allclose(apart, [0.5, 0.3], atol=0.01)
    assert len(found.closure_row) == 2


def test_a_row_left_out_is_judged_as_if_it_never_entered() -> None:
    """Against ordinary least squares without the row (NumPy), at weights 1, 0.3 and 0."""
    rng = np.random.default_rng(3)
    design, seen = rng.normal(size=(30, 4)), rng.normal(size=30)
    rows = np.arange(3)
    others = np.arange(3, 30)
    normal = design[others].T @ design[others]
    without = np.linalg.solve(normal, design[others].T @ seen[others])
    left = seen[rows] - design[rows] @ without
    spread = np.eye(3) + design[rows] @ np.linalg.solve(normal, design[rows].T)
    expected = left @ np.linalg.solve(spread, left)
    for weight in (1.0, 0.3, 0.0):
        root = np.ones(30)
        root[rows] = np.sqrt(weight)
        scaled = root[:, None] * design
        solved = np.linalg.solve(scaled.T @ scaled, scaled.T @ (root * seen))
        hat = design[rows] @ np.linalg.solve(scaled.T @ scaled, design[rows].T)
        residual = seen[rows] - design[rows] @ solved
        statistic, dof = deleted_statistic(residual[None], hat[None], np.array([weight]))
        assert statistic[0] == pytest.approx(expected, rel=1e-9)
        assert dof[0] == 3


def test_directions_that_the_others_do_not_predict_test_nothing() -> None:
    hat = np.diag([1e6, 0.5])[None]
    statistic, dof = deleted_statistic(np.array([[1e3, 3.0]]), hat, np.zeros(1))
    assert dof[0] == 1
    assert statistic[0] == pytest.approx(9.0 / 1.5)


def test_residuals_far_beyond_their_sigmas_are_never_called_ok(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Wrong closures, too few for a verdict on their own, behind a gate that lets all rows pass."""
    world = World(2, robots=("heron",), duration_s=60.0)
    rng = np.random.default_rng(8)
    spans = [(k, k + 100) for k in range(5, 185, 6)]
    off = 50.0 * SIGMA * rng.choice([-1.0, 1.0], len(spans))
    folder = write_survey(
        tmp_path,
        2,
        {"heron": {"odometry": world.odometry("heron")}},
        wide={"closures": _closures(world, spans, list(off))},
    )
    survey, settings = jointmap.read_survey(folder), Settings(noise="given", calibrate=False)

    def gate(
        block: Block, statistic: Floats, dof: Floats, gate: float, scale: float | None = None
    ) -> tuple[NDArray[np.bool_], Floats]:
        return np.ones(len(statistic), dtype=bool), np.ones(len(statistic))

    monkeypatch.setattr(importlib.import_module("jointmap.fuse"), "gate_rows", gate)
    reference = jointmap.fuse(survey, settings)
    assert (reference.measurements["verdict"] == "kept").all()
    assert reference.status == "inconsistent"
    assert "times what the sigmas allow" in reference.meta["reasons"][0]

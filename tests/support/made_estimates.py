"""Estimates made from a reference, with errors that a test chooses, written as a survey has them."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pandas as pd

import jointmap
from jointmap import frames
from jointmap.schema import covariance_columns, pose_columns
from jointmap.simulate.settings import SimulationSettings

SIGMA_M = 0.2


def small_world(folder: Path, dimension: int = 2, **changes):
    """A survey of three robots over two minutes and its reference."""
    settings = {"robots": 3, "duration_s": 120.0, "landmarks": 40, "state_noise": True} | changes
    jointmap.simulate(
        f"quarry-{dimension}d", folder / "survey", SimulationSettings(**settings), seed=4
    )
    survey = jointmap.read_survey(folder / "survey")
    return survey, jointmap.fuse(survey)


def frame_of(reference, robot: str) -> pd.DataFrame:
    """Columns of an estimate that differs smoothly by about ``SIGMA_M`` per axis and says so.

    Its claim is the covariance of that difference plus the reference's own: honest under the same
    data, where the reference's error is independent of the difference.
    """
    path = reference.trajectories[robot]
    g = frames.group(reference.dimension)
    rng = np.random.default_rng(sum(map(ord, robot)))
    t = path.t_s - path.t_s[0]
    error = np.zeros((len(t), g.dof))
    for k in range(g.dof):
        for _ in range(6):
            wave = rng.uniform(5, 25)
            error[:, k] += np.sin(2 * np.pi * t / wave + rng.uniform(0, 7)) / np.sqrt(3)
    size = np.full(g.dof, SIGMA_M)
    size[(slice(2, 3) if g.dim == 2 else slice(0, 3))] = 0.02
    pose = g.retract(g.from_rows(path.pose), error * size)
    cov = np.repeat(np.diag(size**2)[None], len(t), axis=0)
    cov = g.covariance_to_table(pose, cov) + path.cov
    i, j = np.triu_indices(g.dof)
    columns = {"t_s": path.t_s} | dict(zip(pose_columns(g.dim), g.to_rows(pose).T, strict=True))
    columns |= dict(zip(covariance_columns(g.dim), cov[:, i, j].T, strict=True))
    return pd.DataFrame(columns)


def write_estimate(survey, reference, name: str = "made", change=None, **said) -> Path:
    """Write an estimator; ``change(robot, frame)`` may return another table, or None for no file."""
    home = survey.path / "online" / name
    if home.exists():
        shutil.rmtree(home)
    home.mkdir(parents=True)
    told = {"frame": "team", "covariance": "fixed-axes", "evidence": "unknown", "data": "same"}
    text = "".join(f'{k} = "{v}"\n' for k, v in (told | said).items() if v is not None)
    (home / "estimator.toml").write_text(text)
    for robot in reference.trajectories:
        table = frame_of(reference, robot)
        if change is not None:
            table = change(robot, table)
        if table is not None:
            table.to_csv(home / f"{robot}.csv", index=False)
    return home

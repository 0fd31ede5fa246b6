"""Reading simulated surveys with pandas and SciPy only, for tests that must not trust our code."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.linalg import expm, logm
from scipy.spatial.transform import Rotation

Floats = NDArray[np.float64]

PLANAR = ("x_m", "y_m", "yaw_rad")
SPATIAL = ("x_m", "y_m", "z_m", "qx", "qy", "qz", "qw")


def config(folder: Path) -> dict[str, Any]:
    """survey.toml as a mapping."""
    return tomllib.loads((folder / "survey.toml").read_text())


def table(folder: Path, name: str) -> pd.DataFrame:
    """A CSV table of the survey."""
    return pd.read_csv(folder / name)


def matrices(rows: pd.DataFrame) -> Floats:
    """Homogeneous matrices (n, 3, 3) or (n, 4, 4) of pose columns."""
    if "qw" in rows:
        out = np.tile(np.eye(4), (len(rows), 1, 1))
        out[:, :3, :3] = Rotation.from_quat(rows[["qx", "qy", "qz", "qw"]].to_numpy()).as_matrix()
        out[:, :3, 3] = rows[["x_m", "y_m", "z_m"]]
        return out
    out = np.tile(np.eye(3), (len(rows), 1, 1))
    c, s = np.cos(rows["yaw_rad"].to_numpy()), np.sin(rows["yaw_rad"].to_numpy())
    out[:, 0, 0], out[:, 0, 1], out[:, 1, 0], out[:, 1, 1] = c, -s, s, c
    out[:, :2, 2] = rows[["x_m", "y_m"]]
    return out


def row_matrix(row: list[float]) -> Floats:
    """Homogeneous matrix of a pose row as in survey.toml."""
    names = PLANAR if len(row) == 3 else SPATIAL
    return np.asarray(matrices(pd.DataFrame([row], columns=list(names)))[0])


def truth_at(truth: pd.DataFrame, t_s: float) -> Floats:
    """True pose at any instant: constant body twist between rows, by matrix logarithm."""
    times = truth["t_s"].to_numpy()
    i = int(np.clip(np.searchsorted(times, t_s, side="right") - 1, 0, len(times) - 2))
    a, b = matrices(truth.iloc[i : i + 2])
    step = np.real(logm(np.linalg.solve(a, b)))
    return np.asarray(a @ expm(step * (t_s - times[i]) / (times[i + 1] - times[i])))


def polar(local: Floats) -> dict[str, float]:
    """Bearing, elevation, range and coordinates of one point in a sensor's frame."""
    x, y = float(local[0]), float(local[1])
    z = float(local[2]) if len(local) == 3 else 0.0
    return {
        "bearing_rad": float(np.angle(complex(x, y))),
        "elevation_rad": float(np.arcsin(z / np.sqrt(x * x + y * y + z * z))),
        "range_m": float(np.sqrt(x * x + y * y + z * z)),
        "x_m": x,
        "y_m": y,
        "z_m": z,
    }

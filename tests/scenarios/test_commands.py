"""From a simulated survey to poses by the commands alone, held against the simulated truth."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

from jointmap.cli import main
from jointmap.products.files import read_reference

ROBOTS = ("heron", "otter")


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path, int]:
    """Survey, reference and exit code of a fusion of ninety seconds of two robots."""
    folder = tmp_path_factory.mktemp("run")
    survey, reference = folder / "gallery", folder / "reference"
    words = ["--robots", "2", "--duration-s", "90", "--landmarks", "16", "--seed", "11"]
    assert main(["simulate", "quarry-2d", "--out", str(survey), *words]) == 0
    code = main(["fuse", str(survey), "--out", str(reference), "--quiet"])
    return survey, reference, code


Floats = NDArray[np.float64]


def rigid(points: Floats, onto: Floats) -> tuple[Floats, Floats]:
    """Rotation (2, 2) and translation (2,) of the best rigid fit (Kabsch 1976)."""
    centre, target = points.mean(0), onto.mean(0)
    u, _, vt = np.linalg.svd((points - centre).T @ (onto - target))
    rotation = vt.T @ np.diag([1.0, np.sign(np.linalg.det(vt.T @ u.T))]) @ u.T
    return rotation, target - rotation @ centre


def test_the_exit_code_goes_with_the_status(run: tuple[Path, Path, int]) -> None:
    _, folder, code = run
    told = json.loads((folder / "reference.json").read_text())
    assert code == (0 if told["status"] == "ok" else 3)
    assert (told["status"] == "ok") == (not told["reasons"])
    assert read_reference(folder).status == told["status"]


def test_poses_at_any_stamp_meet_the_truth(run: tuple[Path, Path, int], tmp_path: Path) -> None:
    survey, folder, _ = run
    truth = {name: pd.read_csv(survey / "truth" / f"{name}.csv") for name in ROBOTS}
    # Stamps between the rows of the odometry, taken from the middle of the run.
    asked = {name: t["t_s"].to_numpy()[100:-100:7] + 0.033 for name, t in truth.items()}
    file, out = tmp_path / "asked.csv", tmp_path / "poses.csv"
    pd.concat(
        pd.DataFrame({"robot": name, "t_s": stamps}) for name, stamps in asked.items()
    ).to_csv(file, index=False)
    assert main(["poses", str(folder), "--at", str(file), "--out", str(out)]) == 0
    poses = pd.read_csv(out)
    assert len(poses) == sum(map(len, asked.values()))
    real = np.concatenate(
        [
            np.stack([np.interp(asked[n], truth[n]["t_s"], truth[n][c]) for c in ("x_m", "y_m")], 1)
            for n in ROBOTS
        ]
    )
    # Sigmas are stated relative to the landmarks as a whole, so these give the alignment.
    marks = read_reference(folder).landmarks
    both = marks[marks["datum"].fillna(False)].merge(
        pd.read_csv(survey / "truth" / "landmarks.csv"), on="landmark", suffixes=("", "_true")
    )
    rotation, shift = rigid(
        both[["x_m", "y_m"]].to_numpy(), both[["x_m_true", "y_m_true"]].to_numpy()
    )
    error = poses[["x_m", "y_m"]].to_numpy() @ rotation.T + shift - real
    rmse = float(np.sqrt((error**2).sum(1).mean()))
    sigma = np.sqrt(poses["cov_x_x"] + poses["cov_y_y"])
    # Tens of metres driven past few plates: decimetres. A wrong frame or clock shows as metres.
    assert rmse < 0.5
    # Errors of one run hang together, so the claim is only held to a factor of three.
    assert rmse / 3.0 < float(np.sqrt((sigma**2).mean())) < 3.0 * rmse

"""Small surveys against scipy.optimize.least_squares: one solution, one covariance.

The residuals below are written with NumPy and SciPy from the words of the tables alone: odometry
sigmas belong to the increment in the body frame of the row before, bearings to the sensor frame.
Covariance is ``(J^T J)^-1`` of the whitened residuals with heron's first pose held.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation
from tiny_survey import BEARING_RAD, ELEVATION_RAD, RANGE_M, STEP_M, STEP_RAD, World, write_survey

import jointmap
from jointmap.settings import Settings

ROBOTS = ("heron", "otter")
SIGMA = {"range_m": RANGE_M, "bearing_rad": BEARING_RAD, "elevation_rad": ELEVATION_RAD}


def planar(angle: np.ndarray) -> np.ndarray:
    """Rotation matrices (n, 2, 2)."""
    c, s = np.cos(angle), np.sin(angle)
    return np.stack([np.stack([c, -s], -1), np.stack([s, c], -1)], -2)


class Adjustment:
    """Unknowns: poses as position and a turn about the fixed axes on top of a base; landmarks."""

    def __init__(self, folder: Path, dimension: int) -> None:
        self.dim, self.dof = dimension, 3 if dimension == 2 else 6
        read = {n: pd.read_csv(folder / n / "odometry.csv") for n in ROBOTS}
        self.stamps = {n: t["t_s"].to_numpy() for n, t in read.items()}
        self.place = {n: t[["x_m", "y_m", "z_m"][:dimension]].to_numpy() for n, t in read.items()}
        self.turn = {n: self._rotations(t) for n, t in read.items()}
        self.seen = {n: pd.read_csv(folder / n / "sightings.csv") for n in ROBOTS}
        self.met = pd.read_csv(folder / "heron" / "encounters.csv")
        self.names = sorted({m for t in self.seen.values() for m in t["landmark"]})
        self.first = {"heron": 0, "otter": len(self.stamps["heron"])}
        self.n_poses = sum(map(len, self.stamps.values()))

    def _rotations(self, table: pd.DataFrame) -> np.ndarray:
        if self.dim == 3:
            return Rotation.from_quat(table[["qx", "qy", "qz", "qw"]].to_numpy()).as_matrix()
        return planar(table["yaw_rad"].to_numpy())

    def turned(self, turn: np.ndarray) -> np.ndarray:
        """Rotation matrices of turns (n, 1 or 3) about the fixed axes."""
        if self.dim == 3:
            return Rotation.from_rotvec(turn).as_matrix()
        return planar(turn[:, 0])

    def angles(self, rotation: np.ndarray) -> np.ndarray:
        if self.dim == 3:
            return Rotation.from_matrix(rotation).as_rotvec()
        return np.arctan2(rotation[:, 1, 0], rotation[:, 0, 0])[:, None]

    def unpack(self, x: np.ndarray, base: np.ndarray) -> tuple[np.ndarray, ...]:
        free = x[: (self.n_poses - 1) * self.dof].reshape(-1, self.dof)
        full = np.concatenate([np.zeros((1, self.dof)), free])
        rotation = self.turned(full[:, self.dim :]) @ base
        return full[:, : self.dim], rotation, x[free.size :].reshape(-1, self.dim)

    def sight(self, table: pd.DataFrame, at: np.ndarray, place, turn, target) -> list[np.ndarray]:
        local = np.einsum("nji,nj->ni", turn[at], target - place[at])
        flat = np.hypot(local[:, 0], local[:, 1])
        predicted = {
            "range_m": np.linalg.norm(local, axis=1),
            "bearing_rad": np.arctan2(local[:, 1], local[:, 0]),
            "elevation_rad": np.arctan2(local[:, 2], flat) if self.dim == 3 else flat,
        }
        out = []
        for name in ("range_m", "bearing_rad", "elevation_rad")[: self.dim]:
            gap = predicted[name] - table[name].to_numpy()
            if name != "range_m":
                gap = (gap + np.pi) % (2 * np.pi) - np.pi
            out.append(gap / SIGMA[name])
        return out

    def residuals(self, x: np.ndarray, base: np.ndarray) -> np.ndarray:
        place, turn, marks = self.unpack(x, base)
        out: list[np.ndarray] = []
        for name in ROBOTS:
            a = self.first[name] + np.arange(len(self.stamps[name]) - 1)
            step = np.einsum("nji,nj->ni", turn[a], place[a + 1] - place[a])
            told, own = self.place[name], self.turn[name]
            step -= np.einsum("nji,nj->ni", own[:-1], np.diff(told, axis=0))
            turned = np.swapaxes(turn[a], 1, 2) @ turn[a + 1]
            logged = np.swapaxes(own[:-1], 1, 2) @ own[1:]
            out += [
                (step / STEP_M).ravel(),
                (self.angles(turned @ np.swapaxes(logged, 1, 2)) / STEP_RAD).ravel(),
            ]
            table = self.seen[name]
            at = self.first[name] + np.searchsorted(self.stamps[name], table["t_s"] - 1e-6)
            which = np.searchsorted(self.names, table["landmark"].to_numpy(dtype=str))
            out += self.sight(table, at, place, turn, marks[which])
        at = np.searchsorted(self.stamps["heron"], self.met["t_s"] - 1e-6)
        out += self.sight(self.met, at, place, turn, place[self.first["otter"] + at])
        return np.concatenate(out)

    def solve(self, place, turn, marks) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Positions, rotations, landmarks and covariance at the optimum."""
        for _ in range(3):
            x = np.concatenate(
                [np.hstack([place, np.zeros((len(place), self.dof - self.dim))])[1:].ravel(),
                 marks.ravel()]
            )  # fmt: skip
            found = least_squares(
                self.residuals, x, args=(turn,), method="trf", x_scale="jac",
                xtol=1e-15, ftol=1e-15, gtol=1e-12, jac="3-point",
            )  # fmt: skip
            place, turn, marks = self.unpack(found.x, turn)
        return place, turn, marks, np.linalg.inv(found.jac.T @ found.jac)


def survey(folder: Path, dimension: int, seed: int) -> tuple[World, Path]:
    """One row a second for a dozen seconds; everything is seen at the rows of the odometry."""
    world = World(dimension, ROBOTS, duration_s=12.0, plates=6, seed=seed, rate_hz=1.0, noise=0.3)
    tables = {}
    for name in ROBOTS:
        sightings = world.sightings(name, every_s=2.0, reach_m=30.0)
        tables[name] = {"odometry": world.odometry(name), "sightings": sightings}
    stamps = world.t_s[[2, 5, 6, 9]]
    tables["heron"]["encounters"] = world.encounters("heron", "otter", stamps=stamps)
    head = "gravity_aligned = false" if dimension == 3 else ""
    return world, write_survey(folder, dimension, tables, head=head)


@pytest.mark.parametrize(("dimension", "seed"), [(2, 1), (2, 2), (3, 1)])
def test_same_solution_and_covariance(tmp_path: Path, dimension: int, seed: int) -> None:
    world, folder = survey(tmp_path / "survey", dimension, seed)
    settings = Settings(
        noise="given",
        calibrate=False,
        kernel="none",
        datum="robot",
        datum_robot="heron",
        keyframe_spacing_s=1.01,
    )
    reference = jointmap.fuse(jointmap.read_survey(folder), settings)
    assert set(reference.measurements["verdict"]) == {"kept"}

    # Start at the truth as seen from heron's first pose.
    adjustment = Adjustment(folder, dimension)
    home = np.linalg.inv(world.truth["heron"][0])
    true = home @ np.concatenate([world.truth[n] for n in ROBOTS])
    marks = np.array([world.landmarks[n] for n in adjustment.names])
    marks = marks @ home[:dimension, :dimension].T + home[:dimension, dimension]
    place, turn, marks, covariance = adjustment.solve(
        true[:, :dimension, dimension], true[:, :dimension, :dimension], marks
    )
    dof, n = adjustment.dof, adjustment.n_poses
    sigma = np.sqrt(np.diag(covariance))
    mine, mine_cov = [], []
    for name in ROBOTS:
        path = reference.trajectories[name]
        assert path.keyframe.all()
        mine.append(path.pose)
        mine_cov.append(path.cov)
    pose, cov = np.concatenate(mine), np.concatenate(mine_cov)
    spatial = dimension == 3
    turns = Rotation.from_quat(pose[:, 3:]).as_matrix() if spatial else planar(pose[:, 2])
    gap = np.hstack(
        [pose[:, :dimension] - place, adjustment.angles(turns @ np.swapaxes(turn, 1, 2))]
    )
    # Ours measures an increment's error by the logarithm, the other by differences: they part by
    # the product of two errors, here less than 1e-4 of a sigma.
    assert np.abs(gap[0]).max() < 1e-9
    np.testing.assert_allclose(gap[1:].ravel() / sigma[: (n - 1) * dof], 0.0, atol=5e-4)
    theirs = np.zeros((n, dof, dof))
    for k in range(1, n):
        at = slice((k - 1) * dof, k * dof)
        theirs[k] = covariance[at, at]
    assert np.abs(cov[0]).max() < 1e-12
    scale = np.sqrt(np.einsum("ni,nj->nij", *(np.einsum("nii->ni", theirs[1:]),) * 2))
    np.testing.assert_allclose((cov[1:] - theirs[1:]) / scale, 0.0, atol=5e-4)

    table = reference.landmarks.set_index("landmark").loc[adjustment.names]
    axes = ["x", "y", "z"][:dimension]
    got = table[[f"{a}_m" for a in axes]].to_numpy()
    np.testing.assert_allclose((got - marks).ravel() / sigma[(n - 1) * dof :], 0.0, atol=5e-4)
    for k in range(len(adjustment.names)):
        at = slice((n - 1) * dof + k * dimension, (n - 1) * dof + (k + 1) * dimension)
        block = covariance[at, at]
        row = table.iloc[k]
        ours = np.array(
            [[row[f"cov_{min(i, j)}_{max(i, j)}"] for j in axes] for i in axes], dtype=float
        )
        root = np.sqrt(np.diag(block))
        np.testing.assert_allclose((ours - block) / np.outer(root, root), 0.0, atol=5e-4)

    # Half the sum of squares, and the degrees of freedom.
    best = least_squares(
        adjustment.residuals,
        np.concatenate(
            [np.hstack([place, np.zeros((n, dof - dimension))])[1:].ravel(), marks.ravel()]
        ),
        args=(turn,),
    )
    assert reference.meta["chi2"] == pytest.approx(2 * best.cost, rel=1e-4)
    assert reference.meta["dof"] == len(best.fun) - len(best.x)

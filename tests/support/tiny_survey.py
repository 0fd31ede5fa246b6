"""Small surveys with known truth, made with NumPy and SciPy alone.

Robots drive smooth loops through a room of plates. Poses are homogeneous matrices in the site
frame; bearing is the angle from the sensor's x axis to the left, elevation up from its xy plane.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.linalg import expm, logm
from scipy.spatial.transform import Rotation

Floats = NDArray[np.float64]

#: True white sigmas of what the robots log.
STEP_M, STEP_RAD = 0.003, 0.001
RANGE_M, BEARING_RAD, ELEVATION_RAD = 0.05, 0.01, 0.01
AXES = ("x_m", "y_m", "z_m")


def pose_columns(poses: Floats) -> dict[str, Floats]:
    """Table columns of homogeneous matrices (n, d + 1, d + 1)."""
    dim = poses.shape[-1] - 1
    out = {AXES[k]: poses[:, k, dim] for k in range(dim)}
    if dim == 2:
        return out | {"yaw_rad": np.arctan2(poses[:, 1, 0], poses[:, 0, 0])}
    quaternion = Rotation.from_matrix(poses[:, :3, :3]).as_quat()
    return out | {name: quaternion[:, k] for k, name in enumerate(("qx", "qy", "qz", "qw"))}


def pose(row: Sequence[float]) -> Floats:
    """Homogeneous matrix of x, y, yaw or x, y, z, qx, qy, qz, qw."""
    dim = 2 if len(row) == 3 else 3
    out = np.eye(dim + 1)
    if dim == 2:
        c, s = np.cos(row[2]), np.sin(row[2])
        out[:2, :2] = [[c, -s], [s, c]]
    else:
        out[:3, :3] = Rotation.from_quat(np.asarray(row[3:])).as_matrix()
    out[:dim, dim] = row[:dim]
    return out


def twist_matrix(twist: Floats) -> Floats:
    """Generator (d + 1, d + 1) of vx vy wz or vx vy vz wx wy wz."""
    if len(twist) == 3:
        vx, vy, w = twist
        return np.array([[0.0, -w, vx], [w, 0.0, vy], [0.0, 0.0, 0.0]])
    out = np.zeros((4, 4))
    wx, wy, wz = twist[3:]
    out[:3, :3] = [[0.0, -wz, wy], [wz, 0.0, -wx], [-wy, wx, 0.0]]
    out[:3, 3] = twist[:3]
    return out


@dataclass
class World:
    """A room with plates and robots on their ways through it."""

    dimension: int = 2
    robots: tuple[str, ...] = ("heron", "otter")
    duration_s: float = 60.0
    plates: int = 12
    seed: int = 0
    noise: float = 1.0
    rate_hz: float = 5.0
    t_s: Floats = field(init=False)
    truth: dict[str, Floats] = field(init=False)
    landmarks: dict[str, Floats] = field(init=False)

    def __post_init__(self) -> None:
        self.rng = np.random.default_rng(self.seed)
        self.t_s = 1000.0 + np.arange(int(self.duration_s * self.rate_hz) + 1) / self.rate_hz
        self.truth = {name: self._drive(k) for k, name in enumerate(self.robots)}
        place = self.rng.uniform(-7.0, 7.0, (self.plates, 2))
        if self.dimension == 3:
            height = self.rng.uniform(-1.0, 2.0, (self.plates, 1))
            place = np.concatenate([place, height], axis=1)
        self.landmarks = {f"plate-{k:03d}": p for k, p in enumerate(place)}

    def _drive(self, k: int) -> Floats:
        """Body twists held between rows, integrated exactly."""
        t = self.t_s - self.t_s[0]
        turn = 0.35 * np.sin(0.21 * t + 1.3 * k) + 0.12 * (-1.0) ** k
        speed = 0.6 + 0.2 * np.cos(0.4 * t + k)
        if self.dimension == 2:
            twists = np.stack([speed, 0.0 * t, turn], axis=1)
            now = pose([2.0 * k - 2.0, 1.5 - k, 0.8 * k])
        else:
            up = 0.15 * np.cos(0.3 * t + k)
            zero = 0.0 * t
            twists = np.stack([speed, zero, up, zero, zero, turn], axis=1)
            yaw = Rotation.from_rotvec([0.0, 0.0, 0.8 * k]).as_quat()
            now = pose([2.0 * k - 2.0, 1.5 - k, 0.3 * k, *yaw])
        out = [now]
        for twist in twists[:-1]:
            now = now @ expm(twist_matrix(twist) / self.rate_hz)
            out.append(now)
        return np.array(out)

    def at(self, robot: str, t_s: float) -> Floats:
        """True pose at any instant: the body twist is held between rows."""
        i = int(np.clip(np.searchsorted(self.t_s, t_s, side="right") - 1, 0, len(self.t_s) - 2))
        a, b = self.truth[robot][i : i + 2]
        step = np.real(logm(np.linalg.solve(a, b)))
        return np.asarray(a @ expm(step * (t_s - self.t_s[i]) * self.rate_hz))

    def odometry(self, robot: str, stated: bool = True) -> pd.DataFrame:
        """Pose-form odometry from the identity with white errors of the increments."""
        true = self.truth[robot]
        dof = 3 if self.dimension == 2 else 6
        sigma = np.full(dof, STEP_M)
        sigma[2 if dof == 3 else 3 :] = STEP_RAD
        errors = self.noise * sigma * self.rng.normal(size=(len(true) - 1, dof))
        now = np.eye(self.dimension + 1)
        out = [now]
        for a, b, error in zip(true[:-1], true[1:], errors, strict=True):
            now = now @ np.linalg.solve(a, b) @ expm(twist_matrix(error))
            out.append(now)
        columns = {"t_s": self.t_s, **pose_columns(np.array(out))}
        if stated:
            turns = ("yaw_rad",) if dof == 3 else ("rx_rad", "ry_rad", "rz_rad")
            for name, value in zip((*AXES[: self.dimension], *turns), sigma, strict=True):
                columns[f"sigma_{name}"] = np.full(len(true), value)
        return pd.DataFrame(columns)

    def polar(self, target: Floats, sensor: Floats, parts: Sequence[str]) -> dict[str, float]:
        """Noisy observation of a point (site frame) from a sensor pose."""
        dim = self.dimension
        x = np.linalg.solve(sensor, np.append(target, 1.0))[:dim]
        clean = {"range_m": np.linalg.norm(x), "bearing_rad": np.arctan2(x[1], x[0])}
        sigma = {"range_m": RANGE_M, "bearing_rad": BEARING_RAD, "elevation_rad": ELEVATION_RAD}
        if dim == 3:
            clean["elevation_rad"] = np.arctan2(x[2], np.hypot(x[0], x[1]))
        noisy = {n: float(v + self.noise * sigma[n] * self.rng.normal()) for n, v in clean.items()}
        return {n: noisy[n] for n in parts if n in noisy}

    def sightings(
        self,
        robot: str,
        parts: Sequence[str] = ("range_m", "bearing_rad", "elevation_rad"),
        every_s: float = 1.0,
        reach_m: float = 8.0,
        plates: Sequence[str] | None = None,
        mounting: Floats | None = None,
        until_s: float = np.inf,
    ) -> pd.DataFrame:
        """Every plate beyond half a metre and within reach, all around, each ``every_s``."""
        rows = []
        mounting = np.eye(self.dimension + 1) if mounting is None else mounting
        for t in np.arange(self.t_s[0] + 0.5 * every_s, min(self.t_s[-1], until_s), every_s):
            sensor = self.at(robot, t) @ mounting
            for name, place in self.landmarks.items():
                if plates is not None and name not in plates:
                    continue
                if 0.5 < np.linalg.norm(place - sensor[:-1, -1]) < reach_m:
                    seen = self.polar(place, sensor, parts)
                    rows.append({"t_s": t, "sensor": "front", "landmark": name, **seen})
        return pd.DataFrame(rows)

    def encounters(
        self,
        robot: str,
        other: str,
        parts: Sequence[str] = ("range_m", "bearing_rad", "elevation_rad"),
        every_s: float = 5.0,
        stamps: Sequence[float] | None = None,
    ) -> pd.DataFrame:
        """The other robot's body origin, each ``every_s`` or at the stamps given."""
        rows = []
        regular = np.arange(self.t_s[0] + 0.7 * every_s, self.t_s[-1], every_s)
        for t in regular if stamps is None else stamps:
            place = self.at(other, t)[:-1, -1]
            seen = self.polar(place, self.at(robot, t), parts)
            rows.append({"t_s": t, "sensor": "front", "robot": other, **seen})
        return pd.DataFrame(rows)

    def fixes(self, robot: str, sigma_m: float, antenna: Floats, every_s: float) -> pd.DataFrame:
        """Positions of an antenna in the site frame."""
        rows = []
        axes = AXES[: self.dimension]
        for t in np.arange(self.t_s[0] + 0.5 * every_s, self.t_s[-1], every_s):
            place = (self.at(robot, t) @ np.append(antenna, 1.0))[:-1]
            place = place + self.noise * sigma_m * self.rng.normal(size=self.dimension)
            named = dict(zip(axes, place, strict=True))
            rows.append({"t_s": t, **named, **{f"sigma_{a}": sigma_m for a in axes}})
        return pd.DataFrame(rows)


def sensor_lines(robot: str, dimension: int, mounting: Sequence[float] | None = None) -> str:
    """The sensor ``front`` of a robot with its true sigmas."""
    origin = [0.0] * 3 if dimension == 2 else [0.0] * 6 + [1.0]
    lines = [
        f"[robots.{robot}.sensors.front]",
        f"body_T_sensor = {list(mounting if mounting is not None else origin)}",
        f"sigma_range_m = {RANGE_M}",
        f"sigma_bearing_rad = {BEARING_RAD}",
    ]
    if dimension == 3:
        lines.append(f"sigma_elevation_rad = {ELEVATION_RAD}")
    return "\n".join(lines) + "\n"


def write_survey(
    folder: Path,
    dimension: int,
    tables: Mapping[str, Mapping[str, pd.DataFrame]],
    *,
    head: str = "",
    robot_lines: Mapping[str, str] | None = None,
    mountings: Mapping[str, Sequence[float]] | None = None,
    wide: Mapping[str, pd.DataFrame] | None = None,
) -> Path:
    """Write a survey folder.

    ``tables``: robot -> kind -> table; ``head``: more lines of ``[survey]`` and further sections;
    ``robot_lines``: more lines of ``[robots.NAME]``; ``wide``: survey-wide tables by name.
    """
    text = ["[survey]", "format = 1", f"dimension = {dimension}", head]
    for robot, kinds in tables.items():
        text.append(f"[robots.{robot}]")
        for kind, frame in kinds.items():
            path = folder / robot / f"{kind}.csv"
            path.parent.mkdir(parents=True, exist_ok=True)
            frame.to_csv(path, index=False, float_format="%.12g")
            text.append(f'{kind} = "{robot}/{kind}.csv"')
        text.append((robot_lines or {}).get(robot, ""))
        text.append(sensor_lines(robot, dimension, (mountings or {}).get(robot)))
    for name, frame in (wide or {}).items():
        frame.to_csv(folder / f"{name}.csv", index=False, float_format="%.12g")
    (folder / "survey.toml").write_text("\n".join(text))
    return folder


def full_survey(world: World, folder: Path, **options: object) -> Path:
    """Odometry and sightings of every robot, no encounters."""
    tables = {
        name: {"odometry": world.odometry(name), "sightings": world.sightings(name)}
        for name in world.robots
    }
    return write_survey(folder, world.dimension, tables, **options)  # type: ignore[arg-type]

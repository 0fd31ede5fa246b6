"""Results in the site frame, mountings, clocks and lags: simulated, held against what was put in."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pyproj
import pytest
from scipy.spatial.transform import Rotation
from scipy.stats import chi2
from tiny_survey import World, pose, write_survey

import jointmap
from jointmap.products.reference import Reference
from jointmap.settings import Settings

GIVEN = Settings(noise="given", calibrate=False)
SEEDS = range(6)
CONTROL = '[datum]\nkind = "control"'
ANTENNA = {2: [0.4, -0.3], 3: [0.4, -0.3, 0.5]}
ORIGIN = (53.12, -4.11, 210.0)


def fused(folder: Path, settings: Settings = GIVEN) -> Reference:
    return jointmap.fuse(jointmap.read_survey(folder), settings)


def head_of(dimension: int, more: str = "") -> str:
    # The odometry of this world drifts in roll and pitch like in heading.
    return ("gravity_aligned = false\n" if dimension == 3 else "") + more


def geographic(table: pd.DataFrame) -> pd.DataFrame:
    """East, north, up about ORIGIN as latitude, longitude and height.

    Geocentric coordinates by the formulas of IOGP Guidance Note 7-2, methods 9602 and 9836 (the
    rotation written out here), back to geodetic ones by PROJ.
    """
    lat, lon = np.radians(ORIGIN[:2])
    a, e2 = 6378137.0, 0.00669437999014
    nu = a / np.sqrt(1.0 - e2 * np.sin(lat) ** 2)
    up = np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])
    start = (nu + ORIGIN[2]) * up - np.array([0.0, 0.0, e2 * nu * np.sin(lat)])
    east = np.array([-np.sin(lon), np.cos(lon), 0.0])
    place = table[["x_m", "y_m"]].to_numpy() @ np.stack([east, np.cross(up, east)]) + start
    place += table["z_m"].to_numpy()[:, None] * up if "z_m" in table else 0.0
    convert = pyproj.Transformer.from_crs("EPSG:4978", "EPSG:4979", always_xy=True)
    lon_deg, lat_deg, height = convert.transform(*place.T)
    kept = table.drop(columns=[c for c in ("x_m", "y_m", "z_m") if c in table])
    return kept.assign(lat_deg=lat_deg, lon_deg=lon_deg, height_m=height)


def normalized(error: np.ndarray, covariance: np.ndarray) -> float:
    return float(error @ np.linalg.solve(covariance, error))


def site_errors(world: World, reference: Reference) -> tuple[float, float]:
    """Normalised squared site-frame errors of one landmark and of otter's pose half-way."""
    dim = world.dimension
    axes = ["x", "y", "z"][:dim]
    row = reference.landmarks.sort_values("n_sightings").iloc[-1]
    cov = np.array([[row[f"cov_{min(i, j)}_{max(i, j)}"] for j in axes] for i in axes], float)
    gap = row[[f"{a}_m" for a in axes]].to_numpy(float) - world.landmarks[row["landmark"]]
    path = reference.trajectories["otter"]
    k = len(path) // 2
    true = world.at("otter", path.t_s[k])
    mine = pose(path.pose[k])
    turn = mine[:dim, :dim] @ true[:dim, :dim].T
    angle = (
        Rotation.from_matrix(turn).as_rotvec() if dim == 3 else [np.arctan2(turn[1, 0], turn[0, 0])]
    )
    error = np.concatenate([mine[:dim, dim] - true[:dim, dim], angle])
    return normalized(gap, cov), normalized(error, path.cov[k])


def within(values: list[float], dof: int) -> None:
    """Sum of independent chi-square values inside its 99.8 % band."""
    low, high = chi2.ppf([0.001, 0.999], dof * len(values))
    assert low < sum(values) < high, (sum(values) / len(values) / dof, low, high)


@pytest.mark.parametrize("dimension", [2, 3])
@pytest.mark.parametrize("form", ["local", "geographic"])
def test_fixes_put_the_result_into_the_site_frame(
    tmp_path: Path, dimension: int, form: str
) -> None:
    """Only fixes of an antenna off the body's origin; each run an independent sample."""
    points, poses, rms = [], [], []
    more = ""
    if form == "geographic":
        more = f'crs = "EPSG:4979"\nsite_origin = {list(ORIGIN)}\n'
    antenna = np.array(ANTENNA[dimension])
    for seed in SEEDS:
        world = World(dimension, duration_s=30.0, seed=seed)
        tables = {}
        for name in world.robots:
            fixes = world.fixes(name, 0.1, antenna, 4.0)
            tables[name] = {
                "odometry": world.odometry(name),
                "sightings": world.sightings(name),
                "fixes": fixes if form == "local" else geographic(fixes),
            }
        reference = fused(
            write_survey(
                tmp_path / str(seed),
                dimension,
                tables,
                head=head_of(dimension, more + CONTROL),
                robot_lines=dict.fromkeys(world.robots, f"antenna = {antenna.tolist()}"),
            )
        )
        assert reference.meta["datum"]["components"] == [
            "the frame of the fixes and control points"
        ]
        kept = reference.measurements.query("kind == 'fix'")
        assert len(kept) == sum(len(t["fixes"]) for t in tables.values())
        point, pose_ = site_errors(world, reference)
        points.append(point)
        poses.append(pose_)
        path = reference.trajectories["heron"]
        true = world.truth["heron"][:, :dimension, dimension]
        rms.append(np.sqrt(np.mean(np.sum((path.pose[:, :dimension] - true) ** 2, axis=1))))
    within(points, dimension)
    within(poses, 3 if dimension == 2 else 6)
    # Some fourteen fixes of a decimetre per axis hold the frame to some centimetres.
    assert max(rms) < 0.15


@pytest.mark.parametrize("dimension", [2, 3])
def test_control_points_put_the_result_into_the_site_frame(tmp_path: Path, dimension: int) -> None:
    axes = ["x_m", "y_m", "z_m"][:dimension]
    points, poses = [], []
    for seed in SEEDS:
        world = World(dimension, duration_s=30.0, seed=seed)
        names = list(world.landmarks)[:5]
        place = np.array([world.landmarks[n] for n in names])
        place = place + 0.1 * world.rng.normal(size=place.shape)
        control = pd.DataFrame(place, columns=axes).assign(landmark=names)
        for axis in axes:
            control[f"sigma_{axis}"] = 0.1
        tables = {
            n: {"odometry": world.odometry(n), "sightings": world.sightings(n)}
            for n in world.robots
        }
        reference = fused(
            write_survey(
                tmp_path / str(seed),
                dimension,
                tables,
                head=head_of(dimension, CONTROL),
                wide={"control_points": control},
            )
        )
        point, pose_ = site_errors(world, reference)
        points.append(point)
        poses.append(pose_)
    within(points, dimension)
    within(poses, 3 if dimension == 2 else 6)


MOUNTING = {
    2: [0.3, -0.2, 0.7],
    3: [0.3, -0.2, 0.4, *Rotation.from_euler("zyx", [0.7, 0.3, -0.2]).as_quat().tolist()],
}


def shape_error(world: World, reference: Reference) -> float:
    """RMS distance (m) of heron's whole path and the landmarks it sees, from its first pose."""
    dim = world.dimension
    home = np.linalg.inv(world.truth["heron"][0])
    path = reference.trajectories["heron"].pose[:, :dim]
    table = reference.landmarks.query("n_sightings > 10")
    table = table[table["landmark"].isin(list(world.landmarks))]
    mine = np.concatenate([path, table[["x_m", "y_m", "z_m"][:dim]].to_numpy()])
    marks = np.array([world.landmarks[n] for n in table["landmark"]])
    true = np.concatenate([world.truth["heron"][:, :dim, dim], marks])
    true = true @ home[:dim, :dim].T + home[:dim, dim]
    return float(np.sqrt(np.mean(np.sum((mine - true) ** 2, axis=1))))


@pytest.mark.parametrize("dimension", [2, 3])
def test_a_mounting_is_applied(tmp_path: Path, dimension: int) -> None:
    world = World(dimension, duration_s=40.0, seed=3)
    mounting = MOUNTING[dimension]
    tables = {
        n: {
            "odometry": world.odometry(n),
            "sightings": world.sightings(n, mounting=pose(mounting)),
        }
        for n in world.robots
    }
    head = head_of(dimension, '[datum]\nkind = "robot"\nrobot = "heron"')
    right = write_survey(
        tmp_path / "right", dimension, tables, head=head,
        mountings=dict.fromkeys(world.robots, mounting),
    )  # fmt: skip
    wrong = write_survey(tmp_path / "wrong", dimension, tables, head=head)
    assert shape_error(world, fused(right)) < 0.06
    assert shape_error(world, fused(wrong)) > 0.15


@pytest.mark.parametrize("where", ["survey.toml", "edits.toml"])
def test_clocks_and_lags_are_applied(tmp_path: Path, where: str) -> None:
    """Otter's clock is ahead and drifts; its sensor answers late; its odometry describes later."""
    world = World(2, duration_s=60.0, seed=2)
    offset, drift, lag, late = 1.7, 400.0, 0.25, -0.3
    tables = {
        n: {"odometry": world.odometry(n), "sightings": world.sightings(n)} for n in world.robots
    }
    tables["heron"]["encounters"] = world.encounters("heron", "otter", every_s=3.0)
    first = min(world.t_s[0] - late, tables["otter"]["sightings"]["t_s"].min() - lag) + offset

    def by_log(table: pd.DataFrame, lag_s: float) -> pd.DataFrame:
        """survey = log - offset - drift (log - first), and a row describes its stamp + lag."""
        survey = table["t_s"] - lag_s
        rate = drift * 1e-6
        return table.assign(t_s=(survey + offset - rate * first) / (1.0 - rate))

    tables["otter"]["odometry"] = by_log(tables["otter"]["odometry"], late)
    tables["otter"]["sightings"] = by_log(tables["otter"]["sightings"], lag)
    clock = f"[robots.otter.clock]\noffset_s = {offset}\ndrift_ppm = {drift}\n"
    folder = write_survey(
        tmp_path / "survey", 2, tables,
        head='[datum]\nkind = "robot"\nrobot = "heron"',
        robot_lines={"otter": f"odometry_lag_s = {late}"} if where == "survey.toml" else None,
    )  # fmt: skip
    toml = folder / "survey.toml"
    text = toml.read_text()
    if where == "survey.toml":
        at = text.index("[robots.otter.sensors.front]\n") + len("[robots.otter.sensors.front]\n")
        toml.write_text(text[:at] + f"lag_s = {lag}\n" + text[at:] + clock)
    else:
        (folder / "edits.toml").write_text(
            f'[[fix_clock]]\nrobot = "otter"\nname = "offset_s"\nvalue = {offset}\n'
            f'[[fix_clock]]\nrobot = "otter"\nname = "drift_ppm"\nvalue = {drift}\n'
            f'[[fix_calibration]]\nrobot = "otter"\nname = "odometry_lag_s"\nvalue = {late}\n'
            f'[[fix_calibration]]\nrobot = "otter"\nsensor = "front"\nname = "lag_s"\n'
            f"value = {lag}\n"
        )
    reference = fused(folder)
    path = reference.trajectories["otter"]
    home = np.linalg.inv(world.truth["heron"][0])
    inside = (path.t_s >= world.t_s[0]) & (path.t_s <= world.t_s[-1])
    assert inside.sum() > 280
    true = np.array([(home @ world.at("otter", t))[:2, 2] for t in path.t_s[inside]])
    gap = path.pose[inside, :2] - true
    # At 0.6 m/s a quarter of a second would show as 15 cm, the clock as a metre.
    assert np.sqrt(np.mean(np.sum(gap**2, axis=1))) < 0.06
    kept = reference.measurements.query("kind in ('sighting', 'encounter')")["verdict"] == "kept"
    assert kept.mean() > 0.97

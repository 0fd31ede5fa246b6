"""A simulated survey as a folder: tables as the schema has them, and the truth beside it."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import group
from jointmap.simulate.associations import own_labels
from jointmap.simulate.build import Simulation
from jointmap.simulate.files import write_json, write_table, write_toml
from jointmap.simulate.observe import Observed
from jointmap.simulate.team import RobotSpec, SensorSpec

Ints = NDArray[np.int64]

_POSE_COLUMNS = {
    2: ("x_m", "y_m", "yaw_rad"),
    3: ("x_m", "y_m", "z_m", "qx", "qy", "qz", "qw"),
}
_TAG_SIGMAS = {2: ("rz_rad",), 3: ("rx_rad", "ry_rad", "rz_rad")}


def write_survey(simulation: Simulation, folder: Path) -> None:
    """Write all files of a survey into an empty folder."""
    for robot in simulation.team:
        _write_robot(simulation, robot, folder)
    ending = simulation.settings.format
    if simulation.closures is not None:
        write_table(folder / f"closures.{ending}", simulation.closures.columns)
    if simulation.control is not None:
        write_table(folder / "control_points.csv", simulation.control)
    if _associated(simulation):
        write_table(folder / "associations.csv", _associations(simulation, listed_only=True))
    write_toml(folder / "survey.toml", _sections(simulation))
    _write_truth(simulation, folder / "truth")


def _associated(simulation: Simulation) -> bool:
    settings = simulation.settings
    if not simulation.associations.listed.any():
        return False
    return own_labels(settings) or settings.wrong_associations > 0 or settings.unlisted > 0


def _label_column(simulation: Simulation, robot: RobotSpec) -> list[str]:
    """Label of each sighting of a robot."""
    table = simulation.associations
    index = simulation.team.index(robot)
    own = np.flatnonzero(table.robot == index)
    labels = np.array(table.labels, dtype=object)[own]
    where = np.searchsorted(table.plate[own], simulation.sightings[robot.name].target)
    return [str(x) for x in labels[where]]


def _observation_columns(observed: Observed, robot: RobotSpec) -> dict[str, Any]:
    sensors = np.array([s.name for s in robot.sensors], dtype=object)
    return {"t_s": observed.log_s, "sensor": [str(s) for s in sensors[observed.sensor]]}


def _write_robot(simulation: Simulation, robot: RobotSpec, folder: Path) -> None:
    ending = simulation.settings.format
    home = folder / robot.name
    odometry = simulation.odometry[robot.name]
    write_table(home / f"odometry.{ending}", {"t_s": odometry.log_s, **odometry.values})
    seen = simulation.sightings[robot.name]
    if len(seen.log_s):
        columns = _observation_columns(seen, robot)
        columns["landmark"] = _label_column(simulation, robot)
        write_table(home / f"sightings.{ending}", columns | dict(seen.values))
    if simulation.encounters and len(simulation.encounters[robot.name].log_s):
        met = simulation.encounters[robot.name]
        columns = _observation_columns(met, robot)
        columns["robot"] = [simulation.team[k].name for k in met.target]
        write_table(home / f"encounters.{ending}", columns | dict(met.values))
    if robot.name in simulation.fixes:
        write_table(home / f"fixes.{ending}", simulation.fixes[robot.name])


def _associations(simulation: Simulation, *, listed_only: bool) -> dict[str, Any]:
    table = simulation.associations
    rows = np.flatnonzero(table.listed | (not listed_only))
    names = simulation.plates.names
    plate = table.claim if listed_only else table.plate
    return {
        "robot": [simulation.team[k].name for k in table.robot[rows]],
        "label": [table.labels[k] for k in rows],
        "landmark": [names[k] for k in plate[rows]],
    }


def _sections(simulation: Simulation) -> list[tuple[str, dict[str, Any]]]:
    """survey.toml, section by section."""
    settings = simulation.settings
    head: dict[str, Any] = {
        "format": 1,
        "name": f"{simulation.world}, seed {simulation.seed}",
        "dimension": simulation.dimension,
    }
    if simulation.dimension == 3:
        forms = {r.odometry_form for r in simulation.team}
        head["gravity_aligned"] = settings.gravity_aligned and forms == {"pose"}
    first = simulation.team[0].name
    sections = [("survey", head), ("datum", {"kind": "landmarks", "robot": first})]
    for robot in simulation.team:
        sections += _robot_sections(simulation, robot)
    return sections


def _robot_sections(simulation: Simulation, robot: RobotSpec) -> list[tuple[str, dict[str, Any]]]:
    settings, ending = simulation.settings, simulation.settings.format
    name = f"robots.{robot.name}"
    entry: dict[str, Any] = {"odometry": f"{robot.name}/odometry.{ending}"}
    if len(simulation.sightings[robot.name].log_s):
        entry["sightings"] = f"{robot.name}/sightings.{ending}"
    if simulation.encounters and len(simulation.encounters[robot.name].log_s):
        entry["encounters"] = f"{robot.name}/encounters.{ending}"
    if robot.name in simulation.fixes:
        entry["fixes"] = f"{robot.name}/fixes.{ending}"
        entry["antenna"] = robot.antenna.tolist()
    entry["target_point"] = robot.target_point.tolist()
    sections = [(name, entry)]
    if settings.state_noise:
        if simulation.dimension == 3 and robot.tilt_rad > 0:
            entry["gravity_sigma_rad"] = robot.tilt_rad
        if robot.odometry_noise["translation_per_sqrt_m"] > 0:
            sections.append((f"{name}.odometry_noise", dict(robot.odometry_noise)))
    for sensor in robot.sensors:
        sections.append((f"{name}.sensors.{sensor.name}", _sensor_entry(simulation, sensor)))
    if settings.clock_sigma_s > 0:
        sections.append((f"{name}.clock", {"sigma_offset_s": settings.clock_sigma_s}))
    return sections


def _sensor_entry(simulation: Simulation, sensor: SensorSpec) -> dict[str, Any]:
    dim = simulation.dimension
    entry: dict[str, Any] = {"body_T_sensor": group(dim).to_rows(sensor.mount).tolist()}
    if not simulation.settings.state_noise or not any(sensor.sigma.values()):
        return entry
    columns = list(sensor.columns)
    if simulation.settings.tags > 0:
        columns += [*("x_m", "y_m", "z_m")[:dim], *_TAG_SIGMAS[dim]]
    for column in dict.fromkeys(columns):
        entry[f"sigma_{column}"] = sensor.sigma[column]
    if "range_m" in columns and sensor.sigma["range_per_m"] > 0:
        entry["sigma_range_per_m"] = sensor.sigma["range_per_m"]
    return entry


def _write_truth(simulation: Simulation, folder: Path) -> None:
    dim, ending = simulation.dimension, simulation.settings.format
    names = _POSE_COLUMNS[dim]
    for robot in simulation.team:
        motion = simulation.motions[robot.name]
        rows = group(dim).to_rows(motion.pose)
        columns = {"t_s": motion.t_s} | {c: rows[:, k] for k, c in enumerate(names)}
        write_table(folder / f"{robot.name}.{ending}", columns)
    write_table(folder / "landmarks.csv", _true_landmarks(simulation))
    table = _associations(simulation, listed_only=False)
    wrong = simulation.associations.wrong & simulation.associations.listed
    write_table(folder / "associations.csv", table | {"wrong": wrong})
    write_json(folder / "settings.json", _injected(simulation))


def _true_landmarks(simulation: Simulation) -> dict[str, Any]:
    """Plates as poses: x axis along the direction that the plate faces."""
    plates, dim = simulation.plates, simulation.dimension
    columns: dict[str, Any] = {"landmark": list(plates.names)}
    columns |= {c: plates.position[:, k] for k, c in enumerate(("x_m", "y_m", "z_m")[:dim])}
    if dim == 2:
        return columns | {"yaw_rad": plates.yaw}
    zero = np.zeros(len(plates.yaw))
    half = plates.yaw / 2
    return columns | {"qx": zero, "qy": zero, "qz": np.sin(half), "qw": np.cos(half)}


def _injected(simulation: Simulation) -> dict[str, Any]:
    """Everything that was put in, for studies that check estimates."""
    settings = simulation.settings
    # file rows as a text editor counts them: the header is row 1
    closures = simulation.closures
    wrong = [] if closures is None else (np.flatnonzero(closures.wrong) + 2).tolist()
    return {
        "world": simulation.world,
        "seed": simulation.seed,
        "settings": asdict(settings),
        "conventions": {
            "scale": "true motion = scale * reported motion",
            "lag": "a row stamped t describes the motion at t + lag",
            "clock": "survey time = log time - offset - drift * (log time - first log time)",
            "rows": "row numbers count the header as row 1",
            "sigma": "white noise; the other processes are factors on it, see settings",
        },
        "robots": {r.name: _injected_robot(simulation, r) for r in simulation.team},
        "wrong_closure_rows": wrong,
    }


def _injected_robot(simulation: Simulation, robot: RobotSpec) -> dict[str, Any]:
    odometry = simulation.odometry[robot.name]
    seen = simulation.sightings[robot.name]
    met = simulation.encounters.get(robot.name)
    motion = simulation.motions[robot.name]
    return {
        "kind": robot.kind,
        "noise_factor": robot.factor,
        "odometry": {
            "form": robot.odometry_form,
            "noise": dict(robot.odometry_noise),
            "tilt_rad": robot.tilt_rad,
            "scale": robot.scale,
            "rotation_scale": robot.rotation_scale,
            "lag_s": robot.lag_s,
            "gaps_s": [list(g) for g in odometry.gaps],
            "slips_s": [list(s) for s in odometry.slips],
        },
        "clock": {"offset_s": robot.clock_offset_s, "drift_ppm": robot.clock_drift_ppm},
        "sensors": {
            s.name: {
                "columns": list(s.columns),
                "sigma": dict(s.sigma),
                "lag_s": s.lag_s,
                "body_T_sensor": group(simulation.dimension).to_rows(s.mount).tolist(),
            }
            for s in robot.sensors
        },
        "gross_sighting_rows": (np.flatnonzero(seen.gross) + 2).tolist(),
        "gross_encounter_rows": [] if met is None else (np.flatnonzero(met.gross) + 2).tolist(),
        "first_s": float(motion.t_s[0]),
        "last_s": float(motion.t_s[-1]),
        "last_sighting_s": float(seen.log_s[-1]) if len(seen.log_s) else None,
    }

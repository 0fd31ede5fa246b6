"""survey.toml: what the survey consists of."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from jointmap.ingest.files import SurveyFiles
from jointmap.ingest.problems import did_you_mean
from jointmap.ingest.section import Section, load_toml
from jointmap.ingest.survey import Clock, Floats, Sensor
from jointmap.ingest.values import name_fault, unit_quaternion

FILE = "survey.toml"
TABLE_KEYS = ("odometry", "sightings", "encounters", "fixes")
ODOMETRY_NOISE = (
    "translation_per_sqrt_m",
    "rotation_per_sqrt_m",
    "rotation_per_sqrt_rad",
    "translation_per_sqrt_s",
    "rotation_per_sqrt_s",
)
#: Noise terms of a sensor, by their name without ``sigma_``.
SENSOR_NOISE = (
    "range_m",
    "range_per_m",
    "bearing_rad",
    "elevation_rad",
    "x_m",
    "y_m",
    "z_m",
    "rx_rad",
    "ry_rad",
    "rz_rad",
)


@dataclass(frozen=True)
class RobotConfig:
    """One robot of survey.toml; ``files`` holds the file names of each of TABLE_KEYS."""

    name: str
    files: Mapping[str, tuple[str, ...]]
    target_point: Floats
    antenna: Floats
    gravity_sigma_rad: float | None
    odometry_lag_s: float | None
    odometry_noise: Mapping[str, float]
    sensors: Mapping[str, Sensor]
    clock: Clock


@dataclass(frozen=True)
class Config:
    """survey.toml as a whole. ``site_origin`` is (lat_deg, lon_deg, height_m) when stated."""

    name: str
    dimension: int
    gravity_aligned: bool
    crs: str | None
    site_origin: tuple[float, float, float] | None
    datum_kind: Literal["landmarks", "robot", "control"]
    datum_robot: str | None
    robots: Mapping[str, RobotConfig]


def read_config(files: SurveyFiles) -> Config | None:
    """Read survey.toml; ``None`` when nothing else can be read without it."""
    values = load_toml(files, FILE)
    if values is None:
        return None
    root = Section(FILE, "", values, files.problems)
    survey = root.section("survey")
    dimension = _dimension(survey)
    if dimension is None:
        return None
    _format(survey)
    robots = _robots(root.section("robots"), dimension)
    kind, robot = _datum(root.section("datum"), robots)
    config = Config(
        name=survey.text("name", files.folder.resolve().name) or "survey",
        dimension=dimension,
        gravity_aligned=_gravity_aligned(survey, dimension),
        crs=survey.text("crs"),
        site_origin=_origin(survey),
        datum_kind=kind,
        datum_robot=robot,
        robots=robots,
    )
    survey.done()
    root.done()
    return config


def _dimension(survey: Section) -> int | None:
    value = survey.values.get("dimension") if survey.has("dimension") else None
    if value in (2, 3) and not isinstance(value, bool | float):
        return int(value)
    message = "is missing" if value is None else f"{value!r} is neither 2 nor 3"
    survey.wrong("dimension", message, "write dimension = 2 or dimension = 3 under [survey]")
    return None


def _format(survey: Section) -> None:
    if not survey.has("format"):
        survey.wrong("format", "is missing", "format = 1 is assumed", mended=True)
    elif survey.values["format"] != 1:
        message = f"{survey.values['format']!r} is not a format that this version reads"
        survey.wrong("format", message, "write format = 1, or use a newer version")


def _gravity_aligned(survey: Section, dimension: int) -> bool:
    flag = survey.flag("gravity_aligned", False)
    if flag and dimension == 2:
        mend = "it is ignored in two dimensions"
        survey.wrong("gravity_aligned", "has no meaning here", mend, mended=True)
        return False
    return flag


def _origin(survey: Section) -> tuple[float, float, float] | None:
    if not survey.has("site_origin"):
        return None
    lat, lon, height = survey.vector("site_origin", (3,), (0.0, 0.0, 0.0)).tolist()
    if abs(lat) > 90.0 or abs(lon) > 360.0:
        survey.wrong("site_origin", "is no place on Earth", "write [lat_deg, lon_deg, height_m]")
        return None
    return (lat, lon, height)


def _datum(
    datum: Section, robots: Mapping[str, RobotConfig]
) -> tuple[Literal["landmarks", "robot", "control"], str | None]:
    kind = datum.choice("kind", ("landmarks", "robot", "control"), "landmarks")
    robot = datum.text("robot")
    if robot is not None and robot not in robots:
        datum.wrong("robot", f"there is no robot {robot!r}", did_you_mean(robot, robots))
        robot = None
    datum.done()
    return kind, robot  # type: ignore[return-value]


def _robots(section: Section, dimension: int) -> dict[str, RobotConfig]:
    robots = {}
    for name in section.values:
        fault = name_fault(name)
        if fault:
            section.wrong(name, f"the name {fault}", "rename the robot")
        robots[name] = _robot(name, section.section(name), dimension)
    if not robots:
        section.problems.add(
            FILE,
            "the survey has no robot",
            "add a section [robots.NAME] per robot",
            column="robots",
        )
    return robots


def _robot(name: str, section: Section, dimension: int) -> RobotConfig:
    noise = section.section("odometry_noise")
    given = {k: noise.number(k, least=0.0) for k in ODOMETRY_NOISE}
    noise.done()
    sensors = section.section("sensors")
    for sensor in sensors.values:
        fault = name_fault(sensor)
        if fault:
            sensors.wrong(sensor, f"the name {fault}", "rename the sensor")
    robot = RobotConfig(
        name=name,
        files={k: section.names(k) for k in TABLE_KEYS},
        target_point=_point(section, "target_point", dimension),
        antenna=_point(section, "antenna", dimension),
        gravity_sigma_rad=section.number("gravity_sigma_rad", above=0.0),
        odometry_lag_s=section.number("odometry_lag_s"),
        odometry_noise={k: v for k, v in given.items() if v is not None},
        sensors={s: _sensor(s, sensors.section(s), dimension) for s in sensors.values},
        clock=_clock(section.section("clock")),
    )
    section.done()
    return robot


def _point(section: Section, key: str, dimension: int) -> Floats:
    """A point of the body; in two dimensions a third number is height and does not matter."""
    lengths = (2, 3) if dimension == 2 else (3,)
    return section.vector(key, lengths, [0.0] * dimension)[:dimension]


def _clock(section: Section) -> Clock:
    clock = Clock(
        offset_s=section.number("offset_s", 0.0) or 0.0,
        drift_ppm=section.number("drift_ppm", 0.0) or 0.0,
        sigma_offset_s=section.number("sigma_offset_s", 0.0, least=0.0) or 0.0,
        sigma_drift_ppm=section.number("sigma_drift_ppm", 0.0, least=0.0) or 0.0,
    )
    section.done()
    return clock


def _sensor(name: str, section: Section, dimension: int) -> Sensor:
    sensor = Sensor(
        name=name,
        body_T_sensor=_mounting(section, dimension),
        sigma_body_T_sensor=_mounting_sigma(section, dimension),
        lag_s=section.number("lag_s", 0.0) or 0.0,
        sigma=_sensor_noise(section, dimension),
    )
    section.done()
    return sensor


def _mounting(section: Section, dimension: int) -> Floats:
    identity = [0.0] * 3 if dimension == 2 else [0.0] * 6 + [1.0]
    if not section.has("body_T_sensor"):
        section.wrong("body_T_sensor", "is missing", "the body frame is taken", mended=True)
    pose = section.vector("body_T_sensor", (len(identity),), identity)
    if dimension == 2:
        if abs(pose[2]) > 2.0 * np.pi:
            section.wrong("body_T_sensor", "the yaw is in degrees", "multiply it by pi/180")
        return pose
    quaternion, fault = unit_quaternion(pose[None, 3:])
    if fault[0]:
        section.wrong("body_T_sensor", "the quaternion has no unit length", "write qx qy qz qw")
    return np.concatenate([pose[:3], quaternion[0]])


def _mounting_sigma(section: Section, dimension: int) -> Floats:
    dof = 3 if dimension == 2 else 6
    sigma = section.vector("sigma_body_T_sensor", (dof,), [0.0] * dof)
    if (sigma < 0.0).any():
        section.wrong("sigma_body_T_sensor", "has a negative entry", "zero means exact")
    return sigma


def _sensor_noise(section: Section, dimension: int) -> dict[str, float]:
    """Given noise terms; a constant term of zero would be an exact measurement: refused."""
    given = {}
    for term in SENSOR_NOISE:
        exact = term == "range_per_m"
        value = section.number(f"sigma_{term}", least=0.0, **({} if exact else {"above": 0.0}))
        if value is not None:
            given[term] = value
    if dimension == 2:
        yaw = section.number("sigma_yaw_rad", above=0.0)
        if yaw is not None:
            given["rz_rad"] = yaw
    for term, value in given.items():
        if term.endswith("_rad") and value > np.pi:
            section.wrong(
                f"sigma_{term}", f"{value:g} rad is over half a turn", "multiply by pi/180"
            )
    return given

"""The team: names, kinds, sensors with their mountings, and the noise each robot has."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from jointmap.errors import SettingsError
from jointmap.frames import quaternion_to_matrix
from jointmap.simulate.route import Limits
from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams

Floats = NDArray[np.float64]

#: Names of the team; every fourth robot is a quadrotor.
ROBOT_NAMES = (
    "heron",
    "otter",
    "vole",
    "swift",
    "badger",
    "marten",
    "stoat",
    "kestrel",
    "adder",
    "toad",
    "newt",
    "martin",
    "hedgehog",
    "polecat",
    "shrew",
    "merlin",
    "dormouse",
    "weasel",
    "rabbit",
    "lapwing",
    "beetle",
    "snail",
    "mole",
    "plover",
    "fox",
    "hare",
    "ferret",
    "curlew",
    "lizard",
    "frog",
    "cricket",
    "redwing",
    "squirrel",
    "rat",
    "mouse",
    "wagtail",
    "woodlouse",
    "spider",
    "millipede",
    "dipper",
    "goat",
    "ram",
    "ewe",
    "starling",
    "pony",
    "wether",
    "heifer",
    "linnet",
    "slowworm",
    "grouse",
)

#: White sigmas at factor 1: metres, radians.
BASE_SIGMA: Mapping[str, float] = {
    "range_m": 0.05,
    "bearing_rad": 0.010,
    "elevation_rad": 0.010,
    "x_m": 0.05,
    "y_m": 0.05,
    "z_m": 0.05,
    "rx_rad": 0.02,
    "ry_rad": 0.02,
    "rz_rad": 0.02,
}
#: White odometry noise at factor 1, per square root of the unit.
BASE_ODOMETRY: Mapping[str, float] = {
    "translation_per_sqrt_m": 0.02,
    "rotation_per_sqrt_m": 0.006,
    "rotation_per_sqrt_rad": 0.015,
    "translation_per_sqrt_s": 0.001,
    "rotation_per_sqrt_s": 0.0005,
}
#: Standard deviation of roll and pitch of gravity-aligned odometry at factor 1, radians.
BASE_TILT_RAD = 0.003

_LIMITS = {
    "crawler": Limits(speed=0.8, acceleration=0.3, lateral=0.25, rate=0.7),
    "quadrotor": Limits(speed=1.4, acceleration=1.0, lateral=1.0, rate=0.9),
}
#: Yaw of the first to fourth sensor of a crawler and of a quadrotor, radians.
_SENSOR_YAW = {"front": 0.0, "left": 1.75, "right": -1.75, "rear": 3.0}


@dataclass(frozen=True)
class SensorSpec:
    """One landmark sensor.

    ``columns`` are what it observes; ``mount`` is body_T_sensor, (3,) or (3, 4); ``sigma`` true
    white sigma of each column (and ``range_per_m``, and rotations of tags).
    """

    name: str
    columns: tuple[str, ...]
    mount: Floats
    sigma: Mapping[str, float]
    lag_s: float


@dataclass(frozen=True)
class RobotSpec:
    """One robot with everything that is true of it.

    ``target_point`` and ``antenna`` (dimension,) in its body frame; ``odometry_noise`` true white
    terms; ``tilt_rad`` sigma of roll and pitch of gravity-aligned odometry.
    """

    name: str
    kind: Literal["crawler", "quadrotor"]
    sensors: tuple[SensorSpec, ...]
    target_point: Floats
    antenna: Floats
    factor: float
    odometry_form: Literal["pose", "twist"]
    odometry_noise: Mapping[str, float]
    tilt_rad: float
    scale: float
    rotation_scale: float
    lag_s: float
    clock_offset_s: float
    clock_drift_ppm: float

    @property
    def limits(self) -> Limits:
        """What this kind of robot can do."""
        return _LIMITS[self.kind]


def make_team(
    dimension: int, settings: SimulationSettings, streams: Streams
) -> tuple[RobotSpec, ...]:
    """Robots of the survey.

    Raises
    ------
    SettingsError
        If a setting names a robot that is not in the team.
    """
    names = ROBOT_NAMES[: settings.robots]
    for setting in ("lost", "late", "fixes"):
        for name in getattr(settings, setting):
            if name not in names:
                raise SettingsError(f"{setting}: no robot {name!r}; there are {', '.join(names)}")
    return tuple(_robot(k, name, dimension, settings, streams) for k, name in enumerate(names))


def _robot(
    k: int, name: str, dimension: int, settings: SimulationSettings, streams: Streams
) -> RobotSpec:
    kind: Literal["crawler", "quadrotor"] = "quadrotor" if k % 4 == 3 else "crawler"
    spread = np.log(settings.noise_spread) / 2
    factor = settings.per_robot("noise_factors", k) * float(
        np.exp(streams.get("factor", name).uniform(-spread, spread))
    )
    form = settings.odometry_form
    if form == "auto":
        form = "pose" if kind == "quadrotor" or dimension == 3 else "twist"
    offset = settings.mounting == "offset"
    point = np.array([-0.05, 0.02, 0.25])[:dimension] * offset
    antenna = np.array([-0.12, 0.0, 0.3])[:dimension] * offset
    white = settings.odometry_noise * factor
    return RobotSpec(
        name,
        kind,
        _sensors(k, kind, dimension, factor, settings),
        point,
        antenna,
        factor,
        "pose" if form == "pose" else "twist",
        {term: white * value for term, value in BASE_ODOMETRY.items()},
        white * BASE_TILT_RAD,
        settings.per_robot("odometry_scale", k),
        settings.per_robot("odometry_rotation_scale", k),
        settings.per_robot("odometry_lag_s", k),
        settings.per_robot("clock_offset_s", k),
        settings.per_robot("clock_drift_ppm", k),
    )


def _sensors(
    k: int, kind: str, dimension: int, factor: float, settings: SimulationSettings
) -> tuple[SensorSpec, ...]:
    """Range and bearing (2-D), with elevation (3-D); a quadrotor in 3-D has two cameras."""
    polar: tuple[str, ...] = ("bearing_rad", "range_m")
    if dimension == 3:
        polar = ("bearing_rad", "elevation_rad", "range_m")
    names = list(_SENSOR_YAW)[: settings.sensors]
    columns: dict[str, tuple[str, ...]] = dict.fromkeys(names, polar)
    if kind == "quadrotor" and dimension == 3:
        columns = {"camera": ("x_m", "y_m", "z_m"), "wide": ("bearing_rad", "elevation_rad")}
    white = settings.sighting_noise * factor
    sigma = {name: white * value for name, value in BASE_SIGMA.items()}
    sigma["range_per_m"] = white * settings.range_per_m
    lag = settings.per_robot("sensor_lag_s", k)
    return tuple(
        SensorSpec(name, cols, _mount(name, dimension, settings.mounting == "offset"), sigma, lag)
        for name, cols in columns.items()
    )


def _mount(name: str, dimension: int, offset: bool) -> Floats:
    """body_T_sensor, rounded to what survey.toml carries: (3,) or (3, 4)."""
    yaw = _SENSOR_YAW.get(name, 0.15 if name == "wide" else 0.0)
    yaw += 0.04 * offset
    place = np.array([0.18 * np.cos(yaw), 0.18 * np.sin(yaw) + 0.03, 0.22]) * offset
    if dimension == 2:
        return np.round(np.array([place[0], place[1], yaw]), 6)
    pitch = -0.12 * offset  # looks up a little: plates hang above the sensors
    half = 0.5 * np.array([yaw, pitch])
    c, s = np.cos(half), np.sin(half)
    # Rz(yaw) Ry(pitch) as a quaternion x y z w
    quaternion = np.array([-s[0] * s[1], c[0] * s[1], s[0] * c[1], c[0] * c[1]])
    rotation = quaternion_to_matrix(np.round(quaternion, 9))
    return np.asarray(np.column_stack([rotation, np.round(place, 6)]), dtype=np.float64)

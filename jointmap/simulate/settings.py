"""What a simulated survey is like: team, world, sensors and the errors that are put in.

The settings are one flat frozen dataclass; each field carries its help text, so that the options
of the command line are made from it and cannot drift away.

Values per robot are tuples that are repeated over the team: ``(0.9,)`` is the same for all,
``(0.9, 0.95)`` alternates.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any

from jointmap.errors import SettingsError

#: Most robots that a team can have.
MAX_ROBOTS = 50

PerRobot = tuple[float, ...]
Names = tuple[str, ...]


def _setting(
    default: Any,
    text: str,
    low: float | None = None,
    high: float | None = None,
    choices: tuple[str, ...] = (),
) -> Any:
    """A dataclass field with its help text and its domain."""
    return field(
        default=default, metadata={"help": text, "low": low, "high": high, "choices": choices}
    )


@dataclass(frozen=True)
class SimulationSettings:
    """Everything that decides a simulated survey besides the world's name and the seed.

    Lengths in metres, times in seconds, angles in radians, shares in [0, 1]. Factors are relative
    to the white sigma of the component that they disturb.

    Raises
    ------
    SettingsError
        If a value is outside its domain.
    """

    # team and world
    robots: int = _setting(4, "number of robots", 1, MAX_ROBOTS)
    duration_s: float = _setting(600.0, "length of the survey", 10.0, 1e6)
    landmarks: int = _setting(60, "number of plates on the walls", 4, 20000)
    start_s: float = _setting(1.75e9, "first instant, Unix time", 0.0, 4e9)

    # odometry
    odometry_form: str = _setting(
        "auto",
        "form of the odometry; auto: pose form for quadrotors and in 3-D, twist form otherwise",
        choices=("auto", "pose", "twist"),
    )
    odometry_rate_hz: float = _setting(10.0, "odometry rows per second", 1.0, 500.0)
    odometry_start: str = _setting(
        "identity", "first pose of pose-form odometry", choices=("identity", "arbitrary")
    )
    odometry_noise: float = _setting(1.0, "factor on all white odometry noise", 0.0, 100.0)
    odometry_scale: PerRobot = _setting((1.0,), "forward motion / reported motion, per robot", 0.2, 5.0)
    odometry_rotation_scale: PerRobot = _setting(
        (1.0,), "rotation / reported rotation, per robot", 0.2, 5.0
    )
    odometry_lag_s: PerRobot = _setting(
        (0.0,), "motion(t + lag) = command(t), per robot", -5.0, 5.0
    )
    odometry_correlated: float = _setting(
        0.0, "time-correlated velocity error as a share of the velocity", 0.0, 1.0
    )
    odometry_correlation_time_s: float = _setting(
        10.0, "correlation time of that velocity error", 0.01, 1e5
    )
    odometry_gaps_per_h: float = _setting(0.0, "odometry outages per hour", 0.0, 1e4)
    odometry_gap_s: float = _setting(1.0, "longest odometry outage", 0.0, 600.0)
    odometry_slips: int = _setting(0, "wheel slips or jumps of each robot's odometry", 0, 1000)
    gravity_aligned: bool = _setting(
        True, "3-D pose-form odometry keeps true roll and pitch", choices=("yes", "no")
    )

    # sensors and sightings
    sensors: int = _setting(1, "landmark sensors of each robot", 1, 4)
    sighting_rate_hz: float = _setting(2.0, "frames per second of each sensor", 0.01, 100.0)
    detection: float = _setting(0.85, "probability that a visible plate is reported", 0.0, 1.0)
    max_range_m: float = _setting(9.0, "farthest sighting", 1.0, 100.0)
    field_of_view_rad: float = _setting(2.2, "horizontal field of view", 0.1, 6.3)
    mounting: str = _setting(
        "offset",
        "sensor mountings, target points and antennas away from the body's origin, or at it",
        choices=("offset", "origin"),
    )
    sensor_lag_s: PerRobot = _setting(
        (0.0,), "a sighting stamped t describes t + lag, per robot", -5.0, 5.0
    )
    sighting_noise: float = _setting(1.0, "factor on all white sighting noise", 0.0, 100.0)
    noise_factors: PerRobot = _setting((1.0,), "factor on all noise, per robot", 0.0, 100.0)
    noise_spread: float = _setting(
        1.0, "largest / smallest noise of the robots, drawn log-uniformly", 1.0, 100.0
    )
    range_per_m: float = _setting(0.01, "range noise per metre of range", 0.0, 1.0)
    tags: float = _setting(0.0, "share of the plates that are tags with orientation", 0.0, 1.0)

    # errors of sightings outside white noise
    correlated: float = _setting(
        0.0, "Gauss-Markov error per robot, sensor and target, factor on sigma", 0.0, 100.0
    )
    correlation_time_s: float = _setting(5.0, "its correlation time", 0.01, 1e5)
    gross_errors: float = _setting(0.0, "share of gross errors", 0.0, 1.0)
    student_dof: float = _setting(
        0.0, "degrees of freedom of heavy-tailed noise of equal variance; 0: normal", 0.0, 1e6
    )
    bias_walk: float = _setting(
        0.0, "random walk of the sensor's bias, factor on sigma per sqrt(100 s)", 0.0, 100.0
    )
    slow_drift: float = _setting(0.0, "amplitude of a slow sinusoidal bias, factor on sigma", 0.0, 100.0)
    slow_drift_period_s: float = _setting(400.0, "its period", 1.0, 1e6)
    angle_error: float = _setting(
        0.0, "error that grows with the incidence angle on the plate, factor on sigma", 0.0, 100.0
    )

    # labels and associations
    labels: str = _setting(
        "auto",
        "names of landmarks in the logs; auto: each robot's own where associations are needed",
        choices=("auto", "plates", "own"),
    )
    wrong_associations: float = _setting(0.0, "share of wrong associations", 0.0, 1.0)
    wrong_pattern: str = _setting(
        "random",
        "how associations are wrong; coherent: half swapped pairs, half shifted blocks",
        choices=("random", "swapped", "shifted", "coherent"),
    )
    unlisted: float = _setting(0.0, "share of labels that the associations do not list", 0.0, 1.0)

    # robots that fail, clocks
    lost: Names = _setting((), "robots that are lost half-way")
    lost_mode: str = _setting(
        "sightings", "what stops when a robot is lost", choices=("sightings", "all")
    )
    late: Names = _setting((), "robots that start after a third of the survey")
    clock_offset_s: PerRobot = _setting((0.0,), "clock offset, per robot", -1e6, 1e6)
    clock_drift_ppm: PerRobot = _setting((0.0,), "clock drift, per robot", -1e4, 1e4)
    clock_sigma_s: float = _setting(
        0.0, "state clock offsets as unknown with this sigma (0: not stated at all)", 0.0, 1e6
    )

    # other measurements
    encounters: bool = _setting(True, "robots see each other", choices=("yes", "no"))
    fixes: Names = _setting((), "robots that receive position fixes")
    fix_period_s: float = _setting(10.0, "time between fixes", 0.1, 1e5)
    fix_sigma_m: float = _setting(0.5, "sigma of a fix per axis", 1e-4, 100.0)
    control_points: int = _setting(0, "surveyed plates", 0, 1000)
    control_sigma_m: float = _setting(0.02, "sigma of surveyed coordinates per axis", 1e-5, 10.0)
    closures: int = _setting(0, "place recognitions", 0, 100000)
    wrong_closures: float = _setting(0.0, "share of wrong place recognitions", 0.0, 1.0)

    # files
    state_noise: bool = _setting(
        False, "state the true white sigmas in survey.toml", choices=("yes", "no")
    )
    format: str = _setting(
        "csv", "format of the large tables", choices=("csv", "csv.gz", "parquet")
    )

    def __post_init__(self) -> None:
        for item in fields(self):
            _check(item.name, getattr(self, item.name), item.metadata)
        if 0 < self.student_dof <= 2:
            raise SettingsError("student_dof must be 0 or larger than 2: the variance is infinite")

    def per_robot(self, name: str, robot: int) -> float:
        """Value of a per-robot setting for the robot of this index."""
        values: PerRobot = getattr(self, name)
        return values[robot % len(values)]

    @classmethod
    def preset(cls, errors: str = "white", **changes: Any) -> SimulationSettings:
        """Settings for a kind of errors, with changes.

        Parameters
        ----------
        errors : {"none", "white", "field"}
            No errors at all; white noise only; or everything that real logs show.
        **changes
            Fields that replace those of the preset.
        """
        if errors not in PRESETS:
            raise SettingsError(f"errors: {errors!r} is none of {', '.join(PRESETS)}")
        return replace(cls(), **{**PRESETS[errors], **changes})


#: Kinds of errors. ``field`` follows what wheeled robots in a room with tubes were found to do:
#: noise that differs threefold by robot and grows with range, bursts with common errors, one to
#: four per cent of gross errors, commands that the motion follows late and too slowly, outages.
PRESETS: Mapping[str, Mapping[str, Any]] = {
    "none": {"odometry_noise": 0.0, "sighting_noise": 0.0},
    "white": {},
    "field": {
        "noise_spread": 3.0,
        "range_per_m": 0.02,
        "odometry_scale": (0.9, 0.93, 0.95, 0.99),
        "odometry_rotation_scale": (0.97, 0.95, 0.98, 1.0),
        "odometry_lag_s": (0.2, 0.15, 0.3, 0.05),
        "odometry_correlated": 0.02,
        "odometry_gaps_per_h": 20.0,
        "correlated": 1.0,
        "gross_errors": 0.02,
    },
}


def _check(name: str, value: Any, domain: Mapping[str, Any]) -> None:
    """Raise SettingsError unless the value lies in the stated domain."""
    if isinstance(value, bool):
        return
    if isinstance(value, str):
        if domain["choices"] and value not in domain["choices"]:
            raise SettingsError(f"{name}: {value!r} is none of {', '.join(domain['choices'])}")
        return
    values = value if isinstance(value, tuple) else (value,)
    if domain["low"] is None:
        return
    if not values:
        raise SettingsError(f"{name}: needs at least one value")
    for v in values:
        if not domain["low"] <= v <= domain["high"]:
            raise SettingsError(f"{name}: {v} is not in [{domain['low']:g}, {domain['high']:g}]")

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


def _about(
    text: str,
    low: float | None = None,
    high: float | None = None,
    choices: tuple[str, ...] = (),
) -> dict[str, Any]:
    """Metadata of a field: its help text and its domain."""
    return {"help": text, "low": low, "high": high, "choices": choices}


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
    robots: int = field(default=4, metadata=_about("number of robots", 1, MAX_ROBOTS))
    duration_s: float = field(default=600.0, metadata=_about("length of the survey", 10.0, 1e6))
    landmarks: int = field(default=60, metadata=_about("number of plates on the walls", 4, 20000))
    start_s: float = field(default=1.75e9, metadata=_about("first instant, Unix time", 0.0, 4e9))

    # odometry
    odometry_form: str = field(
        default="auto",
        metadata=_about(
            "form of the odometry; auto: pose form for quadrotors and in 3-D, twist form otherwise",
            choices=("auto", "pose", "twist"),
        ),
    )
    odometry_rate_hz: float = field(
        default=10.0, metadata=_about("odometry rows per second", 1.0, 500.0)
    )
    odometry_start: str = field(
        default="identity",
        metadata=_about("first pose of pose-form odometry", choices=("identity", "arbitrary")),
    )
    odometry_noise: float = field(
        default=1.0, metadata=_about("factor on all white odometry noise", 0.0, 100.0)
    )
    odometry_scale: PerRobot = field(
        default=(1.0,), metadata=_about("forward motion / reported motion, per robot", 0.2, 5.0)
    )
    odometry_rotation_scale: PerRobot = field(
        default=(1.0,), metadata=_about("rotation / reported rotation, per robot", 0.2, 5.0)
    )
    odometry_lag_s: PerRobot = field(
        default=(0.0,), metadata=_about("motion(t + lag) = command(t), per robot", -5.0, 5.0)
    )
    odometry_correlated: float = field(
        default=0.0,
        metadata=_about("time-correlated velocity error as a share of the velocity", 0.0, 1.0),
    )
    odometry_correlation_time_s: float = field(
        default=10.0, metadata=_about("correlation time of that velocity error", 0.01, 1e5)
    )
    odometry_gaps_per_h: float = field(
        default=0.0, metadata=_about("odometry outages per hour", 0.0, 1e4)
    )
    odometry_gap_s: float = field(
        default=1.0, metadata=_about("longest odometry outage", 0.0, 600.0)
    )
    odometry_slips: int = field(
        default=0, metadata=_about("wheel slips or jumps of each robot's odometry", 0, 1000)
    )
    gravity_aligned: bool = field(
        default=True,
        metadata=_about("3-D pose-form odometry keeps true roll and pitch", choices=("yes", "no")),
    )

    # sensors and sightings
    sensors: int = field(default=1, metadata=_about("landmark sensors of each robot", 1, 4))
    sighting_rate_hz: float = field(
        default=2.0, metadata=_about("frames per second of each sensor", 0.01, 100.0)
    )
    detection: float = field(
        default=0.85, metadata=_about("probability that a visible plate is reported", 0.0, 1.0)
    )
    max_range_m: float = field(default=9.0, metadata=_about("farthest sighting", 1.0, 100.0))
    field_of_view_rad: float = field(
        default=2.2, metadata=_about("horizontal field of view", 0.1, 6.3)
    )
    mounting: str = field(
        default="offset",
        metadata=_about(
            "sensor mountings, target points and antennas away from the body's origin, or at it",
            choices=("offset", "origin"),
        ),
    )
    sensor_lag_s: PerRobot = field(
        default=(0.0,),
        metadata=_about("a sighting stamped t describes t + lag, per robot", -5.0, 5.0),
    )
    sighting_noise: float = field(
        default=1.0, metadata=_about("factor on all white sighting noise", 0.0, 100.0)
    )
    noise_factors: PerRobot = field(
        default=(1.0,), metadata=_about("factor on all noise, per robot", 0.0, 100.0)
    )
    noise_spread: float = field(
        default=1.0,
        metadata=_about("largest / smallest noise of the robots, drawn log-uniformly", 1.0, 100.0),
    )
    range_per_m: float = field(
        default=0.01, metadata=_about("range noise per metre of range", 0.0, 1.0)
    )
    tags: float = field(
        default=0.0, metadata=_about("share of the plates that are tags with orientation", 0.0, 1.0)
    )

    # errors of sightings outside white noise
    correlated: float = field(
        default=0.0,
        metadata=_about(
            "Gauss-Markov error per robot, sensor and target, factor on sigma", 0.0, 100.0
        ),
    )
    correlation_time_s: float = field(
        default=5.0, metadata=_about("its correlation time", 0.01, 1e5)
    )
    gross_errors: float = field(default=0.0, metadata=_about("share of gross errors", 0.0, 1.0))
    student_dof: float = field(
        default=0.0,
        metadata=_about(
            "degrees of freedom of heavy-tailed noise of equal variance; 0: normal", 0.0, 1e6
        ),
    )
    bias_walk: float = field(
        default=0.0,
        metadata=_about(
            "random walk of the sensor's bias, factor on sigma per sqrt(100 s)", 0.0, 100.0
        ),
    )
    slow_drift: float = field(
        default=0.0,
        metadata=_about("amplitude of a slow sinusoidal bias, factor on sigma", 0.0, 100.0),
    )
    slow_drift_period_s: float = field(default=400.0, metadata=_about("its period", 1.0, 1e6))
    angle_error: float = field(
        default=0.0,
        metadata=_about(
            "error that grows with the incidence angle on the plate, factor on sigma", 0.0, 100.0
        ),
    )

    # labels and associations
    labels: str = field(
        default="auto",
        metadata=_about(
            "names of landmarks in the logs; auto: each robot's own where associations are needed",
            choices=("auto", "plates", "own"),
        ),
    )
    wrong_associations: float = field(
        default=0.0, metadata=_about("share of wrong associations", 0.0, 1.0)
    )
    wrong_pattern: str = field(
        default="random",
        metadata=_about(
            "how associations are wrong; coherent: half swapped pairs, half shifted blocks",
            choices=("random", "swapped", "shifted", "coherent"),
        ),
    )
    unlisted: float = field(
        default=0.0, metadata=_about("share of labels that the associations do not list", 0.0, 1.0)
    )

    # robots that fail, clocks
    lost: Names = field(default=(), metadata=_about("robots that are lost half-way"))
    lost_mode: str = field(
        default="sightings",
        metadata=_about("what stops when a robot is lost", choices=("sightings", "all")),
    )
    late: Names = field(
        default=(), metadata=_about("robots that start after a third of the survey")
    )
    clock_offset_s: PerRobot = field(
        default=(0.0,), metadata=_about("clock offset, per robot", -1e6, 1e6)
    )
    clock_drift_ppm: PerRobot = field(
        default=(0.0,), metadata=_about("clock drift, per robot", -1e4, 1e4)
    )
    clock_sigma_s: float = field(
        default=0.0,
        metadata=_about(
            "state clock offsets as unknown with this sigma (0: not stated at all)", 0.0, 1e6
        ),
    )

    # other measurements
    encounters: bool = field(
        default=True, metadata=_about("robots see each other", choices=("yes", "no"))
    )
    fixes: Names = field(default=(), metadata=_about("robots that receive position fixes"))
    fix_period_s: float = field(default=10.0, metadata=_about("time between fixes", 0.1, 1e5))
    fix_sigma_m: float = field(default=0.5, metadata=_about("sigma of a fix per axis", 1e-4, 100.0))
    control_points: int = field(default=0, metadata=_about("surveyed plates", 0, 1000))
    control_sigma_m: float = field(
        default=0.02, metadata=_about("sigma of surveyed coordinates per axis", 1e-5, 10.0)
    )
    closures: int = field(default=0, metadata=_about("place recognitions", 0, 100000))
    wrong_closures: float = field(
        default=0.0, metadata=_about("share of wrong place recognitions", 0.0, 1.0)
    )

    # files
    state_noise: bool = field(
        default=False,
        metadata=_about("state the true white sigmas in survey.toml", choices=("yes", "no")),
    )
    format: str = field(
        default="csv",
        metadata=_about("format of the large tables", choices=("csv", "csv.gz", "parquet")),
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

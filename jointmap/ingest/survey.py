"""The survey as it was logged: frozen tables of arrays, nothing interpreted yet.

Times are log times of the robot that wrote the row (its clock is not applied here).
Poses in two dimensions are rows ``x y yaw``; in three ``x y z qx qy qz qw``.
``dof`` below is 3 in two dimensions and 6 in three; covariances and sigmas follow the
table order of the pose (x, y, yaw or x, y, z, rx, ry, rz).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from jointmap.errors import LogProblem

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Columns of ``Observations.value``: bearing first, then range, as the factors take them.
VALUE_COLUMNS = (
    "bearing_rad",
    "elevation_rad",
    "range_m",
    "x_m",
    "y_m",
    "z_m",
    "yaw_rad",
    "qx",
    "qy",
    "qz",
    "qw",
)
#: Columns of ``Observations.sigma``; in two dimensions ``rz_rad`` holds the sigma of yaw.
SIGMA_COLUMNS = (
    "bearing_rad",
    "elevation_rad",
    "range_m",
    "x_m",
    "y_m",
    "z_m",
    "rx_rad",
    "ry_rad",
    "rz_rad",
)


@dataclass(frozen=True)
class Provenance:
    """Where each row of a table came from: ``files[file[i]]``, row ``row[i]``."""

    files: tuple[str, ...]
    file: Ints
    row: Ints


@dataclass(frozen=True)
class Clock:
    """Survey time = log time - offset - drift * (log time - first log time)."""

    offset_s: float = 0.0
    drift_ppm: float = 0.0
    sigma_offset_s: float = 0.0
    sigma_drift_ppm: float = 0.0


@dataclass(frozen=True)
class Sensor:
    """Mounting, lag and the noise that was given for one sensor of one robot.

    ``body_T_sensor`` is a pose row; ``sigma_body_T_sensor`` (dof,) zero where exact.
    ``sigma`` holds only what the survey states, by the name without its prefix:
    ``range_m, range_per_m, bearing_rad, elevation_rad, x_m, y_m, z_m, rx_rad, ry_rad, rz_rad``.
    """

    name: str
    body_T_sensor: Floats
    sigma_body_T_sensor: Floats
    lag_s: float
    sigma: Mapping[str, float]


@dataclass(frozen=True)
class Odometry:
    """A robot's own motion estimate, rows in increasing time.

    ``pose`` (N, 3 or 7) in pose form, ``twist`` (N, 3: vx vy wz, or 6: vx vy vz wx wy wz) in
    twist form, the other is ``None``. ``sigma`` (N, dof) of the increment from the row before
    (pose form) or of the twist components (twist form, table order of the twist), NaN where not
    given. ``acc_cov`` (N, dof, dof) accumulated covariance in table order, rotation about the fixed
    axes of the odometry frame (as every covariance of a pose row), NaN where not given.
    """

    form: Literal["pose", "twist"]
    t_s: Floats
    pose: Floats | None
    twist: Floats | None
    sigma: Floats | None
    acc_cov: Floats | None
    source: Provenance


@dataclass(frozen=True)
class Observations:
    """Sightings or encounters of one robot, rows in increasing time.

    ``value`` (N, 11) and ``sigma`` (N, 9) by VALUE_COLUMNS and SIGMA_COLUMNS, NaN where not
    observed or not given. ``target`` indexes ``targets``: landmark labels (sightings) or robot
    names (encounters). ``cov`` is ``None`` or (N, dof, dof) in the table order x, y, yaw or
    x, y, z, rx, ry, rz (sensor frame), NaN where not given or not observed.
    """

    t_s: Floats
    sensor: Ints
    sensors: tuple[str, ...]
    target: Ints
    targets: tuple[str, ...]
    value: Floats
    sigma: Floats
    cov: Floats | None
    source: Provenance


@dataclass(frozen=True)
class Fixes:
    """Absolute positions (N, 2 or 3) in the site frame; geographic ones are converted already.

    ``sigma`` (N, 2 or 3), NaN where not given.
    """

    t_s: Floats
    position: Floats
    sigma: Floats
    source: Provenance


@dataclass(frozen=True)
class Closures:
    """Pose of body b at ``t_b_s`` in body a at ``t_a_s``; each stamp by its own robot's clock.

    ``robot_a``/``robot_b`` index ``robots``. ``cov`` (N, dof, dof) in table order, about the axes
    of body a; NaN where not given.
    """

    robots: tuple[str, ...]
    robot_a: Ints
    t_a_s: Floats
    robot_b: Ints
    t_b_s: Floats
    pose: Floats
    cov: Floats
    source: Provenance


@dataclass(frozen=True)
class ControlPoints:
    """Surveyed coordinates (N, 2 or 3) of landmarks with sigmas, site frame."""

    landmarks: tuple[str, ...]
    position: Floats
    sigma: Floats
    source: Provenance


@dataclass(frozen=True)
class Associations:
    """Rows "label of robot is landmark", valid in [t_from_s, t_to_s] (-inf, inf when not given)."""

    robots: tuple[str, ...]
    labels: tuple[str, ...]
    landmarks: tuple[str, ...]
    t_from_s: Floats
    t_to_s: Floats
    source: Provenance


@dataclass(frozen=True)
class AssociationEdit:
    """Reject or force one association; ``landmark`` is where a forced one leads."""

    action: Literal["reject", "force"]
    robot: str
    label: str
    landmark: str | None = None


@dataclass(frozen=True)
class MaskEdit:
    """Ignore what a robot's sensor saw in [t_from_s, t_to_s] of its own clock.

    ``sensor`` None masks all its sensors; the odometry is kept in any case.
    """

    robot: str
    sensor: str | None
    t_from_s: float
    t_to_s: float


@dataclass(frozen=True)
class SplitEdit:
    """Cut a robot's odometry at a time of its own clock: no motion is known across the cut."""

    robot: str
    t_s: float


@dataclass(frozen=True)
class FixedValueEdit:
    """Hold a sigma, a calibration value or a clock value at the user's number.

    ``what`` is ``sigma`` (``name`` as in survey.toml, e.g. ``range_m`` or
    ``translation_per_sqrt_m``), ``calibration`` (``odometry_scale``, ``odometry_lag_s``,
    ``lag_s`` …) or ``clock`` (``offset_s``, ``drift_ppm``). ``sensor`` is None for the robot.
    """

    what: Literal["sigma", "calibration", "clock"]
    robot: str
    sensor: str | None
    name: str
    value: float


@dataclass(frozen=True)
class Edits:
    """The user's mends, in the order of edits.toml."""

    associations: tuple[AssociationEdit, ...] = ()
    masks: tuple[MaskEdit, ...] = ()
    splits: tuple[SplitEdit, ...] = ()
    values: tuple[FixedValueEdit, ...] = ()


@dataclass(frozen=True)
class RobotLog:
    """Everything one robot logged. ``odometry_noise`` holds only the given terms."""

    name: str
    odometry: Odometry
    sightings: Observations | None
    encounters: Observations | None
    fixes: Fixes | None
    sensors: Mapping[str, Sensor]
    clock: Clock
    target_point: Floats
    antenna: Floats
    gravity_sigma_rad: float | None
    odometry_lag_s: float | None
    odometry_noise: Mapping[str, float]


@dataclass(frozen=True)
class Survey:
    """One field run of a team, read and checked.

    ``inputs`` maps each file read (relative) to its SHA-256; ``problems`` lists what was mended
    while reading. ``geodetic_origin`` is (lat_deg, lon_deg, height_m) of the site frame when
    fixes were geographic.
    """

    path: Path
    name: str
    dimension: int
    gravity_aligned: bool
    crs: str | None
    datum_kind: Literal["landmarks", "robot", "control"]
    datum_robot: str
    robots: Mapping[str, RobotLog]
    closures: Closures | None = None
    control_points: ControlPoints | None = None
    associations: Associations | None = None
    edits: Edits = field(default_factory=Edits)
    geodetic_origin: tuple[float, float, float] | None = None
    inputs: Mapping[str, str] = field(default_factory=dict)
    problems: tuple[LogProblem, ...] = ()

    @property
    def dof(self) -> int:
        """Degrees of freedom of a pose: 3 or 6."""
        return 3 if self.dimension == 2 else 6

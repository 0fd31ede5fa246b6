"""The factor graph as arrays: what is measured between which variables, nothing solved yet.

Variables, by index into a :class:`State`:

* ``poses`` 0 .. K-1 are keyframes, grouped by robot and in time order; they are followed by one
  pose per oriented landmark (tag);
* ``points`` are landmarks without orientation;
* ``calibration`` holds scalar states (odometry scale and lag, sensor biases …).

A *track* is what one robot calls by one label (within the validity of one association row). A
sighting belongs to a track; which landmark a track is, is a *decision* (``Assignment``) that
vetting may change: an accepted association sends the track to the shared landmark, a rejected one
to a landmark of that robot alone. The problem itself never changes.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from jointmap.ingest.survey import Provenance

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

Kind = Literal["odometry", "sighting", "encounter", "fix", "closure", "control", "gravity"]

#: Terms of odometry noise, in the order of ``OdometryNoise.basis``.
ODOMETRY_TERMS = (
    "translation_per_sqrt_m",
    "rotation_per_sqrt_m",
    "rotation_per_sqrt_rad",
    "translation_per_sqrt_s",
    "rotation_per_sqrt_s",
)


@dataclass(frozen=True)
class Keyframes:
    """Robot poses that are variables. ``first[r]:first[r + 1]`` are those of robot ``r``.

    ``robot`` (K,) index of the robot; ``t_s`` (K,) survey time, increasing within a robot.
    """

    robot: Ints
    t_s: Floats
    first: Ints


@dataclass(frozen=True)
class Tracks:
    """What each robot calls by each label. ``claim`` (T,) is the shared landmark that the
    association names (index into ``landmarks``), -1 for a label private to its robot.

    ``association_row`` (T,) is the row of associations.csv, -1 where equal labels decide.
    ``forced`` (T,) marks what the user's edits force; ``oriented`` (T,) tags.
    """

    robot: Ints
    labels: tuple[str, ...]
    claim: Ints
    association_row: Ints
    forced: Bools
    rejected: Bools
    oriented: Bools
    n_sightings: Ints
    landmarks: tuple[str, ...]


@dataclass(frozen=True)
class Block:
    """Measurement rows of one kind, robot, sensor and set of components.

    Parameters
    ----------
    kind, robot, sensor
        What was measured by whom; ``robot`` indexes ``Problem.robots`` (-1: the survey itself).
    components : tuple of str
        Names of the residual rows in order, bearing before range. Pose-valued kinds
        (odometry, closure, tag sightings and full-pose encounters) use ``("pose",)``: the residual
        is the body tangent ``log(obs^-1 predicted)`` of size ``dof``. ``gravity`` uses
        ``("tilt",)``, two rows.
    a : (n,) int
        Pose variable that measures (keyframe), -1 for control points.
    b : (n,) int
        The other end: a keyframe (odometry, encounter, closure), a *track* (sighting), an index
        into ``Tracks.landmarks`` (control), -1 where there is none (fix, gravity).
    obs : (n, m) or (n, *pose shape)
        Observed components, or the relative pose for ``("pose",)``.
    frame_a : (n, *pose shape)
        Fixed transform from the body of ``a`` to the frame that measures: odometry increment from
        the keyframe to the instant, then the mounting. Fixes: its translation is the antenna.
    frame_b : (n, *pose shape)
        The same for ``b`` when it is a pose; its translation is the target point of an encounter.
    sigma : (n, m)
        Standard deviations that the log states row by row, NaN where the noise terms decide
        (residual rows; for ``("pose",)`` m = dof in tangent order).
    covariance : (n, m, m) or None
        Full covariance stated row by row (residual rows), NaN where not given.
    odometry_basis : (n, 5, dof, dof) or None
        Odometry only: covariance of the increment per squared unit of each of ODOMETRY_TERMS.
    t_s : (n,) survey time; ``source`` where the rows come from (odometry: the first row used).
    burst : (n,) int
        Rows of one robot, sensor and target in unbroken sequence share a burst number.
    distance : (n,) or None
        Range of each row by the present solution, for noise that grows with range; None: not
        solved yet, the observed range stands in.
    """

    kind: Kind
    robot: int
    sensor: str
    components: tuple[str, ...]
    a: Ints
    b: Ints
    obs: Floats
    frame_a: Floats
    frame_b: Floats
    sigma: Floats
    covariance: Floats | None
    odometry_basis: Floats | None
    t_s: Floats
    source: Provenance
    burst: Ints
    distance: Floats | None = None

    @property
    def n(self) -> int:
        """Number of measurements."""
        return len(self.t_s)


@dataclass(frozen=True)
class Unusable:
    """Rows of one table that no factor could be made of, with the reason (for the products)."""

    kind: Kind
    robot: int
    sensor: tuple[str, ...]
    target: tuple[str, ...]
    t_s: Floats
    source: Provenance
    reason: str


@dataclass(frozen=True)
class Problem:
    """Everything that is measured, ready to be solved.

    ``dead_reckoning`` (K, *pose shape): each robot's keyframes by its odometry alone, in its own
    frame ``odom_<robot>`` (piecewise where ``breaks`` cuts: keyframes after a break start again at
    the last pose). ``breaks`` (K,) bool marks keyframes that no usable odometry ties to the one
    before. ``gravity_aligned`` is meant for three dimensions.
    """

    dimension: int
    gravity_aligned: bool
    robots: tuple[str, ...]
    keyframes: Keyframes
    tracks: Tracks
    blocks: tuple[Block, ...]
    dead_reckoning: Floats
    breaks: Bools
    unusable: tuple[Unusable, ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class Assignment:
    """Which landmark each track is: ``landmark`` (T,) indexes landmark variables.

    Variables 0 .. len(Tracks.landmarks)-1 are the shared landmarks, then one per track (private).
    """

    landmark: Ints


@dataclass(frozen=True)
class State:
    """Values of the variables.

    ``poses`` (P, 3) as x, y, yaw or (P, 3, 4) as [R | t]; ``landmarks`` (L, dimension), NaN where
    a landmark has no value; ``orientations`` maps an oriented landmark to nothing more than its
    rotation (L, dim, dim), identity for points; ``calibration`` scalar states by name
    ``(robot, sensor, parameter)``; ``extra`` (X,) the constant and shared errors of sensors, whose
    meaning depends on the system that made them (None: all zero).
    """

    poses: Floats
    landmarks: Floats
    orientations: Floats | None = None
    calibration: Mapping[tuple[str, str, str], float] = field(default_factory=dict)
    extra: Floats | None = None

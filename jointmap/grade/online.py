"""What an online estimator reported, as frozen arrays."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

Frame = Literal["own", "team", "site"]
Evidence = Literal["alone", "shared-now", "shared-ever", "unknown"]
Data = Literal["same", "independent", "unknown"]

FRAMES: tuple[str, ...] = ("own", "team", "site")
COVARIANCES: tuple[str, ...] = ("fixed-axes", "body-tangent")
EVIDENCES: tuple[str, ...] = ("alone", "shared-now", "shared-ever", "unknown")
DATA: tuple[str, ...] = ("same", "independent", "unknown")


@dataclass(frozen=True)
class RobotEstimate:
    """One robot's reports, increasing in time.

    Parameters
    ----------
    t_s : (N,) float
        Survey time.
    pose : (N, *pose shape) float
        frame_T_body as :mod:`jointmap.frames` keeps poses.
    cov : (N, dof, dof) float or None
        Covariance of the body tangent, NaN where the row has none; ``None`` without any.
    row : (N,) int
        Row of the file.
    dropped : int
        Rows without a pose, left out.
    """

    t_s: Floats
    pose: Floats
    cov: Floats | None
    row: Ints
    dropped: int = 0

    def __post_init__(self) -> None:
        for array in (self.t_s, self.pose, self.cov, self.row):
            if array is not None:
                array.setflags(write=False)

    def __len__(self) -> int:
        return len(self.t_s)


@dataclass(frozen=True)
class JointCross:
    """Cross-covariance (N, dof, dof), body tangents, of two robots at one stamp."""

    t_s: Floats
    robot_a: tuple[str, ...]
    robot_b: tuple[str, ...]
    cross: Floats


@dataclass(frozen=True)
class MapEstimate:
    """Landmarks of one robot's map: ``position`` (n, d) in its frame, ``cov`` (n, d, d) or NaN."""

    landmarks: tuple[str, ...]
    position: Floats
    cov: Floats


@dataclass(frozen=True)
class OnlineEstimate:
    """Everything one estimator reported.

    Parameters
    ----------
    name : str
    frame : ``own``, ``team`` or ``site``
        Each robot's own frame, one frame of the team, or that of fixes and control points.
    covariance : str
        Convention of the file, for messages; arrays are body tangents.
    evidence : str
        What the estimator could use: its own log, what others share now, what they ever shared.
    data : str
        ``same``: a part of what the reference was built from; ``independent`` of it; ``unknown``.
    robots : mapping of robot to RobotEstimate
    joint : JointCross or None
    maps : mapping of robot to MapEstimate
    """

    name: str
    frame: Frame
    covariance: str
    evidence: Evidence
    data: Data
    robots: Mapping[str, RobotEstimate]
    joint: JointCross | None = None
    maps: Mapping[str, MapEstimate] = field(default_factory=dict)

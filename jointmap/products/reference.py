"""The reference: the batch answer to a survey, as arrays and tables."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from jointmap.products.columns import META_KEYS, STATUSES, TABLES, TRUST, table_columns
from jointmap.products.interpolate import Poses, interpolate
from jointmap.schema import pose_columns

if TYPE_CHECKING:
    from jointmap.products.joint import JointState

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Trajectory:
    """One robot's path, one row per odometry row, increasing in time.

    Parameters
    ----------
    t_s : (N,) float
        Survey time.
    pose : (N, 3) or (N, 7) float
        map_T_body as table rows: x y yaw, or x y z qx qy qz qw.
    cov : (N, dof, dof) float
        Covariance in table order about the fixed map axes, in the datum that the reference
        states; NaN where unknown.
    keyframe : (N,) bool
        The row is a variable of the graph.
    component : (N,) int
        Connected part; rows of different parts have no common frame.
    trust : (N,) int
        Index into ``TRUST``: 0 checked, 1 weak, 2 unchecked.
    """

    t_s: Floats
    pose: Floats
    cov: Floats
    keyframe: Bools
    component: Ints
    trust: Ints

    def __post_init__(self) -> None:
        n = len(self.t_s)
        _freeze(self, "t_s", np.float64, (n,))
        _freeze(self, "pose", np.float64, (n, self.pose.shape[-1]))
        dof = {3: 3, 7: 6}[self.pose.shape[-1]]
        _freeze(self, "cov", np.float64, (n, dof, dof))
        _freeze(self, "keyframe", np.bool_, (n,))
        _freeze(self, "component", np.int64, (n,))
        _freeze(self, "trust", np.int64, (n,))
        if n and not (np.diff(self.t_s) > 0).all():
            raise ValueError("trajectory stamps do not increase")
        if n and not ((self.trust >= 0) & (self.trust < len(TRUST))).all():
            raise ValueError("trust codes lie outside 0, 1, 2")

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return 2 if self.pose.shape[-1] == 3 else 3

    def __len__(self) -> int:
        return len(self.t_s)


@dataclass(frozen=True)
class Reference:
    """Trajectories and landmarks of one survey in one frame, and how far to believe them.

    Parameters
    ----------
    meta : mapping
        What reference.json holds: every key of ``META_KEYS``, plain values only.
    trajectories : mapping of robot name to Trajectory
    landmarks, measurements, associations, noise, calibration, suspects, holdout, robots
        Data frames with exactly the columns of the schema
        (:func:`jointmap.products.columns.complete` makes them).
    state : mapping of name to array
        What further questions need (linearisation point, ordering, square-root factor,
        calibration); numbers and text only, no Python objects.

    Notes
    -----
    A reference is not ground truth: errors that all its measurements share do not show in it.
    """

    meta: Mapping[str, Any]
    trajectories: Mapping[str, Trajectory]
    landmarks: pd.DataFrame
    measurements: pd.DataFrame
    associations: pd.DataFrame
    noise: pd.DataFrame
    calibration: pd.DataFrame
    suspects: pd.DataFrame
    holdout: pd.DataFrame
    robots: pd.DataFrame
    state: Mapping[str, NDArray[Any]]

    def __post_init__(self) -> None:
        missing = [key for key in META_KEYS if key not in self.meta]
        if missing:
            raise ValueError(f"meta lacks {', '.join(missing)}")
        if self.status not in STATUSES:
            raise ValueError(f"status {self.status!r} is none of {', '.join(STATUSES)}")
        if len({t.dimension for t in self.trajectories.values()}) > 1:
            raise ValueError("trajectories differ in dimension")
        for name in TABLES:
            expected = [c.name for c in table_columns(name, self.dimension)]
            if list(getattr(self, name).columns) != expected:
                raise ValueError(f"table {name} must have the columns {' '.join(expected)}")
        for name, array in self.state.items():
            if np.asarray(array).dtype.hasobject:
                raise ValueError(f"state {name} holds Python objects")

    @property
    def status(self) -> str:
        """``ok``, ``weak``, ``not-converged``, ``disconnected`` or ``inconsistent``."""
        return str(self.meta["status"])

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return dimension_of(self.landmarks)

    @property
    def tables(self) -> dict[str, pd.DataFrame]:
        """The tables by the stem of their file."""
        return {name: getattr(self, name) for name in TABLES}

    def pose_at(self, robot: str, t_s: ArrayLike) -> Poses:
        """Pose and covariance of a robot at any stamps.

        Parameters
        ----------
        robot : str
        t_s : (...) float
            Survey time; any shape, a plain number too.

        Returns
        -------
        Poses
            ``pose (..., 3 | 7)``, ``cov (..., dof, dof)``, ``trust``, ``component`` and
            ``reason``; unpacks as ``pose, cov``. Stamps that cannot be answered are NaN and
            ``reason`` says why.

        Raises
        ------
        KeyError
            The reference has no such robot.
        """
        if robot not in self.trajectories:
            known = ", ".join(self.trajectories)
            raise KeyError(f"no robot {robot!r} in this reference; it has {known}")
        return interpolate(self.trajectories[robot], t_s, self.outages(robot))

    @cached_property
    def joint(self) -> JointState:
        """The stored state, ready for joint covariances of any poses and landmarks; read once.

        Raises
        ------
        SurveyError
            The reference was written without its state.
        """
        from jointmap.products.joint import JointState

        return JointState.of(self)

    def relative(self, a: tuple[str, ArrayLike], b: tuple[str, ArrayLike]) -> Poses:
        """Pose of one robot in the body frame of another, or of itself at another time.

        Parameters
        ----------
        a, b : (robot, t_s)
            Robots and survey times; the times broadcast against each other.

        Returns
        -------
        Poses
            ``bodyA_T_bodyB`` as table rows with covariance in table order about the axes of body
            a, cross-covariances included; independent of the datum. NaN with a ``reason`` where
            either pose is unknown or no common frame holds both.

        Raises
        ------
        KeyError
            The reference has no such robot.
        SurveyError
            The reference was written without its state.
        """
        from jointmap.products.joint import relative_poses

        return relative_poses(self.joint, a, b)

    def outages(self, robot: str) -> Floats:
        """Intervals (m, 2) in which the robot logged no odometry, survey time."""
        text = self.robots.loc[self.robots["robot"] == robot, "outages"]
        return parse_outages("" if text.empty or text.isna().iloc[0] else str(text.iloc[0]))


def dimension_of(table: pd.DataFrame) -> int:
    """Dimension of a reference, from the columns of its landmarks."""
    return 3 if set(pose_columns(3)) <= set(table.columns) else 2


def format_outages(intervals: ArrayLike) -> str:
    """``from..to; from..to`` in seconds, microseconds kept; the inverse of parse_outages."""
    rows = np.asarray(intervals, dtype=np.float64).reshape(-1, 2)
    return "; ".join(f"{a:.6f}..{b:.6f}" for a, b in rows)


def parse_outages(text: str) -> Floats:
    """Intervals (m, 2) from the text of robots.csv."""
    pairs = [part.split("..") for part in text.split(";") if ".." in part]
    return np.array(pairs, dtype=np.float64).reshape(-1, 2)


def _freeze(owner: object, name: str, dtype: Any, shape: tuple[int, ...]) -> None:
    """Replace a field of a frozen object by a read-only array of this type and shape."""
    array = np.asarray(getattr(owner, name), dtype=dtype)
    if array.shape != shape:
        raise ValueError(f"{name} has the shape {array.shape}, not {shape}")
    view = array.view()
    view.flags.writeable = False
    object.__setattr__(owner, name, view)

"""Pose and covariance between the rows of a trajectory.

Between rows A = T(t_i) and B = T(t_i+1) the pose follows the geodesic
``T(s) = A exp(s log(A^-1 B))``. Both covariances are carried to the body frame of ``T(s)`` by the
adjoint, where they describe the same rigid motion, and are blended there:

    S(s) = (1 - s) Ad(T^-1 A) S_A Ad^T + s Ad(T^-1 B) S_B Ad^T

Neighbouring rows share nearly all their error. For such errors the blend is exact, and for errors
of any other correlation it is an upper bound, because ``Var((1-s) a + s b)`` never exceeds
``(1-s) Var(a) + s Var(b)``.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap import frames

if TYPE_CHECKING:
    from jointmap.products.reference import Trajectory

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Stamps this close to the first or last row are that row: float64 epoch seconds resolve 0.24 us.
SLACK_S = 1e-6


@dataclass(frozen=True)
class Poses:
    """Answers of ``pose_at``; unpacks as ``pose, cov``.

    Parameters
    ----------
    pose : (..., 3) or (..., 7) float
        map_T_body as table rows; NaN where it cannot be told.
    cov : (..., dof, dof) float
        Covariance in table order about the map axes; NaN where it cannot be told.
    trust : (...) int
        The worse of both neighbours, -1 where there is no pose.
    component : (...) int
        Connected part, -1 where there is no pose.
    reason : (...) text
        Why something is missing, empty otherwise.
    """

    pose: Floats
    cov: Floats
    trust: Ints
    component: Ints
    reason: NDArray[np.str_]

    def __iter__(self) -> Iterator[Floats]:
        yield self.pose
        yield self.cov


def interpolate(trajectory: Trajectory, t_s: ArrayLike, outages: Floats) -> Poses:
    """Poses at any stamps; see the module's notes for the formula.

    Parameters
    ----------
    trajectory : Trajectory
    t_s : (...) float
    outages : (m, 2) float
        Intervals without odometry. Poses inside them are a guess on the geodesic; what the robot
        did there is not known, hence no covariance.
    """
    stamps = np.asarray(t_s, dtype=np.float64)
    flat = stamps.ravel()
    group = frames.group(trajectory.dimension)
    row, share, inside = _locate(trajectory.t_s, flat)
    after = row + (share > 0.0)
    joined = inside.copy()
    joined[inside] = trajectory.component[row[inside]] == trajectory.component[after[inside]]
    pose, cov = _blend(trajectory, row[joined], after[joined], share[joined])
    dark = _within(flat[joined], share[joined], outages)
    cov[dark] = np.nan

    width = trajectory.pose.shape[-1]
    answer = np.full((len(flat), width), np.nan)
    spread = np.full((len(flat), group.dof, group.dof), np.nan)
    trust, component = (np.full(len(flat), -1, dtype=np.int64) for _ in range(2))
    answer[joined], spread[joined] = pose, cov
    trust[joined] = np.maximum(trajectory.trust[row[joined]], trajectory.trust[after[joined]])
    component[joined] = trajectory.component[row[joined]]
    reason = _reasons(trajectory, flat, inside, joined, dark)
    shape = stamps.shape
    return Poses(
        answer.reshape(*shape, width),
        spread.reshape(*shape, group.dof, group.dof),
        trust.reshape(shape),
        component.reshape(shape),
        reason.reshape(shape),
    )


def _locate(rows_s: Floats, t_s: Floats) -> tuple[Ints, Floats, Bools]:
    """Row before each stamp, the share of the way to the next row, and whether it is inside."""
    n = len(rows_s)
    if n == 0:
        empty = np.zeros(len(t_s))
        return empty.astype(np.int64), empty, empty.astype(bool)
    inside = (t_s >= rows_s[0] - SLACK_S) & (t_s <= rows_s[-1] + SLACK_S)
    row = np.clip(np.searchsorted(rows_s, t_s, side="right") - 1, 0, max(n - 2, 0))
    if n == 1:
        return row.astype(np.int64), np.zeros(len(t_s)), inside
    share = (t_s - rows_s[row]) / (rows_s[row + 1] - rows_s[row])
    share = np.clip(np.where(inside, share, 0.0), 0.0, 1.0)
    # A stamp on a row asks for that row alone, whatever happens beside it.
    onto = (share == 1.0) & inside
    return np.where(onto, row + 1, row).astype(np.int64), np.where(onto, 0.0, share), inside


def _blend(trajectory: Trajectory, row: Ints, after: Ints, share: Floats) -> tuple[Floats, Floats]:
    """Pose rows and covariance (table order) at ``share`` of the way from ``row`` to ``after``."""
    group = frames.group(trajectory.dimension)
    start = group.from_rows(trajectory.pose[row])
    end = group.from_rows(trajectory.pose[after])
    middle = group.interpolate(start, end, share)
    body = np.zeros((len(row), group.dof, group.dof))
    for pose, index, weight in ((start, row, 1.0 - share), (end, after, share)):
        own = group.covariance_from_table(pose, trajectory.cov[index])
        carry = group.adjoint(group.between(middle, pose))
        # NaN (unknown) must not spread from a row that has no share in the answer.
        part = weight[:, None, None] * (carry @ own @ np.swapaxes(carry, -1, -2))
        body += np.where(weight[:, None, None] > 0.0, part, 0.0)
    return group.to_rows(middle), group.covariance_to_table(middle, body)


def _within(t_s: Floats, share: Floats, outages: Floats) -> Bools:
    """Stamps strictly inside an outage; its ends are rows and have their own covariance."""
    if len(outages) == 0:
        return np.zeros(len(t_s), dtype=bool)
    after = np.searchsorted(outages[:, 0], t_s, side="right") - 1
    inside = (after >= 0) & (t_s < outages[np.maximum(after, 0), 1])
    return np.asarray(inside & (share > 0.0))


def _reasons(
    trajectory: Trajectory, t_s: Floats, inside: Bools, joined: Bools, dark: Bools
) -> NDArray[np.str_]:
    reason = np.full(len(t_s), "", dtype="U96")
    if len(trajectory) == 0:
        reason[:] = "the robot has no trajectory"
        return reason
    first, last = trajectory.t_s[0], trajectory.t_s[-1]
    reason[~inside] = f"outside the robot's span {first:.6f} .. {last:.6f} s"
    reason[np.isnan(t_s)] = "no stamp given"
    reason[inside & ~joined] = "between two parts that nothing connects"
    reason[np.flatnonzero(joined)[dark]] = "odometry outage: the covariance is not known"
    return reason

"""Pose and covariance between the rows of a trajectory.

Between rows A = T(t_i) and B = T(t_i+1) the pose follows the geodesic
``T(s) = A exp(s log(A^-1 B))``. Both covariances are carried to the body frame of ``T(s)`` by the
adjoint, where they describe the same rigid motion, and are blended there:

    S(s) = (1 - s) Ad(T^-1 A) S_A Ad^T + s Ad(T^-1 B) S_B Ad^T

Neighbouring rows share nearly all their error. For such errors the blend is exact, and for errors
of any other correlation it is an upper bound, because ``Var((1-s) a + s b)`` never exceeds
``(1-s) Var(a) + s Var(b)``. Inside an outage of the odometry the motion itself is unknown as well:
:mod:`jointmap.products.departure` adds what this robot may have done there.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap import frames
from jointmap.products.departure import departure

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
        Intervals without odometry, in order.
    """
    stamps = np.asarray(t_s, dtype=np.float64)
    flat = stamps.ravel()
    group = frames.group(trajectory.dimension)
    row, share, inside = _locate(trajectory.t_s, flat)
    after = row + (share > 0.0)
    joined = inside.copy()
    joined[inside] = trajectory.component[row[inside]] == trajectory.component[after[inside]]
    pose, cov, dark = _blend(trajectory, row[joined], after[joined], share[joined], outages)

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


def _blend(
    trajectory: Trajectory, row: Ints, after: Ints, share: Floats, outages: Floats
) -> tuple[Floats, Floats, Bools]:
    """Pose rows and covariance (table order) at ``share`` of the way from ``row`` to ``after``.

    The third result marks stamps in outages that the trajectory is too short to judge.
    """
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
    dark = np.zeros(len(row), dtype=bool)
    inside = _outage_of(0.5 * (trajectory.t_s[row] + trajectory.t_s[after]), share, outages)
    for k in np.unique(inside[inside >= 0]):
        mine = inside == k
        spread = departure(trajectory, outages[k], outages)
        dark[mine] = spread is None
        if spread is not None:
            body[mine] += (4.0 * share * (1.0 - share))[mine, None, None] * spread
    body[dark] = np.nan
    return group.to_rows(middle), group.covariance_to_table(middle, body), dark


def _outage_of(middle_s: Floats, share: Floats, outages: Floats) -> Ints:
    """Outage between the two rows of each stamp, -1 where there is none.

    ``middle_s`` lies half-way between the rows, safely inside the outage if there is one. A stamp
    on a row (share 0) is in none.
    """
    if len(outages) == 0:
        return np.full(len(middle_s), -1, dtype=np.int64)
    found = np.searchsorted(outages[:, 0], middle_s, side="right") - 1
    inside = (found >= 0) & (middle_s < outages[np.maximum(found, 0), 1]) & (share > 0.0)
    return np.where(inside, found, -1).astype(np.int64)


def _reasons(
    trajectory: Trajectory, t_s: Floats, inside: Bools, joined: Bools, dark: Bools
) -> NDArray[np.str_]:
    reason = np.full(len(t_s), "", dtype="U100")
    if len(trajectory) == 0:
        reason[:] = "the robot has no trajectory"
        return reason
    first, last = trajectory.t_s[0], trajectory.t_s[-1]
    reason[~inside] = f"outside the robot's span {first:.6f} .. {last:.6f} s"
    reason[np.isnan(t_s)] = "no stamp given"
    reason[inside & ~joined] = "between two parts that nothing connects"
    reason[np.flatnonzero(joined)[dark]] = (
        "in an odometry outage; the path is too short to learn how far the robot may have gone"
    )
    return reason

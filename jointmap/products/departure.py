"""How far a robot departs from the geodesic between two poses, learned from its own path.

Inside an outage of the odometry only both ends are known. What the robot did in between is taken
from stretches of its own trajectory that lasted as long and led about as far: their middle is
compared with the geodesic between their ends,

    e = log(T(s)^-1 T_middle),    D = mean of e e^T / (4 s (1 - s)),

and the departure at any share ``s`` of the outage is ``4 s (1 - s) D``. That profile is the one of
motion with independent steps (a Brownian bridge); smooth motion has its square, which is smaller
everywhere but in the middle.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from jointmap import frames

if TYPE_CHECKING:
    from jointmap.products.reference import Trajectory

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: At most this many stretches are looked at, and at least this many must be left.
MOST_STRETCHES, FEWEST_STRETCHES = 4000, 30
#: Share of the stretches, the most similar ones, that are used.
SIMILAR = 0.25


def departure(trajectory: Trajectory, outage: Floats, outages: Floats) -> Floats | None:
    """Covariance D (dof, dof) in the body tangent at the middle of an outage.

    Parameters
    ----------
    trajectory : Trajectory
    outage : (2,) float
        Its first and last instant.
    outages : (m, 2) float
        Every outage of the robot; stretches across one teach nothing.

    Returns
    -------
    (dof, dof) float or None
        ``None`` when the trajectory has too few stretches of that duration.
    """
    group = frames.group(trajectory.dimension)
    start, middle, end = _stretches(trajectory, float(outage[1] - outage[0]), outages)
    if len(start) < FEWEST_STRETCHES:
        return None
    t_s = trajectory.t_s
    share = (t_s[middle] - t_s[start]) / (t_s[end] - t_s[start])
    first, last = (group.from_rows(trajectory.pose[index]) for index in (start, end))
    # Rows beside the outage; its own ends went through text and may be off by a microsecond.
    after = int(np.searchsorted(t_s, 0.5 * (outage[0] + outage[1])))
    ends = group.from_rows(trajectory.pose[[after - 1, after]])
    alike = _most_similar(
        group.local(first, last), group.local(ends[0], ends[1]), trajectory.dimension
    )
    straight = group.interpolate(first[alike], last[alike], share[alike])
    error = group.local(straight, group.from_rows(trajectory.pose[middle[alike]]))
    error /= np.sqrt(4.0 * share * (1.0 - share))[alike, None]
    return np.asarray(error.T @ error / len(error))


def _stretches(
    trajectory: Trajectory, duration_s: float, outages: Floats
) -> tuple[Ints, Ints, Ints]:
    """First, middle and last rows of stretches of about this duration, without outage or break."""
    t_s, n = trajectory.t_s, len(trajectory)
    start = np.unique(np.linspace(0, n - 1, MOST_STRETCHES).astype(np.int64))
    end = np.searchsorted(t_s, t_s[start] + duration_s)
    start, end = start[end < n], end[end < n]
    middle = np.searchsorted(t_s, 0.5 * (t_s[start] + t_s[end]))
    lasting = t_s[end] - t_s[start]
    good = np.abs(lasting - duration_s) <= 0.2 * duration_s
    # Rows that come in clumps may leave none near the middle.
    good &= np.abs((t_s[middle] - t_s[start]) - 0.5 * lasting) <= 0.2 * lasting
    good &= trajectory.component[start] == trajectory.component[end]
    # No outage begins inside: as many began before the end as before the start.
    begun = np.searchsorted(outages[:, 0], t_s - 1e-6)
    good &= begun[start] == begun[end]
    return start[good], middle[good], end[good]


def _most_similar(moved: Floats, wanted: Floats, dimension: int) -> Ints:
    """Stretches (k,) whose travel and turn (tangents ``moved``) are closest to ``wanted``."""
    turn = slice(2, 3) if dimension == 2 else slice(0, 3)
    travel = slice(0, 2) if dimension == 2 else slice(3, 6)
    distance = np.zeros(len(moved))
    for part in (travel, turn):
        size = np.linalg.norm(moved[:, part], axis=1)
        gap = np.abs(size - np.linalg.norm(wanted[part]))
        distance += gap / max(float(size.std()), 1e-12)
    keep = max(FEWEST_STRETCHES, int(SIMILAR * len(moved)))
    return np.argsort(distance, kind="stable")[:keep]

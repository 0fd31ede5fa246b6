"""What a sensor can see: range, field of view, the front of plates, and walls in between.

Galleries have roofs and walls reach them, so a sight line is blocked exactly where its plan
crosses a wall: two segments ``p q`` and ``a b`` cross when each has the ends of the other on
different sides, by the signs of cross products.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: A plate is read at incidence angles up to this, radians from its normal.
MAX_INCIDENCE_RAD = 1.25
#: Half of the vertical field of view, radians.
HALF_VERTICAL_RAD = 0.7
#: Closest sighting, metres.
MIN_RANGE_M = 0.3
_CHUNK = 2048


def pairs_in_reach(eyes: Floats, points: Floats, reach: float) -> tuple[Ints, Ints]:
    """Indices (eye, point) of all pairs closer than ``reach`` in plan.

    Parameters
    ----------
    eyes : (n, 2) float
    points : (m, 2) float
    reach : float
        Metres.
    """
    found: list[tuple[Ints, Ints]] = []
    for first in range(0, len(eyes), _CHUNK):
        part = eyes[first : first + _CHUNK]
        square = (part[:, None, 0] - points[None, :, 0]) ** 2
        square += (part[:, None, 1] - points[None, :, 1]) ** 2
        i, j = np.nonzero(square < reach**2)
        found.append((i + first, j))
    if not found:
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    return np.concatenate([f[0] for f in found]), np.concatenate([f[1] for f in found])


def in_view(local: Floats, field_of_view_rad: float, max_range_m: float) -> Bools:
    """Which points (n, 2 or 3), in the sensor's frame, lie in its field of view and range."""
    plan = np.hypot(local[:, 0], local[:, 1])
    distance = np.linalg.norm(local, axis=1)
    seen = np.abs(np.arctan2(local[:, 1], local[:, 0])) <= field_of_view_rad / 2
    seen &= (distance <= max_range_m) & (distance >= MIN_RANGE_M)
    if local.shape[1] == 3:
        seen &= np.abs(np.arctan2(local[:, 2], plan)) <= HALF_VERTICAL_RAD
    return np.asarray(seen, dtype=np.bool_)


def incidence(eye: Floats, point: Floats, yaw: Floats) -> Floats:
    """Angle (n,) between the plate's normal and the line to the eye, in plan, radians."""
    back = eye[:, :2] - point[:, :2]
    along = back[:, 0] * np.cos(yaw) + back[:, 1] * np.sin(yaw)
    cosine = along / np.maximum(np.hypot(back[:, 0], back[:, 1]), 1e-12)
    return np.asarray(np.arccos(np.clip(cosine, -1.0, 1.0)), dtype=np.float64)


def blocked(eye: Floats, point: Floats, walls: Floats, reach: float) -> Bools:
    """Which sight lines cross a wall.

    Parameters
    ----------
    eye, point : (n, 2) float
        Ends of the sight lines in plan, metres.
    walls : (w, 2, 2) float
        Ends of the walls.
    reach : float
        Longest sight line, metres: walls farther away are not looked at.

    Returns
    -------
    (n,) bool
    """
    hidden = np.zeros(len(eye), dtype=bool)
    if not len(eye):
        return hidden
    # sight lines are grouped by the square they end in, so that each meets only near walls
    cell = np.floor(point / 4.0).astype(np.int64)
    _, group = np.unique(cell, axis=0, return_inverse=True)
    order = np.argsort(group, kind="stable")
    for rows in np.split(order, np.flatnonzero(np.diff(group[order])) + 1):
        middle = point[rows].mean(axis=0)
        near = walls[np.linalg.norm(walls.mean(axis=1) - middle, axis=1) < reach + 4.5]
        for first in range(0, len(rows), _CHUNK):
            part = rows[first : first + _CHUNK]
            hidden[part] = _crosses(eye[part], point[part], near)
    return hidden


def _crosses(eye: Floats, point: Floats, walls: Floats) -> Bools:
    """Whether each sight line (n, 2) crosses any of the walls (w, 2, 2)."""
    a, b = walls[None, :, 0], walls[None, :, 1]
    p, q = eye[:, None], point[:, None]
    sides = [_side(a, b, p) * _side(a, b, q), _side(p, q, a) * _side(p, q, b)]
    return np.asarray(((sides[0] < 0) & (sides[1] < 0)).any(axis=1), dtype=np.bool_)


def _side(a: Floats, b: Floats, p: Floats) -> Floats:
    """Cross product (b - a) x (p - a): positive where p lies left of a -> b."""
    return np.asarray(
        (b[..., 0] - a[..., 0]) * (p[..., 1] - a[..., 1])
        - (b[..., 1] - a[..., 1]) * (p[..., 0] - a[..., 0]),
        dtype=np.float64,
    )

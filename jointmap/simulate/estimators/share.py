"""Sharing landmarks between the filters of a team.

A robot joins the team's frame when it knows two landmarks of a robot that is in it: the transform
enters its state with a flat prior and is determined by the common landmarks. Until then neither
knows anything of the other, so that this step is the same for every way of sharing. Afterwards the
landmarks of the others come in at every exchange,

- as if they were new measurements (wrong: they hold what was sent before), or
- by covariance intersection, which holds for any correlation:

    P^-1 = w A^-1 + (1 - w) H' B^-1 H,   w of the smallest determinant.

References
----------
Julier & Uhlmann, "A non-divergent estimation algorithm in the presence of unknown correlations",
American Control Conference (1997) 2369-2373.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from jointmap._rotations import wrap
from jointmap.simulate.estimators.ekf import Filter, Snapshot

Floats = NDArray[np.float64]

#: Flat prior of the transform into the team's frame: metres, radians.
FLAT = np.array([100.0, 100.0, 3.0])
#: A robot joins when its heading in the team's frame would be known this well (radians).
JOIN_RAD = 0.05
#: Normalised square per scalar above which a transform between maps is not believed.
JOIN_GATE = 40.0
#: Positions are sent with millimetres.
ROUNDING_M = 1e-3


def join(own: Filter, other: Snapshot) -> Filter | None:
    """The filter in the frame of ``other``; None when the common landmarks do not suffice."""
    common = [n for n in own.names if n in other.names]
    if len(common) < 2:
        return None
    rows = _rows(own, common)
    mine, (theirs, noise) = own.x[rows].reshape(-1, 2), other.of(common)
    there = theirs.reshape(-1, 2)
    a, b = mine - mine.mean(axis=0), there - there.mean(axis=0)
    angle = np.arctan2((a[:, 0] * b[:, 1] - a[:, 1] * b[:, 0]).sum(), (a * b).sum())
    c, s = np.cos(angle), np.sin(angle)
    turn = np.array([[c, -s], [s, c]])
    centre = mine.mean(axis=0)
    moved = Filter()
    moved.names = list(own.names)
    points = (own.x.copy()[np.r_[0:2, 3 : len(own.x)]].reshape(-1, 2) - centre) @ turn.T
    points += there.mean(axis=0)
    moved.x = np.concatenate([points[0], [wrap(own.x[2] + angle)], points[1:].ravel()])
    # The transform's own three unknowns turn every variable; its prior is flat.
    n = len(own.x)
    rotate = np.eye(n)
    pairs = [0, *range(3, n, 2)]
    for k in pairs:
        rotate[k : k + 2, k : k + 2] = turn
    frame = np.zeros((n, 3))
    about = points - there.mean(axis=0)
    for k, (x, y) in zip(pairs, about, strict=True):
        frame[k, 0] = frame[k + 1, 1] = 1.0
        frame[k, 2], frame[k + 1, 2] = -y, x
    frame[2, 2] = 1.0
    moved.p = rotate @ own.p @ rotate.T + (frame * FLAT**2) @ frame.T
    h = np.zeros((len(rows), n))
    h[np.arange(len(rows)), rows] = 1.0
    residual = theirs - moved.x[rows]
    spread = (h @ rotate @ own.p @ rotate.T @ h.T) + noise
    if residual @ np.linalg.solve(spread, residual) > JOIN_GATE * len(rows):
        return None
    moved.update(h, residual, noise)
    return moved if moved.p[2, 2] < JOIN_RAD**2 else None


def take_as_measurement(own: Filter, other: Snapshot) -> None:
    """Common landmarks as independent measurements: cross-correlation is ignored."""
    common = [n for n in own.names if n in other.names]
    if not common:
        return
    rows = _rows(own, common)
    theirs, noise = other.of(common)
    h = np.zeros((len(rows), len(own.x)))
    h[np.arange(len(rows)), rows] = 1.0
    # Counted again and again the covariance shrinks without end; this keeps it invertible.
    own.update(h, theirs - own.x[rows], noise + ROUNDING_M**2 * np.eye(len(rows)))


def take_by_intersection(own: Filter, other: Snapshot) -> None:
    """Common landmarks by covariance intersection."""
    common = [n for n in own.names if n in other.names]
    if not common:
        return
    rows = _rows(own, common)
    theirs, noise = other.of(common)
    mine = own.p[np.ix_(rows, rows)]
    weight = best_weight(mine, noise, len(own.x))
    if weight > 1.0 - 1e-6:
        return
    h = np.zeros((len(rows), len(own.x)))
    h[np.arange(len(rows)), rows] = 1.0
    own.p = own.p / weight
    own.update(h, theirs - own.x[rows], noise / (1.0 - weight))


def best_weight(mine: Floats, theirs: Floats, size: int) -> float:
    """Weight w that minimises the determinant of the fused covariance of a state of ``size``.

    Of ``w A^-1 + (1 - w) H' B^-1 H`` with ``mine = H A H'`` the logarithm of the determinant is
    ``-log |A| + size log w + sum log(1 + (1 - w) / w l_i)`` with l the eigenvalues of
    ``B^-1 mine``.
    """
    lower = np.linalg.cholesky(theirs)
    half = np.linalg.solve(lower, np.linalg.solve(lower, mine).T)
    values = np.maximum(np.linalg.eigvalsh(0.5 * (half + half.T)), 0.0)

    def negative(w: float) -> float:
        return -float(size * np.log(w) + np.log1p((1.0 - w) / w * values).sum())

    found = minimize_scalar(negative, bounds=(1e-3, 1.0), method="bounded", options={"xatol": 1e-8})
    return float(found.x) if found.fun < negative(1.0) else 1.0


def intersect(
    a: Floats, cov_a: Floats, b: Floats, cov_b: Floats, weight: float | None = None
) -> tuple[Floats, Floats, float]:
    """Covariance intersection of two estimates of the same vector; the weight of a by default of
    the smallest determinant.
    """
    w = best_weight(cov_a, cov_b, len(cov_a)) if weight is None else weight
    information = w * np.linalg.inv(cov_a) + (1.0 - w) * np.linalg.inv(cov_b)
    cov = np.linalg.inv(information)
    mean = w * np.linalg.solve(cov_a, a) + (1.0 - w) * np.linalg.solve(cov_b, b)
    return cov @ mean, cov, w


def _rows(own: Filter, names: list[str]) -> NDArray[np.int64]:
    start = np.array([own.at(n) for n in names], np.int64)
    return (start[:, None] + np.arange(2)).ravel()

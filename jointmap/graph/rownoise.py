"""Noise that odometry rows state by themselves, as the walk along the rows takes it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.walk import INCREMENT_COVARIANCE, INCREMENT_SIGMA, NO_NOISE, TWIST_SIGMA
from jointmap.ingest.survey import Odometry

Floats = NDArray[np.float64]

#: Rows handled at once, so that temporary matrices stay small.
_CHUNK = 65_536


@dataclass(frozen=True)
class RowNoise:
    """Stated noise of each interval between rows.

    ``kind`` as in :func:`jointmap.graph.walk.row_noise`; ``values`` (M, dof, 1) variances in table
    order or (M, dof, dof) covariance in the body tangent at the interval's end, NaN where a row
    states nothing usable; ``n_ignored`` counts accumulated covariances that could not be used.
    """

    kind: int
    values: Floats
    n_ignored: int


def stated_noise(odometry: Odometry, edges: Floats, dimension: int) -> RowNoise:
    """What the rows state about their own noise.

    Parameters
    ----------
    odometry : Odometry
    edges : (M+1,) seconds
        Ends of the intervals that the rows describe (one more than rows in twist form).
    dimension : int

    Notes
    -----
    Pose form: the sigmas of row k belong to the increment from row k - 1. Twist form: they are
    white from row to row, ``(sigma dt)^2`` over an interval of dt; a sideways sigma that is not
    given is that of the forward speed, as in the noise model. Accumulated covariances (pose form)
    count where ``P_k - A P_(k-1) A^T`` is positive definite, with both in body tangents and A the
    adjoint of the inverse increment.
    """
    nothing = RowNoise(NO_NOISE, np.zeros((0, 1, 1)), 0)
    if odometry.sigma is not None and np.isfinite(odometry.sigma).any():
        sigma = np.asarray(odometry.sigma, dtype=np.float64)
        if odometry.form == "pose":
            return RowNoise(INCREMENT_SIGMA, (sigma[1:] ** 2)[..., None], 0)
        if dimension == 2:
            sigma = sigma.copy()
            sideways = np.isnan(sigma[:, 1])
            sigma[sideways, 1] = sigma[sideways, 0]
        spread = (sigma * np.diff(edges)[:, None]) ** 2
        return RowNoise(TWIST_SIGMA, spread[..., None], 0)
    if odometry.acc_cov is None or not np.isfinite(odometry.acc_cov).any():
        return nothing
    if odometry.pose is None:
        return RowNoise(NO_NOISE, nothing.values, len(odometry.t_s))
    return _from_accumulated(odometry.pose, odometry.acc_cov, dimension)


def _from_accumulated(rows: Floats, accumulated: Floats, dimension: int) -> RowNoise:
    """Differences of accumulated covariances (N, dof, dof) along pose rows (N, 3 or 7)."""
    group = frames.group(dimension)
    n = len(rows) - 1
    values = np.empty((n, group.dof, group.dof))
    ignored = 0
    for lo in range(0, n, _CHUNK):
        hi = min(lo + _CHUNK, n)
        pose = group.from_rows(rows[lo : hi + 1])
        body = group.covariance_from_table(pose, accumulated[lo : hi + 1])
        back = group.adjoint(group.between(pose[1:], pose[:-1]))
        grown = body[1:] - back @ body[:-1] @ np.swapaxes(back, -1, -2)
        grown = 0.5 * (grown + np.swapaxes(grown, -1, -2))
        finite = np.asarray(np.isfinite(grown).all(axis=(1, 2)), dtype=bool)
        smallest = np.linalg.eigvalsh(np.where(finite[:, None, None], grown, 0.0))[:, 0]
        usable = np.asarray(finite & (smallest > 0.0), dtype=bool)
        ignored += hi - lo - int(usable.sum())
        values[lo:hi] = np.where(usable[:, None, None], grown, np.nan)
    kind = INCREMENT_COVARIANCE if ignored < n else NO_NOISE
    return RowNoise(kind, values, ignored)

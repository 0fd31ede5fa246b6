"""Alignment of an estimate with the reference: weighted, with its degrees of freedom.

The transform minimises ``sum w_i |y_i - (c R x_i + t)|^2`` over positions x of the estimate and y
of the reference: all six degrees of freedom in space, four (heading and translation) where gravity
holds roll and pitch, three in the plane, and a scale c only when asked for. Its first-order effect
on errors is the projection ``d - J (J' W J)^-1 J' W d`` with the columns of J the motions that the
alignment may use.

References
----------
Umeyama, "Least-squares estimation of transformation parameters between two point patterns", IEEE
Trans. PAMI 13 (1991) 376-380. Horn, "Closed-form solution of absolute orientation using unit
quaternions", J. Opt. Soc. Am. A 4 (1987) 629-642 (heading alone: the sums of its section 2).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap._rotations import skew
from jointmap.frames import Group, group

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Transform:
    """``map_T_frame`` as rotation (d, d), translation (d,) and scale; ``dof`` spent on it."""

    rotation: Floats
    translation: Floats
    scale: float
    dof: int

    def points(self, x: Floats) -> Floats:
        """Points (n, d) of the frame in the map."""
        return np.asarray(self.scale * x @ self.rotation.T + self.translation)

    def poses(self, pose: Floats, g: Group) -> Floats:
        """Poses (n, *shape) of the frame in the map."""
        turned = self.rotation @ g.rotation(pose)
        return g.build(turned, self.points(g.translation(pose)))


def identity(dimension: int) -> Transform:
    """No alignment."""
    return Transform(np.eye(dimension), np.zeros(dimension), 1.0, 0)


def align(
    x: Floats, y: Floats, weight: Floats, dof: int, *, scale: bool = False
) -> Transform | None:
    """Best transform from points x to points y.

    Parameters
    ----------
    x, y : (n, d) float
    weight : (n,) float
        Not negative.
    dof : int
        3 in the plane; 6 or 4 in space.
    scale : bool

    Returns
    -------
    Transform or None
        ``None`` when the points determine no rotation (fewer than two distinct points, in space
        with six degrees of freedom all on a line; no transform is better than a made-up one).
    """
    total = weight.sum()
    if len(x) < 2 or not total > 0.0:
        return None
    w = weight / total
    mean_x, mean_y = w @ x, w @ y
    a, b = x - mean_x, y - mean_y
    moment = (b * w[:, None]).T @ a
    d = x.shape[1]
    spread = float(w @ (a**2).sum(axis=1))
    if dof in (3, 4):
        cosine, sine = moment[0, 0] + moment[1, 1], moment[1, 0] - moment[0, 1]
        if not np.hypot(cosine, sine) > 1e-12 * max(spread, 1e-300) or spread <= 0.0:
            return None
        angle = np.arctan2(sine, cosine)
        rotation = np.eye(d)
        rotation[:2, :2] = [[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]]
    else:
        u, s, vt = np.linalg.svd(moment)
        if not s[1] > 1e-12 * max(float(s[0]), 1e-300):
            return None
        flip = np.eye(d)
        # Without this the answer may be a reflection (Umeyama's lemma).
        flip[-1, -1] = np.sign(np.linalg.det(u) * np.linalg.det(vt))
        rotation = u @ flip @ vt
    factor = 1.0
    if scale and spread > 0.0:
        factor = float(np.einsum("ij,ij->", rotation, moment)) / spread
    translation = mean_y - factor * rotation @ mean_x
    return Transform(rotation, translation, factor, dof + int(scale))


def motions(y: Floats, dof: int, *, scale: bool = False) -> Floats:
    """Columns J (n, d, q) of the motions of aligned points y (n, d) about their centroid.

    Translations first, then rotations (radians about map axes), then the scale.
    """
    n, d = y.shape
    centred = y - y.mean(axis=0) if n else y
    turns = 1 if dof in (3, 4) else 3
    out = np.zeros((n, d, d + turns + int(scale)))
    out[:, :, :d] = np.eye(d)
    if turns == 1:
        out[:, 0, d], out[:, 1, d] = -centred[:, 1], centred[:, 0]
    else:
        out[:, :, d : d + 3] = -skew(centred)
    if scale:
        out[:, :, -1] = centred
    return out


@dataclass(frozen=True)
class Projection:
    """What alignment takes out of errors: ``d - J fit(d)``.

    ``motions`` (n, d, q), ``gain`` (q, n, d) with ``fit = gain : d``; empty for no alignment.
    ``turns`` says which columns rotate (and change headings).
    """

    motions: Floats
    gain: Floats
    turns: slice

    def fit(self, errors: Floats) -> Floats:
        """Parameters (..., q) that errors (..., n, d) would be aligned by."""
        if not self.motions.shape[2]:
            return np.zeros((*errors.shape[:-2], 0))
        q = len(self.gain)
        flat = errors.reshape(*errors.shape[:-2], errors.shape[-2] * errors.shape[-1])
        return np.asarray(flat @ self.gain.reshape(q, -1).T.astype(errors.dtype))

    def remove(self, errors: Floats, fitted: Floats) -> Floats:
        """Errors (..., n, d) without the fitted motion."""
        if not self.motions.shape[2]:
            return errors
        n, d, q = self.motions.shape
        moved = fitted @ self.motions.reshape(n * d, q).T.astype(errors.dtype)
        return np.asarray(errors - moved.reshape(errors.shape))


def projection(y: Floats, weight: Floats, dof: int, *, scale: bool = False) -> Projection:
    """Projection of alignment at points y (n, d) with weights (n,); ``dof`` 0 for none."""
    n, d = y.shape
    turns = 0 if dof == 0 else 1 if dof in (3, 4) else 3
    if dof == 0 or n == 0:
        return Projection(np.zeros((n, d, 0)), np.zeros((0, n, d)), slice(0, 0))
    j = motions(y, dof, scale=scale)
    weighed = j * weight[:, None, None]
    normal = np.einsum("nda,ndb->ab", j, weighed)
    gain = np.einsum("ab,ndb->and", np.linalg.pinv(normal), weighed)
    return Projection(j, gain, slice(d, d + turns))


def alignment_dof(dimension: int, gravity_aligned: bool) -> int:
    """Degrees of freedom that two frames of one map can differ by."""
    return 3 if dimension == 2 else 4 if gravity_aligned else 6


def angle_of(transform: Transform) -> float:
    """Angle of the rotation in radians."""
    g = group(len(transform.translation))
    xi = g.log(g.build(transform.rotation, np.zeros(g.dim)))
    return float(np.linalg.norm(xi[2:] if g.dim == 2 else xi[:3]))

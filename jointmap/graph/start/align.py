"""Closed-form alignment of corresponding point sets, and its covariance.

Sought are R and t with ``b_i = R a_i + t``. With centred points a', b' and weights w the optimum
maximises tr(R H), H = sum w a' b'^T:

* full rotation: H = U D V^T, R = V diag(1, .., det(V U^T)) U^T (Umeyama 1991, eqs. 40-43; the
  determinant term is what keeps R a rotation and not a reflection);
* about the vertical only (also two dimensions):
  yaw = atan2(sum w (a'_x b'_y - a'_y b'_x), sum w (a'_x b'_x + a'_y b'_y)).

Everything broadcasts over leading axes, so that thousands of trials are one call.

References
----------
S. Umeyama, Least-squares estimation of transformation parameters between two point patterns,
IEEE PAMI 13(4), 1991. B. K. P. Horn, Closed-form solution of absolute orientation using unit
quaternions, JOSA A 4(4), 1987.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: ``planar``: two dimensions; ``yaw``: three, about the vertical only; ``full``: three.
Form = Literal["planar", "yaw", "full"]

#: Spread of the points (ratio of singular values) below which a rotation is not determined.
_FLAT = 1e-9


@dataclass(frozen=True)
class Alignment:
    """A transform ``b = scale * rotation @ a + translation`` and how well it is known.

    Attributes
    ----------
    rotation : (..., d, d)
    translation : (..., d)
    scale : (...)
    covariance : (..., dof, dof)
        Of the body tangent xi in T exp(xi): x, y, yaw in two dimensions, rotation first in three;
        for ``yaw`` the rows of roll and pitch are zero. Per unit weight (weights are 1/sigma^2).
    mean_square : (...)
        Weighted mean of the squared residual length.
    degenerate : (...) bool
        Too few distinct points, or in a line where ``full`` needs a plane.
    """

    rotation: Floats
    translation: Floats
    scale: Floats
    covariance: Floats
    mean_square: Floats
    degenerate: Bools


def form_of(dimension: int, gravity_aligned: bool) -> Form:
    """Return the form of alignment that the survey's geometry asks for."""
    if dimension == 2:
        return "planar"
    return "yaw" if gravity_aligned else "full"


def minimal_points(form: Form) -> int:
    """Return how many distinct points determine the transform (2, or 3 for ``full``)."""
    return 3 if form == "full" else 2


def align(
    a: Floats,
    b: Floats,
    weights: Floats | None = None,
    form: Form = "planar",
    with_scale: bool = False,
) -> Alignment:
    """Return the least-squares transform that carries points ``a`` onto ``b``.

    Parameters
    ----------
    a, b : (..., N, d)
        Corresponding points, metres, in the two frames.
    weights : (..., N), optional
        Inverse variances (1/m^2); 0 leaves a point out. Default 1.
    form
        Which rotations are allowed.
    with_scale
        Estimate a scale too (published checks only; logs are metric).

    Notes
    -----
    Scale c = tr(R H) / sum w |a'|^2 (Umeyama 1991, eq. 42).
    """
    w = np.ones(a.shape[:-1]) if weights is None else np.broadcast_to(weights, a.shape[:-1])
    total = np.maximum(w.sum(axis=-1), np.finfo(float).tiny)
    mean_a = np.einsum("...n,...nd->...d", w, a) / total[..., None]
    mean_b = np.einsum("...n,...nd->...d", w, b) / total[..., None]
    da, db = a - mean_a[..., None, :], b - mean_b[..., None, :]
    cross = np.einsum("...n,...ni,...nj->...ij", w, da, db)
    rotation = _full_rotation(cross) if form == "full" else yaw_matrix(_yaw(cross), a.shape[-1])
    scale = np.ones(total.shape)
    if with_scale:
        spread = np.einsum("...n,...nd,...nd->...", w, da, da)
        scale = np.einsum("...ij,...ji->...", rotation, cross) / spread
    translation = mean_b - scale[..., None] * np.einsum("...ij,...j->...i", rotation, mean_a)
    residual = db - scale[..., None, None] * np.einsum("...ij,...nj->...ni", rotation, da)
    mean_square = np.einsum("...n,...nd,...nd->...", w, residual, residual) / total
    flat = _degenerate(da, w, form)
    information = np.einsum("...n,...nij->...ij", w, _point_information(a, form))
    covariance = masked_inverse(information, form)
    return Alignment(rotation, translation, scale, covariance, mean_square, flat)


def refine(
    a: Floats,
    b: Floats,
    covariance: Floats,
    rotation: Floats,
    translation: Floats,
    form: Form,
    steps: int = 4,
) -> Alignment:
    """Improve a transform by Gauss-Newton with a full covariance for each residual.

    Parameters
    ----------
    a, b : (N, d)
    covariance : (N, d, d)
        Of ``b_i - R a_i`` in the frame of b: S_b + R S_a R^T.
    rotation, translation
        Start, (d, d) and (d,).
    """
    weight = np.linalg.inv(covariance)
    for _ in range(steps):
        jacobian = np.einsum("ij,njk->nik", rotation, point_jacobian(a))
        residual = b - a @ rotation.T - translation
        information = np.einsum("nji,njk,nkl->il", jacobian, weight, jacobian)
        gradient = np.einsum("nji,njk,nk->i", jacobian, weight, residual)
        step = masked_inverse(information, form) @ gradient
        translation = translation + rotation @ _linear_part(step, a.shape[-1])
        rotation = rotation @ _rotation_of(step, a.shape[-1])
    residual = b - a @ rotation.T - translation
    mean_square = np.asarray(np.mean(np.sum(residual**2, axis=-1)))
    flat = _degenerate(a - a.mean(axis=0), np.ones(len(a)), form)
    return Alignment(
        rotation, translation, np.ones(()), masked_inverse(information, form), mean_square, flat
    )


def yaw_matrix(yaw: Floats, dimension: int) -> Floats:
    """Return rotation matrices (..., d, d) by ``yaw`` about the vertical."""
    yaw = np.asarray(yaw)
    matrix = np.zeros((*yaw.shape, dimension, dimension))
    matrix[..., 0, 0] = matrix[..., 1, 1] = np.cos(yaw)
    matrix[..., 1, 0] = np.sin(yaw)
    matrix[..., 0, 1] = -matrix[..., 1, 0]
    if dimension == 3:
        matrix[..., 2, 2] = 1.0
    return matrix


def point_jacobian(points: Floats) -> Floats:
    """Return d(exp(xi) p)/d xi at xi = 0: (..., 2, 3) or (..., 3, 6) with rotation first."""
    dimension = points.shape[-1]
    if dimension == 2:
        jacobian = np.zeros((*points.shape[:-1], 2, 3))
        jacobian[..., 0, 0] = jacobian[..., 1, 1] = 1.0
        jacobian[..., 0, 2], jacobian[..., 1, 2] = -points[..., 1], points[..., 0]
        return jacobian
    jacobian = np.zeros((*points.shape[:-1], 3, 6))
    x, y, z = points[..., 0], points[..., 1], points[..., 2]
    jacobian[..., 0, 1], jacobian[..., 0, 2] = z, -y
    jacobian[..., 1, 0], jacobian[..., 1, 2] = -z, x
    jacobian[..., 2, 0], jacobian[..., 2, 1] = y, -x
    jacobian[..., [0, 1, 2], [3, 4, 5]] = 1.0
    return jacobian


def masked_inverse(information: Floats, form: Form) -> Floats:
    """Invert information over the directions that ``form`` leaves free; the others get zero."""
    if form != "yaw":
        return np.asarray(np.linalg.pinv(information, rcond=1e-14, hermitian=True))
    free = np.array([2, 3, 4, 5])
    inverse = np.zeros_like(information)
    block = np.linalg.pinv(information[..., free[:, None], free], rcond=1e-14, hermitian=True)
    inverse[..., free[:, None], free] = block
    return np.asarray(inverse)


def _full_rotation(cross: Floats) -> Floats:
    u, _, vt = np.linalg.svd(cross)
    sign = np.linalg.det(np.einsum("...ji,...kj->...ik", vt, u))
    vt = vt.copy()
    vt[..., -1, :] *= np.where(sign < 0.0, -1.0, 1.0)[..., None]
    return np.asarray(np.einsum("...ji,...kj->...ik", vt, u))


def _yaw(cross: Floats) -> Floats:
    return np.arctan2(cross[..., 0, 1] - cross[..., 1, 0], cross[..., 0, 0] + cross[..., 1, 1])


def _point_information(points: Floats, form: Form) -> Floats:
    jacobian = point_jacobian(points)
    return np.asarray(np.einsum("...ji,...jk->...ik", jacobian, jacobian))


def _degenerate(centred: Floats, weights: Floats, form: Form) -> Bools:
    """Tell whether the spread of the points leaves a rotation free."""
    points = centred if form == "full" else centred[..., :2]
    scatter = np.einsum("...n,...ni,...nj->...ij", weights, points, points)
    extent = np.sqrt(np.maximum(np.linalg.eigvalsh(scatter), 0.0))
    count = np.count_nonzero(np.broadcast_to(weights, centred.shape[:-1]) > 0.0, axis=-1)
    needed = extent[..., -2] if form == "full" else extent[..., -1]
    scale = np.sqrt(np.maximum(weights.sum(axis=-1), 0.0))
    limit = _FLAT * np.maximum(extent[..., -1], scale)
    return np.asarray((needed <= limit) | (count < minimal_points(form)))


def _linear_part(step: Floats, dimension: int) -> Floats:
    return np.array(step[:2] if dimension == 2 else step[3:])


def _rotation_of(step: Floats, dimension: int) -> Floats:
    """Return exp of the rotation part of a tangent step (Rodrigues' formula in 3-D)."""
    if dimension == 2:
        return yaw_matrix(step[2], 2)
    angle = float(np.linalg.norm(step[:3]))
    x, y, z = step[:3]
    skew = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    first = np.sinc(angle / np.pi)
    second = 0.5 * np.sinc(angle / (2.0 * np.pi)) ** 2
    return np.asarray(np.eye(3) + first * skew + second * skew @ skew)

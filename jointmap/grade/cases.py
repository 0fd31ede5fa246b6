"""Covariance of the difference between an estimate and a reference, by their dependence.

With e_o and e_b the errors of both and d = e_o - e_b:

- independent data:               Cov d = P_o + P_b;
- same or fewer data than an optimal batch: e_b is uncorrelated with d (otherwise a combination of
  both would beat the optimum), so that Cov d = P_o - P_b, positive semi-definite and in general
  singular (Hausman 1978);
- unknown:                        Cov d <= P_o / w + P_b / (1 - w) for every 0 < w < 1, with the
  smallest trace at w = s_o / (s_o + s_b), s the roots of the traces; then it is (s_o + s_b)^2 for
  scalars.

References
----------
Hausman, "Specification tests in econometrics", Econometrica 46 (1978) 1251-1271. The bound is the
one behind covariance intersection (Julier & Uhlmann 1997).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Eigenvalues below this share of the largest, in units of standard deviations, count as zero.
CUT = 1e-9


def bound(p_o: Floats, p_b: Floats) -> tuple[Floats, Floats]:
    """The bound with the weight w (n,) of the smallest trace, for matrices (n, d, d).

    Traces are taken in units of the standard deviations of P_o + P_b, so that metres and radians
    weigh alike.
    """
    size = np.sqrt(np.einsum("nii->ni", p_o + p_b))
    size = np.where(size > 0.0, size, 1.0)
    s_o = np.sqrt(np.maximum((np.einsum("nii->ni", p_o) / size**2).sum(axis=1), 0.0))
    s_b = np.sqrt(np.maximum((np.einsum("nii->ni", p_b) / size**2).sum(axis=1), 0.0))
    w = np.clip(s_o / np.where(s_o + s_b > 0.0, s_o + s_b, 1.0), 1e-9, 1.0 - 1e-9)
    return p_o / w[:, None, None] + p_b / (1.0 - w)[:, None, None], w


def difference_covariance(p_o: Floats, p_b: Floats, case: str) -> Floats:
    """Covariance (n, d, d) of the difference under ``same``, ``independent`` or ``unknown``."""
    if case == "same":
        return np.asarray(p_o - p_b)
    if case == "independent":
        return np.asarray(p_o + p_b)
    if case == "unknown":
        return bound(p_o, p_b)[0]
    raise ValueError(f"no dependence called {case!r}")


def normalised_square(d: Floats, cov: Floats, cut: float = CUT) -> tuple[Floats, Ints, Floats]:
    """``d' C^+ d`` with the pseudo-inverse, its rank and the smallest eigenvalue.

    Parameters
    ----------
    d : (n, k)
    cov : (n, k, k)
        May be singular or indefinite.
    cut : float
        Eigenvalues of the correlation-scaled matrix that are not above this share of the largest
        are left out of the inverse.

    Returns
    -------
    square : (n,)
    rank : (n,) int
        Degrees of freedom.
    least : (n,)
        Smallest eigenvalue in units of the scaled matrix: clearly negative means that no such
        covariance exists.
    """
    size = np.sqrt(np.maximum(np.abs(np.einsum("nii->ni", cov)), 1e-300))
    scaled = cov / (size[:, :, None] * size[:, None, :])
    values, vectors = np.linalg.eigh(0.5 * (scaled + np.swapaxes(scaled, 1, 2)))
    kept = values > cut * np.maximum(values[:, -1:], 0.0)
    kept &= values > 0.0
    along = np.einsum("nij,ni->nj", vectors, d / size)
    square = np.where(kept, along**2 / np.where(kept, values, 1.0), 0.0).sum(axis=1)
    return np.asarray(square), kept.sum(axis=1), values[:, 0]


def least_ratio(p_o: Floats, p_b: Floats) -> Floats:
    """Smallest generalised eigenvalue (n,) of P_o against P_b: below one, P_o - P_b is indefinite.

    Directions in which P_b is zero do not count; NaN where P_b is not positive.
    """
    out = np.full(len(p_o), np.nan)
    size = np.sqrt(np.maximum(np.einsum("nii->ni", p_b), 0.0))
    good = (size > 0.0).all(axis=1) & np.isfinite(p_o).all(axis=(1, 2))
    if not good.any():
        return out
    unit = size[good][:, :, None] * size[good][:, None, :]
    b, o = p_b[good] / unit, p_o[good] / unit
    values, vectors = np.linalg.eigh(b)
    root = np.where(values > 1e-12, values, np.inf) ** -0.5
    white = vectors * root[:, None, :]
    ratio = np.linalg.eigvalsh(np.swapaxes(white, 1, 2) @ o @ white)
    # Directions that were cut give zeros; count them away.
    cut = (values <= 1e-12).sum(axis=1)
    out[good] = ratio[np.arange(len(ratio)), np.minimum(cut, ratio.shape[1] - 1)]
    return out

"""Draws from the distribution that a square-root factor describes.

With ``H = R' R`` the columns of ``R^-1 Z``, Z of independent standard normal numbers, have the
covariance ``R^-1 R^-T = Sigma``: one backward substitution for many draws at once.
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap.trust.solve_pairs import SquareRootFactor

Floats = NDArray[np.float64]


def draw(factor: SquareRootFactor, white: ArrayLike) -> Floats:
    """R^-1 Z.

    Parameters
    ----------
    factor : SquareRootFactor
    white : (N, q)
        Independent standard normal numbers, by scalar of the factor.

    Returns
    -------
    (N, q)
        Columns with covariance Sigma; zero rows for scalars that the factor does not hold.
    """
    tree = factor.tree
    x = np.array(white, dtype=np.float64, order="C")
    if x.shape[0] != tree.n_scalars:
        raise ValueError(f"the white numbers have {x.shape[0]} rows, not {tree.n_scalars}")
    x[np.repeat(tree.clique_of < 0, tree.dims)] = 0.0
    _backward(tree.panel, tree.panel_start, tree.rows, tree.column_start, tree.columns, x)
    return x


@numba.njit(cache=True)
def _backward(panel, start, rows, column_start, columns, x):  # type: ignore[no-untyped-def]
    """Overwrite x (n, q) by R^-1 x; parents come before their children."""
    for c in range(len(rows)):
        f, first = rows[c], column_start[c]
        w = column_start[c + 1] - first
        for i in range(f - 1, -1, -1):
            base = start[c] + i * w
            row = columns[first + i]
            for j in range(i + 1, w):
                r = panel[base + j]
                for q in range(x.shape[1]):
                    x[row, q] -= r * x[columns[first + j], q]
            scale = 1.0 / panel[base + i]
            for q in range(x.shape[1]):
                x[row, q] *= scale


@numba.njit(cache=True)
def markov_path(phi, white):  # type: ignore[no-untyped-def]
    """Stationary first-order Markov numbers of unit variance along the first axis, in place.

    ``phi`` (T,) correlation with the row before (0: none), ``white`` (T, m) standard normal.
    """
    for k in range(1, white.shape[0]):
        a = phi[k]
        b = np.sqrt(max(0.0, 1.0 - a * a))
        for q in range(white.shape[1]):
            white[k, q] = a * white[k - 1, q] + b * white[k, q]
    return white

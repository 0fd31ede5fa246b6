"""Compiled products of small matrices with draws: no temporary arrays, one pass over the draws."""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def relative_draws(errors: Floats, start: Ints, end: Ints, back: Floats) -> Floats:
    """Draws (S, p, k) of ``e[end] - back e[start]`` from draws (S, m, k), ``back`` (p, k, k)."""
    out = np.empty((len(errors), len(start), errors.shape[2]), dtype=errors.dtype)
    _relative(errors, start, end, back.astype(errors.dtype), out)
    return out


def turned_draws(matrix: Floats, draws: Floats, rows: Ints | None = None) -> Floats:
    """Draws (S, n, k) of ``matrix d[rows]`` from draws (S, m, k), ``matrix`` (n, k, k)."""
    chosen = np.arange(draws.shape[1]) if rows is None else rows
    out = np.empty((len(draws), len(chosen), draws.shape[2]), dtype=draws.dtype)
    _turned(draws, chosen, matrix.astype(draws.dtype), out)
    return out


@numba.njit(cache=True)
def _relative(errors, start, end, back, out):  # type: ignore[no-untyped-def]
    k = out.shape[2]
    for s in range(out.shape[0]):
        for p in range(out.shape[1]):
            a, b = start[p], end[p]
            for i in range(k):
                total = errors[s, b, i]
                for j in range(k):
                    total -= back[p, i, j] * errors[s, a, j]
                out[s, p, i] = total


@numba.njit(cache=True)
def _turned(draws, rows, matrix, out):  # type: ignore[no-untyped-def]
    k = out.shape[2]
    for s in range(out.shape[0]):
        for n in range(out.shape[1]):
            row = rows[n]
            for i in range(k):
                total = draws[s, row, 0] * matrix[n, i, 0]
                for j in range(1, k):
                    total += draws[s, row, j] * matrix[n, i, j]
                out[s, n, i] = total

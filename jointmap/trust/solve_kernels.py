"""Compiled triangular solves over the cliques of a tree (see ``clique_tree`` for the layout)."""

from __future__ import annotations

import numba
import numpy as np


@numba.njit(cache=True)
def solve(panel, start, rows, column_start, columns, x):  # type: ignore[no-untyped-def]
    """Overwrite x (n, q) by (R'R)^-1 x."""
    cliques = len(rows)
    for c in range(cliques - 1, -1, -1):
        forward(panel, start, rows, column_start, columns, c, x)
    for c in range(cliques):
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
def forward(panel, start, rows, column_start, columns, c, x):  # type: ignore[no-untyped-def]
    """One clique's share of solving R' y = x in place."""
    f, first = rows[c], column_start[c]
    w = column_start[c + 1] - first
    for i in range(f):
        base = start[c] + i * w
        row = columns[first + i]
        scale = 1.0 / panel[base + i]
        for q in range(x.shape[1]):
            x[row, q] *= scale
        for j in range(i + 1, w):
            r = panel[base + j]
            column = columns[first + j]
            for q in range(x.shape[1]):
                x[column, q] -= r * x[row, q]


@numba.njit(cache=True)
def _unit_columns(  # type: ignore[no-untyped-def]
    panel, start, rows, column_start, columns, parent, c, scalar, d, work, touched
):
    """Solve R' y = E (unit columns of one key) along the path to the root; returns the count.

    ``work`` must be zero where it is touched; the frontal scalars on the path are listed in
    ``touched``, the only ones that R^-T E fills.
    """
    for q in range(d):
        work[scalar + q, q] = 1.0
    count = 0
    while c >= 0:
        forward(panel, start, rows, column_start, columns, c, work)
        for i in range(rows[c]):
            touched[count] = columns[column_start[c] + i]
            count += 1
        c = parent[c]
    return count


@numba.njit(cache=True)
def joint_blocks(  # type: ignore[no-untyped-def]
    panel, start, rows, column_start, columns, parent, offset, clique_of, i_keys, j_keys, d, e, out
):
    """Joint covariance (q, d + e, d + e) of arbitrary pairs: Sigma = R^-1 R^-T, so the block of
    two keys is the inner product of their columns of R^-T, filled only on their paths to the root.
    """
    n = offset[-1]
    left, right = np.zeros((n, d)), np.zeros((n, e))
    touched_left, touched_right = np.empty(n, np.int64), np.empty(n, np.int64)
    previous, count = -1, 0
    for q in range(len(i_keys)):
        a, b = i_keys[q], j_keys[q]
        if a != previous:
            for t in range(count):
                left[touched_left[t]] = 0.0
            count = _unit_columns(
                panel, start, rows, column_start, columns, parent,
                clique_of[a], offset[a], d, left, touched_left,
            )  # fmt: skip
            previous = a
        other = _unit_columns(
            panel, start, rows, column_start, columns, parent,
            clique_of[b], offset[b], e, right, touched_right,
        )  # fmt: skip
        out[q] = 0.0
        for t in range(count):
            row = touched_left[t]
            for i in range(d):
                for j in range(d):
                    out[q, i, j] += left[row, i] * left[row, j]
        for t in range(other):
            row = touched_right[t]
            for i in range(e):
                for j in range(e):
                    out[q, d + i, d + j] += right[row, i] * right[row, j]
                for j in range(d):
                    out[q, j, d + i] += left[row, j] * right[row, i]
        for t in range(other):
            right[touched_right[t]] = 0.0
        for i in range(d):
            for j in range(e):
                out[q, d + j, i] = out[q, i, d + j]

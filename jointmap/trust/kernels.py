"""Compiled loops over the cliques of a :class:`~jointmap.trust.clique_tree.CliqueTree`.

All take the tree's flat arrays; none allocates more than the result and one path of the tree.
"""

from __future__ import annotations

import numba
import numpy as np


@numba.njit(cache=True)
def row_major(values, start, rows, width):  # type: ignore[no-untyped-def]
    """Turn every clique's panel from column-major into row-major."""
    out = np.empty_like(values)
    for c in range(len(rows)):
        f, w, base = rows[c], width[c], start[c]
        for j in range(w):
            for i in range(f):
                out[base + i * w + j] = values[base + j * f + i]
    return out


@numba.njit(cache=True)
def pivots(panel, start, rows, column_start, columns, n):  # type: ignore[no-untyped-def]
    """Squared diagonal of R and diagonal of R'R, by scalar."""
    pivot = np.zeros(n)
    information = np.zeros(n)
    for c in range(len(rows)):
        f, first = rows[c], column_start[c]
        w = column_start[c + 1] - first
        for i in range(f):
            base = start[c] + i * w
            pivot[columns[first + i]] = panel[base + i] ** 2
            for j in range(i, w):
                information[columns[first + j]] += panel[base + j] ** 2
    return pivot, information


@numba.njit(cache=True)
def parent_places(parent, rows, column_start, columns, n):  # type: ignore[no-untyped-def]
    """Where each separator scalar of a clique stands among its parent's scalars.

    Same layout as ``columns``; entries of frontal scalars are not used.
    """
    cliques = len(parent)
    count = np.zeros(cliques + 1, np.int64)
    for c in range(cliques):
        if parent[c] >= 0:
            count[parent[c] + 1] += 1
    first_child = np.cumsum(count)
    children = np.empty(first_child[-1], np.int64)
    fill = first_child[:-1].copy()
    for c in range(cliques):
        if parent[c] >= 0:
            children[fill[parent[c]]] = c
            fill[parent[c]] += 1
    place = np.zeros(n, np.int64)
    out = np.zeros(len(columns), np.int32)
    for p in range(cliques):
        if first_child[p] == first_child[p + 1]:
            continue
        for j in range(column_start[p], column_start[p + 1]):
            place[columns[j]] = j - column_start[p]
        for index in range(first_child[p], first_child[p + 1]):
            c = children[index]
            for j in range(column_start[c] + rows[c], column_start[c + 1]):
                out[j] = place[columns[j]]
    return out


@numba.njit(cache=True)
def _inverse_and_gain(block, f, w):  # type: ignore[no-untyped-def]
    """R^-1 (upper) and -R^-1 T of a panel [R T]."""
    inverse = np.zeros((f, f))
    gain = np.empty((f, w - f))
    for i in range(f - 1, -1, -1):
        scale = 1.0 / block[i, i]
        for j in range(w - f):
            gain[i, j] = -block[i, f + j]
        for k in range(i + 1, f):
            r = block[i, k]
            for j in range(w - f):
                gain[i, j] -= r * gain[k, j]
            for j in range(k, f):
                inverse[i, j] -= r * inverse[k, j]
        for j in range(w - f):
            gain[i, j] *= scale
        for j in range(i + 1, f):
            inverse[i, j] *= scale
        inverse[i, i] = scale
    return inverse, gain


@numba.njit(cache=True)
def _clique_covariance(block, f, w, outer):  # type: ignore[no-untyped-def]
    """Covariance of a clique's scalars from that of its separator (Takahashi, by blocks)."""
    inverse, gain = _inverse_and_gain(block, f, w)
    full = np.empty((w, w))
    full[:f, :f] = np.dot(inverse, np.ascontiguousarray(inverse.T))
    if w > f:
        cross = np.dot(gain, outer)
        full[:f, :f] += np.dot(cross, np.ascontiguousarray(gain.T))
        full[:f, f:] = cross
        full[f:, :f] = cross.T
        full[f:, f:] = outer
    for i in range(f):
        for j in range(i):
            mean = 0.5 * (full[i, j] + full[j, i])
            full[i, j] = mean
            full[j, i] = mean
    return full


@numba.njit(cache=True)
def selected_inverse(  # type: ignore[no-untyped-def]
    panel, start, rows, column_start, columns, parent, n
):
    """Covariance panels [Sigma_FF Sigma_FS] of every clique, laid out as the panels of R.

    Depth first, so that the full covariances of the cliques on the path from the root are all
    that must be held besides the result.
    """
    place = parent_places(parent, rows, column_start, columns, n)
    cliques = len(rows)
    arena_start = np.zeros(cliques, np.int64)
    arena_size = 0
    for c in range(cliques):
        p = parent[c]
        if p >= 0:
            arena_start[c] = arena_start[p] + (column_start[p + 1] - column_start[p]) ** 2
        arena_size = max(arena_size, arena_start[c] + (column_start[c + 1] - column_start[c]) ** 2)
    arena = np.empty(arena_size)
    out = np.empty_like(panel)
    for c in range(cliques):
        f, first, p = rows[c], column_start[c], parent[c]
        w = column_start[c + 1] - first
        s = w - f
        outer = np.empty((s, s))
        if s:
            wide = column_start[p + 1] - column_start[p]
            for i in range(s):
                base = arena_start[p] + place[first + f + i] * wide
                for j in range(s):
                    outer[i, j] = arena[base + place[first + f + j]]
        full = _clique_covariance(panel[start[c] : start[c + 1]].reshape(f, w), f, w, outer)
        arena[arena_start[c] : arena_start[c] + w * w] = full.ravel()
        out[start[c] : start[c + 1]] = full[:f].ravel()
    return out


@numba.njit(cache=True)
def gather_pairs(  # type: ignore[no-untyped-def]
    cov, start, column_start, key_start, keys, dims, clique_of, row_of, i_keys, j_keys, out
):
    """Copy covariance blocks of pairs out of the panels; returns the first pair that has none."""
    for q in range(len(i_keys)):
        a, b = i_keys[q], j_keys[q]
        flip = clique_of[b] > clique_of[a]
        if flip:
            a, b = b, a
        c = clique_of[a]
        if c < 0 or clique_of[b] < 0:
            return q
        w = column_start[c + 1] - column_start[c]
        column = 0
        found = False
        for k in range(key_start[c], key_start[c + 1]):
            if keys[k] == b:
                found = True
                break
            column += dims[keys[k]]
        if not found:
            return q
        base = start[c] + row_of[a] * w + column
        for i in range(dims[a]):
            for j in range(dims[b]):
                value = cov[base + i * w + j]
                if flip:
                    out[q, j, i] = value
                else:
                    out[q, i, j] = value
    return -1


@numba.njit(cache=True)
def share_clique(key_start, keys, clique_of, i_keys, j_keys):  # type: ignore[no-untyped-def]
    """Which pairs of keys stand in a common clique."""
    out = np.zeros(len(i_keys), np.bool_)
    for q in range(len(i_keys)):
        a, b = i_keys[q], j_keys[q]
        if clique_of[b] > clique_of[a]:
            a, b = b, a
        c = clique_of[a]
        if c < 0 or clique_of[b] < 0:
            continue
        for k in range(key_start[c], key_start[c + 1]):
            if keys[k] == b:
                out[q] = True
                break
    return out


@numba.njit(cache=True)
def _block_place(  # type: ignore[no-untyped-def]
    start, column_start, key_start, keys, dims, clique_of, row_of, a, b
):
    """Where the covariance of a pair stands: offset, row stride, column stride; -1 for nowhere."""
    flip = clique_of[b] > clique_of[a]
    if flip:
        a, b = b, a
    c = clique_of[a]
    w = column_start[c + 1] - column_start[c]
    column = 0
    for k in range(key_start[c], key_start[c + 1]):
        if keys[k] == b:
            base = start[c] + row_of[a] * w + column
            return (base, 1, w) if flip else (base, w, 1)
        column += dims[keys[k]]
    return -1, 0, 0


@numba.njit(cache=True)
def row_covariance(  # type: ignore[no-untyped-def]
    panel, cov, start, rows, column_start, key_start, keys, dims, clique_of, row_of, i_keys, j_keys,
    jac_i, jac_j, out,
):  # fmt: skip
    """``J Sigma J'`` (q, m, m) of rows on pairs that share a clique; the first pair that does not.

    The row is carried through the clique's own elimination before anything is squared, so that the
    variance of a difference of two almost equal variables keeps its digits.
    """
    m = jac_i.shape[1]
    for q in range(len(i_keys)):
        a, b = i_keys[q], j_keys[q]
        c = max(clique_of[a], clique_of[b])
        f, first = rows[c], column_start[c]
        w = column_start[c + 1] - first
        row = np.zeros((m, w))
        column, found = 0, 0
        for k in range(key_start[c], key_start[c + 1]):
            d = dims[keys[k]]
            for i in range(m):
                for j in range(d):
                    if keys[k] == a:
                        row[i, column + j] += jac_i[q, i, j]
                    if keys[k] == b:
                        row[i, column + j] += jac_j[q, i, j]
            found += (keys[k] == a) + (keys[k] == b)
            column += d
        if found < 2:
            return q
        base = start[c]
        for j in range(f):
            scale = 1.0 / panel[base + j * w + j]
            for i in range(m):
                row[i, j] *= scale
                for k in range(j + 1, w):
                    row[i, k] -= row[i, j] * panel[base + j * w + k]
        out[q] = 0.0
        for i in range(m):
            for j in range(m):
                for k in range(f):
                    out[q, i, j] += row[i, k] * row[j, k]
        left = f
        for k in range(key_start[c], key_start[c + 1]):
            if clique_of[keys[k]] == c:
                continue
            right = f
            for other in range(key_start[c], key_start[c + 1]):
                if clique_of[keys[other]] == c:
                    continue
                place, down, along = _block_place(
                    start, column_start, key_start, keys, dims, clique_of, row_of,
                    keys[k], keys[other],
                )  # fmt: skip
                for x in range(dims[keys[k]]):
                    for y in range(dims[keys[other]]):
                        value = cov[place + x * down + y * along]
                        for i in range(m):
                            for j in range(m):
                                out[q, i, j] += row[i, left + x] * value * row[j, right + y]
                right += dims[keys[other]]
            left += dims[keys[k]]
    return -1

"""The datum: moving covariances from one choice of coordinates to another (S-transformation).

Without absolute data a component may move as a whole; let the columns of G span those motions.
The solver holds them by some minimal datum. Another one, ``B' dx = 0``, gives

    Sigma' = S Sigma S',   S = I - G (B' G)^-1 B',

and ``S G = 0``, so that whatever held the gauge drops out (Baarda 1973). Every datum used here is
an inner constraint under weights, ``B = W G`` with W diagonal: it minimises ``tr(W Sigma')``.
Equal weights on the positions of landmarks give the free network over the landmarks; unit weight
on all scalars of one pose holds that pose exactly (where gravity holds roll and pitch: its
position and its heading).

Of Sigma only the wanted blocks and ``C = Sigma B`` are needed. With ``U = G (B'G)^-1``,
``D = B' C`` and ``E = C - U D / 2``:

    Sigma'_ij = Sigma_ij - U_i E_j' - E_i U_j'.

References
----------
Baarda, "S-transformations and criterion matrices", Netherlands Geodetic Commission 5 (1) (1973).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.linalg import qr

from jointmap.errors import GaugeError
from jointmap.solve.gauge import motion_basis, point_motion, pose_motion
from jointmap.trust.clique_tree import CliqueTree
from jointmap.trust.solve_pairs import SquareRootFactor

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Smallest eigenvalue of the normalised B'G, as a share of the largest, that still holds a datum.
SINGULAR_DATUM = 1e-13
#: Columns of G that depend on the others to this share are no motion of their own.
DEPENDENT_MOTION = 1e-12


@dataclass(frozen=True)
class DatumTransform:
    """Moves covariance blocks into a datum; one datum per component.

    Parameters
    ----------
    offset : (n + 1,) int
        First scalar of every key.
    component : (n,) int
        Component of every key, -1 for variables that no motion of the map moves (calibration).
    motion : (N, q)
        Rows of U, by scalar.
    cross : (N, q)
        Rows of E, by scalar.
    """

    offset: Ints
    component: Ints
    motion: Floats
    cross: Floats

    def diagonal(self, keys: ArrayLike, blocks: Floats) -> Floats:
        """Covariances (m, d, d) of variables of one dimension, in the datum."""
        return self.pairs(keys, keys, blocks)

    def pairs(self, i_keys: ArrayLike, j_keys: ArrayLike, blocks: Floats) -> Floats:
        """Cross-covariances (m, d, e) of pairs within one component, in the datum.

        Raises
        ------
        ValueError
            A pair joins two components: each has a datum of its own.
        """
        i, j = np.atleast_1d(np.asarray(i_keys)), np.atleast_1d(np.asarray(j_keys))
        if np.any(self.component[i] != self.component[j]):
            raise ValueError("a covariance between two components has no common datum")
        u_i, e_i = self._rows(i, blocks.shape[1])
        u_j, e_j = self._rows(j, blocks.shape[2])
        moved = blocks - u_i @ e_j.swapaxes(1, 2) - e_i @ u_j.swapaxes(1, 2)
        same = i == j
        if same.any():
            moved[same] = 0.5 * (moved[same] + moved[same].swapaxes(1, 2))
        return np.asarray(moved)

    def joint(self, i_keys: ArrayLike, j_keys: ArrayLike, blocks: Floats) -> Floats:
        """Joint covariances (m, d + e, d + e) of pairs, in the datum."""
        i, j = np.atleast_1d(np.asarray(i_keys)), np.atleast_1d(np.asarray(j_keys))
        d = int(self.offset[i[0] + 1] - self.offset[i[0]]) if len(i) else 0
        out = np.empty_like(blocks)
        out[:, :d, :d] = self.diagonal(i, blocks[:, :d, :d])
        out[:, d:, d:] = self.diagonal(j, blocks[:, d:, d:])
        out[:, :d, d:] = self.pairs(i, j, blocks[:, :d, d:])
        out[:, d:, :d] = out[:, :d, d:].swapaxes(1, 2)
        return out

    def to_arrays(self) -> dict[str, Floats | Ints]:
        """The arrays to store (``numpy.savez`` without pickle)."""
        return {
            "offset": self.offset,
            "component": self.component,
            "motion": self.motion,
            "cross": self.cross,
        }

    def _rows(self, keys: Ints, dim: int) -> tuple[Floats, Floats]:
        """U and E of variables, (m, d, q) each."""
        at = self.offset[keys][:, None] + np.arange(dim)
        return self.motion[at], self.cross[at]


def datum_transform(
    factor: SquareRootFactor, component: ArrayLike, null: Floats, weights: ArrayLike
) -> DatumTransform:
    """Prepare the move into the datum that weights define.

    Parameters
    ----------
    factor : SquareRootFactor
        Of the graph with every component held by some minimal datum.
    component : (n,) int
        Component of every key, -1 for keys that no motion of the map moves.
    null : (N, q)
        Motions that are free, in each variable's own tangent (:func:`null_space`). A component
        with fewer free motions has zero or dependent columns; one with none stays as it is.
    weights : (N,)
        Weight of every scalar in the datum, not negative (:func:`position_weights`,
        :func:`pose_weights`).

    Raises
    ------
    GaugeError
        The weights of a component leave some motion free (one landmark, landmarks in a row).
    """
    tree = factor.tree
    part = np.asarray(component, np.int64)
    scalar_part = np.repeat(part, tree.dims)
    scalar_part[np.repeat(tree.clique_of < 0, tree.dims)] = -1
    w = np.asarray(weights, np.float64)
    motion, constraint = np.zeros_like(null), np.zeros_like(null)
    unheld = []
    for c, rows in _rows_of(scalar_part):
        basis = _orthonormal(null[rows])
        gram = basis.T @ (w[rows, None] * basis)
        if not _regular(gram):
            unheld.append(c)
            continue
        q = basis.shape[1]
        motion[rows, :q] = basis @ np.linalg.inv(gram) if q else 0.0
        constraint[rows, :q] = w[rows, None] * basis
    if unheld:
        raise GaugeError(
            "the datum leaves a motion free in component(s) " + ", ".join(map(str, unheld))
        )
    cross = np.zeros_like(null)
    for chosen in _independent_components(tree, part):
        here = np.isin(scalar_part, chosen)
        solved = factor.solve(np.where(here[:, None], constraint, 0.0))
        cross[here] = solved[here]
    for _, rows in _rows_of(scalar_part):
        inner = constraint[rows].T @ cross[rows]
        cross[rows] -= motion[rows] @ (0.25 * (inner + inner.T))
    return DatumTransform(tree.offset, part, motion, cross)


def holds(null: Floats, weights: Floats) -> bool:
    """Whether a datum of weights (N,) holds every motion (N, q) of a component."""
    basis = _orthonormal(null)
    return _regular(basis.T @ (weights[:, None] * basis))


def null_space(
    dims: ArrayLike,
    dimension: int,
    gravity_aligned: bool,
    poses: tuple[Ints, Floats],
    points: tuple[Ints, Floats],
) -> Floats:
    """Motions of the whole map, in each variable's own tangent.

    Parameters
    ----------
    dims : (n,) int
        Tangent dimension of every key.
    dimension, gravity_aligned
        3 motions in the plane (x, y, yaw), 6 in space, 4 in space where gravity holds roll and
        pitch (yaw, x, y, z).
    poses : keys (P,) and values (P, *pose shape)
        Rows are ``Ad(T^-1)``: ``exp(g) T = T exp(Ad(T^-1) g)``.
    points : keys (L,) and values (L, dimension)

    Returns
    -------
    (N, q), zero for keys that are listed in neither.
    """
    size = np.asarray(dims, np.int64)
    offset = np.cumsum(size) - size
    basis = motion_basis(dimension, gravity_aligned)
    out = np.zeros((int(size.sum()), basis.shape[1]))
    for keys, rows in (
        (poses[0], pose_motion(dimension, poses[1], basis)),
        (points[0], point_motion(dimension, points[1], basis)),
    ):
        out[offset[keys][:, None] + np.arange(rows.shape[1])] = rows
    return out


def restrict(
    null: Floats, dims: ArrayLike, component: ArrayLike, directions: Sequence[Floats]
) -> Floats:
    """Keep, per component, only the motions that absolute data leave free.

    Parameters
    ----------
    null : (N, q)
        From :func:`null_space`.
    directions : sequence of (q, free)
        Combinations of the columns that stay free, one array per component.
    """
    out = np.zeros_like(null)
    for c, rows in _rows_of(np.repeat(np.asarray(component, np.int64), np.asarray(dims))):
        out[rows, : directions[c].shape[1]] = null[rows] @ directions[c]
    return out


def position_weights(dims: ArrayLike, dimension: int, keys: ArrayLike) -> Floats:
    """Unit weight (N,) on the position of points or poses: inner constraints over ``keys``.

    A pose's position is the translation of its tangent: the first two scalars in the plane, the
    last three in space.
    """
    size = np.asarray(dims, np.int64)
    chosen = np.asarray(keys, np.int64)
    start = np.cumsum(size) - size
    if dimension == 3:
        start = start + size - 3
    out = np.zeros(int(size.sum()))
    out[start[chosen][:, None] + np.arange(dimension)] = 1.0
    return out


def pose_weights(dims: ArrayLike, keys: ArrayLike) -> Floats:
    """Unit weight (N,) on every scalar of the poses that are to be exact, one per component."""
    size = np.asarray(dims, np.int64)
    held = np.zeros(len(size), dtype=bool)
    held[np.asarray(keys, np.int64)] = True
    return np.repeat(held, size).astype(np.float64)


def _rows_of(part: Ints) -> Iterator[tuple[int, Ints]]:
    """Every component with its scalars."""
    order = np.argsort(part, kind="stable")
    numbers, first = np.unique(part[order], return_index=True)
    for number, rows in zip(numbers.tolist(), np.split(order, first[1:]), strict=True):
        if number >= 0:
            yield number, rows


def _orthonormal(null: Floats) -> Floats:
    """Orthonormal basis (rows, r) of the motions: centres and scales whatever the coordinates."""
    basis, upper, _ = qr(null, mode="economic", pivoting=True)
    size = np.abs(np.diagonal(upper))
    return np.asarray(basis[:, : int(np.sum(size > DEPENDENT_MOTION * max(size[0], 1e-300)))])


def _regular(gram: Floats) -> bool:
    """Whether the weights hold every motion."""
    if not gram.size:
        return True
    values = np.linalg.eigvalsh(gram)
    return bool(values[0] > SINGULAR_DATUM * values[-1] and values[-1] > 0.0)


def _independent_components(tree: CliqueTree, part: Ints) -> list[Ints]:
    """Groups of components that one solve can serve: no two of a group share a tree.

    Components are correlated only through calibration that both use; then they share a tree.
    """
    root = np.cumsum(tree.parent < 0) - 1  # depth first: trees follow each other
    held = np.flatnonzero((tree.clique_of >= 0) & (part >= 0))
    pairs = np.unique(np.stack([root[tree.clique_of[held]], part[held]], axis=1), axis=0)
    if len(np.unique(pairs[:, 1])) < len(pairs):
        raise ValueError("a component falls apart into several trees: its parts are not tied")
    rank = np.arange(len(pairs)) - np.searchsorted(pairs[:, 0], pairs[:, 0])
    return [pairs[rank == k, 1] for k in range(int(rank.max(initial=-1)) + 1)]

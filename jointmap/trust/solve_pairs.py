"""Solves with the square root of the information matrix, and covariances of any pair.

Works on arrays alone, so that a stored result can answer questions without GTSAM: with
``H = R' R`` the covariance is ``Sigma = R^-1 R^-T``. The columns of ``R^-T`` that belong to one
variable are filled only along its path to the root of the clique tree, so the joint covariance of
two variables costs two such paths, not a factorisation.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap.trust import solve_kernels
from jointmap.trust.clique_tree import CliqueTree

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class SquareRootFactor:
    """Square root of the information matrix of an eliminated graph.

    Parameters
    ----------
    tree : CliqueTree
        From :func:`jointmap.trust.elimination.clique_tree` or read back from storage.
    """

    tree: CliqueTree

    def solve(self, rhs: ArrayLike) -> Floats:
        """Sigma @ rhs.

        Parameters
        ----------
        rhs : (N,) or (N, q)
            Rows by scalar: key k owns ``offset[k] .. offset[k] + dims[k] - 1``. Rows of keys that
            the tree does not hold must be zero.

        Returns
        -------
        Same shape.
        """
        b = np.asarray(rhs, np.float64)
        tree = self.tree
        if b.shape[0] != tree.n_scalars:
            raise ValueError(f"the right-hand side has {b.shape[0]} rows, not {tree.n_scalars}")
        x = np.array(b.reshape(len(b), -1), order="C")
        solve_kernels.solve(
            tree.panel, tree.panel_start, tree.rows, tree.column_start, tree.columns, x
        )
        return x.reshape(b.shape)

    def joint(self, i_keys: ArrayLike, j_keys: ArrayLike) -> Floats:
        """Joint covariance of arbitrary pairs of variables.

        Parameters
        ----------
        i_keys, j_keys : (m,) int
            All of ``i_keys`` of one dimension d, all of ``j_keys`` of one dimension e.

        Returns
        -------
        (m, d + e, d + e)

        Raises
        ------
        KeyError
            A key is not in the tree.
        ValueError
            The keys of one side have different dimensions.
        """
        first, d = self._checked(i_keys)
        second, e = self._checked(j_keys)
        order = np.argsort(first, kind="stable")
        out = np.empty((len(first), d + e, d + e))
        tree = self.tree
        solve_kernels.joint_blocks(
            tree.panel, tree.panel_start, tree.rows, tree.column_start, tree.columns, tree.parent,
            tree.offset, tree.clique_of, first[order], second[order], d, e, out,
        )  # fmt: skip
        result = np.empty_like(out)
        result[order] = out
        return result

    def pairs(self, i_keys: ArrayLike, j_keys: ArrayLike) -> Floats:
        """Cross-covariance (m, d, e) of arbitrary pairs."""
        joint = self.joint(i_keys, j_keys)
        d = int(self.tree.dims[np.atleast_1d(i_keys)[0]]) if len(joint) else 0
        return np.ascontiguousarray(joint[:, :d, d:])

    def relative(self, a: int, b: int) -> Floats:
        """Joint covariance (d + e, d + e) of two variables."""
        return np.asarray(self.joint([a], [b])[0])

    def to_arrays(self) -> dict[str, Any]:
        """The arrays to store (``numpy.savez`` without pickle)."""
        return self.tree.to_arrays()

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, Any]) -> SquareRootFactor:
        """Read back what :meth:`to_arrays` gave (an open ``.npz`` will do)."""
        return cls(CliqueTree.from_arrays(arrays))

    def _checked(self, keys: ArrayLike) -> tuple[Ints, int]:
        """Keys as integers and their common dimension."""
        tree = self.tree
        out = np.atleast_1d(np.asarray(keys, np.int64))
        if not len(out):
            return out, 0
        if out.min() < 0 or out.max() >= len(tree.dims) or np.any(tree.clique_of[out] < 0):
            raise KeyError("a variable is not in the factor")
        dims = tree.dims[out]
        if np.any(dims != dims[0]):
            raise ValueError("the variables have different dimensions: ask for each kind by itself")
        return out, int(dims[0])

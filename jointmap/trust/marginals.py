"""All marginal covariances of an eliminated graph at the cost of about one elimination.

Takahashi's recursion, clique by clique and top-down: with the rows ``R x_F + T x_S = d`` of a
clique and the covariance of its separator already known from its parent,

    G = -R^-1 T,   Sigma_FS = G Sigma_SS,   Sigma_FF = R^-1 R^-T + Sigma_FS G'.

It yields the exact covariance of every variable and of every pair that shares a clique; two
variables that one measurement ties always do.

References
----------
Erisman & Tinney, "On computing certain elements of the inverse of a sparse matrix", Comm. ACM 18
(1975). Kaess & Dellaert, "Covariance recovery from a square root information matrix for data
association", Robotics and Autonomous Systems 57 (2009), eq. 14-15.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap.trust import kernels
from jointmap.trust.clique_tree import CliqueTree
from jointmap.trust.elimination import clique_tree

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class SelectedInverse:
    """Covariance blocks of every variable and of every pair that shares a clique.

    Parameters
    ----------
    tree : CliqueTree
        Structure and square-root factor.
    covariance : (sum,) float
        Panels ``[Sigma_FF Sigma_FS]`` in the layout of ``tree.panel``.
    """

    tree: CliqueTree
    covariance: Floats

    def diagonal(self, keys: ArrayLike) -> Floats:
        """Covariance of variables of one dimension d.

        Parameters
        ----------
        keys : (m,) int

        Returns
        -------
        (m, d, d) in each variable's own tangent.

        Raises
        ------
        KeyError
            A key is not in the tree.
        ValueError
            The keys have different dimensions.
        """
        return self.pairs(keys, keys)

    def pairs(self, i_keys: ArrayLike, j_keys: ArrayLike) -> Floats:
        """Cross-covariance of pairs that share a clique (a measurement ties them).

        Parameters
        ----------
        i_keys, j_keys : (m,) int
            All of ``i_keys`` of one dimension, all of ``j_keys`` of one dimension.

        Returns
        -------
        (m, d_i, d_j)

        Raises
        ------
        KeyError
            A pair shares no clique, or a key is not in the tree.
        ValueError
            The keys of one side have different dimensions.
        """
        first, second = _keys(i_keys), _keys(j_keys)
        tree = self.tree
        out = np.empty((len(first), _dimension(tree, first), _dimension(tree, second)))
        missing = kernels.gather_pairs(
            self.covariance, tree.panel_start, tree.column_start, tree.key_start, tree.keys,
            tree.dims, tree.clique_of, tree.row_of, first, second, out,
        )  # fmt: skip
        if missing >= 0:
            raise KeyError(
                f"variables {first[missing]} and {second[missing]} share no clique; "
                "SquareRootFactor.pairs gives any pair"
            )
        return out

    def row_covariance(
        self, i_keys: ArrayLike, j_keys: ArrayLike, jac_i: Floats, jac_j: Floats
    ) -> Floats:
        """``J Sigma J'`` (n, r, r) of rows that tie two variables of one clique each.

        Unlike a sum of covariance blocks it keeps its digits where the variables are almost one.

        Parameters
        ----------
        i_keys, j_keys : (n,) int
        jac_i, jac_j : (n, r, d), (n, r, e)

        Raises
        ------
        KeyError
            A pair shares no clique.
        """
        first, second, tree = _keys(i_keys), _keys(j_keys), self.tree
        out = np.empty((len(first), jac_i.shape[1], jac_i.shape[1]))
        failed = kernels.row_covariance(
            tree.panel, self.covariance, tree.panel_start, tree.rows, tree.column_start,
            tree.key_start, tree.keys, tree.dims, tree.clique_of, tree.row_of, first, second,
            np.ascontiguousarray(jac_i), np.ascontiguousarray(jac_j), out,
        )  # fmt: skip
        if failed >= 0:
            raise KeyError(f"no clique holds both {first[failed]} and {second[failed]}")
        return out

    def shares_clique(self, i_keys: ArrayLike, j_keys: ArrayLike) -> NDArray[np.bool_]:
        """Which pairs :meth:`pairs` can give."""
        tree = self.tree
        return np.asarray(
            kernels.share_clique(
                tree.key_start, tree.keys, tree.clique_of, _keys(i_keys), _keys(j_keys)
            )
        )


def selected_inverse(bayes_tree: Any, dims: ArrayLike) -> SelectedInverse:
    """Covariance of every variable and of every pair in a common clique.

    Parameters
    ----------
    bayes_tree : gtsam.GaussianBayesTree
        From :func:`jointmap.trust.elimination.eliminate`; keys are integers 0 .. n-1.
    dims : (n,) int
        Tangent dimension of every key.

    Raises
    ------
    SingularSystemError
        The system is numerically singular.
    """
    return selected_inverse_of(clique_tree(bayes_tree, dims))


def selected_inverse_of(tree: CliqueTree) -> SelectedInverse:
    """The same from a tree that is packed already."""
    covariance = kernels.selected_inverse(
        tree.panel, tree.panel_start, tree.rows, tree.column_start, tree.columns, tree.parent,
        tree.n_scalars,
    )  # fmt: skip
    return SelectedInverse(tree, covariance)


def _keys(keys: ArrayLike) -> Ints:
    """Keys as a contiguous integer vector."""
    return np.ascontiguousarray(np.atleast_1d(keys), np.int64)


def _dimension(tree: CliqueTree, keys: Ints) -> int:
    """The common dimension of the keys."""
    if not len(keys):
        return 0
    if keys.min() < 0 or keys.max() >= len(tree.dims):
        raise KeyError(f"keys run from 0 to {len(tree.dims) - 1}")
    dims = tree.dims[keys]
    if np.any(dims != dims[0]):
        raise ValueError("the variables have different dimensions: ask for each kind by itself")
    return int(dims[0])

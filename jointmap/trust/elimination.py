"""From GTSAM's Bayes tree to flat arrays: the square root of the information matrix.

The only file of this room that talks to GTSAM's elimination. A multifrontal elimination leaves a
tree of cliques; clique ``c`` states the density of its frontal variables F given its separator S
as ``R x_F + T x_S = d`` with R upper triangular. Stacked, these rows are the square root of the
information matrix, ``R' R = H``. :class:`CliqueTree` holds them in a few flat arrays so that
everything after this file runs without one Python call per clique.
"""

from __future__ import annotations

import itertools
import re
from typing import Any

import gtsam
import numpy as np
from numpy.typing import ArrayLike, NDArray

from jointmap.errors import IndeterminateError
from jointmap.trust.clique_tree import CliqueTree, Ints
from jointmap.trust.solve_pairs import SquareRootFactor

#: A pivot below this share of its own information has lost every digit of double precision.
SINGULAR_PIVOT = 1e-14


class SingularSystemError(IndeterminateError):
    """The linear system leaves a variable undetermined.

    Parameters
    ----------
    key : int
        Integer key at which the elimination stopped (-1 when it is not known). The variable that
        is truly loose can be one of its neighbours: see :func:`loose_keys`.
    """

    def __init__(self, key: int) -> None:
        self.key = key
        super().__init__(
            f"the measurements leave variable {key} or one of its neighbours undetermined"
        )


def metis_ordering(graph: Any) -> Any:
    """Elimination order by nested dissection: a shallow tree with small separators."""
    return gtsam.Ordering.MetisGaussianFactorGraph(graph)


def eliminate(graph: Any, ordering: Any = None) -> Any:
    """Eliminate a ``GaussianFactorGraph`` into a Bayes tree.

    Parameters
    ----------
    graph : gtsam.GaussianFactorGraph
        Linearised factors, for example ``nonlinear.linearize(values)``.
    ordering : gtsam.Ordering, optional
        Default: nested dissection (METIS).

    Raises
    ------
    SingularSystemError
        The system is singular; carries the key at which that showed.

    Notes
    -----
    GTSAM's Cholesky refuses a clique whose last two pivots differ by more than 2^12, which
    determined systems do too (precise translation, poor heading, a long way from anything known).
    So its refusal only decides that QR is tried; whether that leaves a pivot is the judgement.
    """
    order = metis_ordering(graph) if ordering is None else ordering
    try:
        return graph.eliminateMultifrontal(order)
    except RuntimeError:
        pass
    try:
        bayes_tree = graph.eliminateMultifrontal(order, gtsam.EliminateQR)
    except RuntimeError as failure:
        raise SingularSystemError(_key_in(str(failure))) from failure
    clique_tree(bayes_tree, _dimensions(graph))
    return bayes_tree


def clique_tree(bayes_tree: Any, dims: ArrayLike) -> CliqueTree:
    """Pack a Bayes tree into flat arrays, parents before children.

    Parameters
    ----------
    bayes_tree : gtsam.GaussianBayesTree
        Its keys are the integers 0 .. n-1; keys that it does not hold stay without covariance.
    dims : (n,) int
        Tangent dimension of every key.

    Raises
    ------
    SingularSystemError
        A pivot is numerically zero although the elimination went through (a free gauge can
        survive the rounding); carries the key.
    """
    blocks: list[Any] = []
    keys: list[list[int]] = []
    parents: list[int] = []
    stack = [(root, -1) for root in bayes_tree.roots()]
    while stack:
        clique, parent = stack.pop()
        number = len(parents)
        conditional = clique.conditional()
        parents.append(parent)
        blocks.append(conditional.getA())  # a view: the tree owns the memory until the copy below
        keys.append(conditional.keys())
        stack.extend((clique[child], number) for child in range(clique.nrChildren()))
    rows = np.fromiter((block.shape[0] for block in blocks), np.int64, len(blocks))
    sizes = np.fromiter(map(len, keys), np.int64, len(keys))
    flat_keys = np.fromiter(itertools.chain.from_iterable(keys), np.int64, int(sizes.sum()))
    values = (
        np.concatenate([block.ravel(order="F") for block in blocks])
        if blocks
        else np.zeros(0, np.float64)
    )
    tree = CliqueTree.from_columns(
        dims, np.array(parents, np.int64), sizes, flat_keys, rows, values
    )
    key, pivot = tree.weakest_pivot()
    if not pivot > SINGULAR_PIVOT:
        raise SingularSystemError(key)
    return tree


def loose_keys(
    graph: Any, dims: ArrayLike, count: int = 5, seed: int = 0, least: float = 0.01
) -> Ints:
    """Find the variables that the measurements leave undetermined, the loosest first.

    Parameters
    ----------
    graph : gtsam.GaussianFactorGraph
        A graph whose elimination fails.
    dims : (n,) int
        Tangent dimension of every key 0 .. n-1.
    count : int
        Number of keys to return at most.
    least : float
        Smallest squared movement of a key that is returned, as a share of the largest.

    Returns
    -------
    (k,) int
        Keys by descending share in the null space of the information matrix.

    Notes
    -----
    Inverse iteration with a block of vectors on the information matrix plus a tiny multiple of
    its diagonal: what grows is the null space, whichever pivot the elimination happened to
    stumble over.
    """
    sizes = np.asarray(dims, np.int64)
    damped = _damped(graph.clone(), sizes)
    # QR, because GTSAM's Cholesky refuses pivots that differ by more than 2^12.
    # COLAMD, because METIS fails on variables without a neighbour.
    ordering = gtsam.Ordering.ColamdGaussianFactorGraph(damped)
    bayes_tree = damped.eliminateMultifrontal(ordering, gtsam.EliminateQR)
    tree = clique_tree(bayes_tree, sizes)
    factor = SquareRootFactor(tree)
    vectors = np.random.default_rng(seed).standard_normal((int(sizes.sum()), 4))
    for _ in range(4):
        vectors = factor.solve(np.linalg.qr(vectors)[0])
    share = np.add.reduceat(np.sum(vectors**2, axis=1), np.cumsum(sizes) - sizes)
    order = np.argsort(-share, kind="stable")[:count]
    return np.asarray(order[share[order] > least * share.max()], np.int64)


def _damped(graph: Any, dims: Ints) -> Any:
    """The graph with a weak zero prior on every key, scaled to the key's own information."""
    weight = np.sqrt(1e-10 * _information(graph, dims))
    for key, (dim, w) in enumerate(zip(dims.tolist(), weight.tolist(), strict=True)):
        noise = gtsam.noiseModel.Unit.Create(dim)
        graph.add(gtsam.JacobianFactor(key, np.eye(dim) * w, np.zeros(dim), noise))
    return graph


def _information(graph: Any, dims: Ints) -> NDArray[np.float64]:
    """Mean diagonal information of every key, the graph's mean where it has none."""
    total = np.zeros(len(dims))
    for index in range(graph.size()):
        factor = graph.at(index)
        if factor is None:
            continue
        diagonal = np.diag(factor.information())
        keys = np.array(factor.keys(), np.int64)
        ends = np.cumsum(dims[keys])
        np.add.at(total, keys, np.add.reduceat(diagonal, ends - dims[keys]))
    mean = total / dims
    return np.where(mean > 0.0, mean, mean[mean > 0.0].mean() if np.any(mean > 0.0) else 1.0)


def _dimensions(graph: Any) -> Ints:
    """Dimension of every key 0 .. largest, 0 for keys without a factor."""
    gradient = graph.gradientAtZero()
    keys = np.array(list(graph.keyVector()), np.int64)
    dims = np.zeros(int(keys.max(initial=-1)) + 1, np.int64)
    dims[keys] = [len(gradient.at(key)) for key in keys.tolist()]
    return dims


def _key_in(message: str) -> int:
    """The key that GTSAM's message names in its text, -1 if there is none."""
    found = re.search(r"variable\s+(\d+)", message) or re.search(r"\b(\d+)\b", message)
    return int(found.group(1)) if found else -1

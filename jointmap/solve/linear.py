"""Whitened linear rows -> GTSAM's linear engine, and the step it gives back.

GTSAM orders and eliminates; the rows are ours, so that any measurement model, mounting, lag or
weight is possible without a call back into Python (which GTSAM pays for with a copy of all values).
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Protocol

import gtsam
import numpy as np
from numpy.typing import NDArray

from jointmap.errors import IndeterminateError
from jointmap.solve.layout import Layout

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: GTSAM's elimination ordering, for rooms that only pass it on.
Ordering = gtsam.Ordering
#: An eliminated system, likewise.
BayesTree = gtsam.GaussianBayesTree
_UNIT = {m: gtsam.noiseModel.Unit.Create(m) for m in range(1, 13)}


@dataclass
class Rows:
    """Whitened rows ``A_1 d_1 + A_2 d_2 + … = rhs`` of n equal-shaped measurements.

    ``keys`` is a list of (n,) arrays, ``jacobians`` of (n, m, d) arrays, ``rhs`` (n, m).
    """

    keys: list[Ints]
    jacobians: list[Floats]
    rhs: Floats


class HasLayout(Protocol):
    """A system with numbered variables."""

    @property
    def layout(self) -> Layout:
        """Numbering of its variables."""

    @property
    def component(self) -> Ints:
        """Connected component (n,) of each variable but the calibration vectors."""


@dataclass
class LinearGraph:
    """A GTSAM graph that is filled from arrays."""

    graph: gtsam.GaussianFactorGraph = field(default_factory=gtsam.GaussianFactorGraph)

    def push(self, rows: Rows) -> None:
        """Add rows with one to four variables each."""
        make, add, unit = gtsam.JacobianFactor, self.graph.push_back, _UNIT[rows.rhs.shape[1]]
        columns: list[Iterable[object]] = []
        for key, jacobian in zip(rows.keys, rows.jacobians, strict=True):
            columns += [key.tolist(), list(np.ascontiguousarray(jacobian))]
        rhs = list(np.ascontiguousarray(rows.rhs))
        if len(rows.keys) == 1:
            for k1, a1, b in zip(*columns, rhs, strict=True):
                add(make(k1, a1, b, unit))
        elif len(rows.keys) == 2:
            for k1, a1, k2, a2, b in zip(*columns, rhs, strict=True):
                add(make(k1, a1, k2, a2, b, unit))
        elif len(rows.keys) == 4:
            # JacobianFactor takes three variables from Python; a conditional is one that takes any.
            whole = gtsam.GaussianConditional
            for k1, a1, k2, a2, k3, a3, k4, a4, b in zip(*columns, rhs, strict=True):
                add(whole([(k1, a1), (k2, a2), (k3, a3), (k4, a4)], 1, b, unit))
        else:
            for k1, a1, k2, a2, k3, a3, b in zip(*columns, rhs, strict=True):
                add(make(k1, a1, k2, a2, k3, a3, b, unit))

    def damp(self, dims: Ints, strength: Floats) -> None:
        """Add a diagonal: ``strength`` (N,) is the square root of what joins the information."""
        start = 0
        make, add = gtsam.JacobianFactor, self.graph.push_back
        for key, d in enumerate(dims.tolist()):
            add(make(key, np.diag(strength[start : start + d]), np.zeros(d), _UNIT[d]))
            start += d


def system_order(system: HasLayout, graph: LinearGraph) -> gtsam.Ordering:
    """Ordering for a system: its calibration vectors last."""
    keys = system.layout.calibration_key
    alone = np.flatnonzero(np.bincount(system.component)[system.component] == 1)
    if len(alone):
        # METIS reads beyond its arrays where a variable has no neighbour.
        graph = _with_neighbours(graph, system.layout.dims, alone)
    return order(graph, np.concatenate([keys[keys >= 0], system.layout.sensor_key]))


def _with_neighbours(graph: LinearGraph, dims: Ints, alone: Ints) -> LinearGraph:
    """A copy of a graph, to order by, where lonely variables have empty rows with another one."""
    out = LinearGraph(gtsam.GaussianFactorGraph())
    out.graph.push_back(graph.graph)
    for key in alone.tolist():
        other = key - 1 if key else min(1, len(dims) - 1)
        if other != key:
            a, b = (np.zeros((1, int(dims[k]))) for k in (key, other))
            out.graph.push_back(gtsam.JacobianFactor(key, a, other, b, np.zeros(1), _UNIT[1]))
    return out


def order(graph: LinearGraph, last: Ints) -> gtsam.Ordering:
    """Fill-reducing ordering: nested dissection (METIS), COLAMD where the graph is small.

    ``last`` keys (calibration vectors, which touch almost everything) are put at the end.
    """
    if graph.graph.keys().size() < 64 or len(last):
        return gtsam.Ordering.ColamdConstrainedLastGaussianFactorGraph(
            graph.graph, gtsam.KeyVector(last.tolist())
        )
    return gtsam.Ordering.MetisGaussianFactorGraph(graph.graph)


def eliminate(graph: LinearGraph, ordering: gtsam.Ordering) -> gtsam.GaussianBayesTree:
    """Multifrontal Cholesky, QR where Cholesky gives up.

    Raises
    ------
    IndeterminateError
        The system is singular.
    """
    try:
        return graph.graph.eliminateMultifrontal(ordering)
    except RuntimeError:
        # GTSAM's Cholesky also refuses determined systems whose last two pivots of a clique
        # differ by more than 2^12; QR has the last word.
        pass
    try:
        return graph.graph.eliminateMultifrontal(ordering, gtsam.EliminateQR)
    except RuntimeError as error:
        # GTSAM names a key near the defect; `jointmap.trust.loose` finds the variable itself.
        raise IndeterminateError("the measurements leave a variable undetermined") from error


def step(tree: gtsam.GaussianBayesTree) -> Floats:
    """The solution (N,) in key order."""
    return np.asarray(tree.optimize().vector(), dtype=np.float64)

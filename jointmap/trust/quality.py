"""How well each measurement is checked by the others: redundancy and test statistics.

With whitened rows ``w = W v`` and ``J = W A`` the residuals of one measurement have covariance
``R = I - J Sigma J^T`` (Baarda 1968; Foerstner 1979); its trace is the redundancy number and sums
to the degrees of freedom over all measurements. ``T = w^T R^+ w`` is chi-square with rank(R)
degrees of freedom when the measurement is right, whatever the others weigh.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import State
from jointmap.solve.gauge import Gauge
from jointmap.solve.linear import Ordering, eliminate, system_order
from jointmap.solve.system import System, linearise_system, link_rows, part_rows
from jointmap.trust.elimination import clique_tree
from jointmap.trust.marginals import SelectedInverse, selected_inverse_of
from jointmap.trust.redundancy import UNCHECKED, redundancy_matrices
from jointmap.trust.solve_pairs import SquareRootFactor

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class PartQuality:
    """Per measurement of a part: whitened residual (n, m), redundancy matrix (n, m, m)."""

    whitened: Floats
    redundancy: Floats

    @property
    def numbers(self) -> Floats:
        """Redundancy number (n, m) of every row."""
        return np.asarray(np.clip(np.einsum("nii->ni", self.redundancy), 0.0, 1.0))

    def statistic(self) -> tuple[Floats, Floats]:
        """Test statistic T (n,) and its degrees of freedom (n,), 0 where nothing checks."""
        values, vectors = np.linalg.eigh(self.redundancy)
        checked = values > UNCHECKED
        along = np.einsum("nji,nj->ni", vectors, self.whitened)
        t = np.where(checked, along**2 / np.where(checked, values, 1.0), 0.0).sum(axis=1)
        return t, checked.sum(axis=1).astype(np.float64)


@dataclass(frozen=True)
class Quality:
    """Covariances at the inlier set and the quality of every used measurement and link."""

    gauge: Gauge
    inverse: SelectedInverse
    factor: SquareRootFactor
    parts: tuple[PartQuality, ...]
    links: PartQuality | None


def assess(system: System, state: State, ordering: Ordering | None = None) -> Quality:
    """Covariances and redundancies of a system at a state, at full weight of its rows.

    The kernels of the system must be None: a kernel's curvature is not a covariance.
    """
    lin = linearise_system(system, state)
    ordering = system_order(system, lin.graph) if ordering is None else ordering
    tree = clique_tree(eliminate(lin.graph, ordering), system.layout.dims)
    inverse = selected_inverse_of(tree)
    parts = []
    for part in system.parts:
        rows, residual = part_rows(system, part, state)
        parts.append(PartQuality(residual, redundancy_matrices(rows.keys, rows.jacobians, inverse)))
    links = _link_quality(system, state, inverse) if len(system.links.track) else None
    return Quality(lin.gauge, inverse, SquareRootFactor(tree), tuple(parts), links)


def _link_quality(system: System, state: State, inverse: SelectedInverse) -> PartQuality:
    """Quality of the links; those tied by position have rows of zeros in place of rotation."""
    groups = link_rows(system, state)
    n, m = len(system.links.track), max(rows.rhs.shape[1] for _, rows in groups)
    whitened, redundancy = np.zeros((n, m)), np.zeros((n, m, m))
    for index, rows in groups:
        size = rows.rhs.shape[1]
        whitened[index, :size] = -rows.rhs
        redundancy[index, :size, :size] = redundancy_matrices(rows.keys, rows.jacobians, inverse)
    return PartQuality(whitened, redundancy)

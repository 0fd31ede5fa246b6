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
from jointmap.solve.linear import Rows, eliminate
from jointmap.solve.system import System, linearise_system, link_rows, part_rows
from jointmap.trust.elimination import clique_tree
from jointmap.trust.marginals import SelectedInverse, selected_inverse_of
from jointmap.trust.solve_pairs import SquareRootFactor

Floats = NDArray[np.float64]

#: Eigenvalues of R below this are directions that nothing else checks (CHECKS 2d: unchecked).
UNCHECKED = 0.01
#: Rows handled at a time, to bound the memory of the joint blocks.
_CHUNK = 50_000


@dataclass(frozen=True)
class PartQuality:
    """Per measurement of a part: whitened residual (n, m), redundancy matrix (n, m, m)."""

    whitened: Floats
    redundancy: Floats

    @property
    def numbers(self) -> Floats:
        """Redundancy number (n, m) of every row."""
        return np.clip(np.einsum("nii->ni", self.redundancy), 0.0, 1.0)

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

    inverse: SelectedInverse
    factor: SquareRootFactor
    parts: tuple[PartQuality, ...]
    links: PartQuality | None


def assess(system: System, state: State, ordering: object) -> Quality:
    """Covariances and redundancies of a system at a state, at full weight of its rows.

    The kernels of the system must be None: a kernel's curvature is not a covariance.
    """
    lin = linearise_system(system, state)
    tree = clique_tree(eliminate(lin.graph, ordering), system.layout.dims)
    inverse = selected_inverse_of(tree)
    parts = []
    for part in system.parts:
        rows, residual = part_rows(system, part, state)
        parts.append(PartQuality(residual, _redundancy(rows, inverse)))
    links = None
    tied = link_rows(system, state)
    if tied:
        # Point links and pose links come as two groups; put them back in the order of the tracks.
        oriented = system.oriented[system.links.shared]
        order = np.concatenate([np.flatnonzero(~oriented), np.flatnonzero(oriented)])
        back = np.argsort(order)
        links = PartQuality(
            np.concatenate([-r.rhs for r in tied])[back],
            np.concatenate([_redundancy(r, inverse) for r in tied])[back],
        )
    return Quality(inverse, SquareRootFactor(tree), tuple(parts), links)


def _redundancy(rows: Rows, inverse: SelectedInverse) -> Floats:
    n, m = rows.rhs.shape
    out = np.empty((n, m, m))
    eye = np.eye(m)
    for lo in range(0, n, _CHUNK):
        hi = min(lo + _CHUNK, n)
        out[lo:hi] = eye - predicted_covariance(
            [k[lo:hi] for k in rows.keys], [j[lo:hi] for j in rows.jacobians], inverse
        )
    return out


def predicted_covariance(
    keys: list[NDArray[np.int64]], jacobians: list[Floats], inverse: SelectedInverse
) -> Floats:
    """``J Sigma J^T`` (n, m, m) of rows whose variables share a clique."""
    n, m = jacobians[0].shape[:2]
    total = np.zeros((n, m, m))
    for i, (ki, ji) in enumerate(zip(keys, jacobians, strict=True)):
        total += ji @ inverse.diagonal(ki) @ np.swapaxes(ji, 1, 2)
        for kj, jj in zip(keys[i + 1 :], jacobians[i + 1 :], strict=True):
            cross = ji @ inverse.pairs(ki, kj) @ np.swapaxes(jj, 1, 2)
            total += cross + np.swapaxes(cross, 1, 2)
    return total

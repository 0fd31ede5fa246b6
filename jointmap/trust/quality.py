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

from jointmap.graph.noise import whitening
from jointmap.graph.problem import State
from jointmap.solve.gauge import Gauge
from jointmap.solve.linear import BayesTree, Ordering, Rows, eliminate, system_order
from jointmap.solve.system import (
    LinearisedSystem,
    Part,
    System,
    extra_rows,
    linearise,
    linearise_system,
    link_rows,
    part_rows,
    row_columns,
    sensor_constant,
)
from jointmap.trust.elimination import clique_tree
from jointmap.trust.marginals import SelectedInverse, selected_inverse_of
from jointmap.trust.redundancy import UNCHECKED, redundancy_matrices
from jointmap.trust.solve_pairs import SquareRootFactor

Floats = NDArray[np.float64]


#: Redundancy of a link below which nothing tests it: what it ties would be metres apart unnoticed.
LEAST_LINK = 1e-9


@dataclass(frozen=True)
class PartQuality:
    """Per measurement of a part: whitened residual (n, m), redundancy matrix (n, m, m).

    A direction whose redundancy is below ``least`` is not tested.
    """

    whitened: Floats
    redundancy: Floats
    least: float = UNCHECKED

    @property
    def numbers(self) -> Floats:
        """Redundancy number (n, m) of every row."""
        return np.asarray(np.clip(np.einsum("nii->ni", self.redundancy), 0.0, 1.0))

    def statistic(self) -> tuple[Floats, Floats]:
        """Test statistic T (n,) and its degrees of freedom (n,), 0 where nothing checks."""
        values, vectors = np.linalg.eigh(self.redundancy)
        checked = values > self.least
        along = np.einsum("nji,nj->ni", vectors, self.whitened)
        t = np.where(checked, along**2 / np.where(checked, values, 1.0), 0.0).sum(axis=1)
        return t, checked.sum(axis=1).astype(np.float64)


@dataclass(frozen=True)
class Quality:
    """Covariances at the inlier set and the quality of every used measurement and link.

    ``parts`` judge the whole error of a row. Where that is a white part and one that rows share,
    ``white`` judges the white part alone (None elsewhere). ``chi2`` and ``rows`` are the sum and the
    number of the whitened residuals of everything that entered: rows, links, priors and chains.
    """

    gauge: Gauge
    inverse: SelectedInverse
    factor: SquareRootFactor
    parts: tuple[PartQuality, ...]
    links: PartQuality | None
    white: tuple[PartQuality | None, ...] = ()
    chi2: float = 0.0
    rows: int = 0


def assess(
    system: System,
    state: State,
    ordering: Ordering | None = None,
    last: tuple[LinearisedSystem, BayesTree] | None = None,
) -> Quality:
    """Covariances and redundancies of a system at a state, at full weight of its rows.

    The kernels of the system must be None: a kernel's curvature is not a covariance. ``last`` is
    the linearisation at this very state and its elimination, if a solve has just made them.
    """
    if last is None:
        lin = linearise_system(system, state)
        ordering = system_order(system, lin.graph) if ordering is None else ordering
        last = lin, eliminate(lin.graph, ordering)
    lin = last[0]
    tree = clique_tree(last[1], system.layout.dims)
    inverse, factor = selected_inverse_of(tree), SquareRootFactor(tree)
    parts, white, count = [], [], 0
    for part in system.parts:
        rows, residual = part_rows(system, part, state)
        mine = PartQuality(residual, redundancy_matrices(rows.keys, rows.jacobians, inverse))
        count += residual.size
        white.append(None if part.chain is None else mine)
        parts.append(mine if part.chain is None else _whole(system, part, state, rows, inverse))
    links = None
    if len(system.links.track):
        links = _link_quality(system, state, inverse)
        count += sum(r.rhs.size for _, r in link_rows(system, state, jacobians=False))
    count += sum(r.rhs.size for r in extra_rows(system, state))
    count += 3 * len(system.sensitivity) + int(lin.gauge.free.sum())
    return Quality(
        lin.gauge,
        inverse,
        factor,
        tuple(parts),
        links,
        tuple(white),
        2.0 * lin.cost,
        count,
    )


def _whole(
    system: System, part: Part, state: State, rows: Rows, inverse: SelectedInverse
) -> PartQuality:
    """Quality of the whole error of rows that share a part of it.

    Generalised least squares leaves ``Cov(v) = S - A Sigma A^T`` also where S is correlated between
    rows; its diagonal blocks need no more than each row's own variance.
    """
    chain = part.chain
    assert chain is not None
    back = np.linalg.inv(part.whiten)
    covariance = back @ np.swapaxes(back, 1, 2)
    index = np.arange(covariance.shape[1])
    covariance[:, index, index] += chain.sigma[chain.state] ** 2
    w = whitening(np.asarray(covariance, dtype=np.float64))
    residual = linearise(system, part, state, jacobians=False, total=True).residual
    residual = residual + row_columns(part, residual) @ sensor_constant(system, part, state)
    turn = w @ back
    geometry = [turn @ j for j in rows.jacobians[:2]]
    return PartQuality(
        np.einsum("nij,nj->ni", w, residual),
        redundancy_matrices(rows.keys[:2], geometry, inverse),
    )


def _link_quality(system: System, state: State, inverse: SelectedInverse) -> PartQuality:
    """Quality of the links; those tied by position have rows of zeros in place of rotation.

    A link is far tighter than what it ties is known, so its redundancy is tiny, and yet exact.
    """
    groups = link_rows(system, state)
    n, m = len(system.links.track), max(rows.rhs.shape[1] for _, rows in groups)
    whitened, redundancy = np.zeros((n, m)), np.zeros((n, m, m))
    for index, rows in groups:
        size = rows.rhs.shape[1]
        whitened[index, :size] = -rows.rhs
        (first, second), (jac_i, jac_j) = rows.keys, rows.jacobians
        predicted = inverse.row_covariance(first, second, jac_i, jac_j)
        redundancy[index, :size, :size] = np.eye(size) - predicted
    return PartQuality(whitened, redundancy, LEAST_LINK)

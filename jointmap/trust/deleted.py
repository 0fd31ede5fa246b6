"""Test of rows that a solve did not use, or used at a lower weight, as if they had been left out.

The residual of a row that did not enter has the covariance ``S + J Sigma J^T``: its own noise and
that of the prediction. Against its own noise alone it would be called wrong wherever the rest of
the measurements predict it badly, and could never come back. A row that entered at weight ``a``
pulled the solution by itself; with ``u`` and ``H = J Sigma J^T`` whitened at full weight, its
residual without that pull is ``(I - a H)^-1 u`` and

    T = u^T (I - a H)^-1 (I + (1 - a) H)^-1 u

is chi-square while the row is right: for ``a = 1`` the usual test by its redundancy, for ``a = 0``
the test of an innovation.

References
----------
Baarda, "A testing procedure for use in geodetic networks", Netherlands Geodetic Commission 2 (5)
(1968); Cook & Weisberg, "Residuals and Influence in Regression", Chapman & Hall (1982), section
2.2 (residuals of deleted cases).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.noise import whitening
from jointmap.graph.problem import State
from jointmap.solve.system import Part, System, linearise, part_rows
from jointmap.trust.quality import Quality
from jointmap.trust.redundancy import UNCHECKED

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


def deleted_statistic(whitened: Floats, hat: Floats, weight: Floats) -> tuple[Floats, Floats]:
    """Statistic T (n,) of rows as if they had been left out, and its degrees of freedom (n,).

    Parameters
    ----------
    whitened : (n, m)
        Residuals in units of the rows' own noise, at full weight.
    hat : (n, m, m)
        ``J Sigma J^T`` in the same units, from the solve in which the rows had ``weight``.
    weight : (n,)
        Between 0 (left out) and 1.

    Notes
    -----
    Directions in which the others predict the row ten times worse than it measures itself
    (redundancy below ``UNCHECKED`` when it enters) test nothing and are left out.
    """
    values, vectors = np.linalg.eigh(hat)
    along = np.einsum("nji,nj->ni", vectors, whitened)
    a = weight[:, None]
    pulled = np.clip(1.0 - a * values, 0.0, None)
    spread = 1.0 + (1.0 - a) * np.maximum(values, 0.0)
    checked: Bools = np.asarray(pulled / spread > UNCHECKED)
    share = np.where(checked, pulled * spread, 1.0)
    statistic = np.where(checked, along**2 / share, 0.0).sum(axis=1)
    return statistic, checked.sum(axis=1).astype(np.float64)


def fair_statistic(
    solved: System,
    quality: Quality,
    outside: System,
    part: Part,
    state: State,
    index: Ints,
    covariance: Floats,
    weight: Floats,
) -> tuple[Floats, Floats]:
    """:func:`deleted_statistic` of some rows of a part; not a number where the solve knows nothing.

    Parameters
    ----------
    solved, quality : the system that was solved and what is known of it
    outside, part : a system that holds the rows and one of its parts
    index : (k,) rows of the part
    covariance : (k, m, m)
        Noise of each row by itself.
    weight : (k,)
        With which the rows entered ``solved``.
    """
    spread, known = predicted_spread(solved, quality, outside, part, state, index)
    residual = linearise(outside, part, state, jacobians=False, total=True).residual[index]
    white = whitening(covariance)
    hat = white @ spread @ np.swapaxes(white, 1, 2)
    statistic, dof = deleted_statistic(np.einsum("nij,nj->ni", white, residual), hat, weight)
    return np.where(known, statistic, np.nan), dof


def predicted_spread(
    solved: System, quality: Quality, outside: System, part: Part, state: State, index: Ints
) -> tuple[Floats, Bools]:
    """Covariance (k, m, m) of what a solve predicts for some rows of a part, in the rows' units.

    Parameters
    ----------
    solved, quality : the system that was solved and what is known of it
    outside, part : a system of other rows and one of its parts
    index : (k,) rows of the part

    Returns
    -------
    covariance : (k, m, m)
        Of the residuals; zero where unknown.
    known : (k,)
        Whether the solve determines both ends of the row, in one component.
    """
    rows, _ = part_rows(outside, part, state)
    jacobians = [np.linalg.solve(part.whiten[index], j[index]) for j in rows.jacobians[:2]]
    keys = [_translated(solved, outside, key[index]) for key in rows.keys[:2]]
    m = part.whiten.shape[1]
    out, known = np.zeros((len(index), m, m)), np.ones(len(index), dtype=bool)
    for key, jacobian in zip(keys, jacobians, strict=True):
        known &= (key >= 0) & (solved.layout.dims[np.maximum(key, 0)] == jacobian.shape[2])
    known &= solved.component[keys[0]] == solved.component[keys[-1]]
    at = np.flatnonzero(known)
    if len(at):
        ends = [k[at] for k in keys]
        joint = quality.factor.joint(ends[0], ends[-1])
        whole = np.concatenate([j[at] for j in jacobians], axis=2)
        size = whole.shape[2]
        out[at] = whole @ joint[:, :size, :size] @ np.swapaxes(whole, 1, 2)
    return out, known


def _translated(solved: System, outside: System, key: Ints) -> Ints:
    """Keys of one system in the numbering of another, -1 where it has no such variable."""
    poses = solved.layout.n_keyframes
    out = key.copy()
    landmark = np.flatnonzero(key >= poses)
    name = outside.layout.landmark_of_key[key[landmark] - poses]
    out[landmark] = solved.layout.key_of_landmark[name]
    return out

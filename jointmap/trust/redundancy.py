"""How well each measurement is checked by the others, and how large an error could hide in it.

With whitened residuals ``v`` and whitened Jacobian ``J`` of one measurement the residual's
covariance is its redundancy matrix

    R = I - J Sigma J'.

Its trace is the redundancy number; the sum over all measurements is the degrees of freedom.
``T = v' R^+ v`` is chi-square with rank(R) degrees of freedom while the measurement is right.
An error of one observed component, unit vector e, enters the whitened residual along ``c = W e``;
the smallest one that a test finds with the agreed power is ``delta0 / sqrt(c' R c)`` (minimal
detectable bias), and what it does to the unknowns unnoticed is external reliability.

References
----------
Baarda, "A testing procedure for use in geodetic networks", Netherlands Geodetic Commission 2 (5)
(1968). Foerstner, "Reliability analysis of parameter estimation in linear models", CVGIP 40
(1987). Teunissen, "Testing Theory", Delft (2000).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.stats import chi2, ncx2, norm, t

from jointmap.trust.marginals import SelectedInverse

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Redundancy below which nothing else checks a measurement, and below which little does.
UNCHECKED, WEAK = 0.01, 0.1
#: Chance of a false alarm and power of the single test (Baarda 1968).
ALPHA, POWER = 0.001, 0.80
#: Measurements handled at a time, to bound the memory of the joint blocks.
_CHUNK = 65536


def predicted_covariance(
    keys: Sequence[Ints], jacobians: Sequence[Floats], inverse: SelectedInverse
) -> Floats:
    """``J Sigma J'`` (n, m, m) of measurements that tie the variables of ``keys``.

    Parameters
    ----------
    keys : sequence of (n,) int
        One array per end of the measurement (one, two or more).
    jacobians : sequence of (n, m, d)
        Whitened, one per end.
    """
    n, m = jacobians[0].shape[:2]
    out = np.zeros((n, m, m))
    for lo in range(0, n, _CHUNK):
        rows = slice(lo, lo + _CHUNK)
        for a, (key_a, jac_a) in enumerate(zip(keys, jacobians, strict=True)):
            at = jac_a[rows]
            out[rows] += at @ inverse.diagonal(key_a[rows]) @ at.swapaxes(1, 2)
            for key_b, jac_b in zip(keys[a + 1 :], jacobians[a + 1 :], strict=True):
                cross = at @ inverse.pairs(key_a[rows], key_b[rows]) @ jac_b[rows].swapaxes(1, 2)
                out[rows] += cross + cross.swapaxes(1, 2)
    return out


def redundancy_matrices(
    keys: Sequence[Ints], jacobians: Sequence[Floats], inverse: SelectedInverse
) -> Floats:
    """Redundancy matrix R (n, m, m) of every measurement (parameters as above)."""
    m = jacobians[0].shape[1]
    return np.asarray(np.eye(m) - predicted_covariance(keys, jacobians, inverse))


def redundancy_numbers(matrices: Floats) -> Floats:
    """Redundancy number (n,) of every measurement: the trace, between 0 and m."""
    return np.asarray(np.trace(matrices, axis1=1, axis2=2))


def group_sums(group: Ints, values: Floats, n_groups: int) -> Floats:
    """Sum of values (n,) by group (n,) -> (n_groups,)."""
    return np.bincount(group, weights=values, minlength=n_groups).astype(np.float64)


@dataclass(frozen=True)
class VectorTest:
    """Test of whole measurements.

    ``statistic`` (n,) T; ``dof`` (n,) number of checked directions, 0 where nothing checks (then
    T is 0 and ``p_value`` (n,) is 1).
    """

    statistic: Floats
    dof: Ints
    p_value: Floats


def vector_test(residual: Floats, matrices: Floats, unchecked: float = UNCHECKED) -> VectorTest:
    """``T = v' R^+ v`` with directions of redundancy below ``unchecked`` left out.

    Parameters
    ----------
    residual : (n, m)
        Whitened.
    matrices : (n, m, m)
        From :func:`redundancy_matrices`.
    """
    values, vectors = np.linalg.eigh(matrices)
    along = np.einsum("nji,nj->ni", vectors, residual)
    checked = values > unchecked
    statistic = np.where(checked, along**2 / np.where(checked, values, 1.0), 0.0).sum(axis=1)
    dof = checked.sum(axis=1)
    return VectorTest(
        statistic, dof, np.where(dof > 0, chi2.sf(statistic, np.maximum(dof, 1)), 1.0)
    )


@dataclass(frozen=True)
class ComponentTest:
    """Test of single observed components, all (n, m).

    ``redundancy`` r = share of an error that shows in the component's own residual; ``w``
    standard normal while the component is right; ``mdb`` smallest detectable error in the
    component's own unit; ``external`` its effect on the unknowns in their own sigmas. ``w`` is
    NaN and the latter two are infinite where nothing checks (r below 0.01).
    """

    redundancy: Floats
    w: Floats
    mdb: Floats
    external: Floats


def component_test(
    residual: Floats,
    matrices: Floats,
    whiten: Floats | None = None,
    alpha: float = ALPHA,
    power: float = POWER,
) -> ComponentTest:
    """Baarda's test of every observed component and what it can find.

    Parameters
    ----------
    residual : (n, m)
        Whitened.
    matrices : (n, m, m)
        Redundancy matrices.
    whiten : (n, m, m), optional
        W with ``W' W`` the inverse covariance of the observed components; its columns say how an
        error of one component enters the whitened residual. Default: unit sigmas.
    alpha, power
        Of the single two-sided test.

    Notes
    -----
    For uncorrelated components ``c = e / sigma``: w = v / sqrt(r), MDB = delta0 sigma / sqrt(r),
    external = delta0 sqrt((1 - r) / r).
    """
    m = residual.shape[1]
    entry = np.broadcast_to(np.eye(m), matrices.shape) if whiten is None else whiten
    seen = np.einsum("nij,nik,nkj->nj", entry, matrices, entry)  # c' R c
    full = np.einsum("nij,nij->nj", entry, entry)  # c' c
    r = seen / full
    checked = r >= UNCHECKED
    root = np.sqrt(np.where(checked, seen, 1.0))
    size = delta0(alpha, power)
    w = np.where(checked, np.einsum("nij,ni->nj", entry, residual) / root, np.nan)
    hidden = np.sqrt(np.clip(1.0 - r, 0.0, None) / np.where(checked, r, 1.0))
    return ComponentTest(
        r, w, np.where(checked, size / root, np.inf), np.where(checked, size * hidden, np.inf)
    )


def external_effect(
    keys: Sequence[Ints], jacobians: Sequence[Floats], inverse: SelectedInverse, shift: Floats
) -> list[Floats]:
    """What a shift of the whitened observation does to the measurement's own variables.

    Parameters
    ----------
    shift : (n, m)
        Whitened error, for example ``W e`` times the minimal detectable bias of a component.

    Returns
    -------
    list of (n, d)
        ``dx = Sigma J' shift``, one per end, in the variable's own tangent. Depends on the datum.
    """
    pulls = [np.einsum("nmd,nm->nd", jac, shift) for jac in jacobians]
    out = []
    for key_a in keys:
        total = 0.0
        for key_b, pull in zip(keys, pulls, strict=True):
            total = total + np.einsum("nde,ne->nd", inverse.pairs(key_a, key_b), pull)
        out.append(np.asarray(total))
    return out


def delta0(alpha: float = ALPHA, power: float = POWER) -> float:
    """Shift of a standard normal that a two-sided test of size alpha finds with this power.

    Baarda's approximation, which leaves out the far tail: 4.13 for 0.001 and 0.80.
    """
    return float(norm.isf(alpha / 2.0) + norm.ppf(power))


def noncentrality(dof: int, alpha: float = ALPHA, power: float = POWER) -> float:
    """Non-centrality that a chi-square test with ``dof`` finds with this power."""
    limit = chi2.isf(alpha, dof)
    return float(brentq(lambda x: ncx2.sf(limit, dof, x) - power, 1e-6, 1e4, xtol=1e-12))


def vector_mdb(
    matrices: Floats, direction: Floats, alpha: float = ALPHA, power: float = POWER
) -> Floats:
    """Smallest whitened error along unit directions (n, m) that the vector test finds (n,)."""
    seen = np.einsum("ni,nij,nj->n", direction, matrices, direction)
    checked = seen >= UNCHECKED
    size = noncentrality(matrices.shape[1], alpha, power)
    return np.where(checked, np.sqrt(size / np.where(checked, seen, 1.0)), np.inf)


def matched_alpha(dof: int, alpha: float = ALPHA, power: float = POWER) -> float:
    """Size of the test with ``dof`` that finds the same error as the single test (B-method)."""
    size = noncentrality(1, alpha, power)
    return float(chi2.sf(ncx2.isf(power, dof, size), dof))


def pope_tau(alpha: float, dof: int) -> float:
    """Two-sided critical value of a residual studentised by its own network (Pope 1976)."""
    q = float(t.isf(alpha / 2.0, dof - 1))
    return float(np.sqrt(dof) * q / np.sqrt(dof - 1 + q**2))


def critical_w(count: int, alpha: float = 0.05) -> float:
    """Two-sided critical value of the largest of ``count`` single tests (Bonferroni)."""
    return float(norm.isf(alpha / (2.0 * count)))

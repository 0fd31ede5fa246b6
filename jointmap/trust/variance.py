"""Variance factors of groups of measurements from their own redundancy.

    s2_k = sum v' P v / sum r,   over the measurements of group k,

unbiased at the true sigmas; scaling the sigmas by s_k and repeating converges to the restricted
maximum likelihood estimate (Foerstner 1979, equal to Helmert's). Where gross errors were cut by a
gate of probability p, good measurements lost their tails too: the second moment of a gated
Gaussian vector of d components is ``F_{d+2}(g) / p`` of the whole one, g the p-quantile of
chi-square with d degrees of freedom, and is divided out.

References
----------
Foerstner, "Ein Verfahren zur Schaetzung von Varianz- und Kovarianzkomponenten", Allgemeine
Vermessungs-Nachrichten 86 (1979). Koch, "Parameter Estimation and Hypothesis Testing in Linear
Models", section 3.6 (1999).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import chi2

from jointmap.trust.redundancy import group_sums

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Below this redundancy the 95 % band of s2 reaches from a third to the double: refused.
LEAST_REDUNDANCY = 10.0


@dataclass(frozen=True)
class VarianceFactor:
    """Variance factor of one group.

    ``s2`` NaN where refused; ``sigma_ratio`` its root, by which the group's sigmas are to be
    multiplied, with standard deviation ``std`` = s / sqrt(2 r); ``redundancy`` r of the rows
    used; ``determined`` is false where the redundancy is below ``LEAST_REDUNDANCY``.
    """

    s2: float
    std: float
    redundancy: float
    determined: bool

    @property
    def sigma_ratio(self) -> float:
        """Factor for the group's sigmas."""
        return float(np.sqrt(self.s2))


def truncation_factor(dof: ArrayLike, probability: float) -> Floats:
    """Second moment of a gated Gaussian vector as a share of the whole one's.

    Parameters
    ----------
    dof : (n,) int
        Number of components that the gate looked at.
    probability : float
        Share of good measurements that pass, in (0, 1].
    """
    if not 0.0 < probability <= 1.0:
        raise ValueError("the probability of a gate lies above 0 and not above 1")
    d = np.asarray(dof, np.float64)
    if probability == 1.0:
        return np.ones_like(d)
    return np.asarray(chi2.cdf(chi2.ppf(probability, d), d + 2.0) / probability)


def variance_factor(
    v2_whitened: ArrayLike,
    redundancy: ArrayLike,
    dof_per_row: ArrayLike = 1,
    gate_probability: float = 1.0,
    least_redundancy: float = LEAST_REDUNDANCY,
) -> VarianceFactor:
    """Variance factor of one group of measurements.

    Parameters
    ----------
    v2_whitened : (n,)
        Squared norm of the whitened residual of every measurement that passed the gate.
    redundancy : (n,)
        Its redundancy number.
    dof_per_row : int or (n,) int
        Degrees of freedom that the gate looked at.
    gate_probability : float
        Share of good measurements that the gate lets pass; 1 where there was none.
    least_redundancy : float
        Refuse below this.
    """
    v2 = np.asarray(v2_whitened, np.float64)
    group = np.zeros(len(v2), np.int64)
    s2, std, total = variance_factors(
        group, 1, v2, redundancy, dof_per_row, gate_probability, least_redundancy
    )
    return VarianceFactor(float(s2[0]), float(std[0]), float(total[0]), bool(np.isfinite(s2[0])))


def variance_factors(
    group: Ints,
    n_groups: int,
    v2_whitened: ArrayLike,
    redundancy: ArrayLike,
    dof_per_row: ArrayLike = 1,
    gate_probability: float = 1.0,
    least_redundancy: float = LEAST_REDUNDANCY,
) -> tuple[Floats, Floats, Floats]:
    """Variance factors of many groups at once.

    Parameters
    ----------
    group : (n,) int
        Group of every measurement, 0 .. n_groups-1.

    Returns
    -------
    s2 : (n_groups,) NaN where the redundancy is below ``least_redundancy``
    std : (n_groups,) of the factor for the sigmas, s / sqrt(2 r)
    redundancy : (n_groups,)
    """
    r = np.asarray(redundancy, np.float64)
    share = np.broadcast_to(truncation_factor(dof_per_row, gate_probability), r.shape)
    total = group_sums(group, r, n_groups)
    expected = group_sums(group, r * share, n_groups)
    seen = group_sums(group, np.asarray(v2_whitened, np.float64), n_groups)
    known = total >= least_redundancy
    s2 = np.where(known, seen / np.where(known, expected, 1.0), np.nan)
    return s2, np.sqrt(s2 / (2.0 * np.where(known, total, np.nan))), total

"""Graduated non-convexity: the schedule, and the loss of one of its rounds.

A robust loss with inlier limit ``c`` is replaced by a family that a parameter ``mu`` leads from
convex to the loss itself. With ``r2`` the squared whitened norm of a row:

======================== ================================= ===============================
loss                     truncated least squares           Geman-McClure
======================== ================================= ===============================
start                    c^2 / (2 max r2 - c^2)            2 max r2 / c^2
next                     1.4 mu                            max(1, mu / 1.4)
weight                   1 below  mu / (mu + 1) c^2,       (mu c^2 / (r2 + mu c^2))^2
                         0 above (mu + 1) / mu c^2, else
                         c sqrt(mu (mu + 1) / r2) - mu
done                     every weight is 0 or 1            mu is 1
======================== ================================= ===============================

The loop is: solve with all weights 1, start ``mu`` from the residuals; then weigh, solve, advance
until done (:mod:`jointmap.solve.graduate`). Rows known to be right (odometry) keep weight 1 and do
not set ``mu``. What the method cannot do: a row without redundancy has a small residual however
wrong it is, and a sigma that is wrong by two moves the limit by four.

**Dimension.** The limit goes with the number ``d`` of components of a row: ``c^2`` is the 99 % point
of chi-square with ``d`` degrees of freedom. A constant given by the user is ``c`` of a scalar
residual, and the limits of other rows keep their ratio to it. ``mu`` starts from the row that is
furthest out in units of its own limit.

References
----------
Yang, H., Antonante, P., Tzoumas, V., Carlone, L. (2020). Graduated non-convexity for robust spatial
perception: from non-minimal solvers to global outlier rejection. IEEE Robotics and Automation
Letters 5(2), 1127-1134.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]
Loss = Literal["truncated", "geman-mcclure"]

#: Name of the method among the kernels of the settings.
NAME = "gnc"
#: Pace of the schedule.
STEP = 1.4
#: ``mu`` of the truncated loss never starts below this (a residual 700 times its limit): the loss
#: is as good as convex there, and every factor of 1.4 below would be one more round of solving.
SMALLEST_MU = 1e-6


def inlier_limit(components: int | Ints, probability: float = 0.99) -> Floats:
    """Squared limit ``c^2`` that a Gaussian residual passes with ``probability``."""
    return np.asarray(chi2.ppf(probability, components), dtype=np.float64)


def initial_mu(
    loss: Loss, squared: Floats, limit: Floats | float, known: Bools | None = None
) -> float | None:
    """Parameter to start with, None where nothing is to be graduated.

    Parameters
    ----------
    loss : str
    squared : (n,)
        Squared whitened norms after a solve with all weights 1.
    limit : (n,) or float
        ``c^2`` of each row.
    known : (n,) bool or None
        Rows known to be right.

    Returns
    -------
    float or None
        None: no row is outside half its limit (truncated), no row at all (Geman-McClure).
    """
    ratio = np.broadcast_to(squared / np.asarray(limit), np.shape(squared))
    worst = float(np.max(ratio if known is None else ratio[~known], initial=0.0))
    if loss == "geman-mcclure":
        return max(1.0, 2.0 * worst) if worst > 0.0 else None
    return max(SMALLEST_MU, 1.0 / (2.0 * worst - 1.0)) if worst > 0.5 else None


def next_mu(loss: Loss, mu: float, step: float = STEP) -> float:
    """Parameter of the next round."""
    return max(1.0, mu / step) if loss == "geman-mcclure" else mu * step


def weights(
    loss: Loss, squared: Floats, limit: Floats | float, mu: float, known: Bools | None = None
) -> Floats:
    """Weights (n,) in [0, 1] of rows for the weighted least squares of this round."""
    ratio = np.broadcast_to(squared / np.asarray(limit), np.shape(squared))
    if loss == "geman-mcclure":
        out = (mu / (ratio + mu)) ** 2
    else:
        middle = np.sqrt(mu * (mu + 1.0) / np.maximum(ratio, 1e-300)) - mu
        out = np.where(ratio <= mu / (mu + 1.0), 1.0, middle)
        out = np.where(ratio >= (mu + 1.0) / mu, 0.0, out)
    return out if known is None else np.where(known, 1.0, out)


def finished(loss: Loss, mu: float, weight: Floats, tolerance: float = 1e-4) -> bool:
    """Whether the loss is the one wanted: ``mu`` is 1, or every row is decided."""
    if loss == "geman-mcclure":
        return mu <= 1.0
    return bool(np.all((weight <= tolerance) | (weight >= 1.0 - tolerance)))


@dataclass(frozen=True)
class Graduated:
    """Truncated least squares at one stage ``mu`` of the schedule, as a kernel.

    Parameters
    ----------
    mu : float
        Infinite: the truncated loss itself.
    constant : float or None
        Limit ``c`` of a scalar residual; None: its 99 % point.

    Notes
    -----
    The weights are those of the table; the loss whose reweighting they are (equation 9 of the
    paper, halved and shifted to start from zero) is ``x^2 / 2`` up to ``mu / (mu + 1) c^2``,
    ``c^2 / 2`` from ``(mu + 1) / mu c^2``, and between them
    ``c x sqrt(mu (mu + 1)) - mu (c^2 + x^2) / 2``.
    """

    mu: float
    constant: float | None = None

    def limit(self, d: int) -> float:
        """Squared limit ``c^2`` of rows with ``d`` components."""
        own = float(inlier_limit(d))
        return own if self.constant is None else self.constant**2 * own / float(inlier_limit(1))

    def weight(self, norm: Floats, d: int) -> Floats:
        """Weight (n,) in [0, 1] of whitened norms (n,) of residuals with ``d`` components."""
        squared = np.square(np.asarray(norm, dtype=np.float64))
        if np.isinf(self.mu):
            return np.asarray((squared <= self.limit(d)).astype(np.float64))
        return weights("truncated", squared, self.limit(d), self.mu)

    def loss(self, norm: Floats, d: int) -> Floats:
        """Loss (n,) of whitened norms (n,) of residuals with ``d`` components."""
        x = np.abs(np.asarray(norm, dtype=np.float64))
        c2, mu = self.limit(d), self.mu
        if np.isinf(mu):
            return np.asarray(0.5 * np.minimum(x * x, c2))
        middle = np.sqrt(c2 * mu * (mu + 1.0)) * x - 0.5 * mu * (c2 + x * x)
        out = np.where(x * x <= mu / (mu + 1.0) * c2, 0.5 * x * x, middle)
        return np.asarray(np.where(x * x >= (mu + 1.0) / mu * c2, 0.5 * c2, out))

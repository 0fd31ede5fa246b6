"""Robust kernels: loss and weight of the whitened residual norm, with constants by dimension.

A measurement of ``d`` whitened components with norm ``x`` costs ``rho(x)`` and enters the linear
system with weight ``w(x) = rho'(x) / x``; near zero they are ``x^2 / 2`` and 1.
With ``s = (x/c)^2``:

================= ================================== ==========================
name              rho                                w
================= ================================== ==========================
none              x^2 / 2                            1
huber             x^2 / 2, beyond c: c x - c^2 / 2   1, beyond c: c / x
cauchy            c^2 log(1 + s) / 2                 1 / (1 + s)
welsch            c^2 (1 - exp(-s)) / 2              exp(-s)
geman-mcclure     c^2 s / (1 + s) / 2                1 / (1 + s)^2
tukey             c^2 (1 - (1 - s)^3) / 6, c^2 / 6   (1 - s)^2, beyond c: 0
dcs               x^2 / 2, c^2 (3 s - 1)/(1 + s)/2   1, beyond c: 4 / (1 + s)^2
truncated         x^2 / 2, beyond c: c^2 / 2         1, beyond c: 0
================= ================================== ==========================

Notes
-----
**Constants.** A constant is tuned so that the kernel loses 5 % where there is nothing to protect
from: the asymptotic relative efficiency is 0.95 if residuals are Gaussian. For a location in ``d``
dimensions estimated with ``psi(x) = x w(x)`` acting along the residual, the asymptotic covariance
is ``d E[psi^2] / E[r psi]^2`` times that of the mean, ``r`` chi-distributed with ``d`` degrees of
freedom (Maronna 1976; the mean derivative of the score is ``E[r psi] / d`` by Stein's identity), so

    efficiency(c, d) = E[r psi(r)]^2 / (d E[psi(r)^2]).

For ``d = 1`` this is the textbook constant (1.345, 2.385, 4.685, 2.985 …). With the scalar constant
the efficiency for six components would be 0.93 (Huber, Cauchy), 0.82 (Tukey), 0.55 (truncated).

**Dimension.** A kernel acts on the norm of the whole whitened residual of a row, never component by
component. So a row of ``d`` components takes the constant of its ``d`` from ``CONSTANTS``; a
constant given by the user is that of a scalar residual, and a row of ``d`` components takes it
times ``CONSTANTS[name][d - 1] / CONSTANTS[name][0]``. Graduated non-convexity scales by chi-square
quantiles instead: see :mod:`jointmap.solve.gnc`.

References
----------
Holland, P. W., Welsch, R. E. (1977). Robust regression using iteratively reweighted least-squares.
Communications in Statistics A6, 813-827. Maronna, R. A. (1976). Robust M-estimators of multivariate
location and scatter. Annals of Statistics 4, 51-67. Agarwal, P. et al. (2013). Robust map
optimization using dynamic covariance scaling. ICRA (``dcs``; their Phi is c squared).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

import gtsam
import numpy as np
from numpy.typing import NDArray

from jointmap.errors import SettingsError

Floats = NDArray[np.float64]

#: Constant for 95 % efficiency with residuals of 1 … 6 components (a test computes them anew).
CONSTANTS: dict[str, tuple[float, ...]] = {
    "huber": (1.3449975, 1.5011411, 1.6279879, 1.7310725, 1.8120184, 1.8693377),
    "cauchy": (2.3849471, 2.5486376, 2.6655683, 2.7515811, 2.8154035, 2.8623720),
    "welsch": (2.9846372, 3.2509668, 3.4690618, 3.6552438, 3.8185687, 3.9646231),
    "geman-mcclure": (3.7874188, 4.0955523, 4.3372899, 4.5353721, 4.7023691, 4.8460045),
    "tukey": (4.6850649, 5.1229861, 5.4902492, 5.8103156, 6.0962665, 6.3562163),
    "dcs": (1.8982799, 2.1154278, 2.3048350, 2.4750381, 2.6308862, 2.7754466),
    "truncated": (2.7954835, 3.0802157, 3.3272357, 3.5484627, 3.7506187, 3.9379326),
}
NAMES = ("none", *CONSTANTS)


class RobustLoss(Protocol):
    """What a solve asks of a kernel: loss and weight of whitened norms of ``d`` components."""

    def loss(self, norm: Floats, d: int) -> Floats:
        """Loss rho (n,) of whitened norms (n,)."""

    def weight(self, norm: Floats, d: int) -> Floats:
        """Weight rho'(x) / x (n,) of whitened norms (n,), in [0, 1]."""


@dataclass(frozen=True)
class Kernel:
    """A robust kernel for residuals of any dimension from 1 to 6.

    Parameters
    ----------
    name : str
        One of ``NAMES``.
    constant : float or None
        Tuning constant for a scalar residual, in whitened units; other dimensions take it times
        the ratio of their tabulated constants. None: 95 % efficiency.

    Raises
    ------
    SettingsError
        Unknown name, or a constant that is not positive.
    """

    name: str
    constant: float | None = None

    def __post_init__(self) -> None:
        if self.name not in NAMES:
            raise SettingsError(f"kernel is {self.name!r}; allowed: {', '.join(NAMES)}")
        if self.constant is not None and not 0.0 < self.constant < np.inf:
            raise SettingsError(f"kernel constant is {self.constant!r}; it must be positive")

    def constant_for(self, d: int) -> float:
        """Constant for residuals of ``d`` components; infinite for ``none``."""
        if not 1 <= d <= 6:
            raise ValueError(f"residuals have 1 to 6 components, not {d}")
        if self.name == "none":
            return float("inf")
        table = CONSTANTS[self.name]
        return table[d - 1] if self.constant is None else self.constant * table[d - 1] / table[0]

    def loss(self, norm: Floats, d: int) -> Floats:
        """Loss rho (n,) of whitened norms (n,) of residuals with ``d`` components."""
        x2 = np.square(np.asarray(norm, dtype=np.float64))
        c2 = self.constant_for(d) ** 2
        return 0.5 * x2 if self.name == "none" else np.asarray(_LOSS[self.name](x2, c2))

    def weight(self, norm: Floats, d: int) -> Floats:
        """Weight rho'(x) / x (n,) of whitened norms (n,), in [0, 1]."""
        x2 = np.square(np.asarray(norm, dtype=np.float64))
        if self.name == "none":
            return np.ones_like(x2)
        return np.asarray(_WEIGHT[self.name](x2 / self.constant_for(d) ** 2))


def to_gtsam(kernel: Kernel, d: int) -> Any:
    """GTSAM's estimator (``gtsam.noiseModel.mEstimator``) with the same loss and weight."""
    make = gtsam.noiseModel.mEstimator
    c = kernel.constant_for(d)
    if kernel.name == "none":
        return make.Null.Create()
    if kernel.name == "dcs":
        return make.DCS.Create(c * c)
    names = {"geman-mcclure": "GemanMcClure", "truncated": "TruncatedLeastSquares"}
    return getattr(make, names.get(kernel.name, kernel.name.capitalize())).Create(c)


def _huber_loss(x2: Floats, c2: float) -> Floats:
    return np.where(x2 <= c2, 0.5 * x2, np.sqrt(c2 * x2) - 0.5 * c2)


def _dcs_loss(x2: Floats, c2: float) -> Floats:
    return np.where(x2 <= c2, 0.5 * x2, 0.5 * c2 * (3.0 * x2 - c2) / (c2 + x2))


_LOSS: dict[str, Callable[[Floats, float], Floats]] = {
    "huber": _huber_loss,
    "cauchy": lambda x2, c2: 0.5 * c2 * np.log1p(x2 / c2),
    "welsch": lambda x2, c2: -0.5 * c2 * np.expm1(-x2 / c2),
    "geman-mcclure": lambda x2, c2: 0.5 * x2 / (1.0 + x2 / c2),
    "tukey": lambda x2, c2: c2 / 6.0 * (1.0 - (1.0 - np.minimum(x2 / c2, 1.0)) ** 3),
    "dcs": _dcs_loss,
    "truncated": lambda x2, c2: 0.5 * np.minimum(x2, c2),
}
#: Weight by ``s = x^2 / c^2``.
_WEIGHT: dict[str, Callable[[Floats], Floats]] = {
    "huber": lambda s: 1.0 / np.sqrt(np.maximum(s, 1.0)),
    "cauchy": lambda s: 1.0 / (1.0 + s),
    "welsch": lambda s: np.exp(-s),
    "geman-mcclure": lambda s: 1.0 / (1.0 + s) ** 2,
    "tukey": lambda s: (1.0 - np.minimum(s, 1.0)) ** 2,
    "dcs": lambda s: np.minimum(1.0, 4.0 / (1.0 + s) ** 2),
    "truncated": lambda s: (s <= 1.0).astype(np.float64),
}

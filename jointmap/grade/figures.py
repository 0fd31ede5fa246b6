"""Figures of merit that know how far the reference may be off.

A figure is the root of a mean square ``|e|^2`` of errors against the truth, while only differences
d from the reference are seen; with f the reference's own error in the same quantity ``e = d + f``:

    mean |e|^2 = A + X + F,   A = mean |d|^2,   X = 2 mean d.f,   F = mean |f|^2.

Draws of f give the distribution of the figure.

- Same data (the estimator used a part of what the reference used): d is known given the data and f
  independent of it. Expectation ``A + E F``; the uncorrected root of A is too low.
- Independent data: it is e that is independent of f, ``mean |e|^2 = A + X' - F`` with X' = 2 mean e.f
  of the size of X. Expectation ``A - E F``; the uncorrected figure is too high.
- Unknown: ``| sqrt A - sqrt F | <= figure <= sqrt A + sqrt F`` (triangle inequality), no value.

The first follows from the optimality of the reference (its error is uncorrelated with the
difference from any estimator that used no more; Hausman, Econometrica 46 (1978) 1251-1271).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.grade.settings import GradeSettings

Floats = NDArray[np.float64]

#: Draws at once, so that temporary arrays stay small.
_CHUNK_NUMBERS = 4_000_000


@dataclass(frozen=True)
class Figure:
    """``square`` A, and X and F of every draw (S,); ``n`` values, ``case`` of dependence."""

    square: float
    cross: Floats
    floor: Floats
    n: int
    case: str

    def values(self, log_scale: Floats) -> Floats:
        """Mean square against the truth (S,) of every draw; negative ones are set to zero.

        ``log_scale`` (S,): logarithm of how much larger the reference's variances are.
        """
        grow = np.exp(log_scale)
        x, f = np.sqrt(grow) * self.cross, grow * self.floor
        if self.case == "same":
            return np.asarray(np.maximum(self.square + x + f, 0.0))
        if self.case == "independent":
            mean = max(self.square - float(f.mean()), 0.0)
            share = np.sqrt(mean / self.square) if self.square > 0 else 0.0
            return np.asarray(np.maximum(self.square + share * x - f, 0.0))
        raise ValueError("no distribution: the dependence is unknown")


@dataclass(frozen=True)
class Graded:
    """A figure as it is printed, in the unit of the errors.

    ``raw`` root mean square of the differences; ``floor`` what an error-free estimator would score;
    ``value`` corrected, NaN where it cannot be told; ``lower``, ``upper`` of the interval that
    holds the figure against the truth; ``n`` values; ``note``.
    """

    raw: float
    floor: float
    value: float
    lower: float
    upper: float
    n: int
    note: str


def figure(difference: Floats, reference: Floats, case: str) -> Figure:
    """Figure of differences (n, k) and drawn reference errors (S, n, k)."""
    n, k = difference.shape
    s = len(reference)
    if n == 0:
        return Figure(np.nan, np.full(s, np.nan), np.full(s, np.nan), 0, case)
    flat = reference.reshape(s, -1)
    cross, floor = np.empty(s), np.empty(s)
    step = max(1, _CHUNK_NUMBERS // max(n * k, 1))
    for lo in range(0, s, step):
        part = flat[lo : lo + step]
        cross[lo : lo + step] = 2.0 * (part @ difference.ravel().astype(part.dtype)) / n
        floor[lo : lo + step] = np.einsum("ij,ij->i", part, part) / n
    return Figure(float((difference**2).sum() / n), cross, floor, n, case)


def log_scales(count: int, settings: GradeSettings) -> Floats:
    """Drawn logarithms of the reference's scale, the same for every figure.

    Evenly spread over the normal distribution and shuffled: no luck in a few hundred draws.
    """
    from scipy.special import ndtri

    even = ndtri((np.arange(count) + 0.5) / count)
    rng = np.random.default_rng(settings.seed + 1)
    return np.asarray(settings.scale_sigma * rng.permutation(even))


def grade(made: Figure, log_scale: Floats, level: float) -> Graded:
    """What to print of a figure."""
    nan = float("nan")
    if made.n == 0:
        return Graded(nan, nan, nan, nan, nan, 0, "nothing to grade")
    raw, floor = float(np.sqrt(made.square)), float(np.sqrt(made.floor.mean()))
    tail = 0.5 * (1.0 - level)
    if made.case == "unknown":
        roots = np.sqrt(np.exp(log_scale) * made.floor)
        low = max(0.0, raw - float(np.quantile(roots, 1.0 - tail)))
        low = max(low, float(np.quantile(roots, tail)) - raw)
        high = raw + float(np.quantile(roots, 1.0 - tail))
        return Graded(raw, floor, nan, low, high, made.n, "dependence unknown: bounds only")
    values = made.values(log_scale)
    low, high = (float(np.sqrt(q)) for q in np.quantile(values, [tail, 1.0 - tail]))
    mean = float(values.mean())
    note = ""
    if made.case == "independent" and made.square <= made.floor.mean():
        note = "below the reference's own floor: only the upper limit says something"
        return Graded(raw, floor, nan, low, high, made.n, note)
    if floor > 0.5 * raw and made.case == "same":
        note = "mostly the reference's own uncertainty"
    return Graded(raw, floor, float(np.sqrt(mean)), low, high, made.n, note)


@dataclass(frozen=True)
class Difference:
    """Figure of A minus that of B: ``value``, ``lower``, ``upper``, and whether it is resolved."""

    value: float
    lower: float
    upper: float

    @property
    def resolved(self) -> bool:
        """The interval does not hold zero."""
        return bool(self.lower > 0.0 or self.upper < 0.0)


def difference(a: Figure, b: Figure, log_scale: Floats, level: float) -> Difference:
    """Paired difference of two figures over the same instants; draws of the reference cancel."""
    tail = 0.5 * (1.0 - level)
    if a.n == 0 or b.n == 0:
        return Difference(float("nan"), float("-inf"), float("inf"))
    if "unknown" in (a.case, b.case):
        one, two = grade(a, log_scale, level), grade(b, log_scale, level)
        return Difference(one.raw - two.raw, one.lower - two.upper, one.upper - two.lower)
    gap = np.sqrt(a.values(log_scale)) - np.sqrt(b.values(log_scale))
    low, high = (float(q) for q in np.quantile(gap, [tail, 1.0 - tail]))
    return Difference(float(gap.mean()), low, high)

"""Serially correlated series: block length, effective sample size, block bootstrap.

The block length is that of Politis & White, with the correction by Patton, Politis & White: with
the sample autocovariances R(k), the flat-top window lambda and its bandwidth M (twice the lag after
which autocorrelations stay within 2 sqrt(log10(n) / n)),

    G = sum lambda(k / M) |k| R(k),   g0 = sum lambda(k / M) R(k),
    b = (2 G^2 / D)^(1/3) n^(1/3),    D = 4/3 g0^2 (circular),  2 g0^2 (stationary).

References
----------
Politis & White, "Automatic block-length selection for the dependent bootstrap", Econometric Reviews
23 (2004) 53-70; correction: Patton, Politis & White, 28 (2009) 372-375. Politis & Romano, "A
circular block-resampling procedure for stationary data" (1992). Geyer, "Practical Markov chain
Monte Carlo", Statistical Science 7 (1992) 473-483 (initial positive sequence).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Series shorter than this have no block length worth the name: one block.
FEWEST = 8


def autocovariance(series: ArrayLike, lags: int) -> Floats:
    """Sample autocovariances R(0 .. lags), divided by n (by the fast Fourier transform)."""
    x = np.asarray(series, np.float64)
    x = x - x.mean()
    n = len(x)
    size = 1 << (2 * n - 1).bit_length()
    power = np.abs(np.fft.rfft(x, size)) ** 2
    return np.asarray(np.fft.irfft(power, size)[: lags + 1] / n)


def block_length(series: ArrayLike, *, circular: bool = True) -> float:
    """Block length of Politis & White, not rounded; the whole series where it is too short.

    Parameters
    ----------
    series : (n,) float
        Without missing values.
    circular : bool
        For the circular bootstrap; otherwise the mean block of the stationary one.
    """
    x = np.asarray(series, np.float64)
    n = len(x)
    if n < FEWEST or not x.std() > 0.0:
        return float(max(n, 1))
    quiet = max(5, int(np.log10(n)))
    most = int(np.ceil(np.sqrt(n))) + quiet
    lags = min(most, n - 2)
    cov = autocovariance(x, lags)
    bandwidth = _bandwidth(np.abs(_correlation(x, cov)), quiet, lags, n)
    k = np.arange(1, bandwidth + 1)
    window = np.clip(2.0 * (1.0 - k / bandwidth), 0.0, 1.0)
    slope = 2.0 * float(np.sum(window * k * cov[k]))
    level = cov[0] + 2.0 * float(np.sum(window * cov[k]))
    spread = (4.0 / 3.0 if circular else 2.0) * level**2
    if not spread > 0.0:
        return float(np.ceil(min(3.0 * np.sqrt(n), n / 3.0)))
    length = (2.0 * slope**2 / spread) ** (1.0 / 3.0) * n ** (1.0 / 3.0)
    return float(np.clip(length, 1.0, np.ceil(min(3.0 * np.sqrt(n), n / 3.0))))


def _correlation(x: Floats, cov: Floats) -> Floats:
    """Correlation of lag k, each part by its own norm (the ends of a short series matter)."""
    centred = x - x.mean()
    square = np.cumsum(centred**2)
    k = np.arange(len(cov))
    head = square[len(x) - 2 - k]
    tail = square[-1] - square[k]
    return np.asarray(len(x) * cov / np.sqrt(np.maximum(head * tail, 1e-300)))


def _bandwidth(size: Floats, quiet: int, lags: int, n: int) -> int:
    """Twice the lag after which ``quiet`` correlations in a row are insignificant."""
    small = size < 2.0 * np.sqrt(np.log10(n) / n)
    run = np.convolve(small, np.ones(quiet), mode="valid")
    starts = np.flatnonzero(run[: max(len(small) - quiet, 0)] == quiet)
    if not len(starts):
        return lags
    return int(min(2 * max(int(starts[0]), 1), lags))


def effective_size(series: ArrayLike) -> float:
    """Effective number of independent values, ``n R(0) / (R(0) + 2 sum R(k))``.

    The sum ends where neighbouring autocovariances together stop being positive (Geyer). For a
    first-order autoregression it is ``n (1 - phi) / (1 + phi)``.
    """
    x = np.asarray(series, np.float64)
    n = len(x)
    if n < 2:
        return float(n)
    cov = autocovariance(x, n - 1)
    if not cov[0] > 0.0:
        return 1.0
    pairs = cov[1 : n - 1 : 2][: (n - 2) // 2] + cov[2:n:2][: (n - 2) // 2]
    ends = np.flatnonzero(pairs <= 0.0)
    total = float(pairs[: ends[0] if len(ends) else len(pairs)].sum())
    return float(np.clip(n * cov[0] / (cov[0] + 2.0 * total), 1.0, n))


def block_means(
    sums: ArrayLike, counts: ArrayLike, length: float, draws: int, seed: int
) -> tuple[Floats, int]:
    """Ratios of sums over circular block bootstrap samples of a series.

    Parameters
    ----------
    sums : (n,) or (n, q) float
        Sum of a quantity at each instant, over whatever is measured then.
    counts : (n,) float
        How many values each sum holds.
    length : float
        Block length, rounded up.
    draws : int
        Samples.

    Returns
    -------
    means : (draws,) or (draws, q)
        ``sum(sums) / sum(counts)`` of each sample.
    blocks : int
        Blocks of one sample; fewer than about ten make a poor interval.
    """
    s = np.asarray(sums, np.float64)
    values = s.reshape(len(s), -1)
    weight = np.asarray(counts, np.float64)
    n = len(values)
    size = int(np.clip(np.ceil(length), 1, n))
    blocks = int(np.ceil(n / size))
    start = np.random.default_rng(seed).integers(0, n, (draws, blocks))
    whole = np.concatenate([values, weight[:, None]], axis=1)
    ring = np.concatenate([whole, whole[:size]])
    total = np.concatenate([np.zeros((1, ring.shape[1])), np.cumsum(ring, axis=0)])
    picked = (total[start + size] - total[start]).sum(axis=1)
    means = picked[:, :-1] / np.maximum(picked[:, -1:], 1e-300)
    return means.reshape(draws, *s.shape[1:]), blocks

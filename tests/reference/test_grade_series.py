"""Block length and effective sample size against published values and theory."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm

from jointmap.grade.series import autocovariance, block_length, block_means, effective_size


@pytest.mark.parametrize(
    ("data", "column", "stationary", "circular"),
    [("nile", "volume", 12.333494, 14.118327), ("sunspots", "SUNACTIVITY", 21.050693, 24.097028)],
)
def test_block_length_of_textbook_series(data, column, stationary, circular):
    """Computed by another implementation of Politis & White (2004) with the correction of 2009."""
    series = getattr(sm.datasets, data).load_pandas().data[column].to_numpy(float)
    assert block_length(series, circular=False) == pytest.approx(stationary, abs=5e-6)
    assert block_length(series) == pytest.approx(circular, abs=5e-6)


def ar1(phi, n, seed):
    rng = np.random.default_rng(seed)
    out = np.empty(n)
    out[0] = rng.standard_normal() / np.sqrt(1 - phi**2)
    white = rng.standard_normal(n)
    for k in range(1, n):
        out[k] = phi * out[k - 1] + white[k]
    return out


@pytest.mark.parametrize(("phi", "share"), [(0.5, 1 / 3), (0.9, 0.052632), (0.99, 0.0050251)])
def test_effective_size_of_an_autoregression(phi, share):
    """n_eff / n = (1 - phi) / (1 + phi); the mean of 20 long series is within a tenth."""
    n = 40_000
    found = np.mean([effective_size(ar1(phi, n, seed)) for seed in range(20)]) / n
    assert found == pytest.approx(share, rel=0.12)


def test_autocovariance_is_the_plain_sum():
    x = np.random.default_rng(1).normal(size=57)
    c = x - x.mean()
    for k in (0, 1, 7, 56):
        assert autocovariance(x, 56)[k] == pytest.approx(c[k:] @ c[: 57 - k] / 57, abs=1e-12)


def test_bootstrap_interval_of_a_mean_holds_it_as_often_as_it_says():
    """Autocorrelated series, phi 0.7: the spread of block means is that of the sample mean."""
    phi, n, held = 0.7, 800, 0
    for seed in range(300):
        x = ar1(phi, n, seed)
        means, _ = block_means(x, np.ones(n), block_length(x), 300, seed)
        low, high = np.quantile(means, [0.025, 0.975])
        held += low <= 0.0 <= high
    # Block bootstrap falls a little short of its level in short series; plain bootstrap gives 0.6.
    assert 0.86 <= held / 300 <= 0.98


def test_blocks_wrap_and_counts_weigh():
    sums, counts = np.array([2.0, 0.0, 6.0]), np.array([1.0, 0.0, 3.0])
    means, blocks = block_means(sums, counts, 3, 50, 0)
    assert blocks == 1
    np.testing.assert_allclose(means, 2.0)


def test_short_and_constant_series_are_one_block():
    assert block_length(np.ones(50)) == 50
    assert block_length([1.0, 2.0]) == 2
    assert effective_size(np.ones(10)) == 1.0

"""Graduated non-convexity: constants of the published method, and a line among outliers."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest
from scipy.stats import chi2

from jointmap.solve import gnc

#: Squared residuals of four scalar rows and the squared limit 1: by hand below.
SQUARED = np.array([0.25, 1.0, 4.0, 13.0])


def test_inlier_limits() -> None:
    """GncParams.h of GTSAM: threshold on the cost, half the 99 % point of chi-square."""
    half = 0.5 * gnc.inlier_limit(np.array([2, 3, 6]))
    np.testing.assert_allclose(half, [4.60517, 5.67243, 8.40595], atol=5e-6)


def test_start_and_pace_of_truncated_least_squares() -> None:
    # c^2 / (2 r2 - c^2) with the largest r2.
    assert gnc.initial_mu("truncated", SQUARED, 1.0) == pytest.approx(1 / 25)
    assert gnc.next_mu("truncated", 0.5) == pytest.approx(0.7)
    # Every row within half its limit: convex already.
    assert gnc.initial_mu("truncated", np.array([0.5, 0.1]), 1.0) is None
    assert gnc.initial_mu("truncated", np.array([1e30]), 1.0) == 1e-6


def test_start_and_pace_of_geman_mcclure() -> None:
    assert gnc.initial_mu("geman-mcclure", SQUARED, 1.0) == pytest.approx(26.0)
    assert gnc.next_mu("geman-mcclure", 2.8) == pytest.approx(2.0)
    assert gnc.next_mu("geman-mcclure", 1.2) == 1.0
    assert gnc.finished("geman-mcclure", 1.0, SQUARED)
    assert not gnc.finished("geman-mcclure", 1.1, SQUARED)


def test_start_is_set_by_the_row_furthest_out_of_its_own_limit() -> None:
    squared, limit = np.array([12.0, 10.0, 99.0]), np.array([16.8, 6.6, 1.0])
    known = np.array([False, False, True])
    expected = 6.6 / (20.0 - 6.6)
    assert gnc.initial_mu("truncated", squared, limit, known) == pytest.approx(expected)
    assert gnc.initial_mu("truncated", squared, limit, np.ones(3, dtype=bool)) is None
    assert gnc.initial_mu("geman-mcclure", squared, limit, np.ones(3, dtype=bool)) is None


def test_weights_by_hand() -> None:
    """mu = 1, c = 1: one below 1/2, zero above 2, between sqrt(2 / r2) - 1."""
    squared = np.array([0.49, 0.5, 1.0, 1.96, 2.0, 50.0])
    expected = [1.0, 1.0, np.sqrt(2) - 1, np.sqrt(2) / 1.4 - 1, 0.0, 0.0]
    np.testing.assert_allclose(gnc.weights("truncated", squared, 1.0, 1.0), expected, atol=1e-15)
    known = np.array([False, False, False, False, False, True])
    assert gnc.weights("truncated", squared, 1.0, 1.0, known)[-1] == 1.0
    # (mu c^2 / (r2 + mu c^2))^2
    np.testing.assert_allclose(
        gnc.weights("geman-mcclure", np.array([0.0, 2.0, 6.0]), 2.0, 1.0), [1.0, 0.25, 0.0625]
    )


@pytest.mark.parametrize("mu", [1e-6, 0.01, 1.0, 30.0, 1e6])
def test_weights_are_continuous_and_fall(mu: float) -> None:
    squared = np.geomspace(1e-7, 1e8, 4001)
    w = gnc.weights("truncated", squared, 5.0, mu)
    assert (np.diff(w) <= 1e-12).all()
    assert w[0] == 1.0
    assert w.min() == 0.0 or squared[-1] < (mu + 1) / mu * 5.0
    for edge in (mu / (mu + 1) * 5.0, (mu + 1) / mu * 5.0):
        sides = gnc.weights("truncated", edge * np.array([1 - 1e-9, 1 + 1e-9]), 5.0, mu)
        # The slope of the weight at an edge is at most (mu + 1) per relative change of r2.
        assert abs(np.diff(sides)[0]) < 4e-9 * (mu + 1)


def _line(seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Points on y = 0.7 x - 1 with sigma 0.05; 60 % have an ordinate from a wide box."""
    rng = np.random.default_rng(seed)
    x = rng.uniform(-5, 5, 100)
    y = 0.7 * x - 1.0 + rng.normal(size=100) * 0.05
    wrong = np.arange(100) < 60
    y[wrong] = rng.uniform(-20, 20, 60)
    return x, y, wrong


def _fit(x: np.ndarray, y: np.ndarray, w: np.ndarray) -> np.ndarray:
    root = np.sqrt(w)
    design = np.stack([x, np.ones_like(x)], axis=1)
    return np.linalg.lstsq(root[:, None] * design, root * y, rcond=None)[0]


def _graduate(loss: gnc.Loss, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    limit = gnc.inlier_limit(1)
    w = np.ones(len(x))
    fit = _fit(x, y, w)
    squared = ((y - fit[0] * x - fit[1]) / 0.05) ** 2
    mu = gnc.initial_mu(loss, squared, limit)
    assert mu is not None
    for _ in range(100):
        w = gnc.weights(loss, squared, limit, mu)
        fit = _fit(x, y, w)
        squared = ((y - fit[0] * x - fit[1]) / 0.05) ** 2
        if gnc.finished(loss, mu, w):
            return fit, w
        mu = gnc.next_mu(loss, mu)
    raise AssertionError("the schedule did not end")


@pytest.mark.parametrize("seed", range(10))
def test_line_among_sixty_percent_outliers(seed: int) -> None:
    x, y, wrong = _line(seed)
    fit, w = _graduate("truncated", x, y)
    oracle = _fit(x, y, (~wrong).astype(float))
    plain = _fit(x, y, np.ones(100))
    # Standard deviations of 40 good points: slope 0.05 / (2.9 sqrt 40) = 0.0027, offset 0.0079.
    assert np.abs(fit - oracle).max() < 0.012
    assert np.abs(plain - oracle).max() > 0.1
    far = np.abs(y - 0.7 * x + 1.0) > 0.05 * 6
    assert not w[wrong & far].any()
    assert (w[~wrong] == 1.0).mean() >= 0.9


@pytest.mark.parametrize("seed", range(10))
def test_line_by_geman_mcclure(seed: int) -> None:
    x, y, wrong = _line(seed)
    fit, w = _graduate("geman-mcclure", x, y)
    assert np.abs(fit - _fit(x, y, (~wrong).astype(float))).max() < 0.012
    assert w[wrong & (np.abs(y - 0.7 * x + 1.0) > 2.0)].max() < 1e-3


def test_verdicts_equal_gtsam() -> None:
    """A point observed 60 times, 36 of them wrongly, solved by GTSAM's own optimizer."""
    graph, model = gtsam.NonlinearFactorGraph(), gtsam.noiseModel.Isotropic.Sigma(2, 0.05)
    rng = np.random.default_rng(0)
    observed = np.array([1.0, -2.0]) + rng.normal(size=(60, 2)) * 0.05
    observed[24:] = rng.uniform(-20, 20, (36, 2))
    for row in observed:
        graph.add(gtsam.PriorFactorPoint2(0, row, model))
    start = gtsam.Values()
    start.insert(0, observed.mean(axis=0))
    optimizer = gtsam.GncLMOptimizer(graph, start, gtsam.GncLMParams())
    theirs = optimizer.optimize().atPoint2(0)
    limit, at, mu, w = gnc.inlier_limit(2), observed.mean(axis=0), None, np.full(60, 0.5)
    while mu is None or not gnc.finished("truncated", mu, w):
        squared = np.sum((observed - at) ** 2, axis=1) / 0.05**2
        mu = gnc.next_mu("truncated", mu) if mu else gnc.initial_mu("truncated", squared, limit)
        w = gnc.weights("truncated", squared, limit, mu)
        at = w @ observed / w.sum()
    np.testing.assert_allclose(at, theirs, atol=1e-6)
    np.testing.assert_allclose(w, optimizer.getWeights(), atol=1e-4)


@pytest.mark.parametrize("mu", [0.01, 1.0, 30.0])
@pytest.mark.parametrize("d", [1, 2, 6])
def test_loss_of_a_stage_belongs_to_its_weights(mu: float, d: int) -> None:
    """w = rho' / x by central differences; rho is continuous and ends at c^2 / 2."""
    stage = gnc.Graduated(mu)
    c2 = stage.limit(d)
    assert c2 == pytest.approx(chi2.ppf(0.99, d))
    corners = np.sqrt(c2 * np.array([mu / (mu + 1.0), (mu + 1.0) / mu]))
    x = np.linspace(0.01, 1.2 * corners[1], 211)
    x = x[np.abs(x[:, None] - corners).min(axis=1) > 1e-3]
    slope = (stage.loss(x + 1e-6, d) - stage.loss(x - 1e-6, d)) / 2e-6
    np.testing.assert_allclose(stage.weight(x, d), slope / x, atol=1e-5)
    assert stage.loss(np.array([2.0 * corners[1]]), d)[0] == pytest.approx(0.5 * c2)
    for corner in corners:
        below, above = stage.loss(np.array([corner - 1e-9, corner + 1e-9]), d)
        assert above - below == pytest.approx(0.0, abs=1e-7)


def test_last_stage_is_truncated_least_squares() -> None:
    x = np.array([0.0, 1.0, 2.5, 2.6, 40.0])
    last, nearly = gnc.Graduated(np.inf), gnc.Graduated(1e9)
    np.testing.assert_allclose(last.weight(x, 1), [1, 1, 1, 0, 0])
    np.testing.assert_allclose(last.loss(x, 1), nearly.loss(x, 1), rtol=1e-6)


def test_limits_keep_their_ratio_to_a_given_constant() -> None:
    stage = gnc.Graduated(1.0, 2.0)
    assert stage.limit(1) == pytest.approx(4.0)
    assert stage.limit(3) / stage.limit(1) == pytest.approx(chi2.ppf(0.99, 3) / chi2.ppf(0.99, 1))

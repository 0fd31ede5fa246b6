"""Dependence between estimate and reference, covariance intersection, consistency bands."""

from __future__ import annotations

import numpy as np
import pytest
from adjustment_networks import sphere2500
from scipy.stats import chi2

from jointmap.grade.cases import bound, difference_covariance, least_ratio, normalised_square
from jointmap.simulate.estimators.share import best_weight, intersect


def scalar(value):
    return np.array([[[float(value)]]])


def test_three_cases_of_a_scalar():
    """P_o 4, P_b 1: superset 3, independent 5, unknown (2 + 1)^2 = 9 at w = 2/3."""
    assert difference_covariance(scalar(4), scalar(1), "same").item() == 3.0
    assert difference_covariance(scalar(4), scalar(1), "independent").item() == 5.0
    matrix, weight = bound(scalar(4), scalar(1))
    assert matrix.item() == pytest.approx(9.0)
    assert weight[0] == pytest.approx(2 / 3)


def test_bound_holds_for_every_correlation():
    """Covariance of the difference of 5000 random joint distributions never passes the bound."""
    rng = np.random.default_rng(0)
    root = rng.standard_normal((5000, 12, 14))
    joint = root @ np.swapaxes(root, 1, 2)
    a, b, c = joint[:, :6, :6], joint[:, 6:, 6:], joint[:, :6, 6:]
    actual = a + b - c - np.swapaxes(c, 1, 2)
    assert np.linalg.eigvalsh(bound(a, b)[0] - actual).min() > -1e-9


def test_unknown_dependence_is_refused_by_name():
    with pytest.raises(ValueError, match="guess"):
        difference_covariance(scalar(1), scalar(1), "guess")


# Durbin & Koopman, Time Series Analysis by State Space Methods: variances of the Nile's local level.
NILE_NOISE, NILE_LEVEL = 15099.0, 1469.1


def local_level(draws: int, n: int = 100, at: int = 50):
    """Errors of filter and fixed-interval smoother at one time, and their variances."""
    rng = np.random.default_rng(7)
    level = np.cumsum(np.sqrt(NILE_LEVEL) * rng.standard_normal((draws, n)), axis=1)
    y = level + np.sqrt(NILE_NOISE) * rng.standard_normal((draws, n))
    a, p = np.zeros((draws, n)), np.zeros(n)
    mean, var = np.zeros(draws), 1e7
    for t in range(n):
        if t:
            var += NILE_LEVEL
        gain = var / (var + NILE_NOISE)
        mean, var = mean + gain * (y[:, t] - mean), var * (1 - gain)
        a[:, t], p[t] = mean, var
    smooth, spread = a[:, -1].copy(), p[-1]
    for t in range(n - 2, at - 1, -1):
        gain = p[t] / (p[t] + NILE_LEVEL)
        smooth = a[:, t] + gain * (smooth - a[:, t])
        spread = p[t] + gain**2 * (spread - p[t] - NILE_LEVEL)
    return a[:, at], smooth, level[:, at], p[at], spread


def test_filter_against_smoother_of_the_nile():
    """Same data: only P_f - P_s normalises the difference; P_f and P_f + P_s are far too large."""
    filtered, smooth, level, p_f, p_s = local_level(4000)
    assert p_f == pytest.approx(4032.16, abs=0.05) and p_s == pytest.approx(2326.76, abs=0.05)
    d = (filtered - smooth)[:, None]
    wanted = {"same": 1.0, "independent": (p_f - p_s) / (p_f + p_s)}
    for case, value in wanted.items():
        cov = np.repeat(difference_covariance(scalar(p_f), scalar(p_s), case), len(d), axis=0)
        square, rank, _ = normalised_square(d, cov)
        assert (rank == 1).all()
        # Four standard errors of the mean of 4000 chi-square numbers.
        assert square.mean() == pytest.approx(value, abs=4 * value * np.sqrt(2 / 4000))
    assert wanted["independent"] == pytest.approx(0.268, abs=0.001)
    assert (d**2).mean() / p_f == pytest.approx(0.423, abs=0.03)
    # The smoother's error is uncorrelated with the difference: the lemma that the case rests on.
    covariance = np.mean((smooth - level) * d[:, 0])
    assert abs(covariance) < 4 * np.sqrt(p_s * (p_f - p_s) / 4000)


@pytest.fixture(scope="module")
def pose_graph():
    """First 300 poses of sphere2500: information of odometry, of loops, and whitened rows."""
    graph, values = sphere2500()
    n = 300
    rows = {"odometry": [], "kept": [], "withheld": []}
    loops = 0
    for k in range(graph.size()):
        factor = graph.at(k)
        keys = factor.keys()
        if max(keys) >= n:
            continue
        kind = "odometry"
        if len(keys) == 2 and abs(keys[1] - keys[0]) != 1:
            kind = "kept" if loops % 2 == 0 else "withheld"
            loops += 1
        linear = factor.linearize(values)
        a = np.zeros((6, 6 * n))
        jacobian = np.asarray(linear.jacobian()[0])
        for j, key in enumerate(linear.keys()):
            a[:, 6 * key : 6 * key + 6] = jacobian[:, 6 * j : 6 * j + 6]
        rows[kind].append(a)
    return {k: np.concatenate(v) for k, v in rows.items()}, loops


def test_pose_graph_difference_has_the_rank_of_what_was_withheld(pose_graph):
    """Online keeps every second loop: P_o - P_b >= 0 with rank 6 x 125 of 1800."""
    rows, loops = pose_graph
    assert loops == 250
    online = np.concatenate([rows["odometry"], rows["kept"]])
    batch = np.concatenate([online, rows["withheld"]])
    p_o, p_b = (np.linalg.inv(a.T @ a) for a in (online, batch))
    values = np.linalg.eigvalsh(p_o - p_b)
    assert values[0] > -1e-9 * values[-1]
    assert (values > 1e-9 * values[-1]).sum() == 750
    last = slice(-6, None)
    a, b = p_o[last, last][None], p_b[last, last][None]
    rng = np.random.default_rng(0)
    white = rng.standard_normal((len(batch), 400))
    e_o = p_o[last] @ online.T @ white[: len(online)]
    e_b = p_b[last] @ batch.T @ white
    d = (e_o - e_b).T
    found = {}
    for case in ("same", "independent", "unknown"):
        cov = np.repeat(difference_covariance(a, b, case), 400, axis=0)
        found[case] = normalised_square(d, cov)[0].mean() / 6
    low, high = chi2.ppf([0.0005, 0.9995], 2400) / 2400
    assert low < found["same"] < high
    # As computed elsewhere on the same graph: 0.285 and 0.145.
    assert found["independent"] == pytest.approx(0.285, abs=0.03)
    assert found["unknown"] == pytest.approx(0.145, abs=0.02)
    assert least_ratio(a, b)[0] >= 1.0 - 1e-9
    # What the batch says of itself has to be added to what is seen of the online estimate.
    seen, true, own = ((x**2).sum(axis=0).mean() for x in (e_o - e_b, e_o, e_b))
    assert seen == pytest.approx(true - own, rel=0.2)
    assert seen < 0.8 * true


def test_pose_graph_that_counts_loops_twice_is_found_without_truth(pose_graph):
    """Claimed P - P_b has a clearly negative eigenvalue; the honest one has none."""
    rows, _ = pose_graph
    twice = np.concatenate([rows["odometry"], rows["kept"], rows["kept"], rows["kept"]])
    batch = np.concatenate([rows["odometry"], rows["kept"], rows["withheld"]])
    claimed, p_b = (np.linalg.inv(a.T @ a) for a in (twice, batch))
    blocks = [slice(6 * k, 6 * k + 6) for k in range(1, 300)]
    o = np.stack([claimed[s, s] for s in blocks])
    b = np.stack([p_b[s, s] for s in blocks])
    assert np.median(least_ratio(o, b)) < 0.8


def test_pseudo_inverse_and_rank():
    cov = np.diag([2.0, 0.0, 8.0])[None]
    square, rank, least = normalised_square(np.array([[2.0, 5.0, 4.0]]), cov)
    assert square[0] == pytest.approx(2.0 + 2.0)
    assert rank[0] == 2 and least[0] == pytest.approx(0.0)
    _, rank, least = normalised_square(np.ones((1, 2)), np.diag([1.0, -0.5])[None])
    assert rank[0] == 1 and least[0] < 0


@pytest.mark.parametrize(
    ("a", "b", "weight", "diagonal"),
    [
        # Symmetric pair; det-optimal weights of published examples.
        ([1, 4], [4, 1], 0.5, [1.6, 1.6]),
        ([2, 1], [1, 8], 13 / 14, [1.866667, 1.066667]),
    ],
)
def test_covariance_intersection_examples(a, b, weight, diagonal):
    _, cov, w = intersect(np.zeros(2), np.diag(a) * 1.0, np.ones(2), np.diag(b) * 1.0)
    assert w == pytest.approx(weight, abs=1e-4)
    np.testing.assert_allclose(np.diag(cov), diagonal, atol=2e-4)


def test_covariance_intersection_trace_weight_and_correlated_pair():
    _, cov, _ = intersect(np.zeros(2), np.diag([2.0, 1]), np.zeros(2), np.diag([1.0, 8]), 0.779645)
    np.testing.assert_allclose(np.diag(cov), [1.638867, 1.238867], atol=1e-6)
    a = np.array([[10.0, 5, 0], [5, 10, 0], [0, 0, 1]])
    b = np.array([[10.0, -5, 0], [-5, 10, 0], [0, 0, 1]])
    mean, cov, w = intersect(np.array([1.0, 0, 0]), a, np.array([0.0, 1, 0]), b)
    assert w == pytest.approx(0.5, abs=1e-4)
    np.testing.assert_allclose(cov, np.diag([7.5, 7.5, 1.0]), atol=1e-2)
    information = w * np.linalg.inv(a) + (1 - w) * np.linalg.inv(b)
    wanted = w * np.linalg.inv(a) @ [1, 0, 0] + (1 - w) * np.linalg.inv(b) @ [0, 1, 0]
    np.testing.assert_allclose(information @ mean, wanted, atol=1e-12)


def test_intersection_weight_of_a_state_counts_what_is_not_shared():
    """Only one of four scalars is shared: inflating the other three is not worth it."""
    assert best_weight(np.eye(1), np.eye(1) * 0.9, 4) == 1.0
    assert best_weight(np.eye(1), np.eye(1) * 1e-6, 2) < 1.0


@pytest.mark.parametrize(
    ("runs", "dof", "low", "high"),
    [
        (50, 2, 1.4844, 2.5912),
        (50, 4, 3.2546, 4.8212),
        (100, 6, 5.3402, 6.6977),
        (1, 3, 0.2158, 9.3484),
    ],
)
def test_band_of_an_average_normalised_square(runs, dof, low, high):
    """The two-sided 95 % band of N independent runs (Bar-Shalom et al. print 1.5 and 2.6)."""
    band = dof * chi2.ppf([0.025, 0.975], runs * dof) / (runs * dof)
    np.testing.assert_allclose(band, [low, high], atol=5e-5)

"""Redundancy, tests and detectable errors against published numbers and statsmodels."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest
import statsmodels.api as sm
from adjustment_networks import adjust, landmark_file, planar_slam, redundancies, sphere2500
from scipy.stats import chi2, ncx2
from statsmodels.datasets import stackloss

from jointmap.trust.elimination import eliminate
from jointmap.trust.marginals import selected_inverse
from jointmap.trust.redundancy import (
    component_test,
    critical_w,
    delta0,
    external_effect,
    group_sums,
    matched_alpha,
    noncentrality,
    pope_tau,
    redundancy_matrices,
    redundancy_numbers,
    vector_mdb,
    vector_test,
)
from jointmap.trust.variance import variance_factor, variance_factors


@pytest.mark.parametrize(
    ("alpha", "power", "value"),
    [
        (0.001, 0.80, 4.13215),
        (0.05, 0.80, 2.8016),
        (0.05, 0.90, 3.2415),
        (0.01, 0.80, 3.4175),
        (0.01, 0.90, 3.8574),
        (0.0027, 0.80, 3.8416),
        (0.001, 0.90, 4.5721),
        (0.001, 0.95, 4.9354),
    ],
)
def test_b1_shift_that_a_single_test_finds(alpha, power, value):
    """Baarda 1968 prints 4.13 and 17.075 for 0.001 and 0.80; the others by scipy."""
    assert delta0(alpha, power) == pytest.approx(value, abs=5.1e-5)


def test_b2_noncentrality_by_dimension():
    """Against scipy's non-central chi-square; Baarda's 17.075 for one dimension."""
    found = [noncentrality(q) for q in (1, 2, 3, 4, 6)]
    np.testing.assert_allclose(found, [17.0746, 19.6624, 21.5450, 23.1002, 25.6741], atol=5.1e-5)
    found = [noncentrality(q, alpha=0.05) for q in (1, 2, 3, 4)]
    np.testing.assert_allclose(found, [7.8489, 9.6347, 10.9026, 11.9353], atol=5.1e-5)
    assert noncentrality(6, alpha=0.05) == pytest.approx(13.6243, abs=5.1e-5)
    found = [matched_alpha(q) for q in (2, 3, 6, 10, 30, 100)]
    printed = [0.002837, 0.005500, 0.017700, 0.040426, 0.166659, 0.395506]
    np.testing.assert_allclose(found, printed, atol=5.1e-7)
    ratio = [chi2.isf(a, q) / q for a, q in zip(found, (2, 3, 6, 10, 30, 100), strict=True)]
    np.testing.assert_allclose(ratio, [5.8650, 4.2112, 2.5584, 1.8987, 1.2456, 1.0311], atol=5.1e-5)


def test_b3_detectable_and_hidden_errors():
    """MDB and external reliability at sigma 1."""
    r = np.array([0.5, 0.25, 0.1, 0.05, 0.01])
    tested = component_test(np.zeros((5, 1)), r[:, None, None])
    np.testing.assert_allclose(tested.mdb[:, 0], [5.844, 8.264, 13.067, 18.480, 41.321], atol=6e-4)
    hidden = [4.132, 7.157, 12.396, 18.012, 41.114]
    np.testing.assert_allclose(tested.external[:, 0], hidden, atol=6e-4)
    unchecked = component_test(np.ones((1, 1)), np.full((1, 1, 1), 0.0099))
    assert np.isinf(unchecked.mdb) and np.isinf(unchecked.external) and np.isnan(unchecked.w)


def test_b4_studentised_critical_values():
    """Pope 1976 (tables of tau) and Bonferroni."""
    dof = (2, 3, 5, 10, 20, 30, 50, 100)
    printed = [1.4099, 1.6454, 1.8143, 1.9039, 1.9358, 1.9447, 1.9512, 1.9557]
    np.testing.assert_allclose([pope_tau(0.05, n) for n in dof], printed, atol=5.1e-5)
    printed = [1.4142, 1.7303, 2.1781, 2.6786, 2.9749, 3.0785, 3.1626, 3.2263]
    np.testing.assert_allclose([pope_tau(0.001, n) for n in dof], printed, atol=5.1e-5)
    assert critical_w(100) == pytest.approx(3.48076, abs=5.1e-6)


def test_b5_stackloss_against_statsmodels():
    """Redundancy is one minus leverage; v / r is the residual of the left-out row."""
    data = stackloss.load_pandas()
    design = np.column_stack([np.ones(21), data.exog.to_numpy()])
    y = data.endog.to_numpy()
    net = adjust(design, y)
    influence = sm.OLS(y, design).fit().get_influence()
    np.testing.assert_allclose(net.redundancy, 1 - influence.hat_matrix_diag, rtol=1e-10)
    assert net.redundancy.sum() == pytest.approx(17.0, abs=1e-10)
    left_out = net.v / net.redundancy
    np.testing.assert_allclose(left_out, influence.resid_press, rtol=1e-9)
    assert left_out[20] == pytest.approx(-10.116075, abs=5e-7)
    assert left_out @ left_out == pytest.approx(291.868932, abs=5e-7)
    s = np.sqrt(net.v @ net.v / 17)
    tested = component_test(net.v[:, None] / s, net.redundancy[:, None, None])
    np.testing.assert_allclose(tested.w[:, 0], influence.resid_studentized_internal, rtol=1e-9)
    printed = [1.19334, 1.54602, 1.88182, -2.63822]
    np.testing.assert_allclose(tested.w[[0, 2, 3, 20], 0], printed, atol=5.1e-6)


def test_i1_planar_slam_redundancy():
    """Sum 2.000 = 15 - 13; the prior, the second odometry and the last sighting are unchecked."""
    graph, values, dims = planar_slam()
    _, found = redundancies(graph, values, dims)
    rows = [np.diagonal(matrix) for matrix in found]
    np.testing.assert_allclose(rows[1], [0.225806, 0.290323, 0.225806], atol=5.1e-7)
    np.testing.assert_allclose(rows[3], [0.451613, 0.290323], atol=5.1e-7)
    np.testing.assert_allclose(rows[4], [0.225806, 0.290323], atol=5.1e-7)
    for k in (0, 2, 5):
        np.testing.assert_allclose(rows[k], 0.0, atol=1e-12)
    assert sum(r.sum() for r in rows) == pytest.approx(2.0, abs=1e-12)
    unchecked = component_test(np.zeros((1, 2)), found[5][None])
    assert np.all(np.isinf(unchecked.mdb))


def test_i3_sphere2500_redundancy():
    """14700.000 degrees of freedom: odometry 7332.518 and closures 7367.482 (joint marginals)."""
    graph, values = sphere2500()
    inverse = selected_inverse(eliminate(graph.linearize(values)), np.full(2500, 6))
    linear = graph.linearize(values)
    edges = [f for f in range(linear.size()) if len(linear.at(f).keys()) == 2]
    keys = np.array([linear.at(f).keys() for f in edges])
    rows = [linear.at(f).jacobian() for f in edges]
    jac = np.array([a for a, _ in rows])
    residual = np.array([np.ravel(b) for _, b in rows])
    matrices = redundancy_matrices(list(keys.T), [jac[:, :, :6], jac[:, :, 6:]], inverse)
    r = redundancy_numbers(matrices)
    kind = (np.abs(keys[:, 1] - keys[:, 0]) != 1).astype(int)
    total = group_sums(kind, r, 2)
    np.testing.assert_allclose(total, [7332.518, 7367.482], atol=6e-4)
    assert total.sum() == pytest.approx(14700.0, abs=5e-4)
    v2 = np.sum(residual**2, axis=1)
    assert v2.sum() == pytest.approx(14806.856, abs=2e-3)
    s2, _, _ = variance_factors(kind, 2, v2, r)
    np.testing.assert_allclose(s2, [1.01066, 1.00389], atol=6e-6)
    np.testing.assert_allclose(total / np.bincount(kind) / 6, [0.489, 0.501], atol=6e-4)
    tested = vector_test(residual, matrices)
    # The simulated noise is Gaussian up to its Euler angles: 5 % of the p-values below 0.05.
    share = np.mean(tested.p_value < 0.05)
    assert abs(share - 0.05) < 4 * np.sqrt(0.05 * 0.95 / len(r))


@pytest.mark.parametrize(
    ("name", "dimension", "half_objective", "dof"),
    [
        ("noisyToyGraph.txt", 2, 0.0683428242, 6),
        ("pose2example.txt", 2, 0.5494864475, 6),
        ("pose3example-grid.txt", 3, 43.49865834, 108),
        ("Klaus3.g2o", 3, 0.00702779177, 6),
    ],
)
def test_i4_redundancy_of_small_public_graphs(name, dimension, half_objective, dof):
    """Half objective by gtsam 4.3.0; rows less unknowns."""
    space = dimension == 3
    graph, values = gtsam.readG2o(gtsam.findExampleDataFile(name), space)
    noise = gtsam.noiseModel.Isotropic.Sigma(6 if space else 3, 1e-3)
    prior, at = (
        (gtsam.PriorFactorPose3, values.atPose3)
        if space
        else (gtsam.PriorFactorPose2, values.atPose2)
    )
    graph.add(prior(0, at(0), noise))
    params = gtsam.LevenbergMarquardtParams()
    params.setRelativeErrorTol(1e-13)
    params.setAbsoluteErrorTol(1e-13)
    values = gtsam.LevenbergMarquardtOptimizer(graph, values, params).optimize()
    assert graph.error(values) == pytest.approx(half_objective, rel=1e-7)
    _, matrices = redundancies(graph, values, np.full(values.size(), 6 if space else 3))
    r = [np.trace(m) for m in matrices]
    # The prior is the datum: r = 0, up to the rounding of its information of 1e6.
    assert r[-1] == pytest.approx(0.0, abs=1e-8)
    assert sum(r) == pytest.approx(dof, abs=1e-7)


@pytest.mark.parametrize(
    ("name", "square", "dof", "factor"),
    [
        ("cityTrees_reduced_1k.g2o", 685.5281, 680, 1.00813),
        ("victoriaPark_reduced_1k.g2o", 1776.4745, 1116, 1.5918),
    ],
)
def test_i5_landmark_graphs(name, square, dof, factor):
    """Simulated trees fit their stated sigmas; the real park does not: 1.59 is outside the band."""
    graph, values, dims = landmark_file(name)
    assert 2 * graph.error(values) == pytest.approx(square, abs=5.1e-5)
    _, matrices = redundancies(graph, values, dims)
    r = np.array([np.trace(m) for m in matrices])
    assert r.sum() == pytest.approx(dof, abs=1e-5)
    v2 = np.array([2 * graph.at(f).error(values) for f in range(graph.size())])
    found = variance_factor(v2, r)
    assert found.s2 == pytest.approx(factor, abs=5.1e-5)
    inside = abs(found.sigma_ratio - 1) < 1.96 * found.std
    assert inside == (name == "cityTrees_reduced_1k.g2o")


def noisy_network(seed: int):
    """A random whitened linear model with correlated rows, two measurements to a block."""
    rng = np.random.default_rng(seed)
    n, m, p = 30, 2, 6
    jac = rng.standard_normal((n, m, p)) * rng.uniform(0.2, 3.0, (n, 1, 1))
    graph, unit = gtsam.GaussianFactorGraph(), gtsam.noiseModel.Unit.Create(m)
    for block in jac:
        graph.add(gtsam.JacobianFactor(0, block, np.zeros(m), unit))
    inverse = selected_inverse(eliminate(graph), [p])
    return rng, jac, inverse


def test_vector_test_is_chi_square_whatever_the_redundancy():
    """4000 draws of each of 30 measurements: mean 2 and the 1 % tail, by chi-square bounds."""
    rng, jac, inverse = noisy_network(1)
    matrices = redundancy_matrices([np.zeros(30, int)], [jac], inverse)
    assert redundancy_numbers(matrices).sum() == pytest.approx(60 - 6, abs=1e-10)
    a = jac.reshape(60, 6)
    project = np.eye(60) - a @ np.linalg.pinv(a)
    draws = 4000
    v = (rng.standard_normal((draws, 60)) @ project).reshape(draws, 30, 2)
    t = np.stack([vector_test(one, matrices).statistic for one in v])
    bounds = chi2.ppf([1e-4, 1 - 1e-4], 2 * draws) / draws
    assert np.all((t.mean(axis=0) > bounds[0]) & (t.mean(axis=0) < bounds[1]))
    share = np.mean(t > chi2.isf(0.01, 2), axis=0)
    assert np.abs(share - 0.01).max() < 4 * np.sqrt(0.01 * 0.99 / draws)


def test_detectable_bias_is_detected_with_the_agreed_power():
    """An error of one correlated component of the size of its MDB: found in 80 % of the draws."""
    rng, jac, inverse = noisy_network(2)
    matrices = redundancy_matrices([np.zeros(30, int)], [jac], inverse)
    covariance = np.array([[0.04, 0.03], [0.03, 0.09]])
    whiten = np.linalg.cholesky(np.linalg.inv(covariance)).T
    whitens = np.broadcast_to(whiten, (30, 2, 2))
    tested = component_test(np.zeros((30, 2)), matrices, whitens)
    a = jac.reshape(60, 6)
    project = np.eye(60) - a @ np.linalg.pinv(a)
    draws, which, component = 20000, 7, 1
    clean = rng.standard_normal((draws, 60))
    clean[:, 2 * which : 2 * which + 2] += whiten[:, component] * tested.mdb[which, component]
    v = (clean @ project).reshape(draws, 30, 2)[:, which]
    w = component_test(
        v, np.broadcast_to(matrices[which], (draws, 2, 2)), np.broadcast_to(whiten, (draws, 2, 2))
    ).w[:, component]
    power = np.mean(np.abs(w) > 3.290527)
    assert abs(power - 0.80) < 4 * np.sqrt(0.8 * 0.2 / draws)
    direction = np.broadcast_to([0.6, 0.8], (30, 2))
    size = vector_mdb(matrices, direction)
    seen = np.einsum("ni,nij,nj->n", direction, matrices, direction)
    np.testing.assert_allclose(ncx2.sf(chi2.isf(0.001, 2), 2, size**2 * seen), 0.80, rtol=1e-6)


def test_external_effect_is_what_the_error_does_to_the_solution():
    """Shift one sighting of the planar graph and solve again, by dense least squares."""
    graph, values, dims = planar_slam()
    inverse, _ = redundancies(graph, values, dims)
    linear = graph.linearize(values)
    a, _ = linear.at(3).jacobian()
    shift = np.array([[2.0, -3.0]])
    effects = external_effect(
        [np.array([0]), np.array([3])], [a[None, :, :3], a[None, :, 3:]], inverse, shift
    )
    jac, b = linear.jacobian()
    moved = b.copy()
    row = sum(linear.at(k).jacobian()[0].shape[0] for k in range(3))
    moved[row : row + 2] += shift[0]
    dx = np.linalg.lstsq(jac, moved, rcond=None)[0] - np.linalg.lstsq(jac, b, rcond=None)[0]
    np.testing.assert_allclose(effects[0][0], dx[:3], atol=1e-12)
    np.testing.assert_allclose(effects[1][0], dx[9:11], atol=1e-12)

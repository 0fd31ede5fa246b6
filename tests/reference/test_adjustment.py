"""Published least-squares adjustments, and the choice of the datum."""

from __future__ import annotations

from pathlib import Path

import gtsam
import numpy as np
import pytest
import scipy.stats
from adjustment_networks import adjust
from scipy.stats import chi2
from statsmodels.datasets import longley

from jointmap.trust.datum import (
    datum_transform,
)
from jointmap.trust.elimination import SingularSystemError
from jointmap.trust.redundancy import component_test
from jointmap.trust.variance import variance_factor

X, Y, A, B, C = range(5)
#: Levelling of Ghilani, Adjustment Computations, ch. 12: from, to, height difference.
LINES = [(X, A), (A, Y), (Y, C), (C, X), (A, B), (Y, B), (B, C)]
RISE = np.array([5.10, 2.34, -1.25, -6.13, -0.68, -3.00, 1.70])
BENCH = {X: 100.00, Y: 107.50}


def levelling(fixed: dict[int, float]):
    """Design and reduced observations with the given benchmarks' heights taken as exact."""
    design = np.zeros((7, 5))
    for i, (start, end) in enumerate(LINES):
        design[i, start], design[i, end] = -1.0, 1.0
    height = np.array([fixed.get(k, 0.0) for k in range(5)])
    free = [k for k in range(5) if k not in fixed]
    return design[:, free], RISE - design @ height


def test_c1_unweighted_levelling():
    """Ghilani, ch. 12, unweighted example."""
    net = adjust(*levelling(BENCH))
    np.testing.assert_allclose(net.x, [105.140952, 104.482857, 106.187619], atol=5e-7)
    v = [0.04095, 0.01905, -0.06238, -0.05762, 0.02190, -0.01714, 0.00476]
    np.testing.assert_allclose(np.abs(net.v), np.abs(v), atol=5e-6)
    r = [0.61905, 0.61905, 0.61905, 0.61905, 0.47619, 0.57143, 0.47619]
    np.testing.assert_allclose(net.redundancy, r, atol=5e-6)
    assert net.redundancy.sum() == pytest.approx(4.0, abs=1e-12)
    s0 = np.sqrt(net.v @ net.v / net.redundancy.sum())
    assert s0 == pytest.approx(0.0501189, abs=5e-8)
    cofactor = 21 * net.factor.solve(np.eye(3))
    np.testing.assert_allclose(cofactor, [[8, 3, 1], [3, 9, 3], [1, 3, 8]], atol=1e-12)
    sd = s0 * np.sqrt(net.inverse.diagonal([0, 1, 2])[:, 0, 0])
    np.testing.assert_allclose(sd, [0.03093, 0.03281, 0.03093], atol=5e-6)


def test_c1_minimal_detectable_bias():
    """The same net at a sigma of 0.05."""
    sigma = 0.05
    net = adjust(*levelling(BENCH), sigma)
    tested = component_test(
        net.v[:, None] / sigma, net.redundancy[:, None, None], np.full((7, 1, 1), 1 / sigma)
    )
    mdb = [0.26259] * 4 + [0.29940, 0.27332, 0.29940]
    np.testing.assert_allclose(tested.mdb[:, 0], mdb, atol=5e-6)


def test_c2_weighted_levelling():
    """Ghilani, ch. 12, weighted example: weights 12 / miles."""
    miles = np.array([4, 3, 2, 3, 2, 2, 2])
    sigma = np.sqrt(miles / 12)
    net = adjust(*levelling(BENCH), sigma)
    np.testing.assert_allclose(net.x, [105.1504, 104.4892, 106.1972], atol=5e-5)
    r = [0.72, 0.62667, 0.56, 0.70667, 0.40444, 0.53778, 0.44444]
    np.testing.assert_allclose(net.redundancy, r, atol=5e-6)
    assert net.redundancy.sum() == pytest.approx(4.0, abs=1e-12)
    vpv = float(np.sum((net.v / sigma) ** 2))
    assert vpv == pytest.approx(0.045984, abs=5e-7)
    s0 = np.sqrt(vpv / 4)
    assert s0 == pytest.approx(0.107219, abs=5e-7)
    sd = s0 * np.sqrt(net.inverse.diagonal([0, 1, 2])[:, 0, 0])
    np.testing.assert_allclose(sd, [0.032756, 0.029759, 0.029035], atol=5e-7)


def test_c3_global_test_of_a_levelling():
    """Strang & Borre's levelling as printed in a surveyors' forum: 4.636, 1.243, .268/1.765."""
    known = np.array([10.021, 10.321, 11.002])
    ends = [(0, 0), (0, 1), (1, 0), (2, 1)]  # benchmark, unknown (E, F)
    rise, metres = np.array([0.732, 1.978, 0.420, 0.988, 1.258]), [970, 1002, 1070, 1110, 890]
    design, reduced = np.zeros((5, 2)), rise.copy()
    for i, (bench, unknown) in enumerate(ends):
        design[i, unknown] = 1.0
        reduced[i] += known[bench]
    design[4] = -1.0, 1.0
    sigma = 0.006 * np.sqrt(np.array(metres) / 1000)
    net = adjust(design, reduced, sigma)
    np.testing.assert_allclose(net.x, [10.744503, 11.997620], atol=5e-7)
    # One more unit in the fourth digit: the second residual, 1.3805 mm, was rounded upwards.
    np.testing.assert_allclose(
        np.abs(net.v) * 1e3, [8.497, 1.381, 3.503, 7.620, 4.883], atol=5.1e-4
    )
    np.testing.assert_allclose(
        net.redundancy, [0.61409, 0.61818, 0.65016, 0.65533, 0.46224], atol=5e-6
    )
    total = float(np.sum((net.v / sigma) ** 2))
    assert total == pytest.approx(4.636159, abs=5e-7)
    factor = variance_factor((net.v / sigma) ** 2, net.redundancy, least_redundancy=1.0)
    assert factor.sigma_ratio == pytest.approx(1.243136, abs=5e-7)
    band = np.sqrt(chi2.ppf([0.025, 0.975], 3) / 3)
    np.testing.assert_allclose(band, [0.268201, 1.765258], atol=5e-7)
    assert not variance_factor((net.v / sigma) ** 2, net.redundancy).determined
    sd = factor.sigma_ratio * np.sqrt(net.inverse.diagonal([0, 1])[:, 0, 0]) * 1e3
    np.testing.assert_allclose(sd, [4.564, 4.614], atol=5e-4)


def test_c4_datum_of_a_free_levelling():
    """The free net in three datums (numbers computed with dense matrices from the same data)."""
    design, rise = levelling({})
    net = adjust(design, rise, held=[B])  # an arbitrary minimal datum, to be got rid of
    assert net.v @ net.v == pytest.approx(0.00154583, abs=5e-9)
    r = [0.33333, 0.45833, 0.45833, 0.33333, 0.45833, 0.5, 0.45833]
    np.testing.assert_allclose(net.redundancy, r, atol=5e-6)
    keys, part, g = np.arange(5), np.zeros(5, int), np.ones((5, 1))
    found = {}
    for name, weights in {
        "x": np.eye(5)[X],
        "y": np.eye(5)[Y],
        "inner": np.ones(5),
    }.items():
        move = datum_transform(net.factor, part, g, weights)
        i, j = np.meshgrid(keys, keys, indexing="ij")
        blocks = move.pairs(i.ravel(), j.ravel(), net.factor.pairs(i.ravel(), j.ravel()))
        found[name] = blocks.reshape(5, 5)
        q = found[name]
        assert q[C, C] + q[A, A] - 2 * q[A, C] == pytest.approx(0.66667, abs=5e-6)
    trace = [np.trace(found[name]) for name in ("x", "y", "inner")]
    np.testing.assert_allclose(trace, [3.08333, 2.45833, 1.28333], atol=5e-6)
    np.testing.assert_allclose(
        np.diagonal(found["x"]), [0, 0.875, 0.66667, 0.875, 0.66667], atol=5e-6
    )
    np.testing.assert_allclose(
        np.diagonal(found["inner"]), [0.36, 0.235, 0.22667, 0.235, 0.22667], atol=5e-6
    )
    np.testing.assert_allclose(found["inner"], np.linalg.pinv(design.T @ design), atol=1e-12)
    s = np.eye(5) - np.outer(np.ones(5), np.eye(5)[X])
    np.testing.assert_allclose(s @ found["inner"] @ s.T, found["x"], atol=1e-12)


def test_c5_norris():
    """NIST StRD Norris (certified values in the file)."""
    folder = Path(scipy.stats.__file__).parent / "tests" / "data" / "nist_linregress"
    rows = (folder / "Norris.dat").read_text().splitlines()[60:]
    data = np.array([row.split() for row in rows if row.strip()], float)
    y, x = data.T
    assert len(y) == 36
    net = adjust(np.stack([np.ones(36), x], axis=1), y)
    np.testing.assert_allclose(net.x, [-0.262323073774029, 1.00211681802045], rtol=1e-11)
    factor = variance_factor(net.v**2, net.redundancy)
    assert factor.redundancy == pytest.approx(34, abs=1e-10)
    assert factor.sigma_ratio == pytest.approx(0.884796396144373, rel=1e-11)
    sd = factor.sigma_ratio * np.sqrt(net.inverse.diagonal([0, 1])[:, 0, 0])
    np.testing.assert_allclose(sd, [0.232818234301152, 4.29796848199937e-4], rtol=1e-10)


def test_c6_longley():
    """NIST StRD Longley, the ill-conditioned classic, by orthogonal elimination."""
    data = longley.load_pandas()
    design = np.column_stack([np.ones(16), data.exog.to_numpy()])
    net = adjust(design, data.endog.to_numpy(), elimination=gtsam.EliminateQR)
    certified = [
        -3482258.634598, 15.061872272, -0.035819179, -2.020229804,
        -1.033226867, -0.051104106, 1829.151464615,
    ]  # fmt: skip
    # The certified values carry eight digits and more, the shortest one (-.0358) eight.
    np.testing.assert_allclose(net.x, certified, rtol=2e-8)
    factor = variance_factor(net.v**2, net.redundancy, least_redundancy=1.0)
    assert factor.sigma_ratio == pytest.approx(304.854073561965, rel=1e-9)
    sd = factor.sigma_ratio * np.sqrt(np.diagonal(net.inverse.diagonal([0])[0]))
    certified_sd = [
        890420.383607, 84.914925775, 0.033491008, 0.488399682,
        0.214274163, 0.226073200, 455.478499142,
    ]  # fmt: skip
    np.testing.assert_allclose(sd, certified_sd, rtol=2e-8)


def test_c7_misra1a():
    """NIST StRD Misra1a from its first start: b1 (1 - exp(-b2 x))."""
    x = np.array([77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8,
                  593.1, 689.1, 760.0])  # fmt: skip
    y = np.array([10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01,
                  66.40, 75.47, 81.78])  # fmt: skip
    b = np.array([250.0, 5e-4])
    for _ in range(20):
        fade = np.exp(-b[1] * x)
        net = adjust(np.column_stack([1 - fade, b[0] * x * fade]), y - b[0] * (1 - fade))
        b = b + net.x
    np.testing.assert_allclose(b, [2.3894212918e02, 5.5015643181e-04], rtol=1e-9)
    assert net.v @ net.v == pytest.approx(1.2455138894e-01, rel=1e-9)
    factor = variance_factor(net.v**2, net.redundancy)
    assert factor.sigma_ratio == pytest.approx(1.0187876330e-01, rel=1e-9)
    sd = factor.sigma_ratio * np.sqrt(net.inverse.diagonal([0, 1])[:, 0, 0])
    np.testing.assert_allclose(sd, [2.7070075241e00, 7.2668688436e-06], rtol=1e-8)


def test_c9_calibration_line():
    """GUM H.3: line through eleven thermometer corrections, and its prediction at 30 degrees."""
    t = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010,
                  26.511])  # fmt: skip
    y = -np.array([0.171, 0.169, 0.166, 0.159, 0.164, 0.165, 0.156, 0.157, 0.159, 0.161, 0.160])
    net = adjust(np.column_stack([np.ones(11), t - 20]), y)
    s = np.sqrt(net.v @ net.v / net.redundancy.sum())
    covariance = s**2 * net.factor.joint([0], [1])[0]
    sd = np.sqrt(np.diagonal(covariance))
    digits = np.array([1e-4, 1e-5])  # of the printed values
    np.testing.assert_array_equal(np.rint(net.x / digits), [-1712, 218])
    np.testing.assert_array_equal(np.rint(sd / digits), [29, 67])
    assert covariance[0, 1] / sd.prod() == pytest.approx(-0.930, abs=5e-4)
    at30 = np.array([1.0, 10.0])
    assert at30 @ net.x == pytest.approx(-0.1494, abs=5e-5)
    assert np.sqrt(at30 @ covariance @ at30) == pytest.approx(0.0041, abs=5e-5)


def test_free_net_without_a_datum_is_singular():
    with pytest.raises(SingularSystemError):
        adjust(*levelling({}))

"""Robust kernels against their definition, published constants, GTSAM and statsmodels."""

from __future__ import annotations

import gtsam
import numpy as np
import pytest
import statsmodels.api as sm
from scipy.integrate import quad
from scipy.stats import chi, chi2

from jointmap.errors import SettingsError
from jointmap.solve.kernels import CONSTANTS, NAMES, Kernel, to_gtsam

ROBUST = tuple(CONSTANTS)
GRID = np.array([0.0, 1e-8, 0.5, 1.0, 1.5, 2.2, 3.0, 5.0, 10.0, 1e3])


def _mean(function, d: int, cut: float) -> float:
    """Mean over a chi-distributed norm; integrated on both sides of the kernel's corner."""

    def weighted(r: float) -> float:
        return function(r) * chi.pdf(r, d)

    sides = ((0.0, cut), (cut, cut + 40.0))
    return sum(quad(weighted, a, b, epsabs=1e-12, epsrel=1e-12, limit=300)[0] for a, b in sides)


def _efficiency(kernel: Kernel, d: int) -> float:
    def psi(r: float) -> float:
        return float(r * kernel.weight(np.array([r]), d)[0])

    c = kernel.constant_for(d)
    return _mean(lambda r: r * psi(r), d, c) ** 2 / (d * _mean(lambda r: psi(r) ** 2, d, c))


@pytest.mark.parametrize("name", ROBUST)
@pytest.mark.parametrize("d", range(1, 7))
def test_constants_lose_five_percent(name: str, d: int) -> None:
    # Constants carry seven decimals; the efficiency moves by less than 0.2 per unit of them.
    assert _efficiency(Kernel(name), d) == pytest.approx(0.95, abs=1e-7)


def test_efficiency_formula_against_simulation() -> None:
    """Location of 3-D Gaussian samples by the kernel: variance ratio to the mean is 0.95."""
    rng, kernel, n, runs = np.random.default_rng(5), Kernel("tukey"), 200, 4000
    x = rng.normal(size=(runs, n, 3))
    at = np.median(x, axis=1)
    for _ in range(30):
        w = kernel.weight(np.linalg.norm(x - at[:, None], axis=2), 3)
        at = np.einsum("rn,rnd->rd", w, x) / w.sum(axis=1)[:, None]
    # chi-square with 12000 degrees of freedom: a relative sd of 1.3 %, less as both share the data;
    # the other 1 % is for n = 200 instead of infinity.
    ratio = x.mean(axis=1).var() / at.var()
    assert ratio == pytest.approx(0.95, abs=0.015)


def test_published_constants() -> None:
    """Holland & Welsch (1977): 1.345, 2.385, 4.685, 2.985."""
    first = {name: table[0] for name, table in CONSTANTS.items()}
    assert round(first["huber"], 3) == 1.345
    assert round(first["cauchy"], 3) == 2.385
    assert round(first["tukey"], 3) == 4.685
    assert round(first["welsch"], 3) == 2.985


@pytest.mark.parametrize("d", range(1, 7))
def test_constants_with_a_closed_form(d: int) -> None:
    # Truncated: E[r^2; r < c] / d is the chi-square distribution of d + 2 degrees at c^2.
    c = Kernel("truncated").constant_for(d)
    assert chi2.cdf(c * c, d + 2) == pytest.approx(0.95, abs=1e-8)
    # Welsch: Gaussian integrals of exp(-r^2 / c^2) and its square.
    k = 1.0 / Kernel("welsch").constant_for(d) ** 2
    assert ((1 + 4 * k) / (1 + 2 * k) ** 2) ** (d / 2 + 1) == pytest.approx(0.95, abs=1e-7)


def test_careless_constants_cost_efficiency() -> None:
    """Cauchy at 0.1: 0.146; Geman-McClure at 1: 0.4436 (numerical integration elsewhere)."""
    assert _efficiency(Kernel("cauchy", 0.1), 1) == pytest.approx(0.1460, abs=5e-5)
    assert _efficiency(Kernel("geman-mcclure", 1.0), 1) == pytest.approx(0.4436, abs=5e-5)


@pytest.mark.parametrize(
    ("name", "c", "weight", "loss"),
    [
        # Printed by gtsam 4.3.0 at |x| = 0.5, 1, 3, 10.
        ("huber", 1.345, (1, 1, 0.448333, 0.1345), (0.125, 0.5, 3.130488, 12.545488)),
        (
            "cauchy",
            2.3849,
            (0.957896, 0.850473, 0.387244, 0.053817),
            (0.122331, 0.460602, 2.697981, 8.310296),
        ),
        (
            "tukey",
            4.6851,
            (0.977351, 0.91096, 0.348077, 0),
            (0.123582, 0.477567, 2.907085, 3.65836),
        ),
        (
            "welsch",
            2.9846,
            (0.972325, 0.893811, 0.364093, 1.3e-5),
            (0.123262, 0.472956, 2.832279, 4.453859),
        ),
        ("geman-mcclure", 1.0, (0.64, 0.25, 0.01, 9.8e-5), (0.1, 0.25, 0.45, 0.49505)),
    ],
)
def test_printed_values(name: str, c: float, weight: tuple, loss: tuple) -> None:
    x = np.array([0.5, 1.0, 3.0, 10.0])
    np.testing.assert_allclose(Kernel(name, c).weight(x, 1), weight, atol=5.1e-7)
    np.testing.assert_allclose(Kernel(name, c).loss(x, 1), loss, atol=5.1e-7)


def test_printed_weights_of_dynamic_covariance_scaling() -> None:
    """Printed by gtsam 4.3.0 for Phi = 1 at |x| = 0.5, 1, 3, 10."""
    weight = Kernel("dcs", 1.0).weight(np.array([0.5, 1.0, 3.0, 10.0]), 1)
    np.testing.assert_allclose(weight, [1.0, 1.0, 0.04, 0.000392], rtol=0, atol=5e-7)


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("d", [1, 2, 6])
def test_equals_gtsam(name: str, d: int) -> None:
    kernel = Kernel(name)
    theirs = to_gtsam(kernel, d)
    np.testing.assert_allclose(
        kernel.weight(GRID, d), [theirs.weight(x) for x in GRID], rtol=1e-12, atol=1e-15
    )
    np.testing.assert_allclose(
        kernel.loss(GRID, d), [theirs.loss(x) for x in GRID], rtol=1e-9, atol=1e-15
    )


def test_gtsam_weighs_the_norm_of_all_components() -> None:
    """A robust factor of six components: GTSAM's weighted error is our loss of the norm."""
    kernel, sigma = Kernel("cauchy"), 0.1
    base = gtsam.noiseModel.Isotropic.Sigma(6, sigma)
    robust = gtsam.noiseModel.Robust.Create(to_gtsam(kernel, 6), base)
    pose = gtsam.Pose3.Expmap(np.array([0.3, -0.2, 0.1, 0.5, 0.6, -0.7]))
    factor = gtsam.PriorFactorPose3(0, gtsam.Pose3(), robust)
    values = gtsam.Values()
    values.insert(0, pose)
    norm = np.linalg.norm(factor.unwhitenedError(values)) / sigma
    assert factor.error(values) == pytest.approx(kernel.loss(np.array([norm]), 6)[0], rel=1e-12)


@pytest.mark.parametrize("name", ROBUST)
def test_weight_is_the_slope_of_the_loss(name: str) -> None:
    kernel = Kernel(name)
    x = np.linspace(0.05, 12.0, 400)
    x = x[np.abs(x - kernel.constant_for(3)) > 1e-3]
    slope = (kernel.loss(x + 1e-6, 3) - kernel.loss(x - 1e-6, 3)) / 2e-6
    np.testing.assert_allclose(kernel.weight(x, 3), slope / x, atol=1e-7)


def _regression(kernel: Kernel) -> tuple[np.ndarray, float, np.ndarray]:
    """Iteratively reweighted regression of the stack loss data, scale by the median each round."""
    data = sm.datasets.stackloss.load()
    x = sm.add_constant(np.asarray(data.exog, dtype=float), prepend=True)
    y = np.asarray(data.endog, dtype=float)
    w = np.ones(len(y))
    for _ in range(200):
        root = np.sqrt(w)[:, None]
        beta = np.linalg.lstsq(root * x, root[:, 0] * y, rcond=None)[0]
        v = y - x @ beta
        scale = float(np.median(np.abs(v)) * 1.4826022185056018)
        w = kernel.weight(np.abs(v) / scale, 1)
    return beta, scale, w


def test_stack_loss_huber() -> None:
    """statsmodels documentation, RLM of stack loss with HuberT: -41.0265 0.8294 0.9261 -0.1278."""
    beta, scale, w = _regression(Kernel("huber", 1.345))
    np.testing.assert_allclose(beta, [-41.026498, 0.829384, 0.926066, -0.127847], atol=2e-6)
    assert scale == pytest.approx(2.440536, abs=2e-6)
    low = np.flatnonzero(w < 0.9)
    np.testing.assert_array_equal(low + 1, [3, 4, 21])
    np.testing.assert_allclose(w[low], [0.785813, 0.504867, 0.368091], atol=2e-6)


def test_stack_loss_tukey() -> None:
    """statsmodels 0.15, RLM of stack loss with TukeyBiweight."""
    beta, scale, w = _regression(Kernel("tukey", 4.685))
    np.testing.assert_allclose(beta, [-42.285351, 0.927557, 0.650718, -0.112333], atol=5e-4)
    assert scale == pytest.approx(2.281881, abs=5e-4)
    assert w[20] == pytest.approx(0.00222, abs=2e-5)


def test_stack_loss_against_statsmodels() -> None:
    data = sm.datasets.stackloss.load()
    theirs = sm.RLM(
        np.asarray(data.endog, dtype=float),
        sm.add_constant(np.asarray(data.exog, dtype=float)),
        M=sm.robust.norms.HuberT(t=1.345),
    ).fit(tol=1e-13, maxiter=500)
    beta, scale, _ = _regression(Kernel("huber", 1.345))
    np.testing.assert_allclose(beta, theirs.params, rtol=1e-9)
    assert scale == pytest.approx(theirs.scale, rel=1e-9)


def test_a_stated_constant_is_scaled_with_the_dimension() -> None:
    kernel = Kernel("cauchy", 1.0)
    assert kernel.constant_for(1) == 1.0
    assert kernel.constant_for(3) == pytest.approx(2.6655683 / 2.3849471)


def test_refused() -> None:
    with pytest.raises(SettingsError, match="allowed: none, huber"):
        Kernel("hubert")
    with pytest.raises(SettingsError, match="positive"):
        Kernel("huber", 0.0)
    with pytest.raises(ValueError, match="1 to 6"):
        Kernel("huber").constant_for(7)

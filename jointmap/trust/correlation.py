"""How long sightings share their error: from the autocorrelation of residuals.

Residuals of one robot, sensor and target, whitened to unit variance, have the autocorrelation

    rho(dt) = a exp(-dt / tau),   dt > 0,

when a part ``a`` of their variance follows a first-order Gauss-Markov process with correlation
time tau and the rest is white (the jump at zero lag is geostatistics' nugget; Matheron 1963). The
curve is fitted to residuals of a solution whose rows were weakened by their bursts. Restricted
maximum likelihood of the whole chain in the graph, which looks like the better way, is not: a
trajectory whose odometry is loose over a few centimetres swallows the fast part of the error,
and the estimates run off to no white noise and endless memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

from jointmap.graph.noise import (
    BURSTY,
    CORRELATION_TIME,
    Noise,
    NoiseTerm,
    residual_names,
    row_range,
    stated_rows,
    with_value,
)
from jointmap.graph.problem import Problem, State
from jointmap.solve.system import Part, System, linearise

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Edges of the classes of lag, in seconds; roughly geometric.
LAG_S = np.array([0.0, 0.3, 1.0, 2.0, 4.0, 8.0, 15.0, 30.0, 60.0])
#: Neighbours, in time order, that each row is paired with.
_NEIGHBOURS = (1, 2, 3, 5, 8, 12, 18, 27, 40, 60, 90)
#: Fewest pairs of a class that counts, and fewest classes for a fit.
LEAST_PAIRS, LEAST_CLASSES = 30, 3
#: Correlation times that the classes can tell.
TIME_BOUNDS_S = (0.5, 60.0)
#: A shared part below this, or below this many standard deviations of a correlation, is none.
LEAST_PART, LEAST_SIGMAS = 0.05, 4.0


@dataclass
class Curve:
    """Sums over pairs of one robot, sensor and component, by class of lag (C,)."""

    product: Floats
    lag: Floats
    pairs: Floats
    square: float
    rows: int

    @property
    def correlation(self) -> Floats:
        """Autocorrelation (C,) by class, NaN without enough pairs."""
        enough = self.pairs >= LEAST_PAIRS
        mean = self.product / np.where(enough, self.pairs, np.nan)
        return np.asarray(mean / max(self.square / max(self.rows, 1), 1e-300))


@dataclass(frozen=True)
class Fit:
    """Shared part ``a`` of the variance and correlation time (s), with their deviations."""

    part: float
    time_s: float
    part_sigma: float
    time_sigma: float


def residual_curves(
    problem: Problem, noise: Noise, system: System, state: State
) -> dict[tuple[str, str, str], Curve]:
    """Autocorrelation of the sightings' residuals by (robot, sensor, component)."""
    out: dict[tuple[str, str, str], Curve] = {}
    for part in system.parts:
        if part.block.kind not in BURSTY:
            continue
        residual = linearise(system, part, state, jacobians=False, total=True).residual
        robot, sensor = problem.robots[part.block.robot], part.block.sensor
        target = part.landmark
        if target is None:
            target = problem.keyframes.robot[part.block.b]
        for i, name in enumerate(residual_names(part.block, problem.dimension)):
            use = ~stated_rows(part.block)[:, i]
            if not use.any() or (robot, sensor, name, "constant") not in noise.terms:
                continue
            variance = single_variance(noise, (robot, sensor, name), part)
            unit = (residual[:, i] / np.sqrt(variance))[use]
            curve = out.setdefault((robot, sensor, name), _empty())
            _gather(curve, unit, target[use], part.block.t_s[use])
    return out


def single_variance(noise: Noise, key: tuple[str, str, str], part: Part) -> Floats:
    """Variance (n,) of a component of rows by themselves under the terms in force."""
    fixed = noise.value(*key, "constant") ** 2 + noise.value(*key, "correlated") ** 2
    growing = noise.value(*key, "per_m") ** 2 + noise.value(*key, "correlated_per_m") ** 2
    return np.maximum(fixed + growing * row_range(part.block) ** 2, 1e-18)


def _empty() -> Curve:
    n = len(LAG_S) - 1
    return Curve(np.zeros(n), np.zeros(n), np.zeros(n), 0.0, 0)


def _gather(curve: Curve, unit: Floats, target: Ints, t_s: Floats) -> None:
    order = np.lexsort((t_s, target))
    unit, target, t_s = unit[order], target[order], t_s[order]
    curve.square += float(unit @ unit)
    curve.rows += len(unit)
    n = len(LAG_S) - 1
    for step in _NEIGHBOURS:
        if step >= len(unit):
            break
        lag = t_s[step:] - t_s[:-step]
        cell = np.searchsorted(LAG_S, lag, side="right") - 1
        good = (target[step:] == target[:-step]) & (cell < n) & (lag > 0.0)
        cell = cell[good]
        curve.product += np.bincount(cell, (unit[step:] * unit[:-step])[good], n)
        curve.lag += np.bincount(cell, lag[good], n)
        curve.pairs += np.bincount(cell, minlength=n)


def fit_curve(curve: Curve) -> Fit | None:
    """Fit of ``a exp(-dt / tau)`` to a curve by least squares over its classes.

    Returns None where too few classes have pairs to tell.
    """
    rho = curve.correlation
    known = np.isfinite(rho)
    if known.sum() < LEAST_CLASSES:
        return None
    lag, rho = (curve.lag / np.maximum(curve.pairs, 1))[known], rho[known]
    noise = 1.0 / np.sqrt(curve.pairs[known])

    def model(q: Floats) -> Floats:
        return np.asarray(np.exp(-lag / np.exp(q[1])) / (1.0 + np.exp(-q[0])))

    def loss(q: Floats) -> float:
        beyond = max(0.0, q[1] - np.log(TIME_BOUNDS_S[1])) + max(0.0, np.log(0.5) - q[1])
        return float(((rho - model(q)) ** 2).sum() + beyond**2)

    starts = [(x, np.log(t)) for x in (-1.0, 2.0) for t in (2.0, 12.0)]
    found = [minimize(loss, s, method="Nelder-Mead", options={"xatol": 1e-4}) for s in starts]
    best = min(found, key=lambda f: float(f.fun))
    part = float(1.0 / (1.0 + np.exp(-best.x[0])))
    time = float(np.clip(np.exp(best.x[1]), *TIME_BOUNDS_S))
    if part < LEAST_PART or part < LEAST_SIGMAS * float(noise.min()):
        part = 0.0
    spread = float(np.sqrt(max(best.fun, 0.0) / max(len(rho) - 2, 1)))
    return Fit(part, time, spread, time * spread / max(part, spread))


def split_by_correlation(problem: Problem, noise: Noise, system: System, state: State) -> Noise:
    """Noise whose sightings' variance is divided into a white part and a shared one.

    The variance of a single row stays as it was; where the curve cannot be told the terms do too.
    """
    changed: list[NoiseTerm] = []
    for (robot, sensor, name), curve in residual_curves(problem, noise, system, state).items():
        terms = {
            t: noise.terms[(robot, sensor, name, t)]
            for t in ("constant", "per_m", "correlated", "correlated_per_m", CORRELATION_TIME)
            if (robot, sensor, name, t) in noise.terms
        }
        if CORRELATION_TIME not in terms or not all(t.free for t in terms.values()):
            continue
        fit = fit_curve(curve)
        if fit is None:
            continue
        for white, shared in (("constant", "correlated"), ("per_m", "correlated_per_m")):
            if white in terms and shared in terms:
                changed += _divided(terms[white], terms[shared], fit)
        time = terms[CORRELATION_TIME]
        changed.append(with_value(time, fit.time_s, fit.time_sigma, float(curve.pairs.sum())))
    return noise.updated(changed)


def _divided(white: NoiseTerm, shared: NoiseTerm, fit: Fit) -> list[NoiseTerm]:
    total = float(np.hypot(white.value, shared.value))
    out = []
    for term, part in ((white, 1.0 - fit.part), (shared, fit.part)):
        value = total * float(np.sqrt(part))
        relative = 0.5 * fit.part_sigma / max(part, fit.part_sigma, 1e-6)
        redundancy = max(np.nan_to_num(white.redundancy), np.nan_to_num(shared.redundancy))
        sigma = value * float(np.hypot(relative, 1.0 / np.sqrt(2.0 * max(redundancy, 1.0))))
        out.append(with_value(term, value, sigma, redundancy))
    return out

"""Noise of sightings that come in bursts: a white part and a part that the rows of a burst share.

With ``v_i = e_b + w_i`` for the rows i of burst b, the deviations from the burst's mean show the
white part alone, ``E (v_i - m_b)^2 = (1 - 1/n) s_i^2``, and the means show the shared one,
``E m_b^2 = r_b (c_b^2 + s_b^2 / n)``, where ``r_b = 1 - n h_b`` is what the adjustment leaves of a
burst's mean (h the mean share of its rows that the other measurements predict). Both moments are
weighted by the score of their variance, as restricted maximum likelihood weighs them, and every
term is multiplied by the ratio of its two sides. Gross errors are kept out by gates, and what the
gates cut from good values is put back.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.graph.noise import (
    BURSTY,
    DEFAULT_SIGMA,
    FLOOR_SHARE,
    Noise,
    NoiseTerm,
    TermKey,
    residual_names,
    row_range,
    with_value,
)
from jointmap.graph.problem import Problem
from jointmap.solve.system import Part, System
from jointmap.trust.quality import PartQuality, Quality
from jointmap.trust.variance import LEAST_REDUNDANCY, truncation_factor

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

GATE = 0.99
#: One update changes a sigma by at most this factor.
LARGEST_STEP = 3.0
#: Power of the ratio by which a sigma moves: plain ratios creep where several terms share the
#: variance, and twice as far is still stable where one term makes it all.
STRETCH = 1.5
#: The mean of a burst keeps at least this share of its variance in the moment equation; below it
#: the division would only amplify noise.
LEAST_SHARE = 0.05
_WHITE = ("constant", "per_m")
_SHARED = ("correlated", "correlated_per_m")


@dataclass
class Sides:
    """The two sides of the moment equation of one term.

    ``redundancy`` is the share of the residuals' redundancy that the term answers for, ``support``
    all of the redundancy in which it takes part.
    """

    term: NoiseTerm
    seen: float = 0.0
    expected: float = 0.0
    redundancy: float = 0.0
    support: float = 0.0


def burst_moments(
    problem: Problem, noise: Noise, system: System, quality: Quality
) -> dict[TermKey, Sides]:
    """Moment equations of every free term of the bursty kinds."""
    out: dict[TermKey, Sides] = {}
    for part, stats in zip(system.parts, quality.parts, strict=True):
        if part.block.kind not in BURSTY:
            continue
        names = residual_names(part.block, problem.dimension)
        residual = np.linalg.solve(part.whiten, stats.whitened[:, :, None])[:, :, 0]
        for i, name in enumerate(names):
            column = np.asarray(residual[:, i], dtype=np.float64)
            _component(out, problem, noise, part, stats, column, i, name)
    return out


def _component(
    out: dict[TermKey, Sides],
    problem: Problem,
    noise: Noise,
    part: Part,
    stats: PartQuality,
    residual: Floats,
    column: int,
    name: str,
) -> None:
    block = part.block
    robot, sensor = problem.robots[block.robot], block.sensor
    free = ~np.isfinite(block.sigma[:, column])
    if block.covariance is not None:
        free &= ~np.isfinite(block.covariance).all(axis=(1, 2))
    named = [noise.terms.get((robot, sensor, name, t)) for t in (*_WHITE, *_SHARED)]
    if not free.any() or not any(t is not None and t.free for t in named):
        return
    distance2 = row_range(block)[free] ** 2
    shapes = {"constant": np.ones(len(distance2)), "per_m": distance2}
    shapes |= {"correlated": shapes["constant"], "correlated_per_m": distance2}
    terms = {
        t: noise.terms[(robot, sensor, name, t)]
        for t in (*_WHITE, *_SHARED)
        if (robot, sensor, name, t) in noise.terms
    }
    white = sum((terms[t].value ** 2 * shapes[t] for t in _WHITE if t in terms), start=0.0)
    shared = sum((terms[t].value ** 2 * shapes[t] for t in _SHARED if t in terms), start=0.0)
    burst = np.unique(block.burst[free], return_inverse=True)[1]
    leverage = 1.0 - stats.numbers[free, column]
    _white_part(out, terms, shapes, residual[free], burst, np.asarray(white))
    _shared_part(
        out, terms, shapes, residual[free], burst, np.asarray(white), np.asarray(shared), leverage
    )


def _white_part(
    out: dict[TermKey, Sides],
    terms: dict[str, NoiseTerm],
    shapes: dict[str, Floats],
    residual: Floats,
    burst: Ints,
    white: Floats,
) -> None:
    count = np.bincount(burst)
    centre = _median(residual, burst)
    keep = (residual - centre[burst]) ** 2 < 25.0 * white
    n = np.bincount(burst, weights=keep, minlength=len(count))
    mean = np.bincount(burst, weights=residual * keep, minlength=len(count)) / np.maximum(n, 1)
    share = 1.0 - 1.0 / np.maximum(n[burst], 1)
    z2 = (residual - mean[burst]) ** 2 / white
    inside = keep & (n[burst] > 1) & (z2 < chi2.ppf(GATE, 1) * share)
    factor = float(truncation_factor(1, GATE))
    for name in _WHITE:
        term = terms.get(name)
        if term is None or not term.free:
            continue
        score = (shapes[name] / white)[inside]
        sides = out.setdefault(term.key, Sides(term))
        sides.seen += float((z2[inside] * score).sum()) / factor
        sides.expected += float((share[inside] * score).sum())
        sides.redundancy += term.value**2 * float((share[inside] * score).sum())
        sides.support += float(share[inside].sum())


def _shared_part(
    out: dict[TermKey, Sides],
    terms: dict[str, NoiseTerm],
    shapes: dict[str, Floats],
    residual: Floats,
    burst: Ints,
    white: Floats,
    shared: Floats,
    leverage: Floats,
) -> None:
    size = np.bincount(burst)
    mean = _median(residual, burst)

    def average(values: Floats) -> Floats:
        return np.asarray(np.bincount(burst, weights=values) / size)

    # The median of n Gaussian rows has pi/2 times the variance of their mean (large n).
    spread = average(white) / size * np.where(size > 2, np.pi / 2, 1.0)
    total = average(shared) + spread
    left = np.clip(1.0 - size * average(leverage), LEAST_SHARE, 1.0)
    z2 = mean**2 / total
    inside = z2 < chi2.ppf(GATE, 1) * left
    factor = float(truncation_factor(1, GATE))
    for name in _SHARED:
        term = terms.get(name)
        if term is None or not term.free:
            continue
        score = (average(shapes[name]) / total)[inside]
        sides = out.setdefault(term.key, Sides(term))
        sides.seen += float((z2[inside] * score).sum()) / factor
        sides.expected += float((left[inside] * score).sum())
        sides.redundancy += term.value**2 * float((left[inside] * score).sum())
        sides.support += float(left[inside].sum())


def _median(values: Floats, group: Ints) -> Floats:
    """Median (G,) of values by group."""
    order = np.lexsort((values, group))
    size = np.bincount(group)
    start = np.cumsum(size) - size
    ordered = values[order]
    return np.asarray(0.5 * (ordered[start + (size - 1) // 2] + ordered[start + size // 2]))


def moved(sides: Sides, default: float) -> tuple[NoiseTerm, float] | None:
    """A term after one update and its ratio of change; None where the data cannot tell.

    A change within half of the estimate's own standard deviation counts as none, and so does one
    of a term that answers for less than ten residuals.
    """
    if sides.support < LEAST_REDUNDANCY or sides.expected <= 0.0:
        return None
    ratio = float(np.sqrt(max(sides.seen, 1e-12) / sides.expected)) ** STRETCH
    ratio = float(np.clip(ratio, 1 / LARGEST_STEP, LARGEST_STEP))
    floor = FLOOR_SHARE * default
    value = max(sides.term.value * ratio, floor)
    sigma = value / np.sqrt(2.0 * max(sides.redundancy, 1.0))
    idle = value <= 3 * floor or sides.redundancy < LEAST_REDUNDANCY
    settled = idle or abs(value - sides.term.value) < 0.5 * sigma
    return (
        with_value(sides.term, value, sigma, sides.redundancy),
        1.0 if settled else max(ratio, 1 / ratio),
    )


def solved(sums: dict[TermKey, Sides], noise: Noise) -> tuple[Noise, float]:
    """Noise after one update of every term in ``sums``, and the largest ratio of change."""
    changed, largest = [], 1.0
    for key, sides in sums.items():
        made = moved(sides, DEFAULT_SIGMA.get(key[3] if key[2] == "odometry" else key[2], 1.0))
        if made is not None:
            changed.append(made[0])
            largest = max(largest, made[1])
    return noise.updated(changed), largest

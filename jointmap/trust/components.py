"""Variance components of the noise terms, robustly and from redundancy.

The covariance of each residual block is ``C = sum_k theta_k^2 V_k``. Restricted maximum likelihood
gives for every term (Koch 1986; Foerstner 1979 for one shape per group)

    sum w^T S_k w = sum tr(R S_k),   S_k = W V_k W^T,

with the whitened residuals w and their redundancy matrices R. The terms are updated by the ratio
of the two sides until it is one; at the fixed point this is the Helmert/REML estimate. Gross errors
are kept out by a gate on ``T = w^T R^+ w``; what the gate cuts from good measurements is put back
by the truncation factor of the chi-square distribution (F_{d+2}(g) / F_d(g)).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.graph.noise import (
    BURSTY,
    Noise,
    NoiseTerm,
    TermKey,
    block_covariance,
    term_shapes,
    whitening,
    with_value,
)
from jointmap.graph.problem import Problem
from jointmap.solve.system import Part, System
from jointmap.trust.bursts import GATE, Sides, burst_moments, solved
from jointmap.trust.quality import PartQuality, Quality
from jointmap.trust.variance import LEAST_REDUNDANCY, truncation_factor

Floats = NDArray[np.float64]

#: One update changes a sigma by at most this factor.
LARGEST_STEP = 4.0


def update_noise(
    problem: Problem, noise: Noise, system: System, quality: Quality, *, first: bool = False
) -> tuple[Noise, float]:
    """One update of every free term.

    Parameters
    ----------
    first : the values in force may be far off: scale each block by the median of its statistics,
        which no gate distorts

    Returns
    -------
    noise : with the new values; terms with too little redundancy keep theirs
    change : largest ratio of change that exceeds half of a sigma's own standard deviation
    """
    if first:
        return _scaled_by_median(problem, noise, system, quality), LARGEST_STEP
    sums = burst_moments(problem, noise, system, quality)
    for part, stats in zip(system.parts, quality.parts, strict=True):
        if part.block.kind not in BURSTY:
            _add(sums, problem, noise, part, stats)
    return solved(sums, noise)


def update_motion_noise(
    problem: Problem, noise: Noise, system: System, quality: Quality
) -> tuple[Noise, float]:
    """One update of every free term that is not of sightings: odometry, fixes, closures.

    Returns the noise and the largest change of a block's typical sigma. Not of a single term: two
    that look alike on the path of a robot can trade places for ever without changing anything.
    """
    sums: dict[TermKey, Sides] = {}
    for part, stats in zip(system.parts, quality.parts, strict=True):
        if part.block.kind not in BURSTY:
            _add(sums, problem, noise, part, stats)
    made, _ = solved(sums, noise)
    changes = [
        _typical_change(problem, noise, made, part)
        for part in system.parts
        if part.block.kind not in BURSTY
    ]
    return made, max(changes, default=1.0)


def _typical_change(problem: Problem, before: Noise, after: Noise, part: Part) -> float:
    """Largest ratio of sigmas, at least 1, over the components; the median over a part's rows."""
    old, new = (
        np.einsum("nii->ni", block_covariance(part.block, problem, noise))
        for noise in (before, after)
    )
    good = (old > 0) & (new > 0)
    ratio = np.log(np.where(good, new, 1.0) / np.where(good, old, 1.0))
    return float(np.exp(0.5 * np.abs(np.median(ratio, axis=0)).max(initial=0.0)))


def _scaled_by_median(problem: Problem, noise: Noise, system: System, quality: Quality) -> Noise:
    ratios: dict[tuple[str, str, str, str], list[tuple[float, int]]] = {}
    terms: dict[tuple[str, str, str, str], NoiseTerm] = {}
    for part, stats in zip(system.parts, quality.parts, strict=True):
        t, dof = stats.statistic()
        tested = dof > 0
        if stats.numbers[tested].sum() < LEAST_REDUNDANCY:
            continue
        ratio = float(np.median(t[tested] / chi2.ppf(0.5, dof[tested])))
        for term in term_shapes(part.block, problem, noise)[0]:
            if term.free and not term.term.startswith("correlated"):
                terms[term.key] = term
                ratios.setdefault(term.key, []).append((ratio, int(tested.sum())))
    changed = []
    for key, found in ratios.items():
        weights = np.array([n for _, n in found], dtype=np.float64)
        scale = float(np.sqrt(np.average([r for r, _ in found], weights=weights)))
        scale = float(np.clip(scale, 1 / LARGEST_STEP, LARGEST_STEP))
        changed.append(with_value(terms[key], terms[key].value * scale, np.nan, np.nan))
    return noise.updated(changed)


def _add(
    sums: dict[TermKey, Sides],
    problem: Problem,
    noise: Noise,
    part: Part,
    stats: PartQuality,
) -> None:
    block = part.block
    terms, shapes, _ = term_shapes(block, problem, noise)
    if not any(t.free for t in terms):
        return
    w = part.whiten
    if block.kind == "odometry" and problem.dimension == 3 and problem.gravity_aligned:
        w, shapes, stats = _without_tilt(w, shapes, stats)
    t, dof = stats.statistic()
    inside = (dof > 0) & (t <= chi2.ppf(GATE, np.maximum(dof, 1)))
    factor = truncation_factor(np.maximum(dof, 1), GATE)
    left = float(np.trace(stats.redundancy[inside], axis1=1, axis2=2).sum())
    for term, shape in zip(terms, shapes, strict=True):
        if not term.free:
            continue
        s = w @ shape @ np.swapaxes(w, 1, 2)
        seen = np.einsum("ni,nij,nj->n", stats.whitened, s, stats.whitened) / factor
        # A row's share in the term: how much of its variance the term makes, times its redundancy.
        expected = np.einsum("nij,nji->n", stats.redundancy, s)
        total = sums.setdefault(term.key, Sides(term))
        total.seen += float(seen[inside].sum())
        total.expected += float(expected[inside].sum())
        total.redundancy += term.value**2 * float(expected[inside].sum())
        total.support += left


def _without_tilt(
    whiten: Floats, shapes: Floats, stats: PartQuality
) -> tuple[Floats, Floats, PartQuality]:
    """Heading and translation alone (body z rotation, x, y, z) of spatial odometry increments.

    Gravity-aligned odometry agrees with its own tilt by construction; roll and pitch would make its
    rotation noise look like nothing.
    """
    keep = np.array([2, 3, 4, 5])
    back = np.linalg.inv(whiten)
    residual = np.einsum("nij,nj->ni", back, stats.whitened)[:, keep]
    left = (back @ stats.redundancy @ np.swapaxes(back, 1, 2))[:, keep[:, None], keep]
    covariance = (back @ np.swapaxes(back, 1, 2))[:, keep[:, None], keep]
    again = whitening(np.asarray(covariance, dtype=np.float64))
    return (
        again,
        shapes[:, :, keep[:, None], keep],
        PartQuality(
            np.einsum("nij,nj->ni", again, residual), again @ left @ np.swapaxes(again, 1, 2)
        ),
    )

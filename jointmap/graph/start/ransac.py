"""Random samples as a cross-check of cliques, and how much agreement is mere coincidence."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import binom, chi2

from jointmap.graph.start.align import Form, align, minimal_points, refine
from jointmap.graph.start.consistency import GATE, PointSet

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


#: Widening of the gate that counts accidental agreement.
WIDE = 4.0


@dataclass(frozen=True)
class Consensus:
    """A transform (b = R a + t) and the associations that agree with it."""

    rotation: Floats
    translation: Floats
    inliers: Bools


def trials_needed(inlier_share: float, sample: int, confidence: float = 0.99) -> int:
    """Return the number of samples after which one is clean with the given probability.

    N = log(1 - p) / log(1 - w^s), rounded up (Fischler & Bolles, Comm. ACM 24(6), 1981).
    """
    clean = inlier_share**sample
    if clean >= 1.0:
        return 1
    return int(np.ceil(np.log1p(-confidence) / np.log1p(-clean)))


def residual_statistic(a: PointSet, b: PointSet, rotation: Floats, translation: Floats) -> Floats:
    """Squared Mahalanobis distance (..., N) of every association under transforms (..., d, d)."""
    predicted = np.einsum("...ij,nj->...ni", rotation, a.position) + translation[..., None, :]
    turned = np.einsum("...ij,njk,...lk->...nil", rotation, a.covariance, rotation)
    covariance = b.covariance + turned
    residual = b.position - predicted
    solved = np.linalg.solve(covariance, residual[..., None])[..., 0]
    return np.asarray(np.einsum("...i,...i->...", residual, solved))


def ransac(
    a: PointSet,
    b: PointSet,
    adjacency: Bools,
    form: Form,
    rng: np.random.Generator,
    trials: int = 600,
    gate: float = GATE,
) -> Consensus | None:
    """Return the sampled transform that most associations agree with; None without any sample.

    Samples are drawn among pairs that are consistent already, which raises the share of clean
    ones far above that of blind draws. The last step refits to the inliers.
    """
    first, second = np.nonzero(np.triu(adjacency))
    if len(first) == 0:
        return None
    pick = rng.integers(0, len(first), size=min(trials, 4 * len(first)))
    sample = np.stack([first[pick], second[pick]], axis=1)
    if minimal_points(form) == 3:
        third = rng.integers(0, a.n, size=len(sample))
        good = adjacency[sample[:, 0], third] & adjacency[sample[:, 1], third]
        sample = np.column_stack([sample, third])[good]
    fit = align(a.position[sample], b.position[sample], form=form)
    keep = ~fit.degenerate
    if not keep.any():
        return None
    rotation, translation = fit.rotation[keep], fit.translation[keep]
    limit = chi2.ppf(gate, a.position.shape[1])
    # A transform from two points is itself uncertain: a wider gate ranks, the refit decides.
    count = (residual_statistic(a, b, rotation, translation) <= 4.0 * limit).sum(axis=1)
    best = int(np.argmax(count))
    return reconcile(a, b, rotation[best], translation[best], form, gate)


def reconcile(
    a: PointSet, b: PointSet, rotation: Floats, translation: Floats, form: Form, gate: float = GATE
) -> Consensus:
    """Refit to the agreeing associations and gather again, from a wide gate to the stated one."""
    limit = chi2.ppf(gate, a.position.shape[1])
    inliers = np.zeros(a.n, dtype=bool)
    for width in (4.0, 2.0, 1.0, 1.0, 1.0):
        inliers = residual_statistic(a, b, rotation, translation) <= width * limit
        if np.count_nonzero(inliers) < minimal_points(form):
            break
        turned = np.einsum("ij,njk,lk->nil", rotation, a.covariance[inliers], rotation)
        fit = refine(
            a.position[inliers],
            b.position[inliers],
            b.covariance[inliers] + turned,
            rotation,
            translation,
            form,
            steps=2,
        )
        if bool(fit.degenerate):
            break
        rotation, translation = fit.rotation, fit.translation
    return Consensus(rotation, translation, np.asarray(inliers))


def chance_of_agreement(
    a: PointSet, b: PointSet, rotation: Floats, translation: Floats, gate: float = GATE
) -> float:
    """Return the probability that a wrong association happens to agree with a transform.

    Measured on the maps themselves: the share of *crossed* pairs (a_i, b_j), i != j, that agree.
    It knows of rows and clusters of landmarks what an area ratio does not. Few pairs agree within
    the gate itself; within a gate WIDE times as wide there are WIDE^d times as many, which counts
    them better. The larger of both estimates holds.
    """
    if a.n < 2:
        return 1.0
    d = a.position.shape[1]
    predicted = a.position @ rotation.T + translation
    turned = rotation @ a.covariance @ rotation.T
    covariance = b.covariance[None, :] + turned[:, None]
    residual = b.position[None, :] - predicted[:, None]
    solved = np.linalg.solve(covariance, residual[..., None])[..., 0]
    distance = np.einsum("ijk,ijk->ij", residual, solved)
    # The same point twice in a list is no crossed pair.
    crossed = np.linalg.norm(b.position[:, None] - b.position[None, :], axis=-1) > 1e-9
    if not crossed.any():
        return 1.0
    limit, total = chi2.ppf(gate, d), float(crossed.sum())
    near = float((distance[crossed] <= limit).sum()) / total
    wide = (float((distance[crossed] <= limit * WIDE**2).sum()) + 1.0) / total / WIDE**d
    return float(min(max(near, wide), 1.0))


def expected_accidents(n: int, support: int, chance: float, pair_rate: float, sample: int) -> float:
    """Return how many sets of ``support`` agreeing associations wrong ones alone would form.

    Hypotheses are the consistent samples among n wrong associations, C(n, s) pair_rate^C(s, 2);
    each gathers a binomial number of the others: E = hypotheses x P(Bin(n - s, chance) >=
    support - s) / C(support, s), since a set of that size is found from each of its samples.
    """
    if support < sample or n < sample:
        return float(max(n, 1))
    pairs = sample * (sample - 1) // 2
    hypotheses = _choose(n, sample) * pair_rate**pairs
    tail = float(binom.sf(support - sample - 1, n - sample, min(chance, 1.0)))
    return float(hypotheses * tail / _choose(support, sample))


def _choose(n: int, k: int) -> float:
    result = 1.0
    for i in range(k):
        result *= (n - i) / (i + 1)
    return result

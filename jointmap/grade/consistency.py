"""Whether an estimator's covariance tells how wrong it is.

Errors are taken in the estimator's own datum: where one of its poses is exact, relative to that
pose of the reference (both sides in one datum, cross-covariances from the stored state), in the site
frame as they are, otherwise after alignment. The statistic is the normalised square against the
truth, ``q = mean e' P_c^+ e / rank`` with P_c the claim; it is one for an honest claim. Of the truth
the drawn errors f of the reference know: with the same data, ``e = d + f`` and

    E q = mean (d' P_c^+ d + tr P_c^+ P_b) / rank,

which needs no inverse of the difference P_c - P_b. A trajectory is far fewer than its number of
poses: the band is that of chi-square with the effective number of values in time.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.grade.aligned import Aligned
from jointmap.grade.cases import difference_covariance, least_ratio, normalised_square
from jointmap.grade.kernels import relative_draws, turned_draws
from jointmap.grade.match import Matched
from jointmap.grade.online import OnlineEstimate
from jointmap.grade.series import block_length, block_means, effective_size
from jointmap.grade.settings import GradeSettings
from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

LEVELS = (0.50, 0.90, 0.95, 0.99)
#: A pose is exact when its claimed variance is below this share of the estimator's median one.
EXACT = 0.02
#: Claims below this share of the median are left out: nothing is known of an exact pose.
LEAST_CLAIM = 1e-4
#: Share of instants with an impossible claim from which it is evidence.
IMPOSSIBLE_SHARE = 0.1


@dataclass(frozen=True)
class Basis:
    """Errors of an estimator in one datum for both sides.

    ``rows`` (n,) into the matched instants, ``error`` (n, dof) body tangent d, ``claim`` and
    ``reference`` (n, dof, dof) covariances P_c and P_b, ``draws`` (S, n, dof) drawn f with
    ``e = d + f``, ``words`` what the datum is, ``spent`` degrees of freedom of alignment.
    """

    rows: Ints
    error: Floats
    claim: Floats
    reference: Floats
    draws: Floats
    words: str
    spent: int


@dataclass(frozen=True)
class Consistency:
    """The judgement on one estimator's covariance.

    ``nees`` mean normalised square per degree of freedom with the covariance of the case, ``rank``
    mean rank; ``factor`` q with ``lower`` and ``upper``; ``band_lower``, ``band_upper`` for an
    honest claim; ``effective`` independent values; ``impossible`` share of instants whose claim no
    estimator with these data can reach; ``coverage`` shares inside 50, 90, 95, 99 %; ``growth`` of
    q from the first half to the second with its interval.
    """

    estimator: str
    robot: str
    case: str
    basis: str
    n: int
    nees: float
    rank: float
    factor: float
    lower: float
    upper: float
    band_lower: float
    band_upper: float
    effective: float
    impossible: float
    coverage: tuple[float, ...]
    growth: float
    growth_lower: float
    growth_upper: float
    verdict: str
    reason: str


def basis_of(
    estimate: OnlineEstimate, matched: Matched, made: Aligned, stage: Stage
) -> Basis | None:
    """The datum in which the claims can be judged; None without any claim."""
    variance = np.einsum("nii->n", matched.cov)
    claimed = np.isfinite(variance)
    if not claimed.any():
        return None
    if estimate.frame == "site" and stage.site:
        return _absolute(matched, claimed, stage)
    anchors = _anchors(estimate, matched, stage, variance)
    if anchors is not None:
        return _anchored(matched, anchors, stage)
    return _after_alignment(matched, made, claimed, stage)


def _anchors(
    estimate: OnlineEstimate, matched: Matched, stage: Stage, variance: Floats
) -> Ints | None:
    """For every row the row of the exact pose that its frame starts from; None without one."""
    robot = stage.located.robot[matched.row]
    typical = float(np.nanmedian(variance))
    firsts = {int(r): int(np.flatnonzero(robot == r)[0]) for r in np.unique(robot)}
    exact = {r: k for r, k in firsts.items() if variance[k] <= EXACT * typical}
    if estimate.frame == "own":
        if set(exact) != set(firsts):
            return None
        return np.array([firsts[int(r)] for r in robot], np.int64)
    if not exact:
        return None
    best = min(exact.values(), key=lambda k: (variance[k], matched.t_s[k]))
    return np.full(len(matched), best, np.int64)


def _anchored(matched: Matched, anchors: Ints, stage: Stage) -> Basis:
    located, g = stage.located, stage.group
    part = located.component[matched.row]
    rows = np.flatnonzero((part == part[anchors]) & (np.arange(len(matched)) != anchors))
    rows = rows[np.isfinite(matched.cov[rows]).all(axis=(1, 2))]
    start, end = matched.take(anchors[rows]), matched.take(rows)
    _, reference = stage.joint.relative_covariance(located.take(start.row), located.take(end.row))
    # The located stamp and the estimate's own differ by less than the tolerance: the pose is
    # compared at the estimate's stamp, the covariance is that of the instant.
    own = g.between(start.reference, end.reference)
    error = g.local(own, g.between(start.estimate, end.estimate))
    back = g.adjoint(g.inverse(own))
    f = relative_draws(stage.posterior.errors, start.row, end.row, back)
    # log(exp(f) exp(xi)) = xi + J_l^-1(xi) f
    left = g.right_jacobian_inverse(-error)
    draws = turned_draws(left, f)
    carried = left @ reference @ np.swapaxes(left, 1, 2)
    return Basis(
        rows, error, end.cov, carried, draws, "relative to the exact first pose of its frame", 0
    )


def _absolute(matched: Matched, claimed: Bools, stage: Stage) -> Basis:
    rows = np.flatnonzero(claimed)
    chosen = matched.take(rows)
    g = stage.group
    error = g.local(chosen.reference, chosen.estimate)
    left = g.right_jacobian_inverse(-error)
    draws = turned_draws(left, stage.posterior.errors, chosen.row)
    reference = left @ stage.located.cov[chosen.row] @ np.swapaxes(left, 1, 2)
    return Basis(rows, error, chosen.cov, reference, draws, "in the site frame", 0)


def _after_alignment(matched: Matched, made: Aligned, claimed: Bools, stage: Stage) -> Basis:
    """Errors after alignment, rotated into the body; covariance of the reference from its draws."""
    rows = np.flatnonzero(claimed & ~made.unaligned)
    g = stage.group
    turn = np.swapaxes(g.rotation(matched.reference[rows]), 1, 2)
    place = np.einsum("nij,nj->ni", turn, made.place[rows])
    place_draws = turned_draws(turn, made.place_draws, rows)
    if g.dim == 2:
        error = np.concatenate([place, made.turn[rows]], axis=1)
        draws = np.concatenate([place_draws, made.turn_draws[:, rows]], axis=2)
    else:
        turned = np.einsum("nij,nj->ni", turn, made.turn[rows])
        turned_by = turned_draws(turn, made.turn_draws, rows)
        error = np.concatenate([turned, place], axis=1)
        draws = np.concatenate([turned_by, place_draws], axis=2)
    reference = np.einsum("sni,snj->nij", draws, draws) / len(draws)
    return Basis(
        rows, error, matched.cov[rows], reference, draws,
        "after alignment, whose degrees of freedom are subtracted", made.dof,
    )  # fmt: skip


def scale_bounds(stage: Stage, settings: GradeSettings) -> tuple[float, float]:
    """How far the reference's own variances may be too large or too small.

    Two standard deviations of the setting either way. Where the residuals of the reference are
    smaller than its noise model (chi-square under its degrees of freedom), or where its sigmas were
    enlarged after the solution (hold-out), its covariance may be larger than that of an optimal
    batch by as much; where residuals are larger it may be too small.
    """
    wide = 2.0 * settings.scale_sigma
    meta = stage.reference.meta
    ratio = 1.0
    if meta.get("chi2") and meta.get("dof"):
        ratio = float(meta["chi2"]) / float(meta["dof"])
    enlarged = enlargement(meta)
    return float(np.exp(-wide) * min(1.0, ratio) / enlarged), float(np.exp(wide) * max(1.0, ratio))


def enlargement(meta: Mapping[str, Any]) -> float:
    """Factor on variances, at least one, by which a reference enlarged its claims."""
    holdout = (meta.get("evidence") or {}).get("holdout") or {}
    factor = holdout.get("sigma_factor") if isinstance(holdout, Mapping) else None
    return max(1.0, float(factor) ** 2) if factor else 1.0


def judge(
    estimator: str,
    robot: str,
    basis: Basis,
    chosen: Bools,
    matched: Matched,
    stage: Stage,
    settings: GradeSettings,
    case: str,
    *,
    shares: bool,
) -> Consistency | None:
    """Judge the claims of the chosen rows of a basis; None when too few are left."""
    variance = np.einsum("nii->n", basis.claim)
    chosen = chosen & (variance > LEAST_CLAIM * np.median(variance))
    index = np.flatnonzero(chosen)
    if len(index) < 20:
        return None
    d, claim, reference = basis.error[index], basis.claim[index], basis.reference[index]
    instant = stage.instant[matched.row[basis.rows[index]]]
    nees, rank, _ = normalised_square(d, difference_covariance(claim, reference, case))
    by_case = nees / np.maximum(rank, 1)
    root, dims = _whitener(claim)
    plain = np.einsum("nij,nj->ni", root, d)
    f = turned_draws(root, basis.draws, index)
    low_scale, high_scale = scale_bounds(stage, settings)
    factor, lower, upper, per_row = _factor(plain, f, dims, case, low_scale, high_scale, settings)
    series, grid = _by_instant(per_row, instant)
    effective = effective_size(series)
    # Alignment takes its degrees of freedom out of what the errors can show.
    kept = max(1.0 - basis.spent / max(effective * float(dims.mean()), basis.spent + 1.0), 0.05)
    factor, lower, upper = factor / kept, lower / kept, upper / kept
    freedom = effective * float(dims.mean())
    tail = 0.5 * (1.0 - settings.level)
    band = np.asarray(chi2.ppf([tail, 1.0 - tail], freedom)) / freedom
    ratio = least_ratio(claim, reference)
    impossible = float(np.nanmean(ratio < low_scale)) if case == "same" else float("nan")
    growth = _growth(series, grid, settings) if shares else (float("nan"),) * 3
    verdict, reason = _verdict(case, factor, lower, upper, band, effective, impossible, low_scale)
    return Consistency(
        estimator, robot, case, basis.words, len(index), float(by_case.mean()), float(rank.mean()),
        factor, lower, upper, float(band[0]), float(band[1]), effective, impossible,
        _coverage(plain, f, dims, case, nees, rank), *growth, verdict, reason,
    )  # fmt: skip


def _whitener(claim: Floats) -> tuple[Floats, Floats]:
    """Roots (n, dof, dof) of the claims' pseudo-inverses, and their ranks."""
    size = np.sqrt(np.maximum(np.einsum("nii->ni", claim), 1e-300))
    values, vectors = np.linalg.eigh(claim / (size[:, :, None] * size[:, None, :]))
    kept = values > 1e-9
    root = np.where(kept, np.where(kept, values, 1.0) ** -0.5, 0.0)
    white = np.swapaxes(vectors * root[:, None, :], 1, 2) / size[:, None, :]
    return np.asarray(white), kept.sum(axis=1).astype(np.float64)


def _factor(
    d: Floats,
    f: Floats,
    dims: Floats,
    case: str,
    low: float,
    high: float,
    settings: GradeSettings,
) -> tuple[float, float, float, Floats]:
    """Statistic q with its interval, and its rows."""
    tail = 0.5 * (1.0 - settings.level)
    weight = 1.0 / dims
    a = (d**2).sum(axis=1) * weight
    b = np.einsum("sni,sni->sn", f, f) * weight
    x = 2.0 * np.einsum("sni,ni->sn", f, d.astype(f.dtype)) * weight
    square, floor, cross = float(a.mean()), b.mean(axis=1), x.mean(axis=1)
    if case == "same":
        values = [square + np.sqrt(c) * cross + c * floor for c in (low, 1.0, high)]
        rows = a + b.mean(axis=0)
    elif case == "independent":
        rows = a - b.mean(axis=0)
        share = np.sqrt(max(float(rows.mean()), 0.0) / square) if square > 0 else 0.0
        values = [square + share * np.sqrt(c) * cross - c * floor for c in (high, 1.0, low)]
    else:
        rows = a
        roots = [np.sqrt(c * floor) for c in (high, high)]
        lower = max(0.0, np.sqrt(square) - float(np.quantile(roots[0], 1 - tail))) ** 2
        upper = (np.sqrt(square) + float(np.quantile(roots[1], 1 - tail))) ** 2
        return float("nan"), float(lower), float(upper), np.asarray(rows)
    lower, upper = np.quantile(values[0], tail), np.quantile(values[2], 1.0 - tail)
    return float(values[1].mean()), float(lower), float(upper), np.asarray(rows)


def _by_instant(rows: Floats, instant: Ints) -> tuple[Floats, Ints]:
    sums, counts = np.bincount(instant, rows), np.bincount(instant)
    grid = np.flatnonzero(counts)
    return sums[grid] / counts[grid], grid


def _coverage(
    d: Floats, f: Floats, dims: Floats, case: str, nees: Floats, rank: Ints
) -> tuple[float, ...]:
    """Shares inside the claimed regions: against drawn truths, or with the case's covariance."""
    if case == "same":
        step = np.linspace(0, len(f) - 1, min(len(f), 100)).astype(int)
        squares = ((d[None] + f[step]) ** 2).sum(axis=2)
        limits = [np.asarray(chi2.ppf(p, dims)) for p in LEVELS]
        return tuple(float((squares <= limit[None]).mean()) for limit in limits)
    if case == "independent":
        return tuple(float((nees <= chi2.ppf(p, np.maximum(rank, 1))).mean()) for p in LEVELS)
    return (float("nan"),) * len(LEVELS)


def _growth(series: Floats, grid: Ints, settings: GradeSettings) -> tuple[float, float, float]:
    """Statistic q of the second half over that of the first, with a block bootstrap interval."""
    half = len(series) // 2
    if half < 20:
        return (float("nan"),) * 3
    means = []
    for k, part in enumerate((series[:half], series[half:])):
        length = block_length(part)
        drawn, _ = block_means(
            part, np.ones(len(part)), length, settings.bootstrap, settings.seed + 5 + k
        )
        means.append((float(part.mean()), drawn))
    value = means[1][0] / max(means[0][0], 1e-300)
    drawn = means[1][1] / np.maximum(means[0][1], 1e-300)
    tail = 0.5 * (1.0 - settings.level)
    low, high = np.quantile(drawn, [tail, 1.0 - tail])
    return float(value), float(low), float(high)


def _verdict(
    case: str,
    factor: float,
    lower: float,
    upper: float,
    band: Floats,
    effective: float,
    impossible: float,
    low_scale: float,
) -> tuple[str, str]:
    """What can be concluded, and from what."""
    few = f"{effective:.0f} independent values"
    if case == "same" and impossible > IMPOSSIBLE_SHARE and lower > 1.0:
        return (
            "overconfident",
            f"at {100 * impossible:.0f} % of the instants it claims less than {low_scale:.2f} of the "
            "variance that the batch solution of all data has; no estimator can (no truth needed)",
        )
    if lower > band[1]:
        return (
            "overconfident",
            f"its variances would have to be {factor:.3g} times as large ({lower:.3g} to "
            f"{upper:.3g}); an honest claim gives at most {band[1]:.3g} with {few}"
            if np.isfinite(factor)
            else f"its variances are at least {lower:.3g} times too small, whatever the dependence",
        )
    if case == "unknown":
        return (
            "no verdict",
            "the dependence on the reference is unknown: that the bound is kept proves nothing",
        )
    if upper < band[0]:
        return (
            "conservative",
            f"its variances are larger than needed: {factor:.3g} of them would do "
            f"({lower:.3g} to {upper:.3g}; {few})",
        )
    return (
        "not contradicted",
        f"factor {factor:.3g} ({lower:.3g} to {upper:.3g}) against {band[0]:.3g} to {band[1]:.3g} for "
        f"an honest claim with {few}",
    )

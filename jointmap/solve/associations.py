"""Which associations hold: a decision for each robot's label as a whole.

Every track has a landmark of its own; an accepted association ties it to the shared landmark by a
tight factor. The redundancy of that factor gives the exact statistic of leaving it out (Baarda 1968:
the deleted residual is v / r), so the decision needs no solve per association. A rejected track
stays where its own sightings put it; how far that is from the landmark it claims, and from every
other landmark, decides whether it returns and what it agrees with instead.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree
from scipy.stats import chi2
from scipy.stats import f as f_distribution

from jointmap.graph.problem import Tracks

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Joint covariance (n, 2 dim, 2 dim) of the positions of pairs of landmark variables.
JointCovariance = Callable[[Ints, Ints], Floats]

#: Quantiles of the accepted statistics from which their common scale is read: a low one finds what
#: is far out whatever slipped in, the upper one then reads the spread of the rest, tails included.
_FIRST_QUANTILE, _SCALE_QUANTILE = 0.3, 0.75
#: Statistics beyond this many times the first scale's expectation are no part of the rest.
_FAR_OUT = 25.0
_SCALE_LEAST = 8
#: Up to this scale the noise model explains the associations; beyond, their statistics are taken to
#: have the tails of Student's distribution with so many degrees of freedom (common practice).
_WELL_MODELLED, _STUDENT_DOF = 1.5, 6.0
#: Associations beyond which the gate tightens in proportion to their number.
MANY = 100
#: A rejected track returns only when it agrees better than this share of the limit, so that one on
#: the edge does not come and go.
_RETURN_SHARE = 0.5
#: An alternative must agree at least this well, and the claim at least this much worse.
ALTERNATIVE_GATE = 0.99


@dataclass(frozen=True)
class Evidence:
    """What a solve says about the associations.

    ``linked`` (k,) tracks tied in it with ``statistic`` and ``dof`` (k,) of their factors;
    ``own`` (T,) and ``shared`` (T,) landmark variables of each track (shared -1: private label);
    ``positions`` (L, dim), ``component`` (L,) -1 where a landmark has no value.
    """

    linked: Ints
    statistic: Floats
    dof: Floats
    own: Ints
    shared: Ints
    positions: Floats
    component: Ints
    joint: JointCovariance


@dataclass(frozen=True)
class Review:
    """Decision per track (T,).

    ``statistic`` is normalised by ``scale`` (the common variance factor of good associations,
    at least 1) and NaN where nothing tests; ``alternative`` is the shared landmark that the track
    agrees with instead (-1: none); ``unresolved`` marks claims where two labels contradict each
    other and nothing tells which is wrong.
    """

    accepted: Bools
    statistic: Floats
    alternative: Ints
    unresolved: Bools
    scale: float
    changed: bool


def review(tracks: Tracks, accepted: Bools, evidence: Evidence, gate: float) -> Review:
    """One round of decisions.

    Parameters
    ----------
    accepted : (T,) present decisions
    gate : probability that a right association passes

    Returns
    -------
    Review
    """
    n = len(tracks.robot)
    dim = evidence.positions.shape[1]
    scale = _common_scale(evidence, dim)
    # Of thousands of right associations a fixed gate would reject some in every survey (Bonferroni).
    gate = 1.0 - (1.0 - gate) * min(1.0, MANY / max(len(evidence.linked), 1))
    limit = _limit(gate, dim, scale)
    statistic = np.full(n, np.nan)
    tested = evidence.dof >= dim
    # Tags are tested in position and orientation: brought to the scale of a position's gate.
    fair = chi2.ppf(gate, dim) / chi2.ppf(gate, np.maximum(evidence.dof, 1.0))
    statistic[evidence.linked[tested]] = (evidence.statistic * fair)[tested] / scale
    out = accepted.copy()
    out[_worst(tracks, statistic, accepted, limit)] = False
    removed = accepted & ~out
    alternative = np.full(n, -1, dtype=np.int64)
    claimed = (tracks.claim >= 0) & ~tracks.rejected
    present = claimed & (evidence.component[evidence.own] >= 0)
    waiting = np.flatnonzero(present & ~accepted)
    supported = _supported(tracks, accepted, evidence)
    # A landmark that one track alone holds is no more certain than the claim that contradicts it.
    contested = np.zeros(len(supported), dtype=bool)
    contested[tracks.claim[waiting]] = True
    asked = np.flatnonzero(present & (~accepted | (contested & (supported < 2))[tracks.claim]))
    alternative[asked] = _alternatives(tracks, asked, supported, evidence, scale)
    unresolved = np.zeros(n, dtype=bool)
    if not removed.any():
        _readmit(
            tracks,
            waiting,
            accepted,
            out,
            statistic,
            alternative,
            supported,
            evidence,
            scale,
            limit,
        )
        _settle(tracks, out, statistic, alternative, unresolved, supported, evidence, scale, limit)
    out[tracks.forced & claimed] = True
    out[tracks.rejected] = False
    return Review(out, statistic, alternative, unresolved, scale, bool((out != accepted).any()))


def _limit(gate: float, dim: int, scale: float) -> float:
    """Limit of a scaled statistic: chi-square, or Student's where the model misses something.

    Errors that the noise model does not know are not equally large for every landmark; a scale read
    from all of them is then the middle of a spread of variances (Lange, Little & Taylor 1989).
    """
    if scale <= _WELL_MODELLED:
        return float(chi2.ppf(gate, dim))
    return float(dim * f_distribution.ppf(gate, dim, _STUDENT_DOF))


def _common_scale(evidence: Evidence, dim: int) -> float:
    """Variance factor of the accepted associations, at least 1.

    Bursts share errors that a noise model of rows does not know; the statistic of right
    associations is then too large by a common factor, which their own distribution shows.
    """
    t = evidence.statistic[evidence.dof >= dim]
    if len(t) < _SCALE_LEAST:
        return 1.0
    first = max(1.0, float(np.quantile(t, _FIRST_QUANTILE) / chi2.ppf(_FIRST_QUANTILE, dim)))
    rest = t[t < _FAR_OUT * first * dim]
    return max(first, float(np.quantile(rest, _SCALE_QUANTILE) / chi2.ppf(_SCALE_QUANTILE, dim)))


def _worst(tracks: Tracks, statistic: Floats, accepted: Bools, limit: float) -> Ints:
    """Tracks to reject in this round: the worst of each landmark, none far better than the worst.

    One wrong association raises the statistics of its neighbours; taking only the largest ones
    keeps the right ones from being dragged along.
    """
    bad = np.flatnonzero(accepted & ~tracks.forced & (statistic > limit))
    if not len(bad):
        return bad
    bad = bad[np.argsort(-statistic[bad], kind="stable")]
    bad = bad[statistic[bad] >= 0.3 * statistic[bad[0]]]
    _, first = np.unique(tracks.claim[bad], return_index=True)
    return np.asarray(bad[np.sort(first)])


def _supported(tracks: Tracks, accepted: Bools, evidence: Evidence) -> Ints:
    """Number of accepted tracks (L,) of each shared landmark."""
    on = accepted & (evidence.component[evidence.own] >= 0) & (tracks.claim >= 0)
    return np.bincount(tracks.claim[on], minlength=len(evidence.component)).astype(np.int64)


def distance(evidence: Evidence, a: Ints, b: Ints, scale: float) -> Floats:
    """Squared Mahalanobis distance (n,) of landmark pairs by their joint covariance, over scale.

    Infinite where the two are not in one component.
    """
    out = np.full(len(a), np.inf)
    same = (evidence.component[a] >= 0) & (evidence.component[a] == evidence.component[b])
    if not same.any():
        return out
    i, j = a[same], b[same]
    d = evidence.positions[i] - evidence.positions[j]
    dim = d.shape[1]
    c = evidence.joint(i, j)
    cross = c[:, :dim, dim:]
    cov = c[:, :dim, :dim] + c[:, dim:, dim:] - cross - np.swapaxes(cross, 1, 2)
    cov += 1e-9 * np.eye(dim)
    out[same] = np.einsum("ni,ni->n", d, np.linalg.solve(cov, d[:, :, None])[:, :, 0]) / scale
    return out


def _alternatives(
    tracks: Tracks, waiting: Ints, supported: Ints, evidence: Evidence, scale: float
) -> Ints:
    """Shared landmark (len(waiting),) that each rejected track coincides with, -1 if none."""
    best = np.full(len(waiting), -1, dtype=np.int64)
    candidates = np.flatnonzero((supported > 0) & (evidence.component >= 0))
    if not len(waiting) or not len(candidates):
        return best
    tree = cKDTree(evidence.positions[candidates])
    k = min(4, len(candidates))
    _, near = tree.query(evidence.positions[evidence.own[waiting]], k=k)
    near = candidates[np.reshape(near, (len(waiting), k))]
    d2 = distance(evidence, np.repeat(evidence.own[waiting], k), near.ravel(), scale).reshape(
        len(waiting), k
    )
    d2[near == tracks.claim[waiting][:, None]] = np.inf
    pick = d2.argmin(axis=1)
    rows = np.arange(len(waiting))
    good = d2[rows, pick] < chi2.ppf(ALTERNATIVE_GATE, evidence.positions.shape[1])
    best[good] = near[rows[good], pick[good]]
    return best


def _readmit(
    tracks: Tracks,
    waiting: Ints,
    accepted: Bools,
    out: Bools,
    statistic: Floats,
    alternative: Ints,
    supported: Ints,
    evidence: Evidence,
    scale: float,
    limit: float,
) -> None:
    """Take back tracks that agree with their landmark as others place it."""
    there = waiting[(supported[tracks.claim[waiting]] > 0)]
    there = there[evidence.component[tracks.claim[there]] >= 0]
    if not len(there):
        return
    d2 = distance(evidence, evidence.own[there], tracks.claim[there], scale)
    finite = np.isfinite(d2)
    statistic[there[finite]] = d2[finite]
    out[there[d2 < _RETURN_SHARE * limit]] = True


def _settle(
    tracks: Tracks,
    out: Bools,
    statistic: Floats,
    alternative: Ints,
    unresolved: Bools,
    supported: Ints,
    evidence: Evidence,
    scale: float,
    limit: float,
) -> None:
    """Landmarks that nobody holds, or one against others: the largest group that agrees takes it."""
    claimed = (tracks.claim >= 0) & ~tracks.rejected & (evidence.component[evidence.own] >= 0)
    held = np.bincount(tracks.claim[claimed & out], minlength=len(evidence.component))
    asking = np.bincount(tracks.claim[claimed], minlength=len(evidence.component))
    order = np.argsort(tracks.claim, kind="stable")
    start = np.searchsorted(tracks.claim[order], np.arange(len(held) + 1))
    # Those who hold a name keep it against fewer claims than they are themselves.
    open_names = (asking > 0) & ((held == 0) | ((asking > 1) & (asking - held >= held)))
    for landmark in np.flatnonzero(open_names):
        mine = order[start[landmark] : start[landmark + 1]]
        mine = mine[claimed[mine]]
        i, j = np.triu_indices(len(mine), 1)
        d2 = distance(evidence, evidence.own[mine[i]], evidence.own[mine[j]], scale)
        agree = np.eye(len(mine), dtype=bool)
        agree[i, j] = agree[j, i] = d2 < limit
        size = agree.sum(axis=1)
        firmly = (alternative[mine] >= 0) & (supported[np.maximum(alternative[mine], 0)] > 1)
        free = alternative[mine] < 0
        # Agreement counts first, then a label that does not sit on another landmark.
        rank = np.lexsort((-tracks.n_sightings[mine], ~free, firmly, -size))
        group = agree[rank[0]]
        rivals = ~group & (size == size[rank[0]])
        if len(mine) == 1 or (size[rank[0]] > 1 and not (rivals & ~firmly).any()):
            pass
        elif free.sum() == 1 and firmly.sum() == len(mine) - 1:
            group = free
        else:
            # As many against as many: nothing tells whose label is right, the name goes to none.
            group = np.zeros(len(mine), dtype=bool)
            unresolved[mine[~firmly]] = True
        out[mine] = group
        if len(mine) > 1:
            other = np.array([d2[(i == k) | (j == k)].min() for k in range(len(mine))])
            statistic[mine] = np.where(np.isfinite(other), other, np.nan)

"""One unbroken run of a robot at a time: chunk after chunk is fitted to the map grown so far.

Odometry predicts each chunk; what it shares with the map (tracks, closures to earlier chunks)
corrects it. Several hypotheses are scored by a bounded cost, so that a wrong label, a gross error
or a prediction gone astray loses against what the majority says.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap import frames
from jointmap.graph.start.align import (
    Form,
    align,
    masked_inverse,
    minimal_points,
    point_jacobian,
)
from jointmap.graph.start.chunks import Chunks
from jointmap.graph.start.condense import Condensed
from jointmap.graph.start.consistency import PointSet, consistency_matrix, maximum_clique
from jointmap.graph.start.net import Joints, Seen

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Squared distance at which a statement stops to count against a hypothesis, per component.
_BOUND = 4.0
#: The same for the prediction by odometry: it may be off, but not for free.
_PRIOR_BOUND = 25.0
#: A prediction with a mean bounded cost per component below this needs no other hypothesis.
_GOOD = 1.5
#: Closures that propose a pose of one chunk; more are judged but do not propose.
_MOST_PROPOSALS = 12


@dataclass(frozen=True)
class Matches:
    """What one chunk shares with the map: points, and poses that closures propose."""

    at: Floats
    covariance: Floats
    known: Floats
    known_covariance: Floats
    proposed: Floats
    proposed_covariance: Floats

    @property
    def n(self) -> int:
        """Number of statements."""
        return len(self.at) + len(self.proposed)


@dataclass(frozen=True)
class Chained:
    """Anchor poses (C, *shape), each run in its own frame (the first anchor of the run is where
    dead reckoning has it), and per chunk how many statements agreed, by which the map was met.
    """

    poses: Floats
    agreed: Ints


def chain(condensed: Condensed, chunks: Chunks, unit: Ints, start: Floats, form: Form) -> Chained:
    """Fit all chunks one after the other.

    Parameters
    ----------
    unit : (C,) number of the unbroken run that a chunk belongs to
    start : (C, *shape) anchor frames by dead reckoning; the first of a run stays there
    """
    lie = frames.group(start.shape[1] if start.ndim == 3 else 2)
    poses, agreed = start.copy(), np.zeros(chunks.n, dtype=np.int64)
    table = _Table(condensed, unit)
    tracks = int(condensed.seen.point.max(initial=-1)) + 1
    d = lie.dim
    known = np.full((tracks, d), np.nan)
    spread = np.zeros((tracks, d, d))
    prior = np.zeros(lie.dof)
    for c in range(chunks.n):
        fresh = c == 0 or unit[c] != unit[c - 1]
        if fresh:
            known[:] = np.nan
            prior = np.zeros(lie.dof)
        else:
            poses[c] = lie.compose(poses[c - 1], chunks.joint[c])
            prior = prior + _growth(chunks, c, lie.dof)
        seen = table.seen_of(c)
        matches = table.matches(c, seen, known, spread, poses, lie)
        if matches.n and not fresh:
            poses[c], prior, agreed[c] = fit_chunk(matches, poses[c], prior, form)
        _remember(known, spread, condensed.seen, seen, poses[c], prior, lie)
    return Chained(poses, agreed)


def _growth(chunks: Chunks, c: int, dof: int) -> Floats:
    """Variance in tangent order that the joint to the chunk before adds."""
    turn, shift = chunks.joint_turn[c], chunks.joint_shift[c]
    if dof == 3:
        return np.array([shift, shift, turn])
    return np.array([turn] * 3 + [shift] * 3)


class _Table:
    """Statements by chunk; closures only between chunks of one run, listed at the later one."""

    def __init__(self, condensed: Condensed, unit: Ints) -> None:
        self.seen = condensed.seen
        self.order = np.argsort(self.seen.pose, kind="stable")
        self.by_chunk = self.seen.pose[self.order]
        self.closures = condensed.closures
        inside = unit[self.closures.a] == unit[self.closures.b]
        later = np.where(inside, np.maximum(self.closures.a, self.closures.b), -1)
        self.closure_order = np.argsort(later, kind="stable")
        self.later = later[self.closure_order]

    def seen_of(self, c: int) -> Ints:
        lo, hi = np.searchsorted(self.by_chunk, [c, c + 1])
        return np.asarray(self.order[lo:hi])

    def matches(
        self, c: int, seen: Ints, known: Floats, spread: Floats, poses: Floats, lie: frames.Group
    ) -> Matches:
        track = self.seen.point[seen]
        shared = np.isfinite(known[track, 0])
        seen, track = seen[shared], track[shared]
        lo, hi = np.searchsorted(self.later, [c, c + 1])
        rows = self.closure_order[lo:hi]
        pose, covariance = self._proposals(self.closures, rows, c, poses, lie)
        return Matches(
            self.seen.at[seen],
            self.seen.covariance[seen],
            known[track],
            spread[track],
            pose,
            covariance,
        )

    @staticmethod
    def _proposals(
        closures: Joints, rows: Ints, c: int, poses: Floats, lie: frames.Group
    ) -> tuple[Floats, Floats]:
        """Pose of chunk c by each closure, with the covariance of its body tangent."""
        forward = closures.b[rows] == c
        relative, covariance = closures.pose[rows], closures.covariance[rows]
        other = np.where(forward, closures.a[rows], closures.b[rows])
        move = lie.adjoint(relative)
        back = move @ covariance @ np.swapaxes(move, -1, -2)
        pick = forward.reshape(-1, *([1] * len(lie.shape)))
        relative = np.where(pick, relative, lie.inverse(relative))
        covariance = np.where(forward[:, None, None], covariance, back)
        return lie.compose(poses[other], relative), covariance


def fit_chunk(
    matches: Matches, predicted: Floats, prior: Floats, form: Form
) -> tuple[Floats, Floats, int]:
    """Return the pose that most statements and the prediction agree on, its variance, and how many.

    The variance (dof,) is in tangent order, of the pose relative to the map.
    """
    lie = frames.group(2 if form == "planar" else 3)
    hypotheses = [_descend(matches, predicted, predicted, prior, form)]
    if _cost(matches, hypotheses[0], predicted, prior) > _GOOD * _size(matches, lie):
        starts = [*_proposed(matches), *_aligned(matches, form)]
        hypotheses += [_descend(matches, s, predicted, prior, form) for s in starts]
    costs = [_cost(matches, h, predicted, prior) for h in hypotheses]
    best = hypotheses[int(np.argmin(costs))]
    information = _information(matches, best, predicted, prior, form)[0]
    variance = np.diag(masked_inverse(information, form)).copy()
    points, closures = _distances(matches, best)
    agreed = int((points <= chi2.ppf(0.997, lie.dim)).sum())
    agreed += int((closures <= chi2.ppf(0.997, lie.dof)).sum())
    return best, variance, agreed


def _size(matches: Matches, lie: frames.Group) -> float:
    return float(len(matches.at) * lie.dim + len(matches.proposed) * lie.dof)


def _proposed(matches: Matches) -> list[Floats]:
    some = np.linspace(0, len(matches.proposed) - 1, min(_MOST_PROPOSALS, len(matches.proposed)))
    return [matches.proposed[i] for i in np.unique(some.astype(int))]


def _aligned(matches: Matches, form: Form) -> list[Floats]:
    """Return the pose by closed form over the largest consistent set of points."""
    if len(matches.at) < minimal_points(form):
        return []
    a, b = (
        PointSet(matches.at, matches.covariance),
        PointSet(matches.known, matches.known_covariance),
    )
    members, _ = maximum_clique(consistency_matrix(a, b, form), node_cap=2000)
    if len(members) < minimal_points(form):
        return []
    fit = align(matches.at[members], matches.known[members], form=form)
    if bool(fit.degenerate):
        return []
    lie = frames.group(matches.at.shape[1])
    return [lie.build(fit.rotation, fit.translation)]


def _distances(matches: Matches, pose: Floats) -> tuple[Floats, Floats]:
    """Squared Mahalanobis distance of every point and every proposed pose."""
    lie = frames.group(matches.at.shape[1])
    residual = matches.known - lie.transform(pose, matches.at)
    turn = lie.rotation(pose)
    covariance = matches.known_covariance + turn @ matches.covariance @ turn.T
    points = np.einsum("ni,nij,nj->n", residual, np.linalg.inv(covariance), residual)
    tangent = lie.local(matches.proposed, pose)
    weight = np.linalg.inv(matches.proposed_covariance)
    return np.asarray(points), np.asarray(np.einsum("ni,nij,nj->n", tangent, weight, tangent))


def _cost(matches: Matches, pose: Floats, predicted: Floats, prior: Floats) -> float:
    lie = frames.group(matches.at.shape[1])
    points, closures = _distances(matches, pose)
    tangent = lie.local(predicted, pose)
    own = float(np.sum(tangent**2 / np.maximum(prior, 1e-12)))
    bounded = np.minimum(points, _BOUND * lie.dim).sum()
    bounded += np.minimum(closures, _BOUND * lie.dof).sum()
    return float(bounded + min(own, _PRIOR_BOUND))


def _descend(
    matches: Matches, start: Floats, predicted: Floats, prior: Floats, form: Form
) -> Floats:
    lie = frames.group(matches.at.shape[1])
    pose = start
    for _ in range(5):
        information, gradient = _information(matches, pose, predicted, prior, form)
        step = masked_inverse(information, form) @ gradient
        pose = lie.retract(pose, step)
        if np.abs(step).max() < 1e-5:
            break
    return np.asarray(pose)


def _information(
    matches: Matches, pose: Floats, predicted: Floats, prior: Floats, form: Form
) -> tuple[Floats, Floats]:
    """Normal equations of one pose with Cauchy weights on every statement and the prediction."""
    lie = frames.group(matches.at.shape[1])
    points, closures = _distances(matches, pose)
    turn = lie.rotation(pose)
    covariance = matches.known_covariance + turn @ matches.covariance @ turn.T
    weight = np.linalg.inv(covariance) * (1.0 / (1.0 + points / (5.7 * lie.dim)))[:, None, None]
    jacobian = turn @ point_jacobian(matches.at)
    residual = matches.known - lie.transform(pose, matches.at)
    information: Floats = np.einsum("nji,njk,nkl->il", jacobian, weight, jacobian)
    gradient: Floats = np.einsum("nji,njk,nk->i", jacobian, weight, residual)
    if len(matches.proposed):
        share = 1.0 / (1.0 + closures / (5.7 * lie.dof))
        trust = np.linalg.inv(matches.proposed_covariance) * share[:, None, None]
        tangent = lie.local(pose, matches.proposed)
        information = np.asarray(information + trust.sum(axis=0))
        gradient = np.asarray(gradient + np.einsum("nij,nj->i", trust, tangent))
    tangent = lie.local(pose, predicted)
    own: Floats = 1.0 / np.maximum(prior, 1e-12)
    own /= 1.0 + float(np.sum(tangent**2 * own)) / (5.7 * lie.dof)
    return np.asarray(information + np.diag(own)), np.asarray(gradient + own * tangent)


def _remember(
    known: Floats,
    spread: Floats,
    seen: Seen,
    rows: Ints,
    pose: Floats,
    prior: Floats,
    lie: frames.Group,
) -> None:
    """Add a chunk's points to the map, or sharpen those that agree."""
    track = seen.point[rows]
    turn = lie.rotation(pose)
    at = lie.transform(pose, seen.at[rows])
    jacobian = turn @ point_jacobian(seen.at[rows])
    covariance = turn @ seen.covariance[rows] @ turn.T
    covariance = covariance + np.einsum(
        "nij,j,nkj->nik", jacobian, np.minimum(prior, 1e6), jacobian
    )
    new = np.isnan(known[track, 0])
    known[track[new]], spread[track[new]] = at[new], covariance[new]
    old = np.flatnonzero(~new)
    difference = at[old] - known[track[old]]
    total = covariance[old] + spread[track[old]]
    gain = spread[track[old]] @ np.linalg.inv(total)
    distance = np.einsum("ni,nij,nj->n", difference, np.linalg.inv(total), difference)
    good = distance <= chi2.ppf(0.997, lie.dim)
    rows_ok = track[old[good]]
    known[rows_ok] += np.einsum("nij,nj->ni", gain[good], difference[good])
    spread[rows_ok] -= gain[good] @ spread[rows_ok]

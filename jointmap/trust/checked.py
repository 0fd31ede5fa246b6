"""Trust of every stretch of trajectory and every landmark.

What lies outside a robot's first and last observation that the other data check is dead reckoning,
and is called ``unchecked``. Between two such observations the trajectory is held from both sides;
it is ``weak`` where odometry alone carries it so far that its drift exceeds twice the sigma that
the robot's observed poses usually have, or where for a while everything rests on one single
landmark, whose error or wrong label nothing would reveal. An observation or a landmark counts as
checked by its redundancy: below 0.1 it is weak, below 0.01 unchecked.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import Problem
from jointmap.solve.system import Part, System
from jointmap.trust.quality import Quality
from jointmap.trust.redundancy import UNCHECKED, WEAK

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

CHECKED_CODE, WEAK_CODE, UNCHECKED_CODE = 0, 1, 2
#: A stretch is weak when odometry alone drifts by more than this many usual sigmas over it.
DRIFT_RATIO = 2.0
#: Seeing one single target for longer than this on either side is resting on it alone.
WHILE_S = 20.0
_EXTERNAL = ("sighting", "encounter", "fix", "closure")


@dataclass(frozen=True)
class Trust:
    """Codes 0 checked, 1 weak, 2 unchecked.

    ``keyframe`` (K,); ``interval`` (K,) of the stretch from each keyframe to the robot's next one
    (the last of a robot repeats its keyframe); ``landmark`` (L,), 2 for landmarks without value.
    ``keyframes_seeing`` (L,) counts the checked or weak keyframes that see a landmark.
    """

    keyframe: Ints
    interval: Ints
    landmark: Ints
    keyframes_seeing: Ints


def judge_trust(
    problem: Problem,
    system: System,
    quality: Quality,
    n_landmarks: int,
    sigma: Floats | None = None,
) -> Trust:
    """Trust codes of a finished solve.

    Parameters
    ----------
    sigma : (K,) claimed standard deviation of each keyframe's position in its worst direction, in
        the datum of the result; None (the datum is still to be chosen): drift is not judged
    """
    k = len(problem.keyframes.t_s)
    sigma = np.full(k, np.inf) if sigma is None else sigma
    drift2 = np.full(k, np.inf)
    events: list[tuple[Ints, Ints]] = []
    for part, stats in zip(system.parts, quality.parts, strict=True):
        block = part.block
        if block.kind == "odometry":
            inverse = np.linalg.inv(part.whiten)
            place = slice(0, 2) if problem.dimension == 2 else slice(3, 6)
            covariance = (inverse @ np.swapaxes(inverse, 1, 2))[:, place, place]
            drift2[part.key_a] = np.linalg.eigvalsh(covariance)[:, -1]
        elif block.kind in _EXTERNAL:
            good = stats.numbers.max(axis=1) > WEAK
            target = _target(part)
            events.append((part.key_a[good], target[good]))
            if block.kind in ("encounter", "closure"):
                events.append((part.key_b[good], -1 - part.key_a[good]))
    keyframe = np.full(k, UNCHECKED_CODE, dtype=np.int64)
    interval = np.full(k, UNCHECKED_CODE, dtype=np.int64)
    at = np.concatenate([e[0] for e in events] or [np.zeros(0, np.int64)])
    target = np.concatenate([e[1] for e in events] or [np.zeros(0, np.int64)])
    order = np.lexsort((target, at))
    at, target = at[order], target[order]
    for r in range(len(problem.robots)):
        lo, hi = problem.keyframes.first[r], problem.keyframes.first[r + 1]
        mine = slice(*np.searchsorted(at, [lo, hi]))
        keyframe[lo:hi], interval[lo:hi] = _stretches(
            problem.keyframes.t_s[lo:hi], at[mine] - lo, target[mine], drift2[lo:hi], sigma[lo:hi]
        )
    landmark, seeing = _landmarks(system, quality, keyframe, n_landmarks)
    return Trust(keyframe, interval, landmark, seeing)


def _target(part: Part) -> Ints:
    """A number for what each row looked at; fixes and closures are never the same thing twice."""
    if part.landmark is not None:
        return part.landmark
    if part.block.kind == "encounter":
        return -1 - part.key_b
    return -1 - np.arange(len(part.index)) - (1 << 40)


def _stretches(
    t_s: Floats, at: Ints, target: Ints, drift2: Floats, sigma: Floats
) -> tuple[Ints, Ints]:
    """Codes (k,) of one robot's keyframes and of the stretch behind each.

    ``at`` (e,) keyframe of each checked observation, in order; ``target`` (e,) what it looked at.
    """
    n = len(t_s)
    keyframe = np.full(n, UNCHECKED_CODE, dtype=np.int64)
    interval = np.full(n, UNCHECKED_CODE, dtype=np.int64)
    if not len(at):
        return keyframe, interval
    anchors = np.unique(at)
    drift = np.sqrt(np.add.reduceat(drift2, anchors))
    far = drift > DRIFT_RATIO * float(np.median(sigma[anchors]))
    alone = _alone(t_s, at, target, anchors)
    lonely = alone.copy()
    lonely[:-1] = alone[:-1] & alone[1:]
    code = np.where(far | lonely, WEAK_CODE, CHECKED_CODE)
    which = np.searchsorted(anchors, np.arange(n), side="right") - 1
    inside = (which >= 0) & (which < len(anchors) - 1)
    interval[inside] = code[which[inside]]
    keyframe[inside] = interval[inside]
    keyframe[anchors] = np.where(alone, WEAK_CODE, CHECKED_CODE)
    return keyframe, interval


def _alone(t_s: Floats, at: Ints, target: Ints, anchors: Ints) -> Bools:
    """Anchors (a,) around which, within a while, nothing but one target is seen."""
    stamp = t_s[at]
    change = np.flatnonzero(np.diff(target)) + 1
    before = np.searchsorted(change, np.arange(len(at)), side="right") - 1
    last_other = np.where(before >= 0, stamp[change[np.maximum(before, 0)] - 1], -np.inf)
    after = before + 1
    more = after < len(change)
    index = np.minimum(after, max(len(change) - 1, 0))
    next_other = np.where(more, stamp[change[index]] if len(change) else np.inf, np.inf)
    single = (stamp - last_other > WHILE_S) & (next_other - stamp > WHILE_S)
    out = np.ones(len(t_s), dtype=bool)
    np.logical_and.at(out, at, single)
    return out[anchors]


def _landmarks(
    system: System, quality: Quality, keyframe: Ints, n_landmarks: int
) -> tuple[Ints, Ints]:
    """A landmark is checked by its sightings' redundancy, counted once per burst."""
    best = np.zeros(n_landmarks)
    bursts = np.zeros(n_landmarks, dtype=np.int64)
    seeing = np.zeros(n_landmarks, dtype=np.int64)
    for part, stats in zip(system.parts, quality.parts, strict=True):
        if part.block.kind == "control" and part.landmark is not None:
            best[part.landmark] = 1.0
        if part.block.kind != "sighting" or part.landmark is None:
            continue
        shares = np.stack([part.landmark, part.block.burst], axis=1)
        _, first = np.unique(shares, axis=0, return_index=True)
        np.add.at(best, part.landmark[first], stats.numbers.min(axis=1)[first])
        np.add.at(bursts, part.landmark[first], 1)
        views = np.unique(np.stack([part.landmark, part.key_a], axis=1), axis=0)
        good = keyframe[views[:, 1]] < UNCHECKED_CODE
        np.add.at(seeing, views[good, 0], 1)
    # A shared landmark is seen through the tracks that are tied to it.
    for counts in (best, bursts, seeing):
        np.add.at(counts, system.links.shared, counts[system.links.own])
        counts[system.links.own] = counts[system.links.shared]
    code = np.where(
        (best > WEAK) & (bursts > 1),
        CHECKED_CODE,
        np.where(best > UNCHECKED, WEAK_CODE, UNCHECKED_CODE),
    )
    return code.astype(np.int64), seeing

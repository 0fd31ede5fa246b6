"""Trust of every stretch of trajectory and every landmark, from redundancy.

Odometry between two instants at which something else checks the robot is itself checked by as much
as its redundancy over the stretch; what lies outside the first and last such instant is dead
reckoning and is called ``unchecked``. Thresholds are those of CHECKS 2d: redundancy below 0.1 is
weak, below 0.01 unchecked.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import Problem
from jointmap.solve.system import System
from jointmap.trust.quality import Quality
from jointmap.trust.redundancy import UNCHECKED, WEAK

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]

CHECKED_CODE, WEAK_CODE, UNCHECKED_CODE = 0, 1, 2
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


def judge_trust(problem: Problem, system: System, quality: Quality, n_landmarks: int) -> Trust:
    """Trust codes of a finished solve."""
    k = len(problem.keyframes.t_s)
    anchored = np.zeros(k, dtype=bool)
    odometry = np.zeros(k)
    for part, stats in zip(system.parts, quality.parts, strict=True):
        redundancy = stats.numbers
        if part.block.kind == "odometry":
            # The least checked direction of an increment decides, not their mean.
            odometry[part.key_a] = redundancy.min(axis=1)
        elif part.block.kind in _EXTERNAL:
            good = redundancy.max(axis=1) > WEAK
            anchored[part.key_a[good]] = True
            if part.block.kind in ("encounter", "closure"):
                anchored[part.key_b[good]] = True
    keyframe = np.full(k, UNCHECKED_CODE, dtype=np.int64)
    interval = np.full(k, UNCHECKED_CODE, dtype=np.int64)
    for r in range(len(problem.robots)):
        lo, hi = problem.keyframes.first[r], problem.keyframes.first[r + 1]
        keyframe[lo:hi], interval[lo:hi] = _stretches(anchored[lo:hi], odometry[lo:hi])
    landmark, seeing = _landmarks(system, quality, keyframe, n_landmarks)
    return Trust(keyframe, interval, landmark, seeing)


def _stretches(anchored: NDArray[np.bool_], redundancy: Floats) -> tuple[Ints, Ints]:
    n = len(anchored)
    at = np.flatnonzero(anchored)
    keyframe = np.full(n, UNCHECKED_CODE, dtype=np.int64)
    interval = np.full(n, UNCHECKED_CODE, dtype=np.int64)
    if not len(at):
        return keyframe, interval
    total = np.add.reduceat(redundancy, at)
    code = np.where(total > WEAK, CHECKED_CODE, np.where(total > UNCHECKED, WEAK_CODE, UNCHECKED_CODE))
    which = np.searchsorted(at, np.arange(n), side="right") - 1
    inside = (which >= 0) & (which < len(at) - 1)
    interval[inside] = code[which[inside]]
    keyframe[inside] = interval[inside]
    keyframe[at] = CHECKED_CODE
    return keyframe, interval


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
        (best > WEAK) & (bursts > 1), CHECKED_CODE, np.where(best > UNCHECKED, WEAK_CODE, UNCHECKED_CODE)
    )
    return code.astype(np.int64), seeing

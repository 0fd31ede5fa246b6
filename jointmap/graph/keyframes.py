"""Which instants of each robot become variables of the graph."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import Keyframes

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def choose_instants(
    needed: Floats, span: tuple[float, float], merge_s: float, spacing_s: float
) -> Floats:
    """Keyframe stamps of one robot.

    Parameters
    ----------
    needed : (n,) stamps at which something was measured, any order
    span : first and last stamp of the odometry; both become keyframes
    merge_s : instants closer than this to the first of their group share its keyframe
    spacing_s : no two neighbours are further apart; longer stretches are cut evenly

    Returns
    -------
    (k,) increasing stamps
    """
    inside = needed[(needed > span[0]) & (needed < span[1])]
    stamps = np.unique(np.concatenate([inside, np.array(span)]))
    stamps = _merge(stamps, merge_s)
    stamps[-1] = span[1] if len(stamps) > 1 else stamps[-1]
    return _fill(stamps, spacing_s)


def _merge(stamps: Floats, merge_s: float) -> Floats:
    """First stamp of each group of stamps that lie within ``merge_s`` of that first one."""
    if merge_s <= 0.0 or len(stamps) < 2:
        return stamps
    keep = np.ones(len(stamps), dtype=bool)
    close = np.flatnonzero(np.diff(stamps) <= merge_s) + 1
    anchor = -1.0
    # Only the few stamps that have a close neighbour before them need the sequential rule.
    for i in close:
        if keep[i - 1]:
            anchor = stamps[i - 1]
        keep[i] = stamps[i] - anchor > merge_s
    return stamps[keep]


def _fill(stamps: Floats, spacing_s: float) -> Floats:
    gaps = np.diff(stamps)
    parts = np.maximum(np.ceil(gaps / spacing_s - 1e-9), 1).astype(np.int64)
    if parts.sum() == len(gaps):
        return stamps
    start = np.repeat(stamps[:-1], parts)
    step = np.repeat(gaps / parts, parts)
    count = np.arange(parts.sum()) - np.repeat(np.cumsum(parts) - parts, parts)
    return np.append(start + step * count, stamps[-1])


def join(stamps: list[Floats]) -> Keyframes:
    """Keyframes of all robots from each robot's stamps."""
    counts = np.array([len(s) for s in stamps], dtype=np.int64)
    return Keyframes(
        robot=np.repeat(np.arange(len(stamps)), counts),
        t_s=np.concatenate(stamps),
        first=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
    )


def nearest(keyframes: Keyframes, robot: int, t_s: Floats) -> Ints:
    """Index (n,) of the keyframe of a robot nearest to each stamp (n,)."""
    lo, hi = int(keyframes.first[robot]), int(keyframes.first[robot + 1])
    own = keyframes.t_s[lo:hi]
    right = np.clip(np.searchsorted(own, t_s), 1, max(len(own) - 1, 1))
    right = np.minimum(right, len(own) - 1)
    left = np.maximum(right - 1, 0)
    pick = np.where(t_s - own[left] <= own[right] - t_s, left, right)
    return np.asarray(lo + pick, dtype=np.int64)

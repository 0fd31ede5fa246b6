"""Cutting a robot's run into chunks over which its odometry can be trusted.

A chunk is short enough that the heading drifts by less than HEADING_LIMIT and the position by
less than POSITION_LIMIT (metres, or POSITION_SHARE of the path when that is more) from its anchor
on, by the noise model of the odometry. Within it, poses are taken as dead reckoning says.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.problem import Keyframes
from jointmap.graph.start.align import yaw_matrix
from jointmap.graph.start.gather import Steps

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Drift (standard deviations) that a chunk may gather: radians, metres, share of the path.
HEADING_LIMIT = 0.08
POSITION_LIMIT = 0.4
POSITION_SHARE = 0.02
#: No robot is cut into more chunks than this; its limits are widened instead.
MOST_CHUNKS = 600


@dataclass(frozen=True)
class Chunks:
    """Stretches of keyframes, by robot and in time order.

    ``robot`` (C,); ``first`` (C + 1,) keyframes first[c]:first[c + 1]; ``anchor`` (C,) its middle
    keyframe. ``of_keyframe`` (K,). ``local`` (K, *shape) pose of a keyframe in the anchor frame
    of its chunk; the anchor frame is upright when the survey is gravity aligned.
    ``joint`` (C, *shape) the pose of the anchor frame in that of the chunk before (identity where
    there is none) with variances ``joint_turn``, ``joint_shift`` (C,), infinite where no odometry
    ties the two. ``turn``, ``shift`` (K,): variance gathered between a keyframe and its anchor.
    """

    robot: Ints
    first: Ints
    anchor: Ints
    of_keyframe: Ints
    local: Floats
    joint: Floats
    joint_turn: Floats
    joint_shift: Floats
    turn: Floats
    shift: Floats
    path: Floats

    @property
    def n(self) -> int:
        """Number of chunks."""
        return len(self.robot)


def accumulate(delta: Floats, start: Bools, dimension: int) -> Floats:
    """Compose increments (K, *shape) along each run; runs begin where ``start`` is true.

    A scan by doubling: log2 K passes over the arrays in place of a loop over keyframes.
    """
    lie = frames.group(dimension)
    pose = delta.copy()
    pose[start] = lie.identity(1)[0]
    # The number of steps since the start of the run bounds how far a pass may look back.
    index = np.arange(len(pose))
    since = index - np.maximum.accumulate(np.where(start, index, 0))
    width = 1
    while width <= int(since.max(initial=0)):
        later = np.flatnonzero(since >= width)
        pose[later] = lie.compose(pose[later - width], pose[later])
        width *= 2
    return np.asarray(pose)


def cut(steps: Steps, starts: Bools, widen: float = 1.0, pieces: int = 1) -> Ints:
    """Return the first keyframes (C + 1,) of the chunks, robots in order.

    ``starts`` marks keyframes that begin a robot or follow a break; ``widen`` scales the limits;
    every run is cut into at least ``pieces`` of about the same motion.
    """
    bounds = [0]
    head = np.cumsum(np.where(starts, 0.0, np.nan_to_num(steps.turn_variance, posinf=0.0)))
    move = np.cumsum(np.where(starts, 0.0, np.nan_to_num(steps.shift_variance, posinf=0.0)))
    path = np.cumsum(np.where(starts, 0.0, steps.length))
    moved = np.cumsum(np.where(starts, 0.0, steps.length + steps.turned))
    runs = np.append(np.flatnonzero(starts), len(starts))
    for lo, hi in pairwise(runs):
        scale = widen
        while True:
            mine = _cut_run(head[lo:hi], move[lo:hi], path[lo:hi], moved[lo:hi], scale, pieces)
            if len(mine) <= MOST_CHUNKS:
                break
            scale *= 1.5
        bounds.extend(int(lo) + m for m in mine)
    return np.array(bounds, dtype=np.int64)


def _cut_run(
    head: Floats, move: Floats, path: Floats, moved: Floats, widen: float, pieces: int
) -> list[int]:
    """Return the ends of the chunks of one unbroken run."""
    ends: list[int] = []
    most = (moved[-1] - moved[0]) / pieces * (1.0 + 1e-9) if pieces > 1 else np.inf
    lo = 0
    while lo < len(head):
        turn = head[lo:] - head[lo]
        along = path[lo:] - path[lo]
        # The drift counts from the anchor in the middle: half of each variance lies on a side.
        shift2 = 0.5 * (move[lo:] - move[lo]) + 0.5 * turn * (0.5 * along) ** 2 / 3.0
        allowed = widen * np.maximum(POSITION_LIMIT, POSITION_SHARE * along)
        good = (0.5 * turn <= (widen * HEADING_LIMIT) ** 2) & (shift2 <= allowed**2)
        good &= moved[lo:] - moved[lo] <= most
        bad = np.flatnonzero(~good)
        lo += max(int(bad[0]), 1) if len(bad) else len(good)
        ends.append(lo)
    # A last crumb joins the chunk before it.
    if len(ends) > 1 and ends[-1] - ends[-2] <= 2:
        ends.pop(-2)
    return ends


def make_chunks(
    steps: Steps,
    keyframes: Keyframes,
    reckoned: Floats,
    breaks: Bools,
    dimension: int,
    upright: bool,
    widen: float = 1.0,
    pieces: int = 1,
) -> Chunks:
    """Cut all robots' runs and express keyframes in the frames of their anchors."""
    lie = frames.group(dimension)
    count = len(keyframes.robot)
    starts = breaks.copy()
    starts[keyframes.first[:-1][np.diff(keyframes.first) > 0]] = True
    first = cut(steps, starts, widen, pieces)
    of_keyframe = np.repeat(np.arange(len(first) - 1), np.diff(first))
    anchor = (first[:-1] + first[1:] - 1) // 2
    frame = _upright(reckoned[anchor]) if upright and dimension == 3 else reckoned[anchor]
    local = lie.between(frame[of_keyframe], reckoned)
    joint = lie.identity(len(anchor))
    joint[1:] = lie.between(frame[:-1], frame[1:])
    linked = np.zeros(len(anchor), dtype=bool)
    linked[1:] = ~starts[first[1:-1]]
    turn, shift, path = _gathered(steps, starts, anchor, of_keyframe)
    ahead = np.zeros((3, len(anchor)))
    ahead[:, 1:] = _between_anchors(steps, starts, anchor)
    joint_turn = np.where(linked, ahead[0], np.inf)
    joint_shift = np.where(linked, ahead[1] + ahead[0] * ahead[2] ** 2 / 3.0, np.inf)
    joint[~linked] = lie.identity(1)[0]
    assert len(of_keyframe) == count
    return Chunks(
        keyframes.robot[anchor],
        first,
        anchor,
        of_keyframe,
        local,
        joint,
        joint_turn,
        joint_shift,
        turn,
        shift,
        path,
    )


def _sums(steps: Steps, starts: Bools) -> Floats:
    rows = np.stack([steps.turn_variance, steps.shift_variance, steps.length])
    return np.asarray(np.cumsum(np.where(starts | ~np.isfinite(rows), 0.0, rows), axis=1))


def _gathered(
    steps: Steps, starts: Bools, anchor: Ints, of_keyframe: Ints
) -> tuple[Floats, Floats, Floats]:
    total = _sums(steps, starts)
    turn, shift, path = np.abs(total - total[:, anchor[of_keyframe]])
    return turn, shift + turn * path**2 / 3.0, path


def _between_anchors(steps: Steps, starts: Bools, anchor: Ints) -> Floats:
    total = _sums(steps, starts)
    return np.asarray(total[:, anchor[1:]] - total[:, anchor[:-1]])


def _upright(poses: Floats) -> Floats:
    """Keep position and heading (of the projected x axis) and drop roll and pitch."""
    upright = poses.copy()
    upright[:, :, :3] = yaw_matrix(np.arctan2(poses[:, 1, 0], poses[:, 0, 0]), 3)
    return upright

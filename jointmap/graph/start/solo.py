"""Each unbroken run by itself: chunks, chain, relaxation, and a check of the odometry.

A run (*unit*) is what odometry holds together: a robot, or a part of it between breaks.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.problem import Problem
from jointmap.graph.start.align import form_of
from jointmap.graph.start.chain import chain
from jointmap.graph.start.chunks import Chunks, accumulate, make_chunks
from jointmap.graph.start.condense import Condensed, condense
from jointmap.graph.start.gather import Material, Steps
from jointmap.graph.start.net import Joints, Net, Pins, Seen, Touches
from jointmap.graph.start.relax import relax
from jointmap.graph.start.selfcheck import check_odometry, corrected

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Times that chunks are cut anew after the odometry was found to be scaled or worse than stated.
_REPEATS = 3
#: Pieces of equal motion that a run is cut into to check its odometry.
_PROBES = 40
#: Widening of the chunks tried in turn until half of the sighted tracks can be placed.
_WIDEN = (1.0, 2.0, 4.0, 8.0)
_PLACED_SHARE = 0.5


@dataclass(frozen=True)
class Solo:
    """All runs, each in its own frame.

    ``unit`` (C,) run of each chunk, ``units`` their number. Point variables are pairs of run and
    track: ``point_unit``, ``point_track`` (L,), positions ``points`` (L, d) in the run's frame.
    ``poses`` (C, *shape) of the chunks. ``net`` holds what lies within runs. ``scale`` (2, R)
    translation and rotation of each robot's odometry; ``steps`` and ``reckoned`` have it applied.
    """

    chunks: Chunks
    condensed: Condensed
    unit: Ints
    units: int
    point_unit: Ints
    point_track: Ints
    point_of_seen: Ints
    poses: Floats
    points: Floats
    net: Net
    scale: Floats
    steps: Steps
    reckoned: Floats


def solve_alone(problem: Problem, material: Material) -> Solo:
    """Bring every run's keyframes and landmarks into the run's own frame."""
    robots = len(problem.robots)
    steps, reckoned = material.steps, problem.dead_reckoning
    scale = np.ones((2, robots))
    form = form_of(problem.dimension, problem.gravity_aligned)
    for _ in range(_REPEATS):
        probe = _cut(problem, replace(material, steps=steps), reckoned, (1.0,), _PROBES)
        check = check_odometry(probe[1], probe[0], robots, form)
        if not check.worth_repeating:
            break
        steps = corrected(steps, problem.keyframes.robot, check, problem.dimension)
        scale *= np.stack([check.translation, check.rotation])
        reckoned = _reckon(problem, steps.delta)
    chunks, condensed = _cut(problem, replace(material, steps=steps), reckoned, _WIDEN)
    return _solve(problem, chunks, condensed, steps, reckoned, scale)


def _reckon(problem: Problem, delta: Floats) -> Floats:
    """Accumulate corrected increments from each robot's first pose on."""
    lie = frames.group(problem.dimension)
    starts = problem.breaks.copy()
    first = problem.keyframes.first[:-1][np.diff(problem.keyframes.first) > 0]
    starts[first] = True
    run = np.maximum.accumulate(np.where(starts, np.arange(len(starts)), 0))
    origin = problem.dead_reckoning[run]
    return lie.compose(origin, accumulate(delta, starts, problem.dimension))


def _cut(
    problem: Problem, material: Material, reckoned: Floats, widths: tuple[float, ...],
    pieces: int = 1,
) -> tuple[Chunks, Condensed]:  # fmt: skip
    """Cut chunks as short as still place half of the tracks; ``widths`` are tried in turn."""
    tracks = len(np.unique(material.sighted.track))
    for widen in widths:
        chunks = make_chunks(
            material.steps,
            problem.keyframes,
            reckoned,
            problem.breaks,
            problem.dimension,
            problem.gravity_aligned,
            widen,
            pieces,
        )
        condensed = condense(material, chunks, problem.dimension)
        placed = len(np.unique(condensed.seen.point))
        if placed >= _PLACED_SHARE * tracks:
            break
    return chunks, condensed


def _solve(
    problem: Problem,
    chunks: Chunks,
    condensed: Condensed,
    steps: Steps,
    reckoned: Floats,
    scale: Floats,
) -> Solo:
    lie = frames.group(problem.dimension)
    form = form_of(problem.dimension, problem.gravity_aligned)
    unit = np.cumsum(~np.isfinite(chunks.joint_turn)) - 1
    anchors = lie.compose(reckoned[chunks.anchor], lie.inverse(chunks.local[chunks.anchor]))
    chained = chain(condensed, chunks, unit, anchors, form)
    tracks = len(problem.tracks.robot)
    seen = condensed.seen
    key, index = np.unique(unit[seen.pose] * max(tracks, 1) + seen.point, return_inverse=True)
    index = index.ravel().astype(np.int64)
    points = middle_positions(seen, index, len(key), chained.poses, problem.dimension)
    net = within_units(condensed, chunks, unit, index, problem)
    relaxed = relax(net, chained.poses, points)
    return Solo(
        chunks,
        condensed,
        unit,
        int(unit.max(initial=-1)) + 1,
        key // max(tracks, 1),
        key % max(tracks, 1),
        index,
        relaxed.poses,
        relaxed.points,
        net,
        scale,
        steps,
        reckoned,
    )


def middle_positions(seen: Seen, index: Ints, count: int, poses: Floats, dimension: int) -> Floats:
    """Return the median (count, d) of where each variable's statements place it."""
    lie = frames.group(dimension)
    placed = lie.transform(poses[seen.pose], seen.at)
    size = np.bincount(index, minlength=count)
    start = np.cumsum(size) - size
    result = np.full((count, dimension), np.nan)
    filled = size > 0
    for axis in range(dimension):
        order = np.lexsort((placed[:, axis], index))
        low = order[start[filled] + (size[filled] - 1) // 2]
        high = order[start[filled] + size[filled] // 2]
        result[filled, axis] = 0.5 * (placed[low, axis] + placed[high, axis])
    return result


def odometry_joints(chunks: Chunks, dimension: int) -> Joints:
    """Relative poses of neighbouring chunks by odometry."""
    lie = frames.group(dimension)
    later = np.flatnonzero(np.isfinite(chunks.joint_turn))
    variance = np.empty((len(later), lie.dof))
    turn, shift = chunks.joint_turn[later][:, None], chunks.joint_shift[later][:, None]
    linear = slice(0, 2) if dimension == 2 else slice(3, 6)
    angular = slice(2, 3) if dimension == 2 else slice(0, 3)
    variance[:, linear], variance[:, angular] = shift, turn
    covariance = (variance + 1e-10)[:, :, None] * np.eye(lie.dof)
    return Joints(later - 1, later, chunks.joint[later], covariance)


def within_units(
    condensed: Condensed, chunks: Chunks, unit: Ints, index: Ints, problem: Problem
) -> Net:
    """Return the net of what lies within single runs; ``index`` is the variable of each seen."""
    dimension = problem.dimension
    lie, d = frames.group(dimension), dimension
    inside = unit[condensed.closures.a] == unit[condensed.closures.b]
    met = unit[condensed.touches.a] == unit[condensed.touches.b]
    none = np.zeros(0, dtype=np.int64)
    return Net(
        form_of(dimension, problem.gravity_aligned),
        odometry_joints(chunks, dimension),
        take_joints(condensed.closures, inside),
        Seen(condensed.seen.pose, index, condensed.seen.at, condensed.seen.covariance),
        take_touches(condensed.touches, met),
        Pins(none, np.zeros((0, d)), np.zeros((0, d)), np.zeros((0, d, d))),
        Seen(none, none, np.zeros((0, lie.dim)), np.zeros((0, d, d))),
    )


def take_joints(joints: Joints, keep: Bools) -> Joints:
    """Some of the relative poses."""
    return Joints(joints.a[keep], joints.b[keep], joints.pose[keep], joints.covariance[keep])


def take_touches(touches: Touches, keep: Bools) -> Touches:
    """Some of the points between frames."""
    return Touches(
        touches.a[keep],
        touches.b[keep],
        touches.at[keep],
        touches.of[keep],
        touches.covariance[keep],
    )

"""The frame and the datum of the result: coordinates moved, covariances transformed.

``landmarks`` and ``robot`` start at the named robot's first pose; ``control`` stays in the frame
of fixes and control points. One datum per component.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.problem import Problem, State
from jointmap.solve.layout import n_landmarks
from jointmap.solve.system import System
from jointmap.trust.checked import Trust
from jointmap.trust.datum import (
    DatumTransform,
    datum_transform,
    holds,
    null_space,
    pose_weights,
    position_weights,
)
from jointmap.trust.quality import Quality

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Expressed:
    """State and covariances in the frame and datum asked for.

    ``state`` moved by ``shift`` (C, *shape) of each component; ``pose_cov`` (K, dof, dof) body
    tangents; ``next_cov`` (K, dof, dof) cross covariance of each keyframe with the next one of its
    robot (zero at the last);
    ``landmark_cov`` (L, d, d) with d = dof for oriented ones' own rows, NaN where absent;
    ``carries`` (L,) landmarks that carry the datum; ``component`` (C,) anchors;
    ``words`` says per component what the datum is.
    """

    state: State
    shift: Floats
    pose_cov: Floats
    next_cov: Floats
    landmark_cov: Floats
    carries: Bools
    transform: DatumTransform
    words: tuple[str, ...]


def express(
    problem: Problem,
    system: System,
    state: State,
    quality: Quality,
    trust: Trust,
    kind: str,
    robot: str,
) -> Expressed:
    """Move a solved state and its covariances into the datum ``kind``.

    Parameters
    ----------
    kind : ``landmarks``, ``robot`` or ``control``
    robot : the robot whose first pose is the origin (of its component; another component starts
        at its own first robot)
    """
    gauge = quality.gauge
    anchors = _anchors(problem, gauge.component, gauge.anchor, robot)
    held = gauge.free == 0
    to_site = held if kind == "control" else np.zeros(len(held), dtype=bool)
    shift = _shift(problem, state, anchors, to_site)
    moved = _move(problem, system, state, gauge.component, shift)
    layout, k = system.layout, system.layout.n_keyframes
    component = np.full(layout.n, -1, dtype=np.int64)
    component[: len(gauge.component)] = gauge.component
    null = _null(problem, system, state)
    site_rows = np.isin(np.repeat(component, layout.dims), np.flatnonzero(to_site))
    null[site_rows] = 0.0
    weights, carries, words = _weights(
        problem, system, trust, component, anchors, to_site, kind, null
    )
    transform = datum_transform(quality.factor, component, null, weights)
    keys = np.arange(k)
    pose_cov = transform.diagonal(keys, quality.inverse.diagonal(keys))
    next_cov = np.zeros_like(pose_cov)
    tied = keys[:-1][np.diff(problem.keyframes.robot) == 0]
    tied = tied[quality.inverse.shares_clique(tied, tied + 1)]
    tied = tied[component[tied] == component[tied + 1]]
    next_cov[tied] = transform.pairs(tied, tied + 1, quality.inverse.pairs(tied, tied + 1))
    landmark_cov = _landmark_covariance(problem, system, quality, transform, component, shift)
    return Expressed(moved, shift, pose_cov, next_cov, landmark_cov, carries, transform, words)


def _anchors(problem: Problem, component: Ints, anchor: Ints, robot: str) -> Ints:
    """First keyframe of the named robot in its component, else of the component's first robot."""
    out = anchor.copy()
    if robot in problem.robots:
        first = problem.keyframes.first[problem.robots.index(robot)]
        out[component[first]] = first
    return out


def _shift(problem: Problem, state: State, anchors: Ints, to_site: Bools) -> Floats:
    """Transform (C, *shape) of every component from the solver's frame to the result's."""
    group = frames.group(problem.dimension)
    origin = state.poses[anchors]
    if problem.dimension == 3 and problem.gravity_aligned:
        origin = upright(origin)
    shift = group.inverse(origin)
    shift[to_site] = group.identity(1)[0]
    return np.asarray(shift)


def _move(problem: Problem, system: System, state: State, component: Ints, shift: Floats) -> State:
    group = frames.group(problem.dimension)
    k = system.layout.n_keyframes
    poses = group.compose(shift[component[:k]], state.poses[:k])
    landmarks = state.landmarks.copy()
    index = system.layout.landmark_of_key
    mine = shift[component[k : k + len(index)]]
    landmarks[index] = group.transform(mine, state.landmarks[index])
    orientations = state.orientations
    if orientations is not None:
        orientations = orientations.copy()
        orientations[index] = group.rotation(mine) @ orientations[index]
    return replace(state, poses=poses, landmarks=landmarks, orientations=orientations)


def upright(poses: Floats) -> Floats:
    """Poses (n, 3, 4) with roll and pitch taken out, heading and position kept."""
    yaw = np.arctan2(poses[:, 1, 0], poses[:, 0, 0])
    out = np.zeros_like(poses)
    out[:, 0, 0] = out[:, 1, 1] = np.cos(yaw)
    out[:, 1, 0], out[:, 0, 1] = np.sin(yaw), -np.sin(yaw)
    out[:, 2, 2] = 1.0
    out[:, :, 3] = poses[:, :, 3]
    return out


def _null(problem: Problem, system: System, state: State) -> Floats:
    layout, k = system.layout, system.layout.n_keyframes
    group = frames.group(problem.dimension)
    index = layout.landmark_of_key
    oriented = system.oriented[index]
    keys = k + np.arange(len(index))
    pose_keys = np.concatenate([np.arange(k), keys[oriented]])
    poses = state.poses[:k]
    if oriented.any():
        assert state.orientations is not None
        tags = group.build(state.orientations[index[oriented]], state.landmarks[index[oriented]])
        poses = np.concatenate([poses, tags])
    return null_space(
        layout.dims,
        problem.dimension,
        problem.gravity_aligned,
        (pose_keys, poses),
        (keys[~oriented], state.landmarks[index[~oriented]]),
    )


def _weights(
    problem: Problem,
    system: System,
    trust: Trust,
    component: Ints,
    anchors: Ints,
    to_site: Bools,
    kind: str,
    null: Floats,
) -> tuple[Floats, Bools, tuple[str, ...]]:
    """Datum weights (N,), landmarks (L,) that carry a datum, and words per component.

    Landmarks first; the keyframes where these are too few or do not hold every motion (all in a
    row, all in one place); the first pose where the keyframes do not either.
    """
    layout, k = system.layout, system.layout.n_keyframes
    need = 2 if problem.dimension == 2 else 3
    carries = np.zeros(n_landmarks(problem), dtype=bool)
    weights = np.zeros(int(layout.dims.sum()))
    words = []
    index = layout.landmark_of_key
    # A linked track's own landmark is the shared one once more; it must not count twice.
    single = ~np.isin(index, system.links.own)
    good = (trust.keyframes_seeing[index] >= 2) & single
    part = component[k : k + len(index)]
    for c, anchor in enumerate(anchors):
        if to_site[c]:
            words.append("the frame of the fixes and control points")
            continue
        name = problem.robots[problem.keyframes.robot[anchor]]
        mine = np.flatnonzero(good & (part == c))
        free = null[np.repeat(component, layout.dims) == c]
        by_landmarks = position_weights(layout.dims, problem.dimension, k + mine)
        keys = np.flatnonzero(component[:k] == c)
        by_keyframes = position_weights(layout.dims, problem.dimension, keys)
        at = np.repeat(component, layout.dims) == c
        if kind == "robot":
            weights += pose_weights(layout.dims, np.array([anchor]))
            words.append(f"the first pose of {name} is exact")
        elif len(mine) >= need and holds(free, by_landmarks[at]):
            weights += by_landmarks
            carries[index[mine]] = True
            words.append(
                f"inner constraints over {len(mine)} landmarks, "
                f"coordinates from the first pose of {name}"
            )
        elif holds(free, by_keyframes[at]):
            weights += by_keyframes
            words.append(
                "inner constraints over the keyframes, since fewer than "
                f"{need} landmarks are seen often enough; coordinates from the first pose of {name}"
                if len(mine) < need
                else "inner constraints over the keyframes, since the landmarks seen often enough "
                f"lie in a row; coordinates from the first pose of {name}"
            )
        else:
            weights += pose_weights(layout.dims, np.array([anchor]))
            words.append(
                f"the first pose of {name} is exact, since neither landmarks nor keyframes spread "
                "far enough to carry a datum"
            )
    carries[system.links.own] = False
    return weights, carries, tuple(words)


def _landmark_covariance(
    problem: Problem,
    system: System,
    quality: Quality,
    transform: DatumTransform,
    component: Ints,
    shift: Floats,
) -> Floats:
    layout, k = system.layout, system.layout.n_keyframes
    index = layout.landmark_of_key
    dof = 3 if problem.dimension == 2 else 6
    out = np.full((n_landmarks(problem), dof, dof), np.nan)
    for poses in (False, True):
        rows = np.flatnonzero(system.oriented[index] == poses)
        if not len(rows):
            continue
        keys = k + rows
        d = dof if poses else problem.dimension
        blocks = transform.diagonal(keys, quality.inverse.diagonal(keys))
        if not poses:
            # Points have no frame of their own: their covariance turns with the map.
            turn = frames.group(problem.dimension).rotation(shift[component[keys]])
            blocks = turn @ blocks @ np.swapaxes(turn, 1, 2)
        out[index[rows], :d, :d] = blocks
    return out


def position_sigma(covariance: Floats, dimension: int) -> Floats:
    """Standard deviation (n,) of position in its worst direction, from body-tangent blocks."""
    place = slice(0, 2) if dimension == 2 else slice(3, 6)
    worst = np.linalg.eigvalsh(covariance[:, place, place])[:, -1]
    return np.asarray(np.sqrt(np.maximum(worst, 0.0)), dtype=np.float64)

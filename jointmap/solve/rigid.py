"""Taking the common motion out of a step, so that what is linearised stays small.

The linear system holds a free network at one keyframe. If that keyframe's heading is poor, the
solution turns the whole map about it, and at the far end a turn of a few hundredths is metres, for
which the linearisation is wrong, although nothing measured has changed. The common motion is
therefore fitted to the step (inner constraints of a free network, Meissl 1969), the rest is applied
in the tangent and the common motion exactly.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.problem import State
from jointmap.solve.gauge import Gauge, motion_basis, point_motion, pose_motion
from jointmap.solve.system import System

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def common_motion(system: System, gauge: Gauge, state: State, delta: Floats) -> Floats:
    """Global motion (C, dof) of each component, in its free directions, that fits a step best."""
    basis = motion_basis(system.problem.dimension, system.problem.gravity_aligned)
    count, q = len(gauge.free), basis.shape[1]
    square, right = np.zeros((count, q, q)), np.zeros((count, q))
    for key, motion in _motions(system, state, basis):
        part = system.component[key]
        at = system.layout.offset[key][:, None] + np.arange(motion.shape[1])
        along = np.einsum("niq,ni->nq", motion, delta[at])
        product = np.swapaxes(motion, 1, 2) @ motion
        for i in range(q):
            right[:, i] += np.bincount(part, weights=along[:, i], minlength=count)
            for j in range(q):
                square[:, i, j] += np.bincount(part, weights=product[:, i, j], minlength=count)
    out = np.zeros((count, basis.shape[0]))
    for c, open_motion in enumerate(gauge.directions):
        if open_motion.shape[1]:
            inner = open_motion.T @ square[c] @ open_motion
            fit = np.linalg.lstsq(inner, open_motion.T @ right[c], rcond=1e-12)[0]
            out[c] = basis @ (open_motion @ fit)
    return out


def without(system: System, state: State, delta: Floats, motion: Floats) -> Floats:
    """A step (N,) less the tangent of the common motion (C, dof)."""
    basis = np.eye(motion.shape[1])
    out = delta.copy()
    for key, each in _motions(system, state, basis):
        at = system.layout.offset[key][:, None] + np.arange(each.shape[1])
        out[at] -= np.einsum("niq,nq->ni", each, motion[system.component[key]])
    return out


def move(system: System, state: State, motion: Floats) -> State:
    """A state moved by a global motion (C, dof) of each component."""
    group = frames.group(system.problem.dimension)
    layout, k = system.layout, system.layout.n_keyframes
    whole = group.exp(motion)
    poses = state.poses.copy()
    poses[:k] = group.compose(whole[system.component[:k]], state.poses[:k])
    index = layout.landmark_of_key
    of = whole[system.component[k : k + len(index)]]
    landmarks = state.landmarks.copy()
    landmarks[index] = group.transform(of, state.landmarks[index])
    orientations = state.orientations
    if orientations is not None:
        orientations = orientations.copy()
        orientations[index] = group.rotation(of) @ orientations[index]
    return replace(state, poses=poses, landmarks=landmarks, orientations=orientations)


def _motions(system: System, state: State, basis: Floats) -> list[tuple[Ints, Floats]]:
    """Keys (n,) and motion (n, d, q) in their own tangents under global motions ``basis``."""
    dimension, layout = system.problem.dimension, system.layout
    k = layout.n_keyframes
    out = [(np.arange(k), pose_motion(dimension, state.poses[:k], basis))]
    index = layout.landmark_of_key
    oriented = system.oriented[index]
    point, tag = index[~oriented], index[oriented]
    key = k + np.arange(len(index))
    out.append((key[~oriented], point_motion(dimension, state.landmarks[point], basis)))
    if len(tag):
        assert state.orientations is not None
        pose = frames.group(dimension).build(state.orientations[tag], state.landmarks[tag])
        out.append((key[oriented], pose_motion(dimension, pose, basis)))
    return out

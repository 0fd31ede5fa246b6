"""What the reference leaves open, as draws: errors that its covariance allows, jointly in time.

A draw is an error of every pose and landmark with all the correlations of the stored state. Given
the logs the truth lies at the reference plus such an error, whatever an estimator made of the same
logs, so that any figure of an estimator against the truth has the distribution of the figure
against the drawn truths. Draws come in pairs of opposite sign, which makes their mean exact.

The rigid motion that the measurements leave free is taken out of every draw over the keyframes (an
S-transformation): figures after alignment and relative figures do not depend on it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.products.joint import JointState, Located, own_step
from jointmap.trust.draws import draw, markov_path

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Draws solved at once, so that the right-hand side of a large factor stays small.
_BATCH_NUMBERS = 8_000_000


@dataclass(frozen=True)
class Posterior:
    """Drawn errors of a reference at located stamps.

    Parameters
    ----------
    located : Located
        The stamps.
    errors : (S, m, dof) float32
        Body tangents of the reference: a drawn truth is ``T exp(-error)``.
    landmarks : (S, L, d) float
        Errors of ``landmark_names``, map axes.
    """

    located: Located
    errors: Floats
    landmark_names: tuple[str, ...]
    landmarks: Floats

    def __len__(self) -> int:
        return len(self.errors)


def draw_posterior(
    joint: JointState, located: Located, names: tuple[str, ...], count: int, seed: int
) -> Posterior:
    """Draw errors.

    Parameters
    ----------
    joint : JointState
    located : Located
        Stamps, increasing in time within each robot, robots one after another.
    names : tuple of str
        Landmarks; tags count by their position.
    count : int
        Draws, made even.
    seed : int
    """
    rng = np.random.default_rng(seed)
    half = max(1, (count + 1) // 2)
    dof, d = joint.group.dof, joint.group.dim
    keys = np.array([joint.landmarks[n] for n in names], dtype=np.int64)
    errors = np.empty((half, len(located), dof))
    landmarks = np.empty((half, len(keys), d))
    size = joint.factor.tree.n_scalars
    batch = max(1, min(half, _BATCH_NUMBERS // max(size, 1)))
    pose_rows = joint.offset[: len(joint.keyframe_t_s), None] + np.arange(dof)
    last = joint.offset[keys + 1][:, None] - d + np.arange(d)
    turn = _landmark_turn(joint, keys)
    unmove = _free_motion(joint, pose_rows)
    for lo in range(0, half, batch):
        hi = min(lo + batch, half)
        x = draw(joint.factor, rng.standard_normal((size, hi - lo)))
        unmove(x)
        x = np.ascontiguousarray(x.T)
        keyed = x[:, pose_rows]
        errors[lo:hi] = _carry(keyed, located.first, located.a)
        errors[lo:hi] += _carry(keyed, located.second, located.b)
        landmarks[lo:hi] = np.einsum("lij,slj->sli", turn, x[:, last])
    scale = np.sqrt(joint.scale[located.robot])
    errors *= scale[None, :, None]
    errors += _own_draws(located, half, rng)
    # Single precision: a draw is a random number, and these arrays are the largest of a grading.
    errors, landmarks = errors.astype(np.float32), landmarks.astype(np.float32)
    return Posterior(
        located,
        np.concatenate([errors, -errors]),
        names,
        np.concatenate([landmarks, -landmarks]),
    )


def _carry(keyed: Floats, keys: Ints, gain: Floats) -> Floats:
    """(S, m, dof) of keyframe errors (S, K, dof) through gains (m, dof, dof)."""
    return np.asarray(np.matmul(gain[None], keyed[:, keys][..., None])[..., 0])


def _own_draws(located: Located, half: int, rng: np.random.Generator) -> Floats:
    """The odometry's own part between keyframes."""
    m, dof = located.own.shape[:2]
    phi = own_step(located.share, located.interval)
    path = markov_path(phi, rng.standard_normal((m, half * dof))).reshape(m, half, dof)
    values, vectors = np.linalg.eigh(np.nan_to_num(located.own))
    root = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :] @ np.swapaxes(vectors, 1, 2)
    return np.swapaxes(path @ root, 0, 1)


def _landmark_turn(joint: JointState, keys: Ints) -> Floats:
    """Rotation (L, d, d) from the landmark's own axes to the map's."""
    group, state = joint.group, joint.reference.state
    shift = np.asarray(state["map_shift"], np.float64)[joint.part[keys]]
    turn = group.rotation(shift)
    tags = joint.factor.tree.dims[keys] > group.dim
    if tags.any():
        where = np.full(len(joint.factor.tree.dims), -1)
        index = np.asarray(state["key_of_landmark"], np.int64)
        where[index[index >= 0]] = np.flatnonzero(index >= 0)
        own = np.asarray(state["orientations"], np.float64)[where[keys[tags]]]
        turn[tags] = turn[tags] @ own
    return np.asarray(turn)


class _free_motion:  # noqa: N801 - a function with a memory
    """Takes each component's free rigid motion, fitted to keyframe positions, out of draws."""

    def __init__(self, joint: JointState, pose_rows: Ints) -> None:
        d = joint.group.dim
        place = pose_rows[:, :d] if d == 2 else pose_rows[:, 3:]
        size = joint.factor.tree.dims
        scalar_part = np.repeat(joint.part, size)
        self.parts = []
        for c in np.unique(joint.part[: len(pose_rows)]):
            rows = np.flatnonzero(scalar_part == c)
            chosen = place[joint.part[: len(pose_rows)] == c].ravel()
            used = np.flatnonzero(np.abs(joint.motion[chosen]).sum(axis=0) > 0)
            if not len(used):
                continue
            basis = joint.motion[:, used]
            fit = np.linalg.pinv(basis[chosen])
            self.parts.append((rows, chosen, basis[rows], fit))

    def __call__(self, x: Floats) -> None:
        for rows, chosen, basis, fit in self.parts:
            x[rows] -= basis @ (fit @ x[chosen])


def position_errors(group: frames.Group, pose: Floats, errors: Floats) -> tuple[Floats, Floats]:
    """Position (S, m, d) and rotation errors (S, m, 1 or 3) about map axes of body tangents."""
    turn = group.rotation(pose).astype(errors.dtype)
    if group.dim == 2:
        place = np.einsum("mij,smj->smi", turn, errors[..., :2])
        return np.asarray(place), errors[..., 2:]
    place = np.einsum("mij,smj->smi", turn, errors[..., 3:])
    return np.asarray(place), np.asarray(np.einsum("mij,smj->smi", turn, errors[..., :3]))

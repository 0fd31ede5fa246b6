"""Which variables a solve has, and how they are numbered.

Keys are plain integers: keyframe ``k`` is key ``k``; the landmarks in use follow in the order of
their index, then the calibration vectors of robots. Keys are therefore 0 .. n-1 without a hole.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import Assignment, Block, Problem

Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Layout:
    """Numbering of variables.

    ``key_of_landmark`` (L,) is -1 for landmarks without a used sighting; ``landmark_of_key`` is its
    inverse for keys K .. K + A - 1. ``dims`` (n,) tangent dimensions, ``offset`` (n + 1,) their
    cumulative sum. ``calibration_key`` (R,) is -1 for robots without a calibration vector;
    ``sensor_key`` the variables of sensors' constant errors.
    """

    n_keyframes: int
    key_of_landmark: Ints
    landmark_of_key: Ints
    calibration_key: Ints
    dims: Ints
    offset: Ints
    sensor_key: Ints = field(default_factory=lambda: np.zeros(0, dtype=np.int64))

    @property
    def n(self) -> int:
        """Number of variables."""
        return len(self.dims)


def n_landmarks(problem: Problem) -> int:
    """Shared landmarks plus one private landmark per track."""
    return len(problem.tracks.landmarks) + len(problem.tracks.robot)


def oriented_tracks(problem: Problem, used: tuple[Bools, ...]) -> Bools:
    """Tracks (T,) that a used row sees with orientation."""
    out = np.zeros(len(problem.tracks.robot), dtype=bool)
    for block, rows in zip(problem.blocks, used, strict=True):
        if block.kind == "sighting" and block.components == ("pose",):
            out[block.b[rows]] = True
    return out


def oriented_landmarks(
    problem: Problem, assignment: Assignment, tracks: Bools, links: Ints
) -> Bools:
    """Which landmark variables (L,) are poses.

    ``tracks`` (T,) are those seen with orientation; a shared landmark is a pose when one of the
    tracks linked to it is.
    """
    out = np.zeros(n_landmarks(problem), dtype=bool)
    np.logical_or.at(out, assignment.landmark, tracks)
    np.logical_or.at(out, problem.tracks.claim[links], tracks[links])
    return out


def landmark_of_rows(block: Block, assignment: Assignment) -> Ints:
    """Landmark variable (n,) that each row of a sighting or control block involves."""
    if block.kind == "sighting":
        return assignment.landmark[block.b]
    return block.b


def make_layout(
    problem: Problem,
    assignment: Assignment,
    used: tuple[Bools, ...],
    calibrated: Bools,
    links: Ints,
) -> Layout:
    """Number the variables that the used rows involve (control points alone do not make one).

    ``links`` are tracks whose own landmark is tied to the shared one by a factor.
    """
    dof = 3 if problem.dimension == 2 else 6
    k = len(problem.keyframes.t_s)
    active = np.zeros(n_landmarks(problem), dtype=bool)
    for block, rows in zip(problem.blocks, used, strict=True):
        if block.kind == "sighting":
            active[assignment.landmark[block.b[rows]]] = True
    active[problem.tracks.claim[links]] = True
    index = np.flatnonzero(active)
    key = np.full(len(active), -1, dtype=np.int64)
    key[index] = k + np.arange(len(index))
    tracks = oriented_tracks(problem, used)
    oriented = oriented_landmarks(problem, assignment, tracks, links)[index]
    c = np.full(len(problem.robots), -1, dtype=np.int64)
    c[calibrated] = k + len(index) + np.arange(int(calibrated.sum()))
    dims = np.concatenate(
        [
            np.full(k, dof),
            np.where(oriented, dof, problem.dimension),
            np.full(int(calibrated.sum()), 3),
        ]
    ).astype(np.int64)
    return Layout(k, key, index, c, dims, np.concatenate([[0], np.cumsum(dims)]).astype(np.int64))

"""Everything that a finished fusion knows, for the products; and its evidence on associations."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.calibrate import Calibration
from jointmap.graph.noise import Noise
from jointmap.graph.problem import Problem, State
from jointmap.graph.start import StartResult
from jointmap.ingest.survey import Survey
from jointmap.solve.associations import Evidence, Review
from jointmap.solve.decisions import Decisions
from jointmap.solve.optimise import Optimised
from jointmap.solve.session import own_landmarks
from jointmap.solve.system import System
from jointmap.trust.constants import Constants
from jointmap.trust.holdout import HoldOut
from jointmap.trust.quality import Quality

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Outcome:
    """The last state of a fusion: all decisions, values, covariances and how it was reached."""

    survey: Survey
    problem: Problem
    noise: Noise
    calibration: Calibration
    decisions: Decisions
    review: Review | None
    system: System
    state: State
    quality: Quality
    start: StartResult
    optimised: Optimised
    settled: bool
    notes: tuple[str, ...]
    holdout: HoldOut
    constants: Constants | None = None


def association_evidence(
    problem: Problem, system: System, state: State, quality: Quality
) -> Evidence:
    """What an assessed solve says about the associations."""
    own = own_landmarks(problem).landmark
    key = system.layout.key_of_landmark
    component = np.where(key >= 0, system.component[np.maximum(key, 0)], -1)
    statistic, dof = np.zeros(0), np.zeros(0)
    if quality.links is not None:
        statistic, dof = quality.links.statistic()
    return Evidence(
        linked=system.links.track,
        statistic=statistic,
        dof=dof,
        own=own,
        shared=problem.tracks.claim,
        positions=state.landmarks,
        component=component,
        joint=lambda a, b: joint_positions(system, state, quality, a, b),
    )


def joint_positions(system: System, state: State, quality: Quality, a: Ints, b: Ints) -> Floats:
    """Joint covariance (n, 2 dim, 2 dim) of the positions of landmark pairs, map axes."""
    dim = system.problem.dimension
    n = len(a)
    out = np.zeros((n, 2 * dim, 2 * dim))
    oriented = system.oriented
    for first in (False, True):
        for second in (False, True):
            rows = np.flatnonzero((oriented[a] == first) & (oriented[b] == second))
            if not len(rows):
                continue
            keys = system.layout.key_of_landmark
            joint = quality.factor.joint(keys[a[rows]], keys[b[rows]])
            pick_a = position_rows(system, state, a[rows])
            pick_b = position_rows(system, state, b[rows])
            pick = np.zeros((len(rows), 2 * dim, joint.shape[1]))
            pick[:, :dim, : pick_a.shape[2]] = pick_a
            pick[:, dim:, pick_a.shape[2] :] = pick_b
            out[rows] = pick @ joint @ np.swapaxes(pick, 1, 2)
    return out


def position_rows(system: System, state: State, landmarks: Ints) -> Floats:
    """Derivative (n, dim, d) of a landmark's position by its own tangent; all of one kind."""
    dim = system.problem.dimension
    if not system.oriented[landmarks[0]]:
        return np.broadcast_to(np.eye(dim), (len(landmarks), dim, dim))
    assert state.orientations is not None
    turn = state.orientations[landmarks]
    zero = np.zeros((len(landmarks), dim, 1 if dim == 2 else 3))
    return np.concatenate([turn, zero] if dim == 2 else [zero, turn], axis=2)

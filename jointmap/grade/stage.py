"""What the reference offers to every estimator: common instants, poses, covariance, draws."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from jointmap.errors import SurveyError
from jointmap.frames import Group
from jointmap.grade.posterior import Posterior, draw_posterior, position_errors
from jointmap.grade.settings import GradeSettings
from jointmap.products.joint import JointState, Located
from jointmap.products.reference import Reference

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Code of ``trust`` from which a part of the reference is not graded.
UNCHECKED = 2


@dataclass(frozen=True)
class Stage:
    """The reference at common instants.

    Parameters
    ----------
    reference, joint, group
    instants_s : (T,) float
        Survey times, evenly spaced.
    spacing_s : float
    located : Located
        Every robot at every instant at which it has a pose; robots one after another.
    instant : (m,) int
        Index into ``instants_s``.
    row : (R, T) int
        Index into ``located``, -1 where the robot has no pose.
    path_m : (m,) float
        Path of the robot since its first instant.
    place, turn : (S, m, d), (S, m, 1 or 3) float32
        Drawn errors of position and rotation, map axes.
    posterior : Posterior
    site : bool
        The reference stands in the site frame: nothing of it is free to move.
    gravity_aligned : bool
    """

    reference: Reference
    joint: JointState
    group: Group
    instants_s: Floats
    spacing_s: float
    located: Located
    instant: Ints
    row: Ints
    path_m: Floats
    place: Floats
    turn: Floats
    posterior: Posterior
    site: bool
    gravity_aligned: bool

    @property
    def robots(self) -> tuple[str, ...]:
        """Names of the robots, by index."""
        return self.joint.robots

    @property
    def gradeable(self) -> Bools:
        """Stamps (m,) that redundant measurements check at least weakly."""
        return self.located.trust < UNCHECKED

    @cached_property
    def floor(self) -> Floats:
        """Variance (m,) of the reference's position, summed over axes, of its draws."""
        total = np.einsum("smd,smd->m", self.place, self.place)
        return np.asarray(total, dtype=np.float64) / len(self.place)


def make_stage(reference: Reference, settings: GradeSettings) -> Stage:
    """Prepare a reference for grading.

    Raises
    ------
    SurveyError
        The reference has no trajectory, or was written without its state.
    """
    joint = reference.joint
    paths = [reference.trajectories[r] for r in joint.robots]
    paths_s = [p.t_s for p in paths if len(p)]
    if not paths_s:
        raise SurveyError("the reference has no trajectory; nothing can be graded against it")
    first, last = min(t[0] for t in paths_s), max(t[-1] for t in paths_s)
    steps = [float(np.median(np.diff(t))) for t in paths_s if len(t) > 1]
    own = float(np.median(steps)) if steps else 1.0
    spacing = max((last - first) / settings.instants, own)
    instants = np.arange(first, last + 0.5 * spacing, spacing)
    robot, instant = [], []
    for r, name in enumerate(joint.robots):
        t_s = reference.trajectories[name].t_s
        begin, end = (t_s[0], t_s[-1]) if len(t_s) else (np.inf, -np.inf)
        inside = np.flatnonzero((instants >= begin) & (instants <= end))
        robot.append(np.full(len(inside), r))
        instant.append(inside)
    located = joint.locate(np.concatenate(robot), instants[np.concatenate(instant)])
    known = np.isfinite(located.cov).all(axis=(1, 2))
    located, at = located.take(known), np.concatenate(instant)[known]
    row = np.full((len(joint.robots), len(instants)), -1)
    row[located.robot, at] = np.arange(len(at))
    names = tuple(joint.landmarks)
    posterior = draw_posterior(joint, located, names, settings.draws, settings.seed)
    place, turn = position_errors(joint.group, located.pose, posterior.errors)
    site = not joint.motion[joint.offset[: len(joint.keyframe_t_s)]].any()
    gravity = reference.dimension == 3 and joint.motion.shape[1] == 4
    return Stage(
        reference, joint, joint.group, instants, spacing, located, at, row,
        _paths(located, joint.group), place, turn, posterior, site, gravity,
    )  # fmt: skip


def _paths(located: Located, group: Group) -> Floats:
    """Path of each robot since its first instant."""
    place = group.translation(located.pose)
    step = np.zeros(len(located))
    step[1:] = np.linalg.norm(np.diff(place, axis=0), axis=1)
    begins = np.flatnonzero(np.diff(located.robot, prepend=-1))
    step[begins] = 0.0
    total = np.cumsum(step)
    return np.asarray(
        total - total[begins][np.searchsorted(begins, np.arange(len(step)), "right") - 1]
    )

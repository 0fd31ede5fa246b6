"""Odometry calibration as states: translation scale, turn scale and lag of every robot.

Commanded or wheel odometry is scaled and leads the motion: ``motion(t + lag) = scale * row(t)``.
The three values of a robot are variables of the graph; each odometry increment depends on them
through the derivative of its integration. After a solve the odometry is integrated again with the
new values, so the linearisation is always at the present ones.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.clock import SurveyClock, fixed_values
from jointmap.graph.motion import odometry_blocks, prepare_motion
from jointmap.graph.odometry import increment_jacobians
from jointmap.graph.problem import Problem
from jointmap.ingest.survey import RobotLog, Survey

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
ParameterKey = tuple[str, str, str]

#: The calibration vector of a robot, in order.
ODOMETRY_PARAMETERS = ("odometry_scale", "odometry_turn_scale", "odometry_lag_s")
_NEUTRAL = np.array([1.0, 1.0, 0.0])
#: Prior standard deviations (common practice: wheels and commands are off by tens of per cent at
#: worst, by a fraction of a second), and those of a value that the survey or an edit states.
_PRIOR = np.array([0.2, 0.2, 0.5])
_STATED = np.array([1e-6, 1e-6, 1e-6])
#: Largest values a solve may move to; beyond them the linearisation means nothing.
_BOUNDS = np.array([[0.3, 0.3, -2.0], [3.0, 3.0, 2.0]])


@dataclass(frozen=True)
class Calibration:
    """Odometry calibration in force: ``value``, prior ``mean`` and ``prior`` sigma (R, 3).

    ``free`` (R,): robots whose vector is a variable. ``sensor_lags`` the values of sensors.
    """

    robots: tuple[str, ...]
    value: Floats
    mean: Floats
    prior: Floats
    free: Bools

    @property
    def offset(self) -> Floats:
        """Present value minus prior mean (R, 3)."""
        return self.value - self.mean

    @property
    def values(self) -> dict[ParameterKey, float]:
        """By (robot, '', parameter), for the builder."""
        return {
            (robot, "", name): float(self.value[r, i])
            for r, robot in enumerate(self.robots)
            for i, name in enumerate(ODOMETRY_PARAMETERS)
        }

    def moved(self, step: Mapping[ParameterKey, float]) -> tuple[Calibration, float]:
        """After a solve's step; also the largest change in units of 0.1 prior sigmas."""
        change = np.array(
            [[step.get((robot, "", p), 0.0) for p in ODOMETRY_PARAMETERS] for robot in self.robots]
        )
        value = np.clip(self.value + change, _BOUNDS[0], _BOUNDS[1])
        return replace(self, value=value), float(np.abs(change / _PRIOR).max(initial=0.0))


def calibrated_robots(calibration: Calibration) -> list[int]:
    """Robots whose calibration is estimated."""
    return [int(r) for r in np.flatnonzero(calibration.free)]


def states_noise(log: RobotLog) -> bool:
    """Whether a robot's log says how good its odometry is, in the survey or row by row."""
    odometry = log.odometry
    rows = odometry.sigma is not None and bool(np.isfinite(odometry.sigma).any())
    accumulated = odometry.acc_cov is not None and bool(np.isfinite(odometry.acc_cov).any())
    return bool(log.odometry_noise) or rows or accumulated


def first_calibration(survey: Survey, *, enabled: bool) -> Calibration:
    """Prior calibration; free for robots that do not state the quality of their odometry.

    Odometry with stated noise is taken at its word: an estimated scale would contradict it.
    """
    edits = fixed_values(survey, "calibration")
    robots = tuple(survey.robots)
    mean = np.tile(_NEUTRAL, (len(robots), 1))
    prior = np.tile(_PRIOR, (len(robots), 1))
    free = np.zeros(len(robots), dtype=bool)
    for r, (name, log) in enumerate(survey.robots.items()):
        free[r] = enabled and not states_noise(log)
        if log.odometry_lag_s is not None:
            mean[r, 2], prior[r, 2] = log.odometry_lag_s, _STATED[2]
        for i, parameter in enumerate(ODOMETRY_PARAMETERS):
            if (name, "", parameter) in edits:
                mean[r, i], prior[r, i] = edits[(name, "", parameter)], _STATED[i]
    return Calibration(robots, mean.copy(), mean, prior, free)


def reintegrate(
    problem: Problem, survey: Survey, calibration: Calibration, max_gap_s: float | None = None
) -> Problem:
    """The same problem with odometry integrated under another calibration; keyframes stay."""
    clock = SurveyClock(survey)
    values = {**calibration.values, **fixed_values(survey, "calibration")}
    blocks = list(problem.blocks)
    reckoned = np.array(problem.dead_reckoning)
    for r in calibrated_robots(calibration):
        motion = prepare_motion(survey, clock, problem.robots[r], values)
        made = odometry_blocks(motion, problem.keyframes, r, survey, max_gap_s)
        lo, hi = problem.keyframes.first[r], problem.keyframes.first[r + 1]
        reckoned[lo:hi] = made.poses
        for i, block in enumerate(blocks):
            if block.kind == "odometry" and block.robot == r:
                blocks[i] = made.blocks[0]
    return replace(problem, blocks=tuple(blocks), dead_reckoning=reckoned)


def odometry_sensitivity(
    problem: Problem, survey: Survey, calibration: Calibration
) -> dict[int, Floats]:
    """Derivative (rows, dof, 3) of each free robot's increments by its calibration vector."""
    clock = SurveyClock(survey)
    values = {**calibration.values, **fixed_values(survey, "calibration")}
    out: dict[int, Floats] = {}
    for r in calibrated_robots(calibration):
        motion = prepare_motion(survey, clock, problem.robots[r], values)
        lo, hi = problem.keyframes.first[r], problem.keyframes.first[r + 1]
        jacobians = increment_jacobians(
            motion.odometry,
            motion.t_rows,
            problem.keyframes.t_s[lo:hi],
            survey.dimension,
            translation_scale=motion.translation_scale,
            rotation_scale=motion.turn_scale,
        )
        for block in problem.blocks:
            if block.kind == "odometry" and block.robot == r:
                out[r] = jacobians[block.a - lo]
    return out

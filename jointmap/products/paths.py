"""Full-rate trajectories and the table of robots."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.bridge import SolvedKeyframes, prepare_bridge
from jointmap.graph.clock import SurveyClock, fixed_values
from jointmap.graph.motion import prepare_motion
from jointmap.graph.problem import ODOMETRY_TERMS
from jointmap.products.columns import complete, pack_covariance, table_covariance_columns
from jointmap.products.listed import component_numbers
from jointmap.products.reference import Trajectory, format_outages
from jointmap.schema import pose_columns
from jointmap.trust.checked import Trust
from jointmap.trust.frame import Expressed
from jointmap.trust.outcome import Outcome

Floats = NDArray[np.float64]

#: Rows further apart than this (and ten times the median interval) are an outage.
OUTAGE_S = 0.5


def trajectories(
    outcome: Outcome, expressed: Expressed, trust: Trust, max_gap_s: float | None
) -> dict[str, Trajectory]:
    """One trajectory per robot, one row per odometry row."""
    survey, problem = outcome.survey, outcome.problem
    clock = SurveyClock(survey)
    values = {**outcome.calibration.values, **fixed_values(survey, "calibration")}
    numbers = component_numbers(outcome)
    group = frames.group(problem.dimension)
    out = {}
    for r, name in enumerate(problem.robots):
        motion = prepare_motion(survey, clock, name, values)
        lo, hi = problem.keyframes.first[r], problem.keyframes.first[r + 1]
        stamps = problem.keyframes.t_s[lo:hi]
        theta = np.array(
            [outcome.noise.value(name, "", "odometry", term) for term in ODOMETRY_TERMS]
        )
        # Rows are stamped by the robot; the pose is wanted at that stamp, not at stamp + lag.
        rows_s = clock.survey_time(name, motion.odometry.t_s)
        solved = SolvedKeyframes(
            stamps,
            expressed.state.poses[lo:hi],
            expressed.pose_cov[lo:hi],
            expressed.next_cov[lo : hi - 1],
        )
        made = prepare_bridge(
            motion.odometry,
            motion.t_rows,
            solved,
            theta,
            problem.dimension,
            translation_scale=motion.translation_scale,
            rotation_scale=motion.turn_scale,
            max_gap_s=max_gap_s,
            cuts=motion.splits,
        ).at(rows_s)
        at = np.clip(np.searchsorted(stamps, rows_s, side="right") - 1, 0, hi - lo - 1)
        exact = np.isin(rows_s, stamps)
        codes = np.where(exact, trust.keyframe[lo:hi][at], trust.interval[lo:hi][at])
        parts = outcome.quality.gauge.component[lo:hi][at]
        out[name] = Trajectory(
            t_s=rows_s,
            pose=group.to_rows(made.poses),
            cov=group.covariance_to_table(made.poses, made.covariance),
            keyframe=exact,
            component=numbers[parts],
            trust=codes,
        )
    return out


def robot_table(
    outcome: Outcome, expressed: Expressed, paths: dict[str, Trajectory]
) -> pd.DataFrame:
    """robots.csv: frame, path, trust shares and outages of every robot."""
    problem = outcome.problem
    group = frames.group(problem.dimension)
    clock = SurveyClock(outcome.survey)
    rows: list[dict[str, Any]] = []
    for r, (name, path) in enumerate(paths.items()):
        log = outcome.survey.robots[name]
        first = problem.keyframes.first[r]
        reckoned = problem.dead_reckoning[first][None]
        frame = group.compose(expressed.state.poses[first][None], group.inverse(reckoned))
        carry = group.adjoint(reckoned)
        body = carry @ expressed.pose_cov[first][None] @ np.swapaxes(carry, 1, 2)
        packed = pack_covariance(group.covariance_to_table(frame, body))[0]
        place = path.pose[:, : problem.dimension]
        row: dict[str, Any] = {"robot": name, "component": int(path.component[0])}
        row |= dict(zip(pose_columns(problem.dimension), group.to_rows(frame)[0], strict=True))
        row |= dict(zip(table_covariance_columns(problem.dimension), packed, strict=True))
        row["path_m"] = float(np.linalg.norm(np.diff(place, axis=0), axis=1).sum())
        for code, word in enumerate(("checked", "weak", "unchecked")):
            row[f"share_{word}"] = float((path.trust == code).mean())
        row["clock_offset_s"] = log.clock.offset_s
        row["sigma_clock_offset_s"] = log.clock.sigma_offset_s
        row["outages"] = format_outages(outages(clock.survey_time(name, log.odometry.t_s)))
        rows.append(row)
    return complete("robots", problem.dimension, pd.DataFrame(rows))


def outages(t_s: Floats) -> Floats:
    """Intervals (m, 2) without rows."""
    gaps = np.diff(t_s)
    if not len(gaps):
        return np.zeros((0, 2))
    long = gaps > max(OUTAGE_S, 10.0 * float(np.median(gaps)))
    return np.stack([t_s[:-1][long], t_s[1:][long]], axis=1)

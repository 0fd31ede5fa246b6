"""A finished fusion -> Reference: every product in the frame and datum asked for."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from jointmap.products.listed import (
    association_table,
    calibration_table,
    component_numbers,
    holdout_table,
    landmark_table,
    noise_table,
)
from jointmap.products.measured import measurement_table, verdict_counts
from jointmap.products.paths import robot_table, trajectories
from jointmap.products.reference import Reference
from jointmap.products.suspects import suspect_table
from jointmap.products.verdict import Judged, judge
from jointmap.progress import Progress
from jointmap.settings import Settings, environment_versions
from jointmap.solve.layout import n_landmarks
from jointmap.trust.checked import judge_trust
from jointmap.trust.frame import Expressed, express, position_sigma
from jointmap.trust.outcome import Outcome

#: Version of the layout of reference.json.
FORMAT = 1


def assemble(outcome: Outcome, settings: Settings, progress: Progress) -> Reference:
    """All products of a finished fusion."""
    survey, problem = outcome.survey, outcome.problem
    trust = judge_trust(problem, outcome.system, outcome.quality, n_landmarks(problem))
    kind = settings.datum or survey.datum_kind
    robot = settings.datum_robot or survey.datum_robot
    expressed = express(problem, outcome.system, outcome.state, outcome.quality, trust, kind, robot)
    sigma = position_sigma(expressed.pose_cov, problem.dimension)
    trust = judge_trust(problem, outcome.system, outcome.quality, n_landmarks(problem), sigma)
    paths = trajectories(outcome, expressed, trust, settings.gap_s)
    robots = robot_table(outcome, expressed, paths)
    measurements = measurement_table(outcome)
    landmarks = landmark_table(outcome, expressed, trust)
    associations = association_table(outcome)
    suspects = suspect_table(outcome, measurements)
    judged = judge(outcome, settings, robots, landmarks, associations, measurements, suspects)
    return Reference(
        meta=_meta(outcome, settings, progress, expressed, judged, measurements, kind, robot),
        trajectories=paths,
        landmarks=landmarks,
        measurements=measurements,
        associations=associations,
        noise=noise_table(outcome),
        calibration=calibration_table(outcome),
        suspects=suspects,
        holdout=holdout_table(outcome),
        robots=robots,
        state=_state(outcome, expressed),
    )


def _meta(
    outcome: Outcome,
    settings: Settings,
    progress: Progress,
    expressed: Expressed,
    judged: Judged,
    measurements: pd.DataFrame,
    kind: str,
    robot: str,
) -> dict[str, Any]:
    problem, survey = outcome.problem, outcome.survey
    numbers = component_numbers(outcome)
    parts = outcome.quality.gauge.component[problem.keyframes.first[:-1]]
    robots_of: dict[int, list[str]] = {}
    for name, part in zip(problem.robots, parts, strict=True):
        robots_of.setdefault(int(numbers[part]), []).append(name)
    words = dict(zip(numbers.tolist(), expressed.words, strict=True))
    chi2, dof = chi_square(outcome)
    return {
        "format": FORMAT,
        "status": judged.status,
        "reasons": list(judged.reasons),
        "survey": {
            "path": str(survey.path),
            "name": survey.name,
            "inputs": dict(survey.inputs),
            "mended": [str(p) for p in survey.problems],
        },
        "settings": settings.to_dict(),
        "versions": environment_versions(),
        "seed": settings.seed,
        "datum": {
            "kind": kind,
            "robot": robot,
            "components": [words[c] for c in sorted(words)],
        },
        "components": [robots_of[c] for c in sorted(robots_of)],
        "counts": {
            "keyframes": len(problem.keyframes.t_s),
            "landmarks": len(outcome.system.layout.landmark_of_key),
            "measurements": verdict_counts(measurements),
            "odometry_rows": {n: len(r.odometry.t_s) for n, r in survey.robots.items()},
            "iterations": outcome.optimised.iterations,
        },
        "chi2": chi2,
        "dof": dof,
        "evidence": {"links": list(judged.links), "holdout": _holdout(outcome), **judged.evidence},
        "distrust": list(judged.distrust),
        "timings": dict(progress.timings),
    }


def _holdout(outcome: Outcome) -> dict[str, float] | None:
    whole = outcome.holdout.whole
    if whole is None:
        return None
    return {
        "normalized_square": whole.normalized_square,
        "n_effective": whole.n_effective,
        "lower": whole.lower,
        "upper": whole.upper,
        "sigma_factor": outcome.holdout.factor,
    }


def chi_square(outcome: Outcome) -> tuple[float, int]:
    """Sum of squared whitened residuals at the inlier set, and its degrees of freedom."""
    quality = outcome.quality
    return quality.chi2, quality.rows - int(outcome.system.layout.dims.sum())


def _state(outcome: Outcome, expressed: Expressed) -> dict[str, Any]:
    layout, problem = outcome.system.layout, outcome.problem
    out: dict[str, Any] = {f"factor_{k}": v for k, v in outcome.quality.factor.to_arrays().items()}
    out |= {f"datum_{k}": v for k, v in expressed.transform.to_arrays().items()}
    out |= {
        "poses": outcome.state.poses,
        "landmarks": outcome.state.landmarks,
        "map_shift": expressed.shift,
        "component": outcome.quality.gauge.component,
        "keyframe_t_s": problem.keyframes.t_s,
        "keyframe_first": problem.keyframes.first,
        "robots": np.array(problem.robots),
        "key_of_landmark": layout.key_of_landmark,
        "calibration_key": layout.calibration_key,
        "calibration_value": outcome.calibration.value,
        "dims": layout.dims,
        "track_robot": problem.tracks.robot,
        "track_label": np.array(problem.tracks.labels or [""]),
        "track_claim": problem.tracks.claim,
        "landmark_name": np.array(problem.tracks.landmarks or [""]),
        "linked_track": outcome.system.links.track,
    }
    if outcome.state.orientations is not None:
        out["orientations"] = outcome.state.orientations
    return out

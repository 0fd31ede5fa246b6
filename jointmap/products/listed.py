"""Tables of landmarks, associations, noise and calibration."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.calibrate import ODOMETRY_PARAMETERS
from jointmap.ingest.edits import format_edit
from jointmap.ingest.survey import AssociationEdit
from jointmap.products.columns import TRUST as TRUST_WORDS
from jointmap.products.columns import complete, pack_covariance, table_covariance_columns
from jointmap.products.measured import landmark_names
from jointmap.schema import pose_columns
from jointmap.solve.shared import SENSOR_PARAMETERS, SENSOR_PRIOR
from jointmap.trust.checked import Trust
from jointmap.trust.frame import Expressed
from jointmap.trust.outcome import Outcome

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: A calibration value is called significant beyond this many of its sigmas, and observable when
#: the data shrink the prior's sigma at least by half.
SIGNIFICANT = 3.0
OBSERVABLE = 0.5


def result_landmarks(outcome: Outcome) -> tuple[Ints, list[str]]:
    """Landmark variables of the result, and their names: shared ones, then private ones."""
    tracks = outcome.problem.tracks
    key = outcome.system.layout.key_of_landmark
    shared = np.unique(outcome.system.links.shared)
    names = [tracks.landmarks[i] for i in shared]
    linked = np.zeros(len(tracks.robot), dtype=bool)
    linked[outcome.system.links.track] = True
    own = len(tracks.landmarks) + np.flatnonzero(~linked)
    own = own[key[own] >= 0]
    labels = landmark_names(outcome)
    names += [str(labels[i - len(tracks.landmarks)]) for i in own]
    return np.concatenate([shared, own]).astype(np.int64), names


def landmark_table(outcome: Outcome, expressed: Expressed, trust: Trust) -> pd.DataFrame:
    """landmarks.csv."""
    problem, system = outcome.problem, outcome.system
    index, names = result_landmarks(outcome)
    dim = problem.dimension
    key = system.layout.key_of_landmark[index]
    component = component_numbers(outcome)[system.component[key]]
    values: dict[str, Any] = {"landmark": names, "component": component}
    for i, name in enumerate(("x_m", "y_m", "z_m")[:dim]):
        values[name] = expressed.state.landmarks[index, i]
    covariance = _table_covariance(outcome, expressed, index)
    packed = pack_covariance(covariance)
    values |= dict(zip(table_covariance_columns(dim), packed.T, strict=True))
    oriented = system.oriented[index]
    if oriented.any():
        assert expressed.state.orientations is not None
        group = frames.group(dim)
        rows = group.to_rows(
            group.build(expressed.state.orientations[index], expressed.state.landmarks[index])
        )
        for i, name in enumerate(pose_columns(dim)[dim:]):
            values[name] = np.where(oriented, rows[:, dim + i], np.nan)
    values |= _sighting_counts(outcome, index)
    values["trust"] = np.array(TRUST_WORDS, dtype=object)[trust.landmark[index]]
    values["datum"] = expressed.carries[index]
    frame = pd.DataFrame(values).sort_values("landmark", kind="stable")
    return complete("landmarks", dim, frame)


def _table_covariance(outcome: Outcome, expressed: Expressed, index: Ints) -> Floats:
    dim = outcome.problem.dimension
    group = frames.group(dim)
    covariance = expressed.landmark_cov[index].copy()
    oriented = outcome.system.oriented[index]
    if oriented.any():
        assert expressed.state.orientations is not None
        pose = group.build(expressed.state.orientations[index], expressed.state.landmarks[index])
        covariance[oriented] = group.covariance_to_table(pose[oriented], covariance[oriented])
    return covariance


def _sighting_counts(outcome: Outcome, index: Ints) -> dict[str, Any]:
    problem = outcome.problem
    tracks = problem.tracks
    used = np.zeros(len(tracks.robot), dtype=np.int64)
    for block, rows in zip(problem.blocks, outcome.decisions.used, strict=True):
        if block.kind == "sighting":
            used += np.bincount(block.b[rows], minlength=len(used))
    shared = len(tracks.landmarks)
    to = np.arange(shared, shared + len(used))
    to[outcome.system.links.track] = outcome.system.links.shared
    place = {int(v): i for i, v in enumerate(index)}
    count = np.zeros(len(index), dtype=np.int64)
    who: list[dict[str, None]] = [{} for _ in index]
    for track in np.flatnonzero(used > 0):
        at = place.get(int(to[track]))
        if at is not None:
            count[at] += used[track]
            who[at][problem.robots[tracks.robot[track]]] = None
    return {
        "n_sightings": count,
        "n_robots": [len(w) for w in who],
        "robots": [" ".join(w) for w in who],
    }


def component_numbers(outcome: Outcome) -> Ints:
    """Number of each connected part in the result: the part of the datum's robot is 0."""
    parts = outcome.quality.gauge.component
    n = int(parts.max()) + 1
    first = outcome.problem.keyframes.first[:-1]
    order = list(dict.fromkeys([int(parts[k]) for k in first] + list(range(n))))
    out = np.empty(n, dtype=np.int64)
    out[order] = np.arange(n)
    return out


def association_table(outcome: Outcome) -> pd.DataFrame:
    """associations.csv: one row per label of a robot, with what was decided and why."""
    tracks, decided = outcome.problem.tracks, outcome.review
    linked = np.zeros(len(tracks.robot), dtype=bool)
    linked[outcome.system.links.track] = True
    rows = []
    for i in np.flatnonzero(tracks.claim >= 0):
        verdict, reason = _association_verdict(outcome, int(i), bool(linked[i]))
        alternative = -1 if decided is None else int(decided.alternative[i])
        rows.append(
            {
                "robot": outcome.problem.robots[tracks.robot[i]],
                "label": tracks.labels[i],
                "landmark": tracks.landmarks[tracks.claim[i]],
                "n_sightings": int(tracks.n_sightings[i]),
                "verdict": verdict,
                "reason": reason,
                "statistic": np.nan if decided is None else decided.statistic[i],
                "alternative": tracks.landmarks[alternative] if alternative >= 0 else None,
            }
        )
    columns = ["robot", "label", "landmark", "n_sightings", "verdict", "reason", "statistic",
               "alternative"]  # fmt: skip
    frame = pd.DataFrame(rows, columns=columns)
    return complete("associations", outcome.problem.dimension, frame)


def _association_verdict(outcome: Outcome, i: int, linked: bool) -> tuple[str, str]:
    tracks, decided = outcome.problem.tracks, outcome.review
    claim = tracks.landmarks[tracks.claim[i]]
    own = len(tracks.landmarks) + i
    if tracks.rejected[i]:
        return "rejected", "rejected by an edit"
    if outcome.system.layout.key_of_landmark[own] < 0:
        return "unusable", "its sightings do not place it"
    if linked:
        if tracks.forced[i]:
            return "kept", "forced by an edit"
        others = np.sum(outcome.system.links.shared == tracks.claim[i]) - 1
        if others == 0:
            return "kept", "nobody else sees this landmark: not tested"
        return "kept", "agrees with the other robots' sightings"
    assert decided is not None
    distance = outcome.state.landmarks[own] - outcome.state.landmarks[tracks.claim[i]]
    gap = float(np.linalg.norm(distance))
    reason = f"{gap:.2f} m from {claim} as the others place it"
    if not np.isfinite(gap):
        reason = f"contradicts the other claims on {claim}"
    alternative = int(decided.alternative[i])
    if alternative >= 0:
        reason += f"; agrees with {tracks.landmarks[alternative]}"
        swapped = np.flatnonzero(
            (tracks.robot == tracks.robot[i])
            & (tracks.claim == alternative)
            & (decided.alternative == tracks.claim[i])
        )
        if len(swapped):
            reason += f"; swapped with label {tracks.labels[swapped[0]]}"
    if decided.unresolved[i]:
        return "unresolved", (
            reason
            + f"; contradicts the other claim on {claim}, which of them is wrong cannot be told"
        )
    return "rejected", reason


def association_edit(outcome: Outcome, i: int) -> str:
    """Lines for edits.toml that mend the association of a track."""
    tracks, decided = outcome.problem.tracks, outcome.review
    robot, label = outcome.problem.robots[tracks.robot[i]], tracks.labels[i]
    alternative = -1 if decided is None else int(decided.alternative[i])
    if alternative >= 0:
        return format_edit(AssociationEdit("force", robot, label, tracks.landmarks[alternative]))
    return format_edit(AssociationEdit("reject", robot, label))


def noise_table(outcome: Outcome) -> pd.DataFrame:
    """noise.csv: every term with what was given and what is in force."""
    rows = [
        {
            "robot": t.robot,
            "sensor": t.sensor or None,
            "component": t.component,
            "term": t.term,
            "given": t.given,
            "estimated": t.value,
            "sigma": t.sigma,
            "redundancy": t.redundancy,
        }
        for t in outcome.noise.terms.values()
    ]
    columns = ["robot", "sensor", "component", "term", "given", "estimated", "sigma", "redundancy"]
    return complete("noise", outcome.problem.dimension, pd.DataFrame(rows, columns=columns))


def calibration_table(outcome: Outcome) -> pd.DataFrame:
    """calibration.csv: odometry scale and lag of each robot that does not state its noise."""
    calibration, layout = outcome.calibration, outcome.system.layout
    rows = []
    for r in np.flatnonzero(calibration.free):
        covariance = outcome.quality.inverse.diagonal([layout.calibration_key[r]])[0]
        for i, parameter in enumerate(ODOMETRY_PARAMETERS):
            sigma = float(np.sqrt(covariance[i, i]))
            neutral = 0.0 if parameter.endswith("_s") else 1.0
            value = float(calibration.value[r, i])
            rows.append(
                {
                    "robot": calibration.robots[r],
                    "sensor": None,
                    "parameter": parameter,
                    "value": value,
                    "sigma": sigma,
                    "significant": abs(value - neutral) > SIGNIFICANT * sigma,
                    "observable": sigma < OBSERVABLE * calibration.prior[r, i],
                    "used": True,
                }
            )
    rows += _sensor_rows(outcome)
    columns = [
        "robot",
        "sensor",
        "parameter",
        "value",
        "sigma",
        "significant",
        "observable",
        "used",
    ]
    return complete("calibration", outcome.problem.dimension, pd.DataFrame(rows, columns=columns))


def _sensor_rows(outcome: Outcome) -> list[dict[str, object]]:
    """Range bias, range scale and bearing offset of each sensor that does not state its noise."""
    extras = outcome.system.extras
    rows: list[dict[str, object]] = []
    if extras is None or not len(extras.sensors):
        return rows
    key = extras.key0 + np.arange(len(extras.sensors))
    value = extras.values(outcome.state.extra, key, len(SENSOR_PARAMETERS))
    covariance = outcome.quality.inverse.diagonal(key)
    tested = outcome.constants
    used = np.ones(len(SENSOR_PARAMETERS), dtype=bool) if tested is None else tested.used
    for s, (robot, sensor) in enumerate(extras.sensors):
        for i, parameter in enumerate(SENSOR_PARAMETERS):
            sigma, found = float(np.sqrt(covariance[s, i, i])), float(value[s, i])
            if tested is not None and not used[i]:
                # Held at zero: what it would have been, for the record.
                sigma, found = float(tested.sigma[s, i]), float(tested.value[s, i])
            rows.append(
                {
                    "robot": outcome.problem.robots[robot],
                    "sensor": sensor,
                    "parameter": parameter,
                    "value": found,
                    "sigma": sigma,
                    "significant": bool(used[i] and abs(found) > SIGNIFICANT * sigma),
                    "observable": sigma < OBSERVABLE * SENSOR_PRIOR[i],
                    "used": bool(used[i]),
                }
            )
    return rows


def holdout_table(outcome: Outcome) -> pd.DataFrame:
    """holdout.csv: how well what one robot saw of a landmark is predicted by the others."""
    rows = [
        {
            "fold_kind": fold.kind,
            "fold": fold.name,
            "n": fold.n,
            "n_effective": fold.n_effective,
            "normalized_square": fold.normalized_square,
            "lower": fold.lower,
            "upper": fold.upper,
        }
        for fold in outcome.holdout.folds
    ]
    return complete("holdout", outcome.problem.dimension, pd.DataFrame(rows))

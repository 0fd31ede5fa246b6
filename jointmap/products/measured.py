"""One row per measurement: what was observed, what is left over, and what was decided."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, cast

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.models import linearise_block
from jointmap.graph.noise import block_covariance, residual_names, whitening
from jointmap.graph.problem import Block, Problem, Unusable
from jointmap.products.columns import complete
from jointmap.solve.decisions import JUMP_WEIGHT
from jointmap.solve.layout import n_landmarks
from jointmap.solve.session import own_landmarks
from jointmap.trust.outcome import Outcome
from jointmap.trust.redundancy import WEAK, delta0

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_MDB = ("range_m", "bearing_rad", "x_m", "y_m", "z_m", "elevation_rad")
_LOOSE = "it ties two parts without saying where one is relative to the other"
_PLAIN = {
    "range_m": "range",
    "bearing_rad": "bearing",
    "elevation_rad": "elevation",
    "x_m": "x",
    "y_m": "y",
    "z_m": "z",
    "yaw_rad": "heading",
    "rx_rad": "roll",
    "ry_rad": "pitch",
    "rz_rad": "heading",
}


def measurement_table(outcome: Outcome) -> pd.DataFrame:
    """The measurements table of the reference."""
    problem = outcome.problem
    names = landmark_names(outcome)
    frames_of = [_block_frame(outcome, at, block, names) for at, block in enumerate(problem.blocks)]
    frames_of += [_unusable_frame(problem, group) for group in problem.unusable]
    table = pd.concat([f for f in frames_of if len(f)], ignore_index=True)
    table["id"] = np.arange(len(table))
    return complete("measurements", problem.dimension, table)


def landmark_names(outcome: Outcome) -> NDArray[np.object_]:
    """Name (T,) of the landmark that each track is in the result."""
    problem = outcome.problem
    tracks = problem.tracks
    out = np.empty(len(tracks.robot), dtype=object)
    linked = np.zeros(len(tracks.robot), dtype=bool)
    linked[outcome.system.links.track] = True
    taken: dict[str, int] = {}
    for i, label in enumerate(tracks.labels):
        if linked[i]:
            out[i] = tracks.landmarks[tracks.claim[i]]
            continue
        name = f"{problem.robots[tracks.robot[i]]}:{label}"
        taken[name] = taken.get(name, 0) + 1
        # A label with several validity intervals can leave several private landmarks.
        out[i] = name if taken[name] == 1 else f"{name}#{taken[name]}"
    return out


def _block_frame(
    outcome: Outcome, at: int, block: Block, names: NDArray[np.object_]
) -> pd.DataFrame:
    problem = outcome.problem
    dimension = problem.dimension
    covariance = block_covariance(block, problem, outcome.noise, single=True)
    residual = _residuals(outcome, block)
    whitened = np.einsum("nij,nj->ni", whitening(covariance), residual)
    columns = _component_columns(block, dimension, residual, covariance)
    statistic = np.sqrt(np.einsum("ni,ni->n", whitened, whitened))
    redundancy = np.full(block.n, np.nan)
    numbers = np.full(residual.shape, np.nan)
    for part, stats in zip(outcome.system.parts, outcome.quality.parts, strict=True):
        if part.at == at:
            redundancy[part.index] = stats.numbers.sum(axis=1)
            numbers[part.index] = stats.numbers
            statistic[part.index] = np.sqrt(stats.statistic()[0])
    used, weight = outcome.decisions.used[at], outcome.decisions.weight[at]
    usable = outcome.decisions.usable[at] & np.isfinite(residual).all(axis=1)
    verdict = np.where(usable, np.where(used, "kept", "rejected"), "unusable").astype(object)
    verdict[usable & used & (weight < 1.0)] = "down-weighted"
    verdict[usable & used & (weight <= JUMP_WEIGHT)] = "rejected"
    columns |= _mdb_columns(residual_names(block, dimension), covariance, numbers, used)
    robot = problem.robots[block.robot] if block.robot >= 0 else None
    return pd.DataFrame(
        {
            "kind": block.kind,
            "robot": robot,
            "t_s": block.t_s,
            "sensor": block.sensor or None,
            "target": _targets(problem, block),
            "landmark": _landmarks(problem, block, names),
            "file": np.array(block.source.files, dtype=object)[block.source.file],
            "row": block.source.row,
            "burst": block.burst,
            **columns,
            "weight": np.where(used & usable, weight, 0.0),
            "redundancy": redundancy,
            "w": np.where(usable, statistic, np.nan),
            "verdict": verdict,
            "reason": _reasons(block, dimension, verdict, whitened, _placed(outcome, block)),
        }
    )


def _residuals(outcome: Outcome, block: Block) -> Floats:
    """Predicted minus observed (n, m); NaN where a landmark has no value."""
    lin = linearise_block(
        frames.group(outcome.problem.dimension),
        block,
        outcome.state.poses,
        outcome.state.landmarks,
        outcome.state.orientations,
        own_landmarks(outcome.problem).landmark,
        _seen_oriented(outcome.problem),
        jacobians=False,
    )
    return lin.residual


def _seen_oriented(problem: Problem) -> NDArray[np.bool_]:
    """Landmarks (L,) that any row, used or not, sees with orientation."""
    out = np.zeros(n_landmarks(problem), dtype=bool)
    out[own_landmarks(problem).landmark] = problem.tracks.oriented
    return out


def _table_name(name: str, dimension: int) -> str:
    return "yaw_rad" if dimension == 2 and name == "rz_rad" else name


def _component_columns(
    block: Block, dimension: int, residual: Floats, covariance: Floats
) -> dict[str, Floats]:
    out: dict[str, Floats] = {}
    if block.components == ("tilt",):
        names: tuple[str, ...] = ("rx_rad", "ry_rad")
    else:
        names = tuple(_table_name(n, dimension) for n in residual_names(block, dimension))
    sigma = np.sqrt(np.einsum("nii->ni", covariance))
    observed = _observed(block, dimension)
    for i, name in enumerate(names):
        if name in observed:
            out[f"obs_{name}"] = observed[name]
        out[f"res_{name}"] = -residual[:, i]
        out[f"sigma_{name}"] = sigma[:, i]
    return out


def _observed(block: Block, dimension: int) -> dict[str, Floats]:
    if block.components == ("tilt",):
        return {}
    if block.components != ("pose",):
        return {name: block.obs[:, i] for i, name in enumerate(block.components)}
    group = frames.group(dimension)
    place = group.translation(block.obs)
    out = {name: place[:, i] for i, name in enumerate(("x_m", "y_m", "z_m")[:dimension])}
    turn = group.log(group.build(group.rotation(block.obs), np.zeros_like(place)))
    if dimension == 2:
        out["yaw_rad"] = turn[:, 2]
    else:
        out |= {name: turn[:, i] for i, name in enumerate(("rx_rad", "ry_rad", "rz_rad"))}
    return out


def _mdb_columns(
    names: tuple[str, ...], covariance: Floats, numbers: Floats, used: NDArray[np.bool_]
) -> dict[str, Floats]:
    """Minimal detectable bias ``delta0 sigma / sqrt(r)``; infinite (empty) where unchecked."""
    out = {}
    for i, name in enumerate(names):
        if name in _MDB:
            r = np.where(used & (numbers[:, i] > 0.1 * WEAK), numbers[:, i], np.nan)
            out[f"mdb_{name}"] = delta0() * np.sqrt(covariance[:, i, i] / r)
    return out


def _targets(problem: Problem, block: Block) -> Any:
    if block.kind == "sighting":
        return np.array(problem.tracks.labels, dtype=object)[block.b]
    if block.kind in ("encounter", "closure"):
        return np.array(problem.robots, dtype=object)[problem.keyframes.robot[block.b]]
    return None


def _landmarks(problem: Problem, block: Block, names: NDArray[np.object_]) -> Any:
    if block.kind == "sighting":
        return names[block.b]
    if block.kind == "control":
        return np.array(problem.tracks.landmarks, dtype=object)[block.b]
    return None


def _placed(outcome: Outcome, block: Block) -> NDArray[np.bool_]:
    """Rows (n,) of sightings whose landmark has a place from others."""
    if block.kind != "sighting":
        return np.zeros(block.n, dtype=bool)
    key = outcome.system.layout.key_of_landmark
    return key[own_landmarks(outcome.problem).landmark[block.b]] >= 0


def _reasons(
    block: Block,
    dimension: int,
    verdict: NDArray[np.object_],
    whitened: Floats,
    placed: NDArray[np.bool_],
) -> NDArray[np.object_]:
    out = np.full(block.n, None, dtype=object)
    doubted = np.flatnonzero((verdict == "rejected") | (verdict == "down-weighted"))
    names = residual_names(block, dimension)
    size = np.abs(np.nan_to_num(whitened[doubted]))
    worst = size.argmax(axis=1) if len(doubted) else size
    what = "jump of the odometry, " if block.kind == "odometry" else ""
    for row, i, s in zip(doubted, worst, size, strict=True):
        out[row] = f"{what}{s[i]:.0f} sigma in {_PLAIN.get(names[i], 'tilt')}"
    lost = verdict == "unusable"
    if block.kind == "sighting":
        out[lost] = "its landmark is not determined by these sightings"
        out[lost & placed] = _LOOSE
    elif block.kind in ("encounter", "closure"):
        out[lost] = _LOOSE
    elif block.kind == "control":
        out[lost] = "no robot saw this landmark"
    return out


def _unusable_frame(problem: Problem, group: Unusable) -> pd.DataFrame:
    source = group.source
    return pd.DataFrame(
        {
            "kind": group.kind,
            "robot": problem.robots[group.robot],
            "t_s": group.t_s,
            "sensor": [s or None for s in group.sensor],
            "target": [s or None for s in group.target],
            "file": np.array(source.files, dtype=object)[source.file],
            "row": source.row,
            "weight": 0.0,
            "verdict": "unusable",
            "reason": group.reason,
        }
    )


def verdict_counts(table: pd.DataFrame) -> Mapping[str, Mapping[str, int]]:
    """Number of measurements by kind and verdict."""
    counts = table.groupby(["kind", "verdict"]).size()
    out: dict[str, dict[str, int]] = {}
    for key, n in counts.items():
        kind, verdict = cast(tuple[str, str], key)
        out.setdefault(str(kind), {})[str(verdict)] = int(n)
    return out

"""A small made-up reference of two robots in the slate quarry, for products and commands."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from jointmap import frames
from jointmap.products.columns import META_KEYS, TABLES, complete
from jointmap.products.reference import Reference, Trajectory, format_outages
from jointmap.schema import pose_columns
from jointmap.settings import Settings

ROBOTS = ("heron", "otter")
START_S = 1_700_000_000.0


def trajectory(dimension: int, seed: int, n: int = 40) -> Trajectory:
    """A path of ``n`` rows at 10 Hz with a full, random covariance at every row."""
    rng = np.random.default_rng(seed)
    group = frames.group(dimension)
    step = rng.normal(0.0, 0.1, (n, group.dof))
    poses = group.identity(n)
    for i in range(1, n):
        poses[i] = group.retract(poses[i - 1], step[i])
    factor = rng.normal(0.0, 0.02, (n, group.dof, group.dof))
    return Trajectory(
        t_s=START_S + 0.1 * np.arange(n),
        pose=group.to_rows(poses),
        cov=factor @ np.swapaxes(factor, -1, -2) + 1e-6 * np.eye(group.dof),
        keyframe=np.arange(n) % 10 == 0,
        component=np.zeros(n, dtype=int),
        trust=np.where(np.arange(n) < n - 8, np.arange(n) % 2, 2),
    )


def meta(**changes: Any) -> dict[str, Any]:
    """Every key of reference.json."""
    made: dict[str, Any] = dict.fromkeys(META_KEYS)
    made |= {
        "format": 1,
        "status": "ok",
        "reasons": [],
        "survey": {"name": "gallery 7", "path": "gallery-7", "inputs": {"survey.toml": "ab" * 32}},
        "settings": Settings().to_dict(),
        "versions": {"jointmap": "0.1.0"},
        "seed": 0,
        "datum": {"kind": "landmarks", "robot": "heron", "components": ["2 landmarks"]},
        "components": [list(ROBOTS)],
        "counts": {"keyframes": 8, "landmarks": 3, "measurements": 12},
        "chi2": 11.0,
        "dof": 10,
        "evidence": {},
        "distrust": ["the last 0.8 s of otter: nobody saw it again"],
        "timings": {"solve": 0.1},
    }
    return {**made, **changes}


def _measurements(dimension: int) -> pd.DataFrame:
    n = 12
    return complete(
        "measurements",
        dimension,
        {
            "id": np.arange(n),
            "kind": ["sighting"] * 10 + ["encounter", "sighting"],
            "robot": ["heron", "otter"] * 6,
            "t_s": START_S + np.linspace(0.0, 3.0, n),
            "sensor": "front",
            "target": ["17", "17", "18", "18", "NA", "NA"] * 2,
            "landmark": (["plate-017"] * 2 + ["plate-018"] * 2 + ["NA"] * 2) * 2,
            "file": "heron/sightings.csv",
            "row": np.arange(2, n + 2),
            "burst": np.arange(n) // 2,
            "obs_range_m": np.linspace(1.0, 4.0, n),
            "weight": np.linspace(1.0, 0.0, n),
            "verdict": ["kept"] * 8 + ["down-weighted", "rejected", "kept", "unusable"],
            "reason": ["", "", "", "", "", "", "", "", "", "w-test 6.1 over 3.29", "", "no pose"],
        },
    )


def reference(dimension: int = 2, **changes: Any) -> Reference:
    """The whole reference; ``changes`` replace keys of reference.json."""
    paths = {name: trajectory(dimension, 10 + i) for i, name in enumerate(ROBOTS)}
    pose = {c: np.linspace(0.0, 0.1, 2) for c in pose_columns(dimension)}
    tables: dict[str, pd.DataFrame] = {name: complete(name, dimension, {}) for name in TABLES}
    place = {c: np.array([1.0, 2.5, -1.0 / 3.0]) for c in pose_columns(dimension)[:dimension]}
    tables["landmarks"] = complete(
        "landmarks",
        dimension,
        {
            "landmark": ["plate-017", "plate-018", "NA"],
            "component": 0,
            **place,
            "cov_x_x": 0.01,
            "cov_x_y": 0.0,
            "cov_y_y": 0.04,
            "n_sightings": [4, 4, 3],
            "n_robots": [2, 2, 1],
            "robots": ["heron otter", "heron otter", "heron"],
            "trust": ["checked", "weak", "unchecked"],
            "datum": [True, True, False],
        },
    )
    tables["measurements"] = _measurements(dimension)
    tables["associations"] = complete(
        "associations",
        dimension,
        {
            "robot": ["otter", "heron"],
            "label": ["017", "true"],
            "landmark": ["plate-017", "plate-018"],
            "n_sightings": [5, 6],
            "verdict": ["rejected", "kept"],
            "reason": ["does not fit heron's plate-017 by 1.2 m", ""],
            "statistic": [61.5, 1.0],
            "alternative": [None, None],
        },
    )
    tables["noise"] = complete(
        "noise",
        dimension,
        {
            "robot": ["heron"],
            "sensor": ["front"],
            "component": ["range_m"],
            "term": ["constant"],
            "given": [0.1],
            "estimated": [0.043],
            "sigma": [0.002],
            "redundancy": [120.5],
        },
    )
    tables["calibration"] = complete(
        "calibration",
        dimension,
        {
            "robot": ["heron", "otter"],
            "sensor": [None, "front"],
            "parameter": ["odometry_scale", "lag_s"],
            "value": [0.93, 0.0],
            "sigma": [0.01, np.nan],
            "significant": [True, False],
            "observable": [True, None],
            "used": [True, False],
        },
    )
    tables["suspects"] = complete(
        "suspects",
        dimension,
        {
            "kind": ["association"],
            "robot": ["otter"],
            "t_from_s": [START_S],
            "t_to_s": [START_S + 2.0],
            "target": ["017"],
            "statistic": [61.5],
            "reason": ["otter's 017 does not fit plate-017 by 1.2 m"],
            "edit": ['[[reject_association]]\nrobot = "otter"\nlabel = "017"'],
        },
    )
    tables["robots"] = complete(
        "robots",
        dimension,
        {
            "robot": list(ROBOTS),
            "component": 0,
            **pose,
            "path_m": [3.2, 2.8],
            "share_checked": [0.4, 0.4],
            "share_weak": [0.4, 0.4],
            "share_unchecked": [0.2, 0.2],
            "outages": ["", format_outages([[START_S + 1.0, START_S + 1.1]])],
        },
    )
    state: dict[str, NDArray[Any]] = {
        "ordering": np.arange(5),
        "linearisation": np.linspace(0.0, 1.0, 7),
        "names": np.array(["heron", "otter"]),
    }
    return Reference(meta=meta(**changes), trajectories=paths, state=state, **tables)


def with_trajectory(base: Reference, robot: str, **changes: Any) -> Reference:
    """The same reference with fields of one trajectory changed."""
    changed = replace(base.trajectories[robot], **changes)
    return replace(base, trajectories={**base.trajectories, robot: changed})

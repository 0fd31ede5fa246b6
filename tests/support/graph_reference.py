"""A reference made straight from a small gtsam graph, and what gtsam says about the same graph."""

from __future__ import annotations

from dataclasses import dataclass

import gtsam
import numpy as np
import pandas as pd
from adjustment_networks import landmark_graph

from jointmap import frames
from jointmap.products.columns import META_KEYS, TABLES, complete, pack_covariance
from jointmap.products.reference import Reference, Trajectory
from jointmap.schema import covariance_columns, pose_columns
from jointmap.trust.datum import datum_transform, null_space, position_weights
from jointmap.trust.elimination import clique_tree, eliminate
from jointmap.trust.marginals import selected_inverse_of
from jointmap.trust.solve_pairs import SquareRootFactor

ROBOTS = ("heron", "otter")


@dataclass(frozen=True)
class Made:
    """The reference, gtsam's marginals of the graph, and the dense covariance in the datum."""

    reference: Reference
    marginals: gtsam.Marginals
    dense: np.ndarray
    start: np.ndarray
    dims: np.ndarray
    moved: np.ndarray

    def block(self, i, j):
        """Cross-covariance of two keys in the datum, from the dense matrix."""
        rows = self.start[i] + np.arange(self.dims[i])
        return self.dense[np.ix_(rows, self.start[j] + np.arange(self.dims[j]))]


def made(dimension: int, poses: int = 60) -> Made:
    """Two robots share a walk of ``poses`` keyframes, one a second, in a turned map frame."""
    graph, values, dims = landmark_graph(dimension, poses)
    group = frames.group(dimension)
    if dimension == 2:
        at = [values.atPose2(k) for k in range(poses)]
        pose = np.array([[p.x(), p.y(), p.theta()] for p in at])
        point = np.array([values.atPoint2(poses + k) for k in range(len(dims) - poses)])
    else:
        pose = np.array([values.atPose3(k).matrix()[:3] for k in range(poses)])
        point = np.array([values.atPoint3(poses + k) for k in range(len(dims) - poses)])
    tree = clique_tree(eliminate(graph.linearize(values)), dims)
    factor = SquareRootFactor(tree)
    keys, points = np.arange(poses), np.arange(poses, len(dims))
    null = null_space(dims, dimension, False, (keys, pose), (points, point))
    weights = position_weights(dims, dimension, points)
    datum = datum_transform(factor, np.zeros(len(dims), int), null, weights)
    shift = group.exp(np.linspace(0.3, -0.5, group.dof))[None]
    moved = group.compose(shift, pose)
    inverse = selected_inverse_of(tree)
    cov = datum.diagonal(keys, inverse.diagonal(keys))
    half = poses // 2
    paths = {}
    for r, name in enumerate(ROBOTS):
        mine = slice(r * half, (r + 1) * half)
        paths[name] = Trajectory(
            t_s=np.arange(half, dtype=float),
            pose=group.to_rows(moved[mine]),
            cov=group.covariance_to_table(moved[mine], cov[mine]),
            keyframe=np.ones(half, bool),
            component=np.zeros(half, int),
            trust=np.zeros(half, int),
        )
    tables = {name: complete(name, dimension, {}) for name in TABLES}
    names = [f"plate-{k:03d}" for k in range(len(points))]
    turn = group.rotation(shift)
    blocks = turn @ datum.diagonal(points, inverse.diagonal(points)) @ np.swapaxes(turn, 1, 2)
    where = group.transform(shift, point)
    landmark = {"landmark": names, "component": 0, "trust": "checked", "datum": True}
    landmark |= dict(zip(pose_columns(dimension)[:dimension], where.T, strict=True))
    corner = [
        c
        for c in covariance_columns(dimension)
        if not any(a in c for a in ("yaw", "rx", "ry", "rz"))
    ]
    landmark |= dict(zip(corner, pack_covariance(blocks).T, strict=True))
    tables["landmarks"] = complete("landmarks", dimension, pd.DataFrame(landmark))
    meta = dict.fromkeys(META_KEYS) | {
        "format": 1, "status": "ok", "reasons": [], "components": [list(ROBOTS)],
        "survey": {"name": "walk", "path": "walk", "inputs": {}}, "evidence": {},
        "distrust": [], "timings": {}, "chi2": 100.0, "dof": 100,
        "datum": {"kind": "landmarks", "robot": "heron", "components": ["landmarks"]},
    }  # fmt: skip
    state = {f"factor_{k}": v for k, v in factor.to_arrays().items()}
    state |= {f"datum_{k}": v for k, v in datum.to_arrays().items()}
    state |= {
        "poses": pose, "landmarks": point, "map_shift": shift,
        "component": np.zeros(len(dims), int), "keyframe_t_s": np.tile(np.arange(half), 2) * 1.0,
        "keyframe_first": np.array([0, half, 2 * half]), "robots": np.array(ROBOTS),
        "key_of_landmark": points, "dims": dims, "track_robot": np.zeros(0, int),
        "track_label": np.array([""]), "landmark_name": np.array(names),
    }  # fmt: skip
    marginals = gtsam.Marginals(graph, values)
    b = weights[:, None] * null
    s = np.eye(len(b)) - null @ np.linalg.solve(b.T @ null, b.T)
    start = np.cumsum(dims) - dims
    full = np.empty((len(b), len(b)))
    for i in range(len(dims)):
        for j in range(i, len(dims)):
            rows = start[i] + np.arange(dims[i])
            cols = start[j] + np.arange(dims[j])
            if i == j:
                full[np.ix_(rows, rows)] = marginals.marginalCovariance(i)
                continue
            joint = marginals.jointMarginalCovariance([i, j])
            full[np.ix_(rows, cols)] = joint.at(i, j)
            full[np.ix_(cols, rows)] = full[np.ix_(rows, cols)].T
    reference = Reference(meta=meta, trajectories=paths, state=state, **tables)
    return Made(reference, marginals, s @ full @ s.T, start, dims, moved)

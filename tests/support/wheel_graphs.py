"""Public graphs that the gtsam wheel ships, cut into robots and written as survey folders.

Reading, cutting, covariance and the unsplit optimum use gtsam, NumPy and pandas alone. Poses are
gtsam ``Pose2`` or ``Pose3``; covariances are of the body tangent at the later pose, in gtsam's
order (rotation first in three dimensions), the residual being ``log(measured^-1 predicted)``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

import gtsam
import gtsam_unstable
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from jointmap.products.reference import Reference

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Pose = gtsam.Pose2 | gtsam.Pose3

ROBOTS = ("heron", "otter", "vole", "swift", "dipper")
#: Log time of every robot's first pose, and the seconds from pose to pose.
FIRST_S, STEP_S = 1000.0, 1.0
#: Key of the first landmark in gtsam graphs.
LANDMARK_KEY = 1_000_000


@dataclass(frozen=True)
class Edges:
    """Relative poses of ``b`` in ``a`` with their covariance (n, dof, dof)."""

    a: Ints
    b: Ints
    pose: list[Pose]
    covariance: Floats

    def take(self, rows: Ints | NDArray[np.bool_]) -> Edges:
        """Some of the rows."""
        index = np.arange(len(self.pose))[rows]
        return Edges(
            self.a[index], self.b[index], [self.pose[i] for i in index], self.covariance[index]
        )


@dataclass(frozen=True)
class Sightings:
    """Landmarks (positions ``at`` (n, 2) in the body) with covariance (n, 2, 2)."""

    pose: Ints
    landmark: Ints
    at: Floats
    covariance: Floats


@dataclass(frozen=True)
class Graph:
    """A graph with poses 0 .. n_poses - 1 in order of time.

    ``steps`` are the edges between neighbours in time, one each; ``others`` all the rest;
    ``wrong`` further candidates that the file offers for some steps.
    """

    dimension: int
    n_poses: int
    steps: Edges
    others: Edges
    wrong: Edges | None = None
    sightings: Sightings | None = None


@dataclass(frozen=True)
class Cut:
    """Where each pose of a graph went: robot (n,), its stamp (n,) seconds; and the folder."""

    folder: Path
    robot: Ints
    t_s: Floats
    names: tuple[str, ...] = field(default=ROBOTS)


def data_file(name: str) -> Path:
    """A file of the wheel's data folder."""
    return Path(gtsam.__file__).parent / "Data" / name


def _edges(a: Sequence[int], b: Sequence[int], pose: list[Pose], covariance: Floats) -> Edges:
    dof = 3 if isinstance(pose[0], gtsam.Pose2) else 6
    full = np.broadcast_to(covariance, (len(pose), dof, dof))
    return Edges(np.asarray(a, dtype=np.int64), np.asarray(b, dtype=np.int64), pose, full)


def _ordered(dimension: int, n: int, edges: Edges, **more: object) -> Graph:
    """Split edges into the first one of each step, in order, and the rest."""
    step = np.flatnonzero(edges.b == edges.a + 1)
    _, first = np.unique(edges.a[step], return_index=True)
    step = step[first]
    assert len(step) == n - 1
    rest = np.setdiff1d(np.arange(len(edges.pose)), step)
    return Graph(dimension, n, edges.take(step), edges.take(rest), **more)  # type: ignore[arg-type]


def read_city(limit: int | None = None) -> Graph:
    """T1_city10000_04.txt (or its first ``limit`` poses): some steps have two candidates.

    A line reads ``EDGE2 from 1 to 0 count`` and ``count`` times x, y, yaw; the first candidate is
    the right one. The file has no noise: 0.02 m, 0.02 m, 0.01 rad.
    """
    covariance = np.diag([0.02, 0.02, 0.01]) ** 2
    right: list[tuple[int, int, Pose]] = []
    wrong: list[tuple[int, int, Pose]] = []
    for line in data_file("T1_city10000_04.txt").read_text().splitlines():
        part = line.split()
        a, b, count = int(part[1]), int(part[3]), int(part[5])
        if limit is not None and max(a, b) >= limit:
            continue
        for k in range(count):
            pose = gtsam.Pose2(*map(float, part[6 + 3 * k : 9 + 3 * k]))
            (right if k == 0 else wrong).append((a, b, pose))
    edges = _edges(*_columns(right), covariance)
    n = int(max(edges.a.max(), edges.b.max())) + 1
    return _ordered(2, n, edges, wrong=_edges(*_columns(wrong), covariance))


def _columns(rows: list[tuple[int, int, Pose]]) -> tuple[list[int], list[int], list[Pose]]:
    return [r[0] for r in rows], [r[1] for r in rows], [r[2] for r in rows]


def _upper(values: Sequence[str], size: int) -> Floats:
    out = np.zeros((size, size))
    out[np.triu_indices(size)] = [float(v) for v in values]
    return out


def _covariance_of_root(root: Floats) -> Floats:
    """Covariance whose information is ``root^T root``."""
    back = np.linalg.inv(root)
    return back @ back.T


def read_sphere(limit: int | None = None) -> Graph:
    """sphere2500.txt (or its first ``limit`` poses).

    ``EDGE3 a b x y z roll pitch yaw`` and the upper triangle of the square-root information,
    translation first.
    """
    rows, covariance = [], []
    for line in data_file("sphere2500.txt").read_text().splitlines():
        part = line.split()
        a, b = int(part[1]), int(part[2])
        if limit is not None and max(a, b) >= limit:
            continue
        x, y, z, roll, pitch, yaw = map(float, part[3:9])
        turn = gtsam.Rot3.Ypr(yaw, pitch, roll)
        rows.append((a, b, gtsam.Pose3(turn, np.array([x, y, z]))))
        covariance.append(_covariance_of_root(_upper(part[9:], 6)))
    order = [3, 4, 5, 0, 1, 2]
    turned = np.array(covariance)[:, order][:, :, order]
    edges = _edges(*_columns(rows), turned)
    return _ordered(3, int(max(edges.a.max(), edges.b.max())) + 1, edges)


def read_landmark_graph(name: str) -> Graph:
    """cityTrees_reduced_1k.g2o or victoriaPark_reduced_1k.g2o, as square-root information."""
    rows, covariance, seen = [], [], []
    for line in data_file(name).read_text().splitlines():
        part = line.split()
        a, b = int(part[1]), int(part[2])
        if part[0] == "EDGE_SE2":
            rows.append((a, b, gtsam.Pose2(*map(float, part[3:6]))))
            covariance.append(_covariance_of_root(_upper(part[6:], 3)))
        else:
            root = _upper(part[5:], 2)
            seen.append((a, b, [float(v) for v in part[3:5]], _covariance_of_root(root)))
    a, b, pose = _columns(rows)
    names = np.unique(a + b)
    place = {int(k): i for i, k in enumerate(names)}
    edges = _edges([place[k] for k in a], [place[k] for k in b], pose, np.array(covariance))
    sightings = Sightings(
        np.array([place[s[0]] for s in seen]),
        np.array([s[1] for s in seen]),
        np.array([s[2] for s in seen]),
        np.array([s[3] for s in seen]),
    )
    return _ordered(2, len(names), edges, sightings=sightings)


def inflated(graph: Graph, factor: float) -> Graph:
    """The graph with all covariances times a factor: same optimum, chi-square over the factor."""
    steps = replace(graph.steps, covariance=factor * graph.steps.covariance)
    others = replace(graph.others, covariance=factor * graph.others.covariance)
    seen = graph.sightings
    if seen is not None:
        seen = replace(seen, covariance=factor * seen.covariance)
    return replace(graph, steps=steps, others=others, sightings=seen)


def without_bridges(graph: Graph, pieces: int) -> Graph:
    """The graph without the steps that lead from one piece to the next."""
    robot = pieces_of(graph, pieces)
    return replace(graph, steps=graph.steps.take(robot[graph.steps.a] == robot[graph.steps.b]))


def pieces_of(graph: Graph, pieces: int) -> Ints:
    """Which piece (n_poses,) each pose belongs to."""
    return np.arange(graph.n_poses) * pieces // graph.n_poses


# -- the unsplit graph in gtsam -----------------------------------------------------------------


def _append(graph: gtsam.NonlinearFactorGraph, edges: Edges, dimension: int) -> None:
    make = gtsam.BetweenFactorPose2 if dimension == 2 else gtsam.BetweenFactorPose3
    models: dict[bytes, gtsam.noiseModel.Base] = {}
    for a, b, pose, cov in zip(edges.a, edges.b, edges.pose, edges.covariance, strict=True):
        model = models.setdefault(cov.tobytes(), gtsam.noiseModel.Gaussian.Covariance(cov))
        graph.add(make(int(a), int(b), pose, model))


def factor_graph(graph: Graph) -> gtsam.NonlinearFactorGraph:
    """The unsplit graph without a gauge."""
    out = gtsam.NonlinearFactorGraph()
    _append(out, graph.steps, graph.dimension)
    _append(out, graph.others, graph.dimension)
    seen = graph.sightings
    if seen is not None:
        for k in range(len(seen.pose)):
            model = gtsam.noiseModel.Gaussian.Covariance(seen.covariance[k])
            key = LANDMARK_KEY + int(seen.landmark[k])
            out.add(gtsam_unstable.DeltaFactor(int(seen.pose[k]), key, seen.at[k], model))
    return out


def degrees_of_freedom(graph: Graph) -> int:
    """Rows minus unknowns of the unsplit graph, the gauge taken off."""
    dof = 3 if graph.dimension == 2 else 6
    rows = dof * (len(graph.steps.pose) + len(graph.others.pose))
    unknowns = dof * (graph.n_poses - 1)
    if graph.sightings is not None:
        rows += 2 * len(graph.sightings.pose)
        unknowns += 2 * len(np.unique(graph.sightings.landmark))
    return rows - unknowns


def optimum(graph: Graph, start: gtsam.Values) -> tuple[float, gtsam.Values]:
    """Chi-square and values of the unsplit optimum by plain Levenberg-Marquardt in gtsam."""
    plain = factor_graph(graph)
    held = factor_graph(graph)
    sigma = gtsam.noiseModel.Isotropic.Sigma(3 if graph.dimension == 2 else 6, 1e-3)
    if graph.dimension == 2:
        held.add(gtsam.PriorFactorPose2(0, start.atPose2(0), sigma))
    else:
        held.add(gtsam.PriorFactorPose3(0, start.atPose3(0), sigma))
    params = gtsam.LevenbergMarquardtParams()
    params.setOrderingType("METIS")
    params.setMaxIterations(100)
    params.setRelativeErrorTol(1e-12)
    params.setAbsoluteErrorTol(1e-9)
    values = gtsam.LevenbergMarquardtOptimizer(held, start, params).optimize()
    return 2.0 * plain.error(values), values


# -- cutting ------------------------------------------------------------------------------------


def cut(graph: Graph, pieces: int, folder: Path, *, seed: int = 0, coin: bool = False) -> Cut:
    """Cut a graph into consecutive robots and write it as a survey folder.

    Every robot's odometry starts at a random pose of its own. Steps within a robot are its
    odometry, with the covariance that accumulates along it; steps across a cut and all other
    edges are closures with full covariance. Further candidates of a step are closures too;
    ``coin``: a coin decides which of two candidates is the odometry and which the closure.
    """
    rng = np.random.default_rng(seed)
    robot = pieces_of(graph, pieces)
    first = np.searchsorted(robot, np.arange(pieces))
    stamps = FIRST_S + STEP_S * (np.arange(graph.n_poses) - first[robot])
    made = Cut(folder, robot, stamps)
    steps, wrong = graph.steps, graph.wrong
    if coin and wrong is not None:
        steps, wrong = _tossed(graph.steps, wrong, rng)
    inside = robot[steps.a] == robot[steps.b]
    parts = [steps.take(~inside), graph.others] + ([] if wrong is None else [wrong])
    text = ["[survey]", "format = 1", f"dimension = {graph.dimension}"]
    if graph.dimension == 3:
        text.append("gravity_aligned = false")
    folder.mkdir(parents=True, exist_ok=True)
    for r in range(pieces):
        own = np.flatnonzero(inside & (robot[steps.a] == r))
        text += _write_robot(graph, made, r, steps.take(own), rng)
    _write_closures(parts, made, folder / "closures.csv", graph.dimension)
    (folder / "survey.toml").write_text("\n".join(text) + "\n")
    return made


def _tossed(steps: Edges, wrong: Edges, rng: np.random.Generator) -> tuple[Edges, Edges]:
    """Let a coin swap each further candidate with the step that it competes with."""
    pose, other = list(steps.pose), list(wrong.pose)
    for k in np.flatnonzero(rng.random(len(wrong.pose)) < 0.5):
        at = int(wrong.a[k])
        assert steps.a[at] == wrong.a[k] and steps.b[at] == wrong.b[k]
        pose[at], other[k] = other[k], pose[at]
    return replace(steps, pose=pose), replace(wrong, pose=other)


def _write_robot(
    graph: Graph, made: Cut, r: int, steps: Edges, rng: np.random.Generator
) -> list[str]:
    name = made.names[r]
    folder = made.folder / name
    folder.mkdir(exist_ok=True)
    mine = np.flatnonzero(made.robot == r)
    now = random_pose(rng, graph.dimension)
    poses, spread = [now], np.zeros((len(mine), *steps.covariance.shape[1:]))
    for k, (step, cov) in enumerate(zip(steps.pose, steps.covariance, strict=True)):
        now = now.compose(step)
        back = step.inverse().AdjointMap()
        spread[k + 1] = back @ spread[k] @ back.T + cov
        poses.append(now)
    table = pd.DataFrame({"t_s": made.t_s[mine], **pose_columns(poses)})
    table = table.assign(**covariance_columns(poses, spread, "acc_cov_"))
    table.to_csv(folder / "odometry.csv", index=False, float_format="%.17g")
    lines = [f"[robots.{name}]", f'odometry = "{name}/odometry.csv"']
    seen = graph.sightings
    if seen is not None:
        rows = np.flatnonzero(made.robot[seen.pose] == r)
        sighted = pd.DataFrame(
            {
                "t_s": made.t_s[seen.pose[rows]],
                "sensor": "front",
                "landmark": [f"plate-{k:04d}" for k in seen.landmark[rows]],
                "x_m": seen.at[rows, 0],
                "y_m": seen.at[rows, 1],
                "sigma_x_m": np.sqrt(seen.covariance[rows, 0, 0]),
                "sigma_y_m": np.sqrt(seen.covariance[rows, 1, 1]),
            }
        )
        assert not seen.covariance[rows, 0, 1].any()
        sighted.to_csv(folder / "sightings.csv", index=False, float_format="%.17g")
        lines.append(f'sightings = "{name}/sightings.csv"')
        lines += [f"[robots.{name}.sensors.front]", "body_T_sensor = [0.0, 0.0, 0.0]"]
    return lines


def _write_closures(parts: list[Edges], made: Cut, path: Path, dimension: int) -> None:
    if not any(edges.pose for edges in parts):
        return
    tables = []
    for edges in parts:
        if not len(edges.pose):
            continue
        table = pd.DataFrame(
            {
                "robot_a": [made.names[r] for r in made.robot[edges.a]],
                "t_a_s": made.t_s[edges.a],
                "robot_b": [made.names[r] for r in made.robot[edges.b]],
                "t_b_s": made.t_s[edges.b],
                **pose_columns(edges.pose),
                **covariance_columns(edges.pose, edges.covariance, "cov_"),
            }
        )
        tables.append(table)
    pd.concat(tables).to_csv(path, index=False, float_format="%.17g")


def random_pose(rng: np.random.Generator, dimension: int) -> Pose:
    """Any place within 100 m, any attitude."""
    if dimension == 2:
        return gtsam.Pose2(*rng.uniform(-100.0, 100.0, 2), rng.uniform(-np.pi, np.pi))
    w, x, y, z = rng.normal(size=4)
    return gtsam.Pose3(gtsam.Rot3.Quaternion(*_unit([w, x, y, z])), rng.uniform(-100, 100, 3))


def _unit(v: Sequence[float]) -> Floats:
    return np.asarray(v) / np.linalg.norm(v)


def pose_columns(poses: Sequence[Pose]) -> dict[str, Floats]:
    """Table columns of poses."""
    if isinstance(poses[0], gtsam.Pose2):
        rows = np.array([[p.x(), p.y(), p.theta()] for p in poses])
        return dict(zip(("x_m", "y_m", "yaw_rad"), rows.T, strict=True))
    rows = np.array([[*p.translation(), *_xyzw(p)] for p in poses])
    return dict(zip(("x_m", "y_m", "z_m", "qx", "qy", "qz", "qw"), rows.T, strict=True))


def _xyzw(pose: gtsam.Pose3) -> list[float]:
    q = pose.rotation().toQuaternion()
    return [q.x(), q.y(), q.z(), q.w()]


def covariance_columns(poses: Sequence[Pose], covariance: Floats, prefix: str) -> dict[str, Floats]:
    """Upper triangle in table order about the fixed axes of the frame the poses stand in."""
    planar = isinstance(poses[0], gtsam.Pose2)
    names = ("x", "y", "yaw") if planar else ("x", "y", "z", "rx", "ry", "rz")
    size = len(names)
    axes = np.zeros((len(poses), size, size))
    for k, pose in enumerate(poses):
        turn = pose.rotation().matrix()
        if planar:
            axes[k, :2, :2], axes[k, 2, 2] = turn, 1.0
        else:
            axes[k, :3, 3:] = axes[k, 3:, :3] = turn
    full = axes @ covariance @ np.swapaxes(axes, 1, 2)
    return {
        f"{prefix}{names[i]}_{names[j]}": full[:, i, j]
        for i, j in zip(*np.triu_indices(size), strict=True)
    }


def fused_values(graph: Graph, made: Cut, reference: Reference) -> gtsam.Values:
    """The reference's poses and landmarks under the keys of the unsplit graph."""
    values = gtsam.Values()
    for r in np.unique(made.robot):
        path = reference.trajectories[made.names[r]]
        mine = np.flatnonzero(made.robot == r)
        assert np.array_equal(path.t_s, made.t_s[mine])
        for key, row in zip(mine, path.pose, strict=True):
            values.insert(int(key), _pose_of(row))
    if graph.sightings is not None:
        for row in reference.landmarks.itertuples():
            key = LANDMARK_KEY + int(str(row.landmark).removeprefix("plate-"))
            values.insert(key, np.array([row.x_m, row.y_m]))
    return values


def _pose_of(row: Floats) -> Pose:
    if len(row) == 3:
        return gtsam.Pose2(*row)
    x, y, z, qx, qy, qz, qw = row
    return gtsam.Pose3(gtsam.Rot3.Quaternion(qw, qx, qy, qz), np.array([x, y, z]))

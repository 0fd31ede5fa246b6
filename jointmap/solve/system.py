"""The nonlinear least-squares system of a problem under one set of decisions.

Decisions are: which landmark each track is (assignment), which rows are used, how residuals are
whitened and which kernel each block has. The system evaluates residuals and linearises them at a
state; it never changes.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.calibrate import ODOMETRY_PARAMETERS
from jointmap.graph.models import Linearised, linearise_block, relative_pose
from jointmap.graph.problem import Assignment, Block, Problem, State
from jointmap.ingest.survey import Provenance
from jointmap.solve.gauge import (
    Gauge,
    components,
    make_gauge,
    motion_basis,
    point_motion,
    pose_motion,
)
from jointmap.solve.kernels import RobustLoss
from jointmap.solve.layout import (
    Layout,
    landmark_of_rows,
    make_layout,
    oriented_landmarks,
    oriented_tracks,
)
from jointmap.solve.linear import LinearGraph, Rows
from jointmap.solve.shared import (
    SENSOR_PARAMETERS,
    SENSOR_PRIOR,
    UNUSED_SHARE,
    Chain,
    Extras,
    SharedModel,
    by_state,
    chain_rows,
    constant_columns,
    make_chain,
    only,
    scaled,
    sensor_index,
    sensor_rows,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: A redescending kernel never weighs a row below this, so that no chain is ever cut in two.
WEIGHT_FLOOR = 1e-7


def take_rows(block: Block, rows: Bools | Ints) -> Block:
    """Some rows of a block."""
    n = block.n
    changed: dict[str, object] = {}
    for f in fields(block):
        value = getattr(block, f.name)
        if (isinstance(value, np.ndarray) and value.ndim and len(value) == n and n != 1) or (
            isinstance(value, np.ndarray) and n == 1 and f.name not in ("frame_a", "frame_b")
        ):
            changed[f.name] = value[rows]
    s = block.source
    changed["source"] = Provenance(s.files, s.file[rows], s.row[rows])
    return replace(block, **changed)  # type: ignore[arg-type]


@dataclass(frozen=True)
class Part:
    """The used rows of one block.

    ``at`` is the place of the block in the problem, ``index`` (n,) the rows in it; ``whiten``
    (n, m, m); ``key_a``, ``key_b`` (n,) variables; ``landmark`` (n,) of sightings and control.
    ``chain`` the errors that its rows share, which then are variables and no part of ``whiten``;
    ``sensor_key`` the constant errors of its sensor where there is no chain to carry them (-1).
    """

    at: int
    block: Block
    index: Ints
    whiten: Floats
    kernel: RobustLoss | None
    key_a: Ints
    key_b: Ints
    landmark: Ints | None
    chain: Chain | None = None
    sensor_key: int = -1


@dataclass(frozen=True)
class Links:
    """Associations as factors: the landmark of a track equals the shared one it claims.

    ``track`` (n,), ``own`` and ``shared`` (n,) landmark variables, ``sigma`` in metres: small, so
    that the factor says "the same", and the redundancy of the factor tests exactly that.
    """

    track: Ints
    own: Ints
    shared: Ints
    sigma: float


@dataclass(frozen=True)
class System:
    """Everything that :func:`jointmap.solve.optimise.optimise` needs besides a start."""

    problem: Problem
    assignment: Assignment
    layout: Layout
    oriented: Bools
    parts: tuple[Part, ...]
    component: Ints
    links: Links
    sensitivity: Mapping[int, Floats] = field(default_factory=dict)
    calibration_offset: Floats = field(default_factory=lambda: np.zeros((0, 3)))
    calibration_prior: Floats = field(default_factory=lambda: np.ones((0, 3)))
    scale: Floats = field(default_factory=lambda: np.ones(0))
    extras: Extras | None = None


def make_system(
    problem: Problem,
    assignment: Assignment,
    used: tuple[Bools, ...],
    whiten: tuple[Floats, ...],
    kernels: tuple[RobustLoss | None, ...],
    sensitivity: Mapping[int, Floats] | None = None,
    calibration_offset: Floats | None = None,
    calibration_prior: Floats | None = None,
    scale: Floats | None = None,
    links: Ints | None = None,
    link_sigma: float = 1e-3,
    shared: Mapping[int, SharedModel] | None = None,
    sensors: tuple[tuple[int, str], ...] = (),
    constants: Bools | None = None,
) -> System:
    """Assemble a system.

    Parameters
    ----------
    used : per block (n,) bool
    whiten : per block (n, m, m) as :func:`jointmap.graph.noise.whitening`
    kernels : per block, None for plain least squares
    sensitivity : robot -> (rows of its odometry block, dof, 3) derivative of the increment by
        translation scale, turn scale and lag; robots in it get a calibration vector
    calibration_offset, calibration_prior : (R, 3) present calibration minus its prior mean, and
        the prior's standard deviations
    scale : (R,) translation scale with which the odometry was integrated
    links : (k,) tracks whose own landmark is tied to the shared one that they claim
    shared : block -> what its rows share; their ``whiten`` is then of the white part alone
    sensors : (robot index, name) of every sensor with constant errors, by ``SharedModel.sensor``
    constants : (3,) which of them may differ from zero; None: all
    """
    links = np.zeros(0, dtype=np.int64) if links is None else links
    sensitivity = sensitivity or {}
    calibrated = np.zeros(len(problem.robots), dtype=bool)
    calibrated[list(sensitivity)] = True
    layout = make_layout(problem, assignment, used, calibrated, links)
    tied = Links(links, assignment.landmark[links], problem.tracks.claim[links], link_sigma)
    oriented = oriented_landmarks(problem, assignment, oriented_tracks(problem, used), links)
    parts: list[Part] = []
    for at, (block, rows, w, kernel) in enumerate(
        zip(problem.blocks, used, whiten, kernels, strict=True)
    ):
        keep = rows
        landmark = None
        if block.kind in ("sighting", "control"):
            landmark = landmark_of_rows(block, assignment)
            keep = rows & (layout.key_of_landmark[landmark] >= 0)
        for index in _uniform(keep, landmark, oriented):
            parts.append(_part(at, block, index, w, kernel, landmark, layout))
    pairs = [(p.key_a, p.key_b) for p in parts if p.block.kind not in ("fix", "gravity", "control")]
    pairs.append((layout.key_of_landmark[tied.own], layout.key_of_landmark[tied.shared]))
    n_tied = layout.n - int(calibrated.sum())
    parts, layout, extras = _with_extras(problem, parts, layout, shared or {}, sensors, constants)
    return System(
        problem,
        assignment,
        layout,
        oriented,
        tuple(parts),
        components(n_tied, pairs),
        tied,
        sensitivity,
        np.zeros((len(problem.robots), 3)) if calibration_offset is None else calibration_offset,
        np.ones((len(problem.robots), 3)) if calibration_prior is None else calibration_prior,
        np.ones(len(problem.robots)) if scale is None else scale,
        extras,
    )


def _with_extras(
    problem: Problem,
    parts: list[Part],
    layout: Layout,
    shared: Mapping[int, SharedModel],
    sensors: tuple[tuple[int, str], ...],
    constants: Bools | None,
) -> tuple[list[Part], Layout, Extras | None]:
    """Parts with the variables of their shared and constant errors, which follow all others."""
    if not shared:
        return parts, layout, None
    key0, n_sensors = layout.n, sensor_index(shared)
    dims = [np.full(n_sensors, len(SENSOR_PARAMETERS), dtype=np.int64)]
    key, out = key0 + n_sensors, []
    for part in parts:
        model = shared.get(part.at)
        if model is None:
            out.append(part)
            continue
        sensor_key = key0 + model.sensor if model.sensor >= 0 else -1
        if model.sigma is None:
            out.append(replace(part, sensor_key=sensor_key))
            continue
        target = part.landmark
        if target is None:
            target = problem.keyframes.robot[part.block.b]
        mine = replace(model, sigma=model.sigma[part.index])
        chain = make_chain(part.block, target, mine, key, sensor_key)
        dims.append(np.full(len(chain.key), part.whiten.shape[1], dtype=np.int64))
        key += len(chain.key)
        out.append(replace(part, chain=chain))
    size = np.concatenate(dims)
    offset = np.concatenate([[0], np.cumsum(size)]).astype(np.int64)
    used = np.ones(len(SENSOR_PARAMETERS), dtype=bool) if constants is None else constants
    prior = SENSOR_PRIOR * np.where(used, 1.0, UNUSED_SHARE)
    extras = Extras(sensors[:n_sensors], key0, size, offset, prior)
    whole = np.concatenate([layout.dims, size])
    offset = np.concatenate([[0], np.cumsum(whole)]).astype(np.int64)
    last = key0 + np.arange(n_sensors)
    return out, replace(layout, dims=whole, offset=offset, sensor_key=last), extras


def _uniform(keep: Bools, landmark: Ints | None, oriented: Bools) -> list[Ints]:
    """Used rows, apart by whether their landmark is a pose: a part has one shape of Jacobian."""
    if landmark is None:
        return [np.flatnonzero(keep)] if keep.any() else []
    poses = oriented[landmark]
    return [np.flatnonzero(g) for g in (keep & ~poses, keep & poses) if g.any()]


def _part(
    at: int,
    block: Block,
    index: Ints,
    whiten: Floats,
    kernel: RobustLoss | None,
    landmark: Ints | None,
    layout: Layout,
) -> Part:
    whole = len(index) == block.n
    sub = block if whole else take_rows(block, index)
    landmark = None if landmark is None else landmark[index]
    key_b = sub.b if landmark is None else layout.key_of_landmark[landmark]
    whiten = whiten if whole else whiten[index]
    return Part(at, sub, index, whiten, kernel, sub.a, key_b, landmark)


def linearise(
    system: System, part: Part, state: State, *, jacobians: bool = True, total: bool = False
) -> Linearised:
    """Unwhitened residual and Jacobians of a part at a state, calibration step included.

    ``total``: the whole error of each row, the share of its chain not taken off.
    """
    lin = linearise_block(
        frames.group(system.problem.dimension),
        part.block,
        state.poses,
        state.landmarks,
        state.orientations,
        system.assignment.landmark,
        system.oriented,
        jacobians=jacobians,
    )
    if part.block.kind == "odometry" and part.block.robot in system.sensitivity:
        change = calibration_step(system, state, part.block.robot)
        shift = system.sensitivity[part.block.robot][part.index] @ change
        factor = _row_units(system, part.block.robot, change[0])
        lin = replace(lin, residual=(lin.residual - shift) * factor)
        if lin.jac_a is not None and change[0] != 0.0:
            assert lin.jac_b is not None
            turn = factor[:, None]
            lin = replace(lin, jac_a=lin.jac_a * turn, jac_b=lin.jac_b * turn)
    if total or system.extras is None or (part.chain is None and part.sensor_key < 0):
        return lin
    error = shared_error(system, part, state, lin.residual)
    stretch = 1.0 + sensor_constant(system, part, state)[1] * scaled(part.block.components)
    return replace(
        lin,
        residual=lin.residual + error,
        jac_a=None if lin.jac_a is None else lin.jac_a * stretch[:, None],
        jac_b=None if lin.jac_b is None else lin.jac_b * stretch[:, None],
    )


def shared_error(system: System, part: Part, state: State, residual: Floats) -> Floats:
    """Shared and constant error (n, m) of a part's rows at a state.

    ``residual`` (n, m) predicted minus observed. The range scale acts on each row's own range; bias
    and bearing offset are in the mean of the chain, where there is one.
    """
    assert system.extras is not None
    constant, columns = sensor_constant(system, part, state), row_columns(part, residual)
    if part.chain is None:
        return np.asarray(columns @ constant)
    values = system.extras.values(state.extra, part.chain.key, part.whiten.shape[1])
    return np.asarray(values[part.chain.state] + columns[:, :, 1] * constant[1])


def sensor_constant(system: System, part: Part, state: State) -> Floats:
    """Constant errors (3,) of a part's sensor: range bias, range scale, bearing offset."""
    key = part.sensor_key if part.chain is None else part.chain.sensor_key
    if system.extras is None or key < 0:
        return np.zeros(len(SENSOR_PARAMETERS))
    return system.extras.values(state.extra, key, len(SENSOR_PARAMETERS))


def row_columns(part: Part, residual: Floats) -> Floats:
    """Derivative (n, m, 3) of the rows' error by the constant errors of their sensor."""
    if part.block.components == ("pose",):
        return constant_columns(part.block.components, residual)
    return constant_columns(part.block.components, part.block.obs + residual)


def state_columns(system: System, part: Part, state: State) -> Floats:
    """The same (E, m, 3), on average over the rows of each state of the part's chain."""
    assert part.chain is not None
    lin = linearise(system, part, state, jacobians=False, total=True)
    return by_state(part.chain, row_columns(part, lin.residual))


def extra_rows(system: System, state: State) -> list[Rows]:
    """Whitened rows that tie the shared and constant errors of sensors among themselves."""
    if system.extras is None:
        return []
    out = sensor_rows(system.extras, state.extra)
    for part in system.parts:
        if part.chain is not None:
            columns = state_columns(system, part, state)
            out += chain_rows(system.extras, part.chain, state.extra, columns)
    return out


def _row_units(system: System, robot: int, change: float) -> Floats:
    """Factor (dof,) that takes an odometry residual from metres to the units of its rows.

    The noise of an odometry belongs to what the odometry reports. In metres of the map a smaller
    scale would make every residual smaller, and the world would shrink to hide the noise.
    """
    dim = system.problem.dimension
    out = np.ones(3 if dim == 2 else 6)
    place = slice(0, 2) if dim == 2 else slice(3, 6)
    out[place] = 1.0 / max(1.0 + change / system.scale[robot], 0.1)
    return out


def calibration_step(system: System, state: State, robot: int) -> Floats:
    """Change (3,) of a robot's odometry calibration since its odometry was integrated."""
    name = system.problem.robots[robot]
    return np.array([state.calibration.get((name, "", p), 0.0) for p in ODOMETRY_PARAMETERS])


def whitened_norm(whitened: Floats) -> Floats:
    """Norm (n,) of whitened residuals (n, m)."""
    return np.asarray(np.sqrt(np.einsum("nm,nm->n", whitened, whitened)))


def whitened_residual(system: System, part: Part, state: State) -> Floats:
    """Whitened residual (n, m) of a part."""
    lin = linearise(system, part, state, jacobians=False)
    return np.asarray((part.whiten @ lin.residual[:, :, None])[:, :, 0])


def cost(system: System, state: State) -> float:
    """Half the robust objective: sum of rho over rows, plus the calibration priors."""
    total = 0.0
    for part in system.parts:
        norm = whitened_norm(whitened_residual(system, part, state))
        if part.kernel is None:
            total += 0.5 * float(norm @ norm)
        else:
            total += float(part.kernel.loss(norm, part.whiten.shape[1]).sum())
    for _, tied in link_rows(system, state, jacobians=False):
        total += 0.5 * float(np.einsum("nm,nm->", tied.rhs, tied.rhs))
    for robot in system.sensitivity:
        v = _prior_residual(system, state, robot)
        total += 0.5 * float(v @ v)
    for rows in extra_rows(system, state):
        total += 0.5 * float(np.einsum("nm,nm->", rows.rhs, rows.rhs))
    return total


def link_rows(system: System, state: State, *, jacobians: bool = True) -> list[tuple[Ints, Rows]]:
    """Whitened rows of the links, in groups: which links (k,), and their rows.

    Two poses are tied as poses, everything else by position.
    """
    links = system.links
    both = system.oriented[links.own] & system.oriented[links.shared]
    half = system.oriented[links.shared] & ~both
    out = []
    for group, make in ((both, _pose_links), (half, _half_links), (~both & ~half, _point_links)):
        rows = np.flatnonzero(group)
        if len(rows):
            out.append((rows, make(system, state, rows, jacobians)))
    return out


def _link_keys(system: System, rows: Ints) -> list[Ints]:
    key = system.layout.key_of_landmark
    return [key[system.links.own[rows]], key[system.links.shared[rows]]]


def _landmark_poses(system: System, state: State, index: Ints) -> Floats:
    assert state.orientations is not None
    group = frames.group(system.problem.dimension)
    return np.asarray(group.build(state.orientations[index], state.landmarks[index]))


def _pose_links(system: System, state: State, rows: Ints, jacobians: bool) -> Rows:
    group = frames.group(system.problem.dimension)
    links = system.links
    own = _landmark_poses(system, state, links.own[rows])
    shared = _landmark_poses(system, state, links.shared[rows])
    still = group.identity(1)
    lin = relative_pose(group, still, shared, still, own, still, jacobians=jacobians)
    rhs = -lin.residual / links.sigma
    if not jacobians:
        return Rows([], [], rhs)
    assert lin.jac_a is not None and lin.jac_b is not None
    return Rows(_link_keys(system, rows), [lin.jac_b / links.sigma, lin.jac_a / links.sigma], rhs)


def _point_links(system: System, state: State, rows: Ints, jacobians: bool) -> Rows:
    links, dim = system.links, system.problem.dimension
    gap = state.landmarks[links.own[rows]] - state.landmarks[links.shared[rows]]
    one = np.broadcast_to(np.eye(dim) / links.sigma, (len(rows), dim, dim))
    return Rows(_link_keys(system, rows), [one, -one] if jacobians else [], -gap / links.sigma)


def _half_links(system: System, state: State, rows: Ints, jacobians: bool) -> Rows:
    """A point tied to the position of a shared landmark that others see with orientation."""
    made = _point_links(system, state, rows, jacobians)
    if jacobians:
        assert state.orientations is not None
        turn = state.orientations[system.links.shared[rows]]
        zero = np.zeros((*turn.shape[:2], 1 if turn.shape[1] == 2 else 3))
        body = np.concatenate([turn, zero] if turn.shape[1] == 2 else [zero, turn], axis=2)
        made.jacobians[1] = -body / system.links.sigma
    return made


def _prior_residual(system: System, state: State, robot: int) -> Floats:
    now = system.calibration_offset[robot] + calibration_step(system, state, robot)
    return np.asarray(now / system.calibration_prior[robot])


@dataclass(frozen=True)
class LinearisedSystem:
    """A GTSAM linear graph at a state, with the cost there and the weights that entered."""

    graph: LinearGraph
    gauge: Gauge
    cost: float
    weights: tuple[Floats, ...]


def part_rows(
    system: System, part: Part, state: State, weight: Floats | None = None
) -> tuple[Rows, Floats]:
    """Whitened (and weighted) rows of a part, and the whitened residual (n, m) before weighting."""
    lin = linearise(system, part, state)
    w = part.whiten
    residual = (w @ lin.residual[:, :, None])[:, :, 0]
    if weight is not None:
        w = w * np.sqrt(weight)[:, None, None]
    keys, jacobians = [], []
    if lin.jac_a is not None and part.block.kind != "control":
        keys.append(part.key_a)
        jacobians.append(w @ lin.jac_a)
    if lin.jac_b is not None and (part.key_b >= 0).all():
        keys.append(part.key_b)
        jacobians.append(w @ lin.jac_b)
    if part.block.kind == "odometry" and part.block.robot in system.sensitivity:
        key = system.layout.calibration_key[part.block.robot]
        keys.append(np.full(len(part.index), key))
        jacobians.append(-(w @ _odometry_columns(system, part, state, lin.residual)))
    if part.chain is not None:
        keys.append(part.chain.key[part.chain.state])
        jacobians.append(w)
        if part.chain.sensor_key >= 0 and scaled(part.block.components).any():
            keys.append(np.full(len(part.index), part.chain.sensor_key))
            bare = linearise(system, part, state, jacobians=False, total=True).residual
            jacobians.append(w @ only(row_columns(part, bare), [1]))
    elif part.sensor_key >= 0:
        keys.append(np.full(len(part.index), part.sensor_key))
        bare = linearise(system, part, state, jacobians=False, total=True).residual
        jacobians.append(w @ row_columns(part, bare))
    rhs = -residual if weight is None else -residual * np.sqrt(weight)[:, None]
    return Rows(keys, jacobians, rhs), residual


def _odometry_columns(system: System, part: Part, state: State, residual: Floats) -> Floats:
    """Minus the derivative (n, dof, 3) of odometry residuals by the calibration of their robot."""
    robot = part.block.robot
    change = calibration_step(system, state, robot)[0]
    factor = _row_units(system, robot, change)
    out = system.sensitivity[robot][part.index] * factor[:, None]
    place = slice(0, 2) if system.problem.dimension == 2 else slice(3, 6)
    out[:, place, 0] += residual[:, place] / (system.scale[robot] + change)
    return out


def linearise_system(system: System, state: State) -> LinearisedSystem:
    """Linearise every part with the kernels' weights at the state, and hold the gauge."""
    graph = LinearGraph()
    total, weights = 0.0, []
    absolute: list[tuple[Ints, Floats]] = []
    for part in system.parts:
        weight = None
        if part.kernel is not None:
            norm = whitened_norm(whitened_residual(system, part, state))
            m = part.whiten.shape[1]
            weight = np.maximum(part.kernel.weight(norm, m), WEIGHT_FLOOR)
            total += float(part.kernel.loss(norm, m).sum())
        rows, residual = part_rows(system, part, state, weight)
        if part.kernel is None:
            total += 0.5 * float(np.einsum("nm,nm->", residual, residual))
        graph.push(rows)
        weights.append(np.ones(len(part.index)) if weight is None else weight)
        if part.block.kind in ("fix", "control"):
            absolute.append(_absolute_motion(system, part, state, rows))
    for _, rows in link_rows(system, state):
        graph.push(rows)
        total += 0.5 * float(np.einsum("nm,nm->", rows.rhs, rows.rhs))
    for robot in system.sensitivity:
        v = _prior_residual(system, state, robot)
        total += 0.5 * float(v @ v)
        key = np.array([system.layout.calibration_key[robot]])
        graph.push(Rows([key], [np.diag(1.0 / system.calibration_prior[robot])[None]], -v[None]))
    for rows in extra_rows(system, state):
        graph.push(rows)
        total += 0.5 * float(np.einsum("nm,nm->", rows.rhs, rows.rhs))
    k = system.layout.n_keyframes
    gauge = make_gauge(system.problem, state.poses[:k], system.component, absolute)
    for hold in gauge.rows:
        graph.push(hold)
    return LinearisedSystem(graph, gauge, total, tuple(weights))


def _absolute_motion(system: System, part: Part, state: State, rows: Rows) -> tuple[Ints, Floats]:
    basis = motion_basis(system.problem.dimension, system.problem.gravity_aligned)
    key = rows.keys[0]
    if part.landmark is None:
        motion = pose_motion(system.problem.dimension, state.poses[part.key_a], basis)
    else:
        motion = point_motion(system.problem.dimension, state.landmarks[part.landmark], basis)
        if rows.jacobians[0].shape[2] != motion.shape[1]:
            assert state.orientations is not None
            motion = pose_motion(
                system.problem.dimension,
                frames.group(system.problem.dimension).build(
                    state.orientations[part.landmark], state.landmarks[part.landmark]
                ),
                basis,
            )
    product = rows.jacobians[0] @ motion
    component = np.repeat(system.component[key], product.shape[1])
    return component, product.reshape(-1, basis.shape[1])


def retract(system: System, state: State, delta: Floats) -> State:
    """Move a state by a step (N,) in key order."""
    layout, dim = system.layout, system.problem.dimension
    group = frames.group(dim)
    k = layout.n_keyframes
    dof = group.dof
    poses = group.retract(state.poses[:k], delta[: k * dof].reshape(k, dof))
    landmarks = state.landmarks.copy()
    orientations = None if state.orientations is None else state.orientations.copy()
    oriented = system.oriented[layout.landmark_of_key]
    start = layout.offset[k : k + len(oriented)]
    point, pose = layout.landmark_of_key[~oriented], layout.landmark_of_key[oriented]
    landmarks[point] += delta[start[~oriented][:, None] + np.arange(dim)]
    if len(pose):
        assert orientations is not None
        moved = group.retract(
            group.build(orientations[pose], landmarks[pose]),
            delta[start[oriented][:, None] + np.arange(dof)],
        )
        landmarks[pose] = group.translation(moved)
        orientations[pose] = group.rotation(moved)
    calibration = dict(state.calibration)
    for robot in system.sensitivity:
        at = layout.offset[layout.calibration_key[robot]]
        name = system.problem.robots[robot]
        for i, p in enumerate(ODOMETRY_PARAMETERS):
            calibration[(name, "", p)] = calibration.get((name, "", p), 0.0) + float(delta[at + i])
    extra = state.extra
    if system.extras is not None:
        step = delta[layout.offset[system.extras.key0] :]
        extra = step if extra is None or len(extra) != len(step) else extra + step
    return State(poses, landmarks, orientations, calibration, extra)

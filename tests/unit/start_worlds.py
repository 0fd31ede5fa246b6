"""Small synthetic teams with known truth, as problems ready for start values."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.noise import Noise, NoiseTerm, residual_names
from jointmap.graph.problem import ODOMETRY_TERMS, Block, Keyframes, Problem, Tracks
from jointmap.graph.start.chunks import accumulate
from jointmap.ingest.survey import Provenance

Floats = NDArray[np.float64]
NAMES = ("heron", "otter", "vole", "swift", "marten", "stoat")


@dataclass
class Options:
    """What a world is made of."""

    dimension: int = 2
    gravity_aligned: bool = True
    robots: int = 3
    steps: int = 200
    landmarks: int = 40
    size: float = 12.0
    reach: float = 6.0
    components: tuple[str, ...] = ("bearing_rad", "range_m")
    sigma: float = 0.05
    sigma_angle: float = 0.01
    step_sigma: float = 0.005
    turn_sigma: float = 0.004
    turn_scale: float = 1.0
    move_scale: float = 1.0
    stated_turn_sigma: float | None = None
    wrong: float = 0.0
    wrong_kind: str = "random"
    gross: float = 0.02
    encounters: str = ""
    sightings: bool = True
    closures: int = 0
    wrong_closures: float = 0.0
    fixes: tuple[int, ...] = ()
    control: int = 0
    breaks: tuple[tuple[int, int], ...] = ()
    apart: tuple[int, ...] = ()
    seed: int = 0


@dataclass
class World:
    """A problem, its noise and its truth. ``right`` (T,) tracks with a right claim."""

    problem: Problem
    noise: Noise
    poses: Floats
    landmarks: Floats
    track_landmark: NDArray[np.int64]
    right: NDArray[np.bool_]
    blocks: list[Block] = field(default_factory=list)


def make_world(options: Options) -> World:
    """Simulate a team."""
    return _Maker(options).make()


class _Maker:
    def __init__(self, o: Options) -> None:
        self.o = o
        self.rng = np.random.default_rng(o.seed)
        self.lie = frames.group(o.dimension)

    def make(self) -> World:
        o = self.o
        k = o.steps
        self.truth = np.concatenate([self.path(r) for r in range(o.robots)])
        first = np.arange(o.robots + 1) * k
        self.keyframes = Keyframes(
            np.repeat(np.arange(o.robots), k), np.tile(np.arange(k) * 0.5, o.robots), first
        )
        self.breaks = np.zeros(k * o.robots, dtype=bool)
        for r, at in o.breaks:
            self.breaks[r * k + at] = True
        self.blocks: list[Block] = []
        self.reckoned = self.odometry()
        self.landmarks = self.rng.uniform(0, 1, size=(o.landmarks, o.dimension)) * self.box()
        tracks, of_track, right = self.sightings()
        if o.encounters:
            self.encounters()
        if o.closures:
            self.closures()
        self.absolute(tracks)
        problem = Problem(
            o.dimension, o.gravity_aligned, NAMES[: o.robots], self.keyframes, tracks,
            tuple(self.blocks), self.reckoned, self.breaks,
        )  # fmt: skip
        return World(problem, self.noise(), self.truth, self.landmarks, of_track, right)

    def box(self) -> Floats:
        return self.o.size * np.array([1.0, 1.0, 0.3])[: self.o.dimension]

    def path(self, robot: int) -> Floats:
        """A wandering path with the heading along it; roll and pitch sway a little in 3-D."""
        o, k = self.o, self.o.steps
        s = np.arange(k) / 40.0
        phase = self.rng.uniform(0, 2 * np.pi, size=6)
        rate = self.rng.uniform(0.6, 1.4, size=6)
        axes = [0.5 + 0.42 * np.sin(rate[i] * s + phase[i]) for i in range(3)]
        axes = [a + 0.06 * np.sin(2.7 * rate[3 + i] * s + phase[3 + i]) for i, a in enumerate(axes)]
        at = np.stack(axes, axis=1)[:, : o.dimension] * self.box()
        if robot in o.apart:
            at = at + 100.0
        velocity = np.gradient(at, axis=0)
        yaw = np.arctan2(velocity[:, 1], velocity[:, 0])
        if o.dimension == 2:
            return np.column_stack([at, yaw])
        sway = 0.1 * np.stack([np.sin(3 * s), np.cos(2 * s)], axis=1)
        turn = self.lie.rotation(
            self.lie.exp(np.column_stack([np.zeros((k, 2)), yaw, np.zeros((k, 3))]))
        )
        tilt = self.lie.rotation(self.lie.exp(np.column_stack([sway, np.zeros((k, 4))])))
        return self.lie.build(turn @ tilt, at)

    def odometry(self) -> Floats:
        o, k = self.o, self.o.steps
        reckoned = []
        for r in range(o.robots):
            mine = slice(r * k, (r + 1) * k)
            truth = self.truth[mine]
            tangent = self.lie.local(truth[:-1], truth[1:])
            if o.dimension == 2:
                linear, angular = slice(0, 2), slice(2, 3)
            else:
                linear, angular = slice(3, 6), slice(0, 3)
            moved = tangent.copy()
            moved[:, linear] /= o.move_scale
            moved[:, angular] /= o.turn_scale
            noise = np.zeros(o.dimension + (1 if o.dimension == 2 else 3))
            noise[linear], noise[angular] = o.step_sigma, o.turn_sigma
            moved = moved + self.rng.normal(size=moved.shape) * noise
            delta = self.lie.exp(moved)
            delta = np.concatenate([self.lie.identity(1), delta])
            start = self.breaks[mine].copy()
            start[0] = True
            pose = accumulate(delta, start, o.dimension)
            if o.dimension == 3 and o.gravity_aligned:
                # The odometry frame keeps true roll and pitch: only heading and place drift.
                pose = self.upright(pose, truth, start)
                delta[1:] = self.lie.between(pose[:-1], pose[1:])
            stated = noise.copy()
            if o.stated_turn_sigma is not None:
                stated[angular] = o.stated_turn_sigma
            keep = np.flatnonzero(~start[1:])
            self.block(
                "odometry", r, "", ("pose",), r * k + keep, r * k + keep + 1, delta[1:][keep],
                covariance=np.broadcast_to(np.diag(stated**2), (len(keep), *[len(stated)] * 2)),
            )  # fmt: skip
            reckoned.append(pose)
        return np.concatenate(reckoned)

    def upright(self, pose: Floats, truth: Floats, start: NDArray[np.bool_]) -> Floats:
        """Give dead-reckoned poses the true roll and pitch; each run starts level in yaw zero."""
        yaw = np.arctan2(pose[:, 1, 0], pose[:, 0, 0])
        true_yaw = np.arctan2(truth[:, 1, 0], truth[:, 0, 0])
        turn = np.zeros((len(pose), 6))
        turn[:, 2] = yaw - true_yaw
        return self.lie.build(
            self.lie.rotation(self.lie.exp(turn)) @ self.lie.rotation(truth),
            self.lie.translation(pose),
        )

    def block(
        self, kind: str, robot: int, sensor: str, components: tuple[str, ...], a: Floats,
        b: Floats, obs: Floats, frame_b: Floats | None = None, covariance: Floats | None = None,
        sigma: Floats | None = None, frame_a: Floats | None = None,
    ) -> None:  # fmt: skip
        n = len(obs)
        one = self.lie.identity(1)
        dof = self.lie.dof
        m = dof if components == ("pose",) else len(components)
        source = Provenance(("log.csv",), np.zeros(n, dtype=np.int64), np.arange(n))
        basis = np.zeros((n, 5, dof, dof)) if kind == "odometry" else None
        t = self.keyframes.t_s[a] if kind != "control" else np.full(n, np.nan)
        self.blocks.append(
            Block(
                kind, robot, sensor, components, np.asarray(a), np.asarray(b), obs,
                one if frame_a is None else frame_a, one if frame_b is None else frame_b,
                np.full((n, m), np.nan) if sigma is None else sigma, covariance, basis,
                np.asarray(t), source, np.arange(n),
            )
        )  # fmt: skip

    def observe(self, local: Floats, components: tuple[str, ...]) -> Floats:
        """Noisy components of points (n, d) in the sensor frame, some grossly wrong."""
        o = self.o
        x, y = local[:, 0], local[:, 1]
        z = local[:, 2] if o.dimension == 3 else np.zeros(len(x))
        exact = {
            "bearing_rad": np.arctan2(y, x), "elevation_rad": np.arctan2(z, np.hypot(x, y)),
            "range_m": np.sqrt(x**2 + y**2 + z**2), "x_m": x, "y_m": y, "z_m": z,
        }  # fmt: skip
        columns = []
        bad = self.rng.random(len(x)) < o.gross
        for name in components:
            angle = name.endswith("rad")
            value = exact[name] + self.rng.normal(size=len(x)) * (
                o.sigma_angle if angle else o.sigma
            )
            value[bad] += self.rng.normal(size=bad.sum()) * (0.7 if angle else 3.0)
            columns.append(
                frames.wrap(value) if angle else np.abs(value) if name == "range_m" else value
            )
        return np.stack(columns, axis=1)

    def sightings(self) -> tuple[Tracks, NDArray[np.int64], NDArray[np.bool_]]:
        o, k = self.o, self.o.steps
        robot, of_track, count = [], [], []
        for r in range(o.robots if o.sightings else 0):
            a = np.arange(r * k, (r + 1) * k, 2)
            pose = self.truth[a]
            distance = np.linalg.norm(
                self.landmarks[None] - self.lie.translation(pose)[:, None], axis=2
            )
            row, lm = np.nonzero(distance < o.reach)
            if not len(row):
                continue
            names, track = np.unique(lm, return_inverse=True)
            local = self.lie.inverse_transform(pose[row], self.landmarks[lm])
            obs = self.observe(local, o.components)
            self.block("sighting", r, "front", o.components, a[row], len(robot) + track, obs)
            robot += [r] * len(names)
            of_track += names.tolist()
            count += np.bincount(track).tolist()
        landmark = np.array(of_track, dtype=np.int64)
        claim = landmark.copy()
        owner = np.array(robot, dtype=np.int64)
        for r in range(1, o.robots):
            mine = np.flatnonzero(owner == r)
            claim[mine] = self.corrupted(landmark[mine])
        t = len(landmark)
        tracks = Tracks(
            owner, tuple(f"label-{i}" for i in range(t)), claim, np.arange(t), np.zeros(t, bool),
            np.zeros(t, bool), np.zeros(t, bool), np.array(count, dtype=np.int64),
            tuple(f"plate-{i:03d}" for i in range(o.landmarks)),
        )  # fmt: skip
        return tracks, landmark, claim == landmark

    def corrupted(self, landmark: NDArray[np.int64]) -> NDArray[np.int64]:
        """Claims with the wanted share wrong: shuffled at random, or swapped in pairs."""
        claim = landmark.copy()
        bad = self.rng.permutation(len(landmark))[: round(self.o.wrong * len(landmark))]
        if self.o.wrong_kind == "swapped":
            bad = bad[: len(bad) // 2 * 2]
            claim[bad] = landmark[bad.reshape(-1, 2)[:, ::-1].ravel()]
        elif self.o.wrong_kind == "shifted":
            bad = np.sort(bad)
            claim[bad] = landmark[np.roll(bad, 1)]
        else:
            claim[bad] = self.rng.integers(0, self.o.landmarks, size=len(bad))
        return claim

    def encounters(self) -> None:
        o, k = self.o, self.o.steps
        for r in range(o.robots):
            for other in range(o.robots):
                if other == r:
                    continue
                a, b = np.arange(r * k, (r + 1) * k, 3), np.arange(other * k, (other + 1) * k, 3)
                local = self.lie.inverse_transform(
                    self.truth[a], self.lie.translation(self.truth[b])
                )
                near = np.flatnonzero(np.linalg.norm(local, axis=1) < o.reach)
                if not len(near):
                    continue
                if o.encounters == "pose":
                    obs, covariance = self.relative(a[near], b[near], 0.0)
                    self.block("encounter", r, "front", ("pose",), a[near], b[near], obs,
                               covariance=covariance)  # fmt: skip
                else:
                    components = ("bearing_rad", "elevation_rad", "range_m")
                    components = components if o.dimension == 3 else components[::2]
                    obs = self.observe(local[near], components)
                    self.block("encounter", r, "front", components, a[near], b[near], obs)

    def relative(self, a: Floats, b: Floats, wrong: float) -> tuple[Floats, Floats]:
        sigma = np.full(self.lie.dof, 0.02)
        obs = self.lie.between(self.truth[a], self.truth[b])
        obs = self.lie.retract(obs, self.rng.normal(size=(len(a), self.lie.dof)) * sigma)
        bad = np.flatnonzero(self.rng.random(len(a)) < wrong)
        scatter = np.full(self.lie.dof, 2.0)
        obs[bad] = self.lie.retract(
            obs[bad], self.rng.normal(size=(len(bad), self.lie.dof)) * scatter
        )
        return obs, np.broadcast_to(np.diag(sigma**2), (len(a), *[self.lie.dof] * 2))

    def closures(self) -> None:
        """Closures at places that two keyframes share, within and between robots."""
        o = self.o
        at = self.lie.translation(self.truth)
        n = len(at)
        a, b = self.rng.integers(0, n, size=(2, 200 * o.closures))
        far = (np.abs(a - b) > 20) & (np.linalg.norm(at[a] - at[b], axis=1) < 2.0)
        pairs = np.flatnonzero(far)[: o.closures]
        a, b = a[pairs], b[pairs]
        owner = self.keyframes.robot
        obs, covariance = self.relative(a, b, o.wrong_closures)
        for pair in np.unique(np.stack([owner[a], owner[b]], axis=1), axis=0):
            mine = (owner[a] == pair[0]) & (owner[b] == pair[1])
            self.block("closure", int(pair[0]), "", ("pose",), a[mine], b[mine], obs[mine],
                       covariance=covariance[mine])  # fmt: skip

    def absolute(self, tracks: Tracks) -> None:
        o, k, d = self.o, self.o.steps, self.o.dimension
        names = ("x_m", "y_m", "z_m")[:d]
        for r in o.fixes:
            a = np.arange(r * k, (r + 1) * k, 10)
            obs = self.lie.translation(self.truth[a]) + self.rng.normal(size=(len(a), d)) * 0.1
            self.block("fix", r, "", names, a, np.full(len(a), -1), obs,
                       sigma=np.full((len(a), d), 0.1))  # fmt: skip
        if o.control:
            b = np.arange(o.control)
            self.block("control", -1, "", names, np.full(len(b), -1), b, self.landmarks[b],
                       sigma=np.full((len(b), d), 0.01))  # fmt: skip

    def noise(self) -> Noise:
        nan, terms = float("nan"), []
        for block in self.blocks:
            robot = NAMES[block.robot] if block.robot >= 0 else ""
            if block.kind == "odometry":
                for name in ODOMETRY_TERMS:
                    terms.append(
                        NoiseTerm(robot, "", "odometry", name, nan, 0.0, nan, nan, "given")
                    )
                continue
            for name in residual_names(block, self.o.dimension):
                value = self.o.sigma_angle if name.endswith("rad") else self.o.sigma
                sensor = block.sensor or block.kind
                terms.append(
                    NoiseTerm(robot, sensor, name, "constant", nan, value, nan, nan, "given")
                )
        return Noise({t.key: t for t in terms})


def team_error(world: World, poses: Floats, keyframes: NDArray[np.int64]) -> tuple[float, float]:
    """Median and largest position error of keyframes after one alignment of all of them (m)."""
    from jointmap.graph.start.align import align, form_of

    lie = frames.group(world.problem.dimension)
    a, b = lie.translation(poses[keyframes]), lie.translation(world.poses[keyframes])
    form = form_of(world.problem.dimension, world.problem.gravity_aligned)
    fit = align(a, b, form=form)
    error = np.linalg.norm(b - a @ fit.rotation.T - fit.translation, axis=1)
    return float(np.median(error)), float(error.max())

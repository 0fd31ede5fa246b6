"""Large planar surveys, their fusion stage by stage, and GTSAM's optimizer alone on the same graph.

Run as a program (``python tests/bench/big_survey.py SURVEY OUT``) it prints what it measured as one
line of JSON, so that peak memory is that of one fresh process.
"""

from __future__ import annotations

import importlib
import json
import resource
import sys
import time
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import gtsam
import numpy as np

from jointmap import frames
from jointmap.graph.native import NativeBlock, native_graph, native_values
from jointmap.ingest.read import read_survey
from jointmap.products.files import write_reference
from jointmap.progress import Silent
from jointmap.settings import Settings
from jointmap.simulate.run import simulate
from jointmap.simulate.settings import SimulationSettings
from jointmap.solve.session import own_landmarks, whiten_blocks
from jointmap.solve.system import take_rows

#: The module; the package itself offers the function of that name.
fusion = importlib.import_module("jointmap.fuse")
#: Length of the survey for about this many keyframes of all four robots together.
DURATION_S = {"10k": 1_230.0, "100k": 12_300.0}


def make_survey(out: Path, size: str, seed: int = 1) -> Path:
    """Simulate the survey of a size: three sightings on a keyframe, noise stated, no wrong names."""
    settings = SimulationSettings(
        robots=4,
        duration_s=DURATION_S[size],
        landmarks=1000,
        mounting="origin",
        detection=0.95,
        field_of_view_rad=2.6,
        max_range_m=10.0,
        state_noise=True,
    )
    simulate("quarry-2d", out, settings, seed=seed)
    return out


@dataclass
class Clocked(Silent):
    """Wall and processor seconds of every stage."""

    wall: dict[str, float] = field(default_factory=dict)
    cpu: dict[str, float] = field(default_factory=dict)

    def __post_init__(self) -> None:
        super().__init__()
        self._running: tuple[str, float, float] | None = None

    def stage(self, name: str, total: int | None = None) -> None:
        self.finish()
        self._running = (name, time.perf_counter(), time.process_time())

    def finish(self) -> None:
        if self._running is not None:
            name, wall, cpu = self._running
            self.wall[name] = self.wall.get(name, 0.0) + time.perf_counter() - wall
            self.cpu[name] = self.cpu.get(name, 0.0) + time.process_time() - cpu
            self._running = None


@dataclass(frozen=True)
class Baseline:
    """The optimizer alone: wall and processor seconds, iterations, and chi-square at the end."""

    wall: float
    cpu: float
    iterations: int
    chi2: float


def bare_optimizer(run: Any) -> Baseline:
    """GTSAM's optimizer on the graph of a prepared run, from the run's start values.

    The tracks of a landmark are one variable here; the first pose is held.
    """
    problem, group = run.problem, frames.group(run.problem.dimension)
    shared = len(problem.tracks.landmarks)
    accepted = run.decisions.accepted & (problem.tracks.claim >= 0)
    landmark = np.where(accepted, problem.tracks.claim, own_landmarks(problem).landmark)
    blocks = []
    whiten = whiten_blocks(problem, run.noise)
    for block, w, rows in zip(problem.blocks, whiten, run.decisions.usable, strict=True):
        # A few stamps were merged: their bodies moved by less than a millimetre.
        still = group.identity(1)
        used_rows = replace(take_rows(block, rows), frame_a=still, frame_b=still)
        blocks.append(NativeBlock(used_rows, w[rows]))
    poses = len(run.state.poses)
    graph = native_graph(group, blocks, landmark, poses)
    start = native_values(group, run.state)
    hold = gtsam.noiseModel.Isotropic.Sigma(group.dof, 1e-3)
    graph.add(gtsam.PriorFactorPose2(0, start.atPose2(0), hold))
    used = np.zeros(len(run.state.landmarks), dtype=bool)
    for block in blocks:
        if block.block.kind == "sighting":
            used[landmark[block.block.b]] = True
    assert len(landmark) + shared == len(used)
    for index in np.flatnonzero(~used):
        if start.exists(poses + int(index)):
            start.erase(poses + int(index))
    parameters = gtsam.LevenbergMarquardtParams()
    parameters.setOrderingType("METIS")
    parameters.setLinearSolverType("MULTIFRONTAL_CHOLESKY")
    wall, cpu = time.perf_counter(), time.process_time()
    optimizer = gtsam.LevenbergMarquardtOptimizer(graph, start, parameters)
    values = optimizer.optimize()
    wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
    return Baseline(wall, cpu, optimizer.iterations(), 2.0 * graph.error(values))


def measure(survey: Path, out: Path) -> dict[str, object]:
    """Fuse a survey, then run the bare optimizer from the start values of that fusion.

    The compiled kernels are warm (they are cached on disk), as in any run but the first.
    """
    settings = Settings(noise="given")
    kept: list[Any] = []
    progress = Clocked()
    prepare = fusion._prepare

    def keep(*arguments: object) -> Any:
        run = prepare(*arguments)  # type: ignore[arg-type]
        kept.append(fusion._Run(**{k: getattr(run, k) for k in run.__dataclass_fields__}))
        return run

    fusion._prepare = keep  # type: ignore[assignment]
    wall, cpu = time.perf_counter(), time.process_time()
    progress.stage("read")
    read = read_survey(survey)
    reference = fusion.fuse(read, settings, progress)
    progress.stage("write")
    write_reference(reference, out)
    progress.finish()
    wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024.0**2
    run = kept[0]
    bare = bare_optimizer(run)
    blocks = run.problem.blocks
    return {
        "keyframes": len(run.problem.keyframes.t_s),
        "measurements": sum(b.n for b in blocks if b.kind != "odometry"),
        "wall_s": wall,
        "cpu_s": cpu,
        "peak_gib": peak,
        "status": reference.status,
        "stages": {name: (progress.wall[name], progress.cpu[name]) for name in progress.wall},
        "bare": {
            "wall_s": bare.wall,
            "cpu_s": bare.cpu,
            "iterations": bare.iterations,
            "chi2": bare.chi2,
        },
    }


def report(found: dict) -> str:
    """The measured figures as a table: seconds, and their ratio to the bare optimizer's."""
    bare = found["bare"]
    lines = [
        f"{found['keyframes']} keyframes, {found['measurements']} measurements besides odometry, "
        f"peak memory {found['peak_gib']:.2f} GiB",
        f"{'':24s}{'wall s':>9s}{'ratio':>7s}{'cpu s':>9s}{'ratio':>7s}",
    ]
    rows = [(f"bare optimizer ({bare['iterations']} it.)", bare["wall_s"], bare["cpu_s"])]
    rows += [(name, *seconds) for name, seconds in found["stages"].items()]
    rows.append(("whole fuse", found["wall_s"], found["cpu_s"]))
    for name, wall, cpu in rows:
        ratios = wall / bare["wall_s"], cpu / bare["cpu_s"]
        lines.append(f"{name:24s}{wall:9.2f}{ratios[0]:7.2f}{cpu:9.2f}{ratios[1]:7.2f}")
    return "\n".join(lines)


if __name__ == "__main__":
    print(json.dumps(measure(Path(sys.argv[1]), Path(sys.argv[2]))))

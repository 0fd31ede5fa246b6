"""Cost of grading ten estimators of four robots with 100,000 poses each."""

from __future__ import annotations

import resource
import time
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import jointmap
from jointmap import frames
from jointmap.grade import GradeSettings
from jointmap.schema import covariance_columns, pose_columns
from jointmap.simulate.settings import SimulationSettings

ESTIMATORS, RATE_HZ, DURATION_S = 10, 50.0, 2000.0


def write_estimates(folder: Path, reference, count: int) -> int:
    """Estimates at the reference's own rows with smooth errors; returns the number of poses."""
    g, total = frames.group(reference.dimension), 0
    for k in range(count):
        home = folder / "online" / f"made-{k:02d}"
        home.mkdir(parents=True)
        (home / "estimator.toml").write_text(
            'frame = "team"\ncovariance = "fixed-axes"\nevidence = "shared-ever"\ndata = "same"\n'
        )
        for r, (name, path) in enumerate(reference.trajectories.items()):
            rng = np.random.default_rng([k, r])
            phase = (path.t_s - path.t_s[0])[:, None] / rng.uniform(20, 200, g.dof)
            error = 0.05 * (k + 1) * np.sin(phase + rng.uniform(0, 6, g.dof))
            rows = g.to_rows(g.retract(g.from_rows(path.pose), error))
            columns = {"t_s": path.t_s} | dict(zip(pose_columns(g.dim), rows.T, strict=True))
            spread = np.eye(g.dof) * (0.04 * (k + 1)) ** 2
            i, j = np.triu_indices(g.dof)
            for name_c, value in zip(covariance_columns(g.dim), spread[i, j], strict=True):
                columns[name_c] = np.full(len(rows), value)
            pq.write_table(pa.table(columns), home / f"{name}.parquet")
            total += len(rows)
    return total


@pytest.mark.bench
def test_ten_estimators_of_four_long_robots(tmp_path, capsys):
    folder = tmp_path / "survey"
    world = SimulationSettings(
        robots=4, duration_s=DURATION_S, odometry_rate_hz=RATE_HZ, landmarks=80, state_noise=True
    )
    jointmap.simulate("quarry-2d", folder, world, seed=1)
    survey = jointmap.read_survey(folder)
    reference = jointmap.fuse(survey)
    poses = write_estimates(folder, reference, ESTIMATORS)
    jointmap.grade(reference, survey, GradeSettings(instants=50, draws=50), online=["made-00"])
    before = time.perf_counter(), time.process_time()
    card = jointmap.grade(reference, survey)
    wall, busy = time.perf_counter() - before[0], time.process_time() - before[1]
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    with capsys.disabled():
        print(f"\n{poses:,} poses of {ESTIMATORS} estimators: {wall:.1f} s ({busy:.1f} s of a "
              f"processor), peak memory of the whole process {peak:.2f} GB")  # fmt: skip
    assert poses >= 10 * 4 * 99_000
    assert len(card.runs[0].estimators) == ESTIMATORS

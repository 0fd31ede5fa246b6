"""Ten million rows of odometry, against a plain read of the same file."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv as pacsv
import pytest

from jointmap.ingest.read import read_survey

pytestmark = pytest.mark.bench
ROWS = 10_000_000
TOML = '[survey]\nformat = 1\ndimension = 2\n[robots.heron]\nodometry = "odometry.csv"\n'


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A long drive, stamps to the millisecond and positions to the tenth of a millimetre."""
    out = tmp_path_factory.mktemp("long")
    rng = np.random.default_rng(7)
    yaw = np.cumsum(rng.normal(0.0, 0.01, ROWS))
    table = {
        "t_s": np.round(1.7e9 + 0.01 * np.arange(ROWS), 3),
        "x_m": np.round(np.cumsum(0.01 * np.cos(yaw)), 4),
        "y_m": np.round(np.cumsum(0.01 * np.sin(yaw)), 4),
        "yaw_rad": np.round(yaw, 6),
    }
    pacsv.write_csv(pa.table(table), out / "odometry.csv")
    (out / "survey.toml").write_text(TOML)
    return out


def seconds(work: Callable[[], object]) -> float:
    """Processor time of one call, all threads together."""
    start = time.process_time()
    work()
    return time.process_time() - start


def test_ten_million_rows(folder: Path) -> None:
    ours = seconds(lambda: read_survey(folder))
    plain = seconds(lambda: pd.read_csv(folder / "odometry.csv").to_numpy())
    print(f"{ROWS / ours / 1e6:.2f} million rows per second and core, {ours / plain:.2f} of pandas")
    assert ROWS / ours >= 1e6
    # Hashing, checking and arranging beside the parse; measured 1.8 to 2.8 on one thread.
    assert ours < 4.0 * plain

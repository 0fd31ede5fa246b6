"""A whole fusion against GTSAM's optimizer alone: the same graph from the same start values."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest
from big_survey import DURATION_S, make_survey, report

pytestmark = pytest.mark.bench
PROGRAM = Path(__file__).with_name("big_survey.py")


@pytest.mark.parametrize("size", list(DURATION_S))
def test_whole_fusion(size: str, tmp_path: Path) -> None:
    """Processor time of everything, covariances and files included, and memory of the process."""
    survey = make_survey(tmp_path / "survey", size)
    run = [sys.executable, str(PROGRAM), str(survey)]
    # The first run compiles and caches what numba compiles.
    warm = make_survey(tmp_path / "warm", "10k", seed=2)
    subprocess.run([*run[:2], str(warm), str(tmp_path / "cold")], check=True, capture_output=True)
    done = subprocess.run([*run, str(tmp_path / "out")], check=True, capture_output=True, text=True)
    found = json.loads(done.stdout.splitlines()[-1])
    (tmp_path / "figures.json").write_text(json.dumps(found, indent=1))
    print("\n" + report(found))
    assert found["status"] == "ok"
    assert found["peak_gib"] < 4.0

"""The real command, killed or interrupted while it replaces a result: whole old, whole new or none.

(That every single step of the swap is safe is tested with the writer alone, in the unit tests.)
"""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from tiny_survey import World, full_survey

import jointmap
from jointmap.atomic import recover
from jointmap.products.files import read_reference

ROOT = Path(jointmap.__file__).resolve().parent.parent
ENV = {**os.environ, "PYTHONPATH": str(ROOT)}


def command(survey: Path, out: Path, seed: int, *words: str) -> list[str]:
    made = [sys.executable, "-m", "jointmap", "fuse", str(survey), "--out", str(out)]
    return [*made, "--seed", str(seed), "--quiet", *words]


def contents(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path, float]:
    """Survey, a finished reference with seed 1, and how long the command took."""
    folder = tmp_path_factory.mktemp("killed")
    survey = full_survey(World(2, duration_s=20.0), folder / "survey")
    out = folder / "place" / "reference"
    subprocess.run(command(survey, out, 1), env=ENV, check=True)
    start = time.monotonic()
    subprocess.run(command(survey, out, 1, "--replace"), env=ENV, check=True)
    return survey, out, time.monotonic() - start


def test_a_result_is_never_overwritten_unasked(finished: tuple[Path, Path, float]) -> None:
    survey, out, _ = finished
    before = contents(out)
    done = subprocess.run(command(survey, out, 2), env=ENV, capture_output=True, text=True)
    assert done.returncode == 2
    assert "--replace" in done.stderr
    assert contents(out) == before


@pytest.mark.parametrize(
    ("signum", "moment"),
    [
        (signal.SIGKILL, "any"),
        (signal.SIGKILL, "writing"),
        (signal.SIGKILL, "writing later"),
        (signal.SIGINT, "any"),
        (signal.SIGINT, "writing"),
    ],
)
def test_an_end_at_a_random_moment(
    finished: tuple[Path, Path, float], signum: int, moment: str
) -> None:
    survey, out, seconds = finished
    recover(out)
    if not out.exists():
        subprocess.run(command(survey, out, 1), env=ENV, check=True)
    before = contents(out)
    rng = random.Random(f"{signum} {moment}")
    running = subprocess.Popen(
        command(survey, out, 2, "--replace"),
        env=ENV,
        stderr=subprocess.PIPE,
        text=True,
        # What starts the tests may have left the interrupt ignored.
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    )
    fresh = out.parent / f".{out.name}.new"
    if moment == "any":
        time.sleep(rng.uniform(0.0, seconds))
    else:
        deadline = time.monotonic() + 60
        while running.poll() is None and not fresh.exists() and time.monotonic() < deadline:
            time.sleep(0.0005)
        time.sleep(rng.uniform(0.0, 0.02 if moment == "writing" else 0.15))
    running.send_signal(signum)
    _, err = running.communicate(timeout=60)
    # Python itself ends by the signal where it strikes code that is just being made.
    assert running.returncode in (0, 3, 130, -signum), err
    if moment != "any":
        assert "Traceback" not in err
    if out.exists():
        seed = read_reference(out).meta["settings"]["seed"]
        assert seed in (1, 2)
        if seed == 1:
            assert contents(out) == before
    # The next start finds the traces and leaves one whole result, old or new.
    recover(out)
    assert read_reference(out).meta["settings"]["seed"] in (1, 2)
    assert [p.name for p in out.parent.iterdir()] == [out.name]

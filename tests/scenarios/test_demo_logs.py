"""The demo logs are what their README says: its commands make them again, number by number."""

from __future__ import annotations

import argparse
import json
import shlex
from pathlib import Path

import pandas as pd
import pytest

from jointmap.ingest import read_survey
from jointmap.simulate import simulate
from jointmap.simulate.options import add_arguments, settings_from

DEMO = Path(__file__).parents[2] / "demo_logs"
COMMANDS = [
    shlex.split(line)[2:]
    for line in (DEMO / "README.md").read_text().splitlines()
    if line.startswith("jointmap simulate ")
]


@pytest.mark.parametrize("words", COMMANDS, ids=lambda words: words[0])
def test_the_command_in_the_readme_makes_the_demo(words: list[str], tmp_path: Path) -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("world")
    parser.add_argument("--out", type=Path)
    parser.add_argument("--seed", type=int)
    add_arguments(parser)
    args = parser.parse_args(words)
    shipped = DEMO.parent / args.out
    simulate(args.world, tmp_path / "again", settings_from(args), seed=args.seed)
    names = sorted(
        str(p.relative_to(shipped)) for p in shipped.rglob("*.csv*") if "online" not in p.parts
    )
    assert names == sorted(
        str(p.relative_to(tmp_path / "again")) for p in (tmp_path / "again").rglob("*.csv*")
    )
    for name in names:
        # the last decimal may differ between processors
        pd.testing.assert_frame_equal(
            pd.read_csv(shipped / name), pd.read_csv(tmp_path / "again" / name), rtol=0, atol=1e-5
        )


def test_there_are_two() -> None:
    assert [words[0] for words in COMMANDS] == ["quarry-2d", "quarry-3d"]


@pytest.mark.parametrize("world", ["quarry-2d", "quarry-3d"])
def test_the_reader_takes_them_without_complaint(world: str) -> None:
    survey = read_survey(DEMO / world)
    assert list(survey.robots) == ["heron", "otter", "vole", "swift"]
    assert survey.problems == ()
    told = json.loads((DEMO / world / "truth/settings.json").read_text())
    assert set(told["robots"]) == set(survey.robots)

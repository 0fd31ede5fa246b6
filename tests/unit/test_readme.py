"""What the README shows works as it stands there: tables, survey by hand, edits, Python example."""

from __future__ import annotations

import argparse
import re
from pathlib import Path

import pytest

from jointmap import cli
from jointmap.ingest import read_survey
from jointmap.products.files import read_reference
from jointmap.schema import tables_markdown

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
FILES = dict(re.findall(r"<!-- file: (\S+) -->\n```\w+\n(.*?)```\n", README, flags=re.DOTALL))
SURVEY = ("survey.toml", "heron/odometry.csv", "heron/sightings.csv", "otter/odometry.csv",
          "otter/sightings.csv")  # fmt: skip


def write(folder: Path, *names: str) -> Path:
    """Files of the README under a folder, as a reader would copy them."""
    for name in names:
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        (folder / name).write_text(FILES[name], encoding="utf-8")
    return folder


def between(name: str) -> str:
    return README.split(f"<!-- {name} begin -->\n")[1].split(f"<!-- {name} end -->\n")[0]


def test_the_tables_are_those_of_the_program() -> None:
    assert between("tables") == tables_markdown(level=2), "run .ci/refresh --tables"


def test_the_page_is_one_that_the_program_prints() -> None:
    page = between("page")
    assert page.startswith("```text\nReference of quarry-2d, seed 7\n")
    assert page.endswith("ok: 4 robots in 1 common frame\n```\n")
    assert (ROOT / "demo_logs" / "quarry-2d.png").stat().st_size < 300_000


def test_the_survey_by_hand_fuses(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    write(tmp_path / "gallery-7", *SURVEY)
    commands = [
        line.split()[1:]
        for line in README.splitlines()
        if re.match(r"jointmap (check|fuse) gallery-7", line)
    ]
    assert [words[0] for words in commands] == ["check", "fuse"]
    assert [cli.main(words) for words in commands] == [0, 0]
    assert "nothing to complain about" in capsys.readouterr().out
    reference = read_reference(tmp_path / "gallery-7-reference")
    # The gallery that the logs were written from: two walls 4 m apart, otter 9 m ahead of heron
    # and facing it. Sensors see to 5 cm; a few decimetres tell right from wrong.
    marks = reference.landmarks.set_index("landmark")[["x_m", "y_m"]]
    true = {"plate-001": (2.0, 2.0), "plate-002": (5.0, 2.2), "plate-003": (8.0, 1.8),
            "plate-004": (6.5, -2.0), "plate-005": (3.0, -2.1)}  # fmt: skip
    for name, place in true.items():
        assert marks.loc[name].to_numpy() == pytest.approx(place, abs=0.25)
    start = reference.trajectories["otter"].pose[0]
    assert start[:2] == pytest.approx((9.0, -0.5), abs=0.3)
    assert abs(start[2]) == pytest.approx(3.14, abs=0.15)


def test_the_edits_are_read(tmp_path: Path) -> None:
    survey = read_survey(write(tmp_path, *SURVEY, "edits.toml"))
    edits = survey.edits
    assert survey.problems == ()
    assert [len(t) for t in (edits.associations, edits.masks, edits.splits, edits.values)] == [
        2, 1, 1, 3,
    ]  # fmt: skip


def test_the_python_example_runs(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    write(tmp_path / "gallery-7", *SURVEY)
    found = re.search(r"<!-- python example -->\n```python\n(.*?)```", README, flags=re.DOTALL)
    assert found is not None
    exec(compile(found.group(1), "README.md", "exec"), {})
    assert capsys.readouterr().out.startswith("ok []\n")
    assert (tmp_path / "gallery-7.png").is_file()
    assert (tmp_path / "gallery-7-reference" / "reference.json").is_file()


def test_all_of_survey_toml_names_only_keys_that_the_reader_knows(tmp_path: Path) -> None:
    section = README.split("### All of survey.toml")[1]
    text = re.search(r"```toml\n(.*?)```", section, flags=re.DOTALL)
    assert text is not None
    write(tmp_path, *SURVEY)
    for name in ("encounters", "fixes"):
        columns = {"encounters": "t_s,sensor,robot,range_m\n", "fixes": "t_s,x_m,y_m\n"}[name]
        (tmp_path / "heron" / f"{name}.csv").write_text(columns)
    (tmp_path / "survey.toml").write_text(text.group(1))
    told = [str(p) for p in read_survey(tmp_path).problems]
    assert not [line for line in told if "unknown" in line]


def _commands() -> dict[str, argparse.ArgumentParser]:
    parsers = {}
    for name in cli._COMMANDS:
        parser = cli._parser([name])
        action = next(a for a in parser._actions if isinstance(a, argparse._SubParsersAction))
        parsers[name] = action.choices[name]
    return parsers


DESCRIBED = re.findall(r"^\| `jointmap (\w+) ", README, flags=re.MULTILINE)


def test_every_command_is_described() -> None:
    assert set(DESCRIBED) == set(_commands())


@pytest.mark.parametrize("name", DESCRIBED)
def test_every_option_is_described(name: str) -> None:
    parsers = _commands()
    section = README.split(f"\n### {name}\n")[1].split("\n##")[0]
    options = {o for a in parsers[name]._actions for o in a.option_strings if o.startswith("--")}
    if name == "simulate":
        options = {"--seed", "--errors"}  # the rest is left to --help, as the README says
    shown = README if name != "fuse" else section
    for option in options - {"--help"}:
        assert f"{option}" in shown, f"README does not tell of {option}"
    named = set(re.findall(r"`(--[\w-]+)", section)) - {"--help"}
    known = {o for a in parsers[name]._actions for o in a.option_strings}
    assert named <= known, "the README tells of options that are not there"
    assert "Exit codes" in section


def test_the_kernels_are_the_ones_that_exist() -> None:
    from jointmap.settings import KERNELS

    assert f"`{' '.join(KERNELS)}`" in README

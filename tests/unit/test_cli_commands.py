"""Commands: exit codes, what goes to which stream, files written or left alone."""

from __future__ import annotations

import json
import os
import re
import shutil
import sys
from pathlib import Path
from types import ModuleType
from typing import Any

import pandas as pd
import pytest
from synthetic_reference import START_S, reference

from jointmap.cli import main
from jointmap.ingest.survey import Survey
from jointmap.products.files import read_reference, write_reference
from jointmap.products.reference import Reference
from jointmap.settings import Settings


@pytest.fixture(scope="module")
def survey(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Twenty seconds of two robots in the quarry."""
    out = tmp_path_factory.mktemp("logs") / "gallery"
    options = ["--robots", "2", "--duration-s", "20", "--landmarks", "8", "--seed", "5"]
    assert main(["simulate", "quarry-2d", "--out", str(out), *options]) == 0
    return out


class Fuser:
    """Stands in for the fusion, which has its own tests: returns or raises what it is told."""

    def __init__(self) -> None:
        self.answer: Reference | BaseException = reference(2)
        self.settings: Settings | None = None

    def __call__(self, survey: Survey, settings: Settings, progress: Any) -> Reference:
        self.settings = settings
        progress.stage("solve", 3)
        progress.update(1, "cost 12.5")
        if isinstance(self.answer, BaseException):
            raise self.answer
        return self.answer


@pytest.fixture
def fuser(monkeypatch: pytest.MonkeyPatch) -> Fuser:
    made = Fuser()
    module = ModuleType("jointmap.fuse")
    module.fuse = made  # type: ignore[attr-defined]
    monkeypatch.setitem(sys.modules, "jointmap.fuse", module)
    return made


Captured = pytest.CaptureFixture[str]


def test_simulate_writes_what_check_accepts(survey: Path, capsys: Captured) -> None:
    assert main(["check", str(survey)]) == 0
    page = capsys.readouterr().out
    assert "heron" in page
    assert "otter" in page
    assert main(["check", str(survey), "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["ok"] is True
    assert [robot["name"] for robot in told["robots"]] == ["heron", "otter"]


def test_simulate_keeps_an_earlier_survey(survey: Path, capsys: Captured) -> None:
    before = (survey / "survey.toml").read_bytes()
    assert main(["simulate", "quarry-2d", "--out", str(survey), "--seed", "6"]) == 2
    assert "exists already" in capsys.readouterr().err
    assert (survey / "survey.toml").read_bytes() == before


def test_a_setting_outside_its_domain_is_refused(tmp_path: Path, capsys: Captured) -> None:
    out = str(tmp_path / "s")
    assert main(["simulate", "quarry-2d", "--out", out, "--duration-s", "-1"]) == 2
    assert "duration_s" in capsys.readouterr().err
    assert os.listdir(tmp_path) == []


def test_check_lists_every_problem_on_stderr(
    survey: Path, tmp_path: Path, capsys: Captured
) -> None:
    broken = tmp_path / "broken"
    shutil.copytree(survey, broken)
    for robot, row in (("heron", 4), ("otter", 7)):
        file = broken / robot / "odometry.csv"
        lines = file.read_text().splitlines()
        lines[row - 1] = "noon" + lines[row - 1][lines[row - 1].index(",") :]
        file.write_text("\n".join(lines) + "\n")
    assert main(["check", str(broken)]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert "heron/odometry.csv, row 4, column t_s" in err
    assert "otter/odometry.csv, row 7, column t_s" in err
    assert re.fullmatch(
        r"jointmap: the input was refused: \d problems to mend", err.splitlines()[-1]
    )
    assert main(["check", str(broken), "--json"]) == 2
    told = json.loads(capsys.readouterr().out)
    assert told["ok"] is False
    assert {p["row"] for p in told["problems"] if not p["mended"]} == {4, 7}


def test_fuse_writes_and_prints_the_page(
    survey: Path, tmp_path: Path, fuser: Fuser, capsys: Captured
) -> None:
    out = tmp_path / "ref"
    assert main(["fuse", str(survey), "--out", str(out)]) == 0
    page, err = capsys.readouterr()
    assert err == ""
    assert "\x1b" not in page
    assert "\r" not in page
    assert page.splitlines()[-1] == "ok: 2 robots in 1 common frame"
    assert read_reference(out).status == "ok"


def test_fuse_hands_its_options_on(survey: Path, tmp_path: Path, fuser: Fuser) -> None:
    words = ["--datum", "robot", "--robot", "otter", "--kernel", "tukey"]
    words += ["--noise", "given", "--seed", "9", "--quiet"]
    assert main(["fuse", str(survey), "--out", str(tmp_path / "ref"), *words]) == 0
    assert fuser.settings == Settings(
        datum="robot", datum_robot="otter", kernel="tukey", noise="given", seed=9
    )


@pytest.mark.parametrize("status", ["weak", "not-converged", "disconnected", "inconsistent"])
def test_a_doubtful_result_is_written_and_the_last_line_says_why(
    survey: Path, tmp_path: Path, fuser: Fuser, capsys: Captured, status: str
) -> None:
    fuser.answer = reference(2, status=status, reasons=["nobody met vole", "late clock"])
    for i, flags in enumerate(([], ["--quiet"])):
        out = tmp_path / f"ref{i}"
        assert main(["fuse", str(survey), "--out", str(out), *flags]) == 3
        last = capsys.readouterr().out.splitlines()[-1]
        assert last == f"{status}: nobody met vole; late clock"
        assert read_reference(out).status == status


def test_quiet_and_json_are_for_machines(
    survey: Path, tmp_path: Path, fuser: Fuser, capsys: Captured
) -> None:
    assert main(["fuse", str(survey), "--out", str(tmp_path / "a"), "--quiet"]) == 0
    assert capsys.readouterr() == ("", "")
    assert main(["fuse", str(survey), "--out", str(tmp_path / "b"), "--json"]) == 0
    out, err = capsys.readouterr()
    assert json.loads(out) == json.loads((tmp_path / "b" / "reference.json").read_text())
    assert err == ""


def test_an_earlier_reference_is_refused_before_the_work(
    survey: Path, tmp_path: Path, fuser: Fuser, capsys: Captured
) -> None:
    out = write_reference(reference(2, seed=1), tmp_path / "ref")
    assert main(["fuse", str(survey), "--out", str(out)]) == 2
    assert fuser.settings is None
    assert "exists already" in capsys.readouterr().err
    fuser.answer = reference(2, seed=2)
    assert main(["fuse", str(survey), "--out", str(out), "--replace", "--quiet"]) == 0
    assert read_reference(out).meta["seed"] == 2


def test_the_survey_itself_is_never_replaced(survey: Path, fuser: Fuser, capsys: Captured) -> None:
    assert main(["fuse", str(survey), "--out", str(survey), "--replace"]) == 2
    assert "no reference.json" in capsys.readouterr().err
    assert (survey / "survey.toml").is_file()


def test_a_broken_replacement_is_finished_and_said(
    survey: Path, tmp_path: Path, fuser: Fuser, capsys: Captured
) -> None:
    write_reference(reference(2, seed=1), tmp_path / ".ref.old")
    write_reference(reference(2, seed=2), tmp_path / ".ref.new")
    assert main(["fuse", str(survey), "--out", str(tmp_path / "ref")]) == 2
    assert "finished replacing" in capsys.readouterr().err
    assert read_reference(tmp_path / "ref").meta["seed"] == 2


def test_a_fault_is_short_and_says_how_to_see_more(
    survey: Path,
    tmp_path: Path,
    fuser: Fuser,
    capsys: Captured,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    fuser.answer = ZeroDivisionError("by zero")
    command = ["fuse", str(survey), "--out", str(tmp_path / "ref")]
    monkeypatch.delenv("JOINTMAP_TRACEBACK", raising=False)
    assert main(command) == 1
    err = capsys.readouterr().err
    assert err.splitlines() == [
        "jointmap: this is a fault of the program (ZeroDivisionError: by zero)",
        "set JOINTMAP_TRACEBACK=1 to see where it happened",
    ]
    monkeypatch.setenv("JOINTMAP_TRACEBACK", "1")
    assert main(command) == 1
    assert "Traceback (most recent call last)" in capsys.readouterr().err
    assert os.listdir(tmp_path) == []


def test_an_interrupted_fusion_leaves_nothing(
    survey: Path, tmp_path: Path, fuser: Fuser, capsys: Captured
) -> None:
    fuser.answer = KeyboardInterrupt()
    assert main(["fuse", str(survey), "--out", str(tmp_path / "ref")]) == 130
    assert capsys.readouterr().err == "interrupted: no result was written\n"
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize(
    "words",
    [
        [],
        ["grade"],
        ["fuse"],
        ["fuse", "s"],
        ["fuse", "s", "--out", "r", "--kernel", "magic"],
        ["fuse", "s", "--out", "r", "--seed", "one"],
        ["simulate", "desert", "--out", "s"],
        ["import", "other", "f", "--out", "s"],
        ["poses", "r", "--out", "p.csv"],
        ["check"],
    ],
)
def test_wrong_usage_is_refused(words: list[str], capsys: Captured) -> None:
    with pytest.raises(SystemExit) as stop:
        main(words)
    assert stop.value.code == 2
    assert "usage: jointmap" in capsys.readouterr().err


def test_a_negative_seed_is_refused(survey: Path, tmp_path: Path, fuser: Fuser) -> None:
    assert main(["fuse", str(survey), "--out", str(tmp_path / "r"), "--seed", "-1"]) == 2
    assert fuser.settings is None


def test_poses_answers_a_file(tmp_path: Path, capsys: Captured) -> None:
    folder = write_reference(reference(3), tmp_path / "ref")
    asked = tmp_path / "asked.csv"
    asked.write_text(f"robot,t_s\notter,{START_S + 0.5}\nheron,{START_S + 1e4}\n")
    out = tmp_path / "poses.parquet"
    command = ["poses", str(folder), "--at", str(asked), "--out", str(out)]
    assert main(command) == 0
    said = capsys.readouterr().out
    assert "2 poses written" in said
    assert "incomplete: 1;" in said
    first = pd.read_parquet(out).iloc[0]
    row = reference(3).trajectories["otter"]
    assert first["x_m"] == pytest.approx(row.pose[5, 0], abs=1e-9)
    assert first["cov_rz_rz"] == pytest.approx(row.cov[5, 5, 5], rel=1e-6)
    assert main(command) == 2
    assert "exists already" in capsys.readouterr().err
    assert main([*command, "--replace"]) == 0


def test_poses_refuses_what_it_cannot_read(tmp_path: Path, capsys: Captured) -> None:
    folder = write_reference(reference(2), tmp_path / "ref")
    asked, out = tmp_path / "asked.csv", tmp_path / "poses.csv"
    asked.write_text("robot,t_s\nbadger,1.0\n")
    command = ["poses", str(folder), "--at", str(asked), "--out", str(out)]
    assert main(command) == 2
    assert "asked.csv, row 2, column robot" in capsys.readouterr().err
    assert not out.exists()
    assert main(["poses", str(tmp_path), "--at", str(asked), "--out", str(out)]) == 2
    assert "reference.json: the file is missing" in capsys.readouterr().err


def test_import_needs_the_logs(tmp_path: Path, capsys: Captured) -> None:
    target = str(tmp_path / "s")
    assert main(["import", "mrclam", str(tmp_path / "none"), "--out", target]) == 2
    assert "none" in capsys.readouterr().err


def test_a_disk_that_refuses_is_no_fault(tmp_path: Path, capsys: Captured) -> None:
    out = tmp_path / ("x" * 300)
    assert main(["simulate", "quarry-2d", "--out", str(out), "--duration-s", "10"]) == 2
    assert "File name too long" in capsys.readouterr().err

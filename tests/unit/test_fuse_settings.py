"""Settings that only the survey can show to be wrong are refused before any work."""

from __future__ import annotations

from pathlib import Path

import pytest

import jointmap
from jointmap.cli import main
from jointmap.errors import SettingsError


def test_a_datum_at_a_robot_that_is_not_there(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    folder = tmp_path / "gallery"
    words = ["--robots", "2", "--duration-s", "10", "--landmarks", "6"]
    assert main(["simulate", "quarry-2d", "--out", str(folder), *words]) == 0
    survey = jointmap.read_survey(folder)
    with pytest.raises(
        SettingsError, match=r"no robot 'hron' for the datum; did you mean 'heron'\?"
    ):
        jointmap.fuse(survey, jointmap.Settings(datum_robot="hron"))
    out = tmp_path / "reference"
    assert main(["fuse", str(folder), "--out", str(out), "--robot", "hron", "--quiet"]) == 2
    assert "did you mean 'heron'?" in capsys.readouterr().err
    assert not out.exists()

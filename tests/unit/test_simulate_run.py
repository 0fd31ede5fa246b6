"""Folders, options and repeatability."""

from __future__ import annotations

import argparse
import shlex
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from simulated_files import config, table

from jointmap.errors import OutputExistsError, SettingsError
from jointmap.simulate import SimulationSettings, build, simulate
from jointmap.simulate.options import add_arguments, settings_from

SMALL = SimulationSettings(duration_s=40.0, landmarks=20)


def contents(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


@pytest.mark.parametrize("world", ["quarry-2d", "quarry-3d"])
def test_a_seed_repeats_to_the_byte(world: str, tmp_path: Path) -> None:
    settings = SimulationSettings.preset("field", duration_s=40.0, landmarks=20, tags=0.2)
    for name, seed in (("a", 1), ("b", 1), ("c", 2)):
        simulate(world, tmp_path / name, settings, seed=seed)
    assert contents(tmp_path / "a") == contents(tmp_path / "b")
    assert contents(tmp_path / "a") != contents(tmp_path / "c")


@pytest.mark.parametrize(
    "change",
    [
        {"encounters": False},
        {"gross_errors": 0.1},
        {"fixes": ("heron",)},
        {"control_points": 4},
        {"closures": 10},
        {"odometry_gaps_per_h": 200.0},
        {"odometry_slips": 2},
    ],
)
def test_one_option_leaves_the_rest_unchanged(change: dict[str, object]) -> None:
    a, b = build("quarry-2d", SMALL, 1), build("quarry-2d", replace(SMALL, **change), 1)
    for name, seen in a.sightings.items():
        other = b.sightings[name]
        assert np.array_equal(seen.log_s, other.log_s)
        same = ~other.gross
        for column, values in seen.values.items():
            assert np.array_equal(values[same], other.values[column][same])
    if not any("odometry" in name for name in change):
        for name, log in a.odometry.items():
            for column, values in log.values.items():
                assert np.array_equal(values, b.odometry[name].values[column])


def test_an_existing_folder_is_refused(tmp_path: Path) -> None:
    simulate("quarry-2d", tmp_path / "s", SMALL, seed=1)
    before = contents(tmp_path / "s")
    with pytest.raises(OutputExistsError):
        simulate("quarry-2d", tmp_path / "s", SMALL, seed=2)
    assert contents(tmp_path / "s") == before
    simulate("quarry-2d", tmp_path / "s", SMALL, seed=2, replace=True)
    assert contents(tmp_path / "s") != before
    assert [p.name for p in tmp_path.iterdir()] == ["s"]


@pytest.mark.parametrize("ending", ["csv", "csv.gz", "parquet"])
def test_formats_hold_the_same_numbers(ending: str, tmp_path: Path) -> None:
    simulate("quarry-3d", tmp_path / "s", replace(SMALL, format=ending), seed=1)
    simulate("quarry-3d", tmp_path / "csv", SMALL, seed=1)
    for robot, entry in config(tmp_path / "s")["robots"].items():
        for kind in ("odometry", "sightings"):
            path = tmp_path / "s" / entry[kind]
            assert path.name == f"{kind}.{ending}"
            got = pd.read_parquet(path) if ending == "parquet" else pd.read_csv(path)
            pd.testing.assert_frame_equal(
                got, table(tmp_path / "csv", f"{robot}/{kind}.csv"), check_dtype=False, rtol=0
            )


def test_stamps_keep_microseconds(tmp_path: Path) -> None:
    settings = replace(SMALL, clock_offset_s=(0.123457,))
    simulate("quarry-2d", tmp_path / "s", settings, seed=1)
    text = pd.read_csv(tmp_path / "s/heron/odometry.csv", dtype=str)["t_s"]
    assert text[0] == "1750000000.123457"
    assert "e" not in "".join(text)


def test_noise_is_stated_only_when_asked(tmp_path: Path) -> None:
    simulate("quarry-2d", tmp_path / "a", SMALL, seed=1)
    simulate("quarry-2d", tmp_path / "b", replace(SMALL, state_noise=True), seed=1)
    assert "sigma" not in (tmp_path / "a/survey.toml").read_text()
    assert "per_sqrt" not in (tmp_path / "a/survey.toml").read_text()
    stated = config(tmp_path / "b")["robots"]["heron"]
    assert stated["odometry_noise"]["translation_per_sqrt_m"] == pytest.approx(0.02)
    assert stated["sensors"]["front"]["sigma_range_m"] == pytest.approx(0.05)


def parse(*words: str) -> SimulationSettings:
    parser = argparse.ArgumentParser()
    add_arguments(parser)
    return settings_from(parser.parse_args(words))


def test_options_cover_every_setting() -> None:
    assert parse() == SimulationSettings()
    assert parse("--errors", "field") == SimulationSettings.preset("field")
    parser = argparse.ArgumentParser()
    add_arguments(parser)
    dests = {action.dest for action in parser._actions}
    assert {f.name for f in fields(SimulationSettings)} <= dests
    assert "robots" in parser.format_help()


def test_options_are_read() -> None:
    got = parse(
        *shlex.split("--robots 7 --duration-s 90 --odometry-scale 0.9,0.95 --lost vole,otter"),
        *shlex.split("--no-encounters --state-noise --format parquet --wrong-pattern coherent"),
    )
    assert got == SimulationSettings(
        robots=7,
        duration_s=90.0,
        odometry_scale=(0.9, 0.95),
        lost=("vole", "otter"),
        encounters=False,
        state_noise=True,
        format="parquet",
        wrong_pattern="coherent",
    )
    assert parse("--errors", "field", "--gross-errors", "0").gross_errors == 0.0


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"robots": 51}, "robots: 51"),
        ({"detection": 1.5}, "detection"),
        ({"duration_s": float("nan")}, "duration_s"),
        ({"odometry_form": "wheel"}, "odometry_form"),
        ({"odometry_scale": ()}, "at least one"),
        ({"student_dof": 1.0}, "variance is infinite"),
    ],
)
def test_settings_outside_their_domain(change: dict[str, object], message: str) -> None:
    with pytest.raises(SettingsError, match=message):
        replace(SMALL, **change)


def test_unknown_names_are_refused() -> None:
    with pytest.raises(SettingsError, match="no robot 'owl'"):
        build("quarry-2d", replace(SMALL, lost=("owl",)), 1)
    with pytest.raises(SettingsError, match="world"):
        build("quarry-4d", SMALL, 1)
    with pytest.raises(SettingsError, match="seed"):
        build("quarry-2d", SMALL, -1)
    with pytest.raises(SettingsError, match="errors"):
        SimulationSettings.preset("harsh")


def test_fifty_robots_have_names_of_their_own() -> None:
    s = build("quarry-2d", replace(SMALL, robots=50, landmarks=100), 1)
    names = [r.name for r in s.team]
    assert len(set(names)) == 50 and names[:4] == ["heron", "otter", "vole", "swift"]
    assert len({tuple(m.pose[0]) for m in s.motions.values()}) == 50

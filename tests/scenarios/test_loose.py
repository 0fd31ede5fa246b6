"""Systems that the measurements leave loose: named, cut where a tie says nothing, never a crash."""

from __future__ import annotations

import importlib
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from tiny_survey import World, write_survey

import jointmap
from jointmap.cli import main
from jointmap.errors import IndeterminateError
from jointmap.products.files import read_reference
from jointmap.progress import Silent
from jointmap.settings import Settings
from jointmap.trust.loose import find_loose

rooms = importlib.import_module("jointmap.fuse")
GIVEN = Settings(noise="given", calibrate=False)


def fused(folder: Path, out: Path) -> tuple[int, dict]:
    code = main(["fuse", str(folder), "--out", str(out), "--quiet"])
    return code, json.loads((out / "reference.json").read_text())


def one_meeting(folder: Path) -> Path:
    """Two robots that see no landmark and meet once, by range and bearing: no relative heading."""
    world = World(2)
    tables = {name: {"odometry": world.odometry(name)} for name in world.robots}
    tables["heron"]["encounters"] = world.encounters("heron", "otter", every_s=50.0)
    assert len(tables["heron"]["encounters"]) == 1
    return write_survey(folder, 2, tables)


def test_one_meeting_does_not_tie_two_robots(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    code, told = fused(one_meeting(tmp_path / "survey"), tmp_path / "out")
    assert code == 3
    assert told["status"] == "disconnected"
    assert told["components"] == [["heron"], ["otter"]]
    last = capsys.readouterr().out.splitlines()[-1]
    assert last.startswith("disconnected: nothing ties these groups of robots")
    note = next(text for text in told["distrust"] if "do not determine" in text)
    assert "1 measurements do not determine" in note
    assert "poses of otter from 1000.000 to 1060.000 s" in note
    rows = read_reference(tmp_path / "out").measurements
    meeting = rows[rows["kind"] == "encounter"]
    assert meeting["verdict"].tolist() == ["unusable"]
    assert meeting["reason"].tolist() == [
        "it ties two parts without saying where one is relative to the other"
    ]


def test_the_loose_part_is_named_whichever_key_the_elimination_stopped_at(tmp_path: Path) -> None:
    run = rooms._prepare(jointmap.read_survey(one_meeting(tmp_path / "survey")), GIVEN, Silent())
    system = rooms._system(run, robust=False)
    loose = find_loose(system, run.state)
    n = int((run.problem.keyframes.robot == 1).sum())
    assert loose.words == f"{n} poses of otter from 1000.000 to 1060.000 s"
    cut = [b.kind for b, rows in zip(run.problem.blocks, loose.rows, strict=True) if rows.any()]
    assert cut == ["encounter"]
    # The dense information matrix says the same: one null vector, zero on heron's poses.
    graph = rooms.linearise_system(system, run.state).graph.graph
    dense = graph.hessian(rooms._ordering(run, system))[0]
    values = np.linalg.eigvalsh(dense)
    assert values[0] < 1e-9 * values[-1] < values[1]


def test_a_landmark_that_one_bearing_is_left_of_is_named(tmp_path: Path) -> None:
    world = World(2)
    sightings = world.sightings("heron")
    other = world.sightings("heron", ("bearing_rad",), plates=["plate-003"])
    other["landmark"] = "plate-900"
    tables = {
        "heron": {"odometry": world.odometry("heron"), "sightings": pd.concat([sightings, other])}
    }
    survey = jointmap.read_survey(write_survey(tmp_path / "survey", 2, tables))
    run = rooms._prepare(survey, GIVEN, Silent())
    track = run.problem.tracks.labels.index("plate-900")
    used = []
    for block, rows in zip(run.problem.blocks, run.decisions.used, strict=True):
        rows = rows.copy()
        if block.kind == "sighting":
            rows[np.flatnonzero(block.b == track)[1:]] = False
        used.append(rows)
    run.decisions = replace(run.decisions, used=tuple(used))
    loose = find_loose(rooms._system(run, robust=False), run.state)
    assert "plate-900" in loose.words
    assert sum(int(rows.sum()) for rows in loose.rows) == 1
    # The fusion goes on without it instead of refusing the survey.
    rooms._cut_loose(run, IndeterminateError("singular"))
    rooms._assess(run)
    assert any("do not determine landmark plate-900" in note for note in run.notes)


def test_a_stretch_behind_a_split_that_one_sighting_holds(tmp_path: Path) -> None:
    world = World(2)
    seen = world.sightings("heron")
    few = pd.concat([seen[seen["t_s"] < 1030.0], seen[seen["t_s"] > 1035.0].iloc[:1]])
    tables = {
        "heron": {"odometry": world.odometry("heron"), "sightings": few},
        "otter": {"odometry": world.odometry("otter"), "sightings": world.sightings("otter")},
    }
    folder = write_survey(tmp_path / "survey", 2, tables)
    (folder / "edits.toml").write_text('[[split_odometry]]\nrobot = "heron"\nt_s = 1032.0\n')
    code, told = fused(folder, tmp_path / "out")
    assert code == 3
    note = next(text for text in told["distrust"] if "do not determine" in text)
    assert "poses of heron from 103" in note
    path = read_reference(tmp_path / "out").trajectories["heron"]
    component = path.component
    assert len(np.unique(component[path.t_s < 1031.0])) == 1
    assert set(component[path.t_s < 1031.0]).isdisjoint(component[path.t_s > 1036.0])


def test_what_cannot_be_left_out_is_refused_by_name(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """One shared plate gives no relative heading, and the user forces it."""
    world = World(2)
    names = list(world.landmarks)
    tables = {
        "heron": {
            "odometry": world.odometry("heron"),
            "sightings": world.sightings("heron", plates=names[:6], reach_m=20.0),
        },
        "otter": {
            "odometry": world.odometry("otter"),
            "sightings": world.sightings("otter", plates=names[5:], reach_m=20.0),
        },
    }
    folder = write_survey(tmp_path / "survey", 2, tables)
    (folder / "edits.toml").write_text(
        "".join(
            f'[[force_association]]\nrobot = "{name}"\nlabel = "plate-005"\n'
            'landmark = "plate-005"\n'
            for name in world.robots
        )
    )
    code = main(["fuse", str(folder), "--out", str(tmp_path / "out")])
    assert code == 2
    told = capsys.readouterr().err.splitlines()
    assert len(told) == 1
    assert told[0].startswith("jointmap: the measurements do not determine ")
    assert "poses of otter from 1000.000 to 1060.000 s" in told[0]
    assert "edits.toml forces" in told[0]
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize("sees", [True, False])
def test_a_robot_with_one_row_of_odometry(tmp_path: Path, sees: bool) -> None:
    """Its only pose has no neighbour when it sees too little; nobody else is harmed by it."""
    world = World(2)
    first = world.sightings("otter", every_s=1.0, until_s=1001.0)
    first["t_s"] = 1000.0
    place = world.at("otter", 1000.5)
    tables = {
        "heron": {"odometry": world.odometry("heron"), "sightings": world.sightings("heron")},
        "otter": {
            "odometry": world.odometry("otter").iloc[:1],
            "sightings": first if sees else first.drop(columns="range_m").iloc[:2],
        },
    }
    code, told = fused(write_survey(tmp_path / "survey", 2, tables), tmp_path / "out")
    assert told["counts"]
    if not sees:
        assert code == 3
        assert told["components"] == [["heron"], ["otter"]]
        return
    assert told["components"] == [["heron", "otter"]]
    reference = read_reference(tmp_path / "out")
    origin = world.truth["heron"][0]
    mine = (origin @ np.append(reference.trajectories["otter"].pose[0, :2], 1.0))[:2]
    assert np.linalg.norm(mine - place[:2, 2]) < 0.15


def test_keyframes_in_a_row_carry_no_datum_in_space(tmp_path: Path) -> None:
    """A straight drive in free space: roll about its line is held by the first pose instead."""
    world = World(3)
    straight = world.odometry("heron").assign(
        x_m=0.5 * (world.t_s - world.t_s[0]), y_m=0.0, z_m=0.0, qx=0.0, qy=0.0, qz=0.0, qw=1.0
    )
    folder = write_survey(
        tmp_path / "survey", 3, {"heron": {"odometry": straight}}, head="gravity_aligned = false"
    )
    code, told = fused(folder, tmp_path / "out")
    assert code == 3
    assert "first pose of heron is exact" in str(told["datum"])

"""Bad and odd input through the whole command: the refusal, or the mend and the result."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from tiny_survey import World, full_survey, write_survey

from jointmap.cli import main
from jointmap.products.files import read_reference
from jointmap.products.reference import Reference

Tables = dict[str, dict[str, pd.DataFrame]]
POLAR = ("range_m", "bearing_rad")


def tables_of(world: World, parts: tuple[str, ...] = POLAR) -> Tables:
    return {
        n: {"odometry": world.odometry(n), "sightings": world.sightings(n, parts)}
        for n in world.robots
    }


def fuse(folder: Path, *words: str) -> tuple[int, Reference]:
    out = folder.parent / "out"
    code = main(["fuse", str(folder), "--out", str(out), "--quiet", *words])
    return code, read_reference(out)


def landmark_error(world: World, reference: Reference, names: list[str]) -> float:
    """RMS distance (m) after the best rigid fit without reflection (Kabsch 1976)."""
    table = reference.landmarks.set_index("landmark").loc[names]
    mine = table[["x_m", "y_m", "z_m"][: world.dimension]].to_numpy()
    true = np.array([world.landmarks[n] for n in names])
    a, b = mine - mine.mean(axis=0), true - true.mean(axis=0)
    u, _, vt = np.linalg.svd(a.T @ b)
    flip = np.ones(world.dimension)
    flip[-1] = np.sign(np.linalg.det(vt.T @ u.T))
    return float(np.sqrt(np.mean(np.sum((a @ u @ np.diag(flip) @ vt - b) ** 2, axis=1))))


# Refusals ----------------------------------------------------------------------------------------


def _degrees(folder: Path) -> str:
    path = folder / "heron" / "sightings.csv"
    table = pd.read_csv(path)
    table["bearing_rad"] = np.degrees(table["bearing_rad"])
    table.to_csv(path, index=False)
    return "bearing_rad"


def _escape(folder: Path) -> str:
    (folder.parent / "odometry.csv").write_text((folder / "heron" / "odometry.csv").read_text())
    toml = folder / "survey.toml"
    toml.write_text(toml.read_text().replace('"heron/odometry.csv"', '"../odometry.csv"'))
    return "../odometry.csv"


def _no_robot(folder: Path) -> str:
    (folder / "survey.toml").write_text("[survey]\nformat = 1\ndimension = 2\n")
    return "the survey has no robot"


def _no_odometry_rows(folder: Path) -> str:
    for name in ("heron", "otter"):
        path = folder / name / "odometry.csv"
        path.write_text(path.read_text().splitlines()[0] + "\n")
    return "odometry"


def _indefinite(folder: Path) -> str:
    rows = "heron,1001.0,otter,1001.0,1.0,0.5,0.2,0.01,0.02,0.0,0.01,0.0,0.01\n"
    (folder / "closures.csv").write_text(
        "robot_a,t_a_s,robot_b,t_b_s,x_m,y_m,yaw_rad,"
        "cov_x_x,cov_x_y,cov_x_yaw,cov_y_y,cov_y_yaw,cov_yaw_yaw\n" + rows
    )
    return "closures.csv, row 2"


def _contradiction(folder: Path) -> str:
    (folder / "control_points.csv").write_text(
        "landmark,x_m,y_m,sigma_x_m,sigma_y_m\n"
        "plate-001,1.0,2.0,0.01,0.01\nplate-001,1.5,2.0,0.01,0.01\n"
    )
    return "contradicts row 2"


def _text_in_a_number(folder: Path) -> str:
    path = folder / "otter" / "sightings.csv"
    lines = path.read_text().splitlines()
    lines[3] = lines[3].replace(lines[3].split(",")[3], "near")
    path.write_text("\n".join(lines) + "\n")
    return "otter/sightings.csv, row 4"


@pytest.mark.parametrize(
    "spoil",
    [
        _degrees,
        _escape,
        _no_robot,
        _no_odometry_rows,
        _indefinite,
        _contradiction,
        _text_in_a_number,
    ],
)
def test_refused_with_a_clear_word_and_nothing_written(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], spoil: Callable[[Path], str]
) -> None:
    folder = full_survey(World(2, duration_s=20.0), tmp_path / "survey")
    told = spoil(folder)
    before = sorted(p.name for p in tmp_path.iterdir())
    assert main(["fuse", str(folder), "--out", str(tmp_path / "out")]) == 2
    seen = capsys.readouterr()
    assert told in seen.err
    assert "Traceback" not in seen.err
    assert seen.err.splitlines()[-1].startswith("jointmap: ")
    assert sorted(p.name for p in tmp_path.iterdir()) == before


def test_quaternions_far_from_unit_length_are_refused(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    world = World(3, duration_s=20.0)
    tables = tables_of(world, (*POLAR, "elevation_rad"))
    tables["otter"]["odometry"].loc[7, ["qx", "qy", "qz", "qw"]] *= 3.0
    folder = write_survey(tmp_path / "survey", 3, tables, head="gravity_aligned = true")
    assert main(["fuse", str(folder), "--out", str(tmp_path / "out")]) == 2
    assert "otter/odometry.csv, row 9" in capsys.readouterr().err
    assert not (tmp_path / "out").exists()


# Mends -------------------------------------------------------------------------------------------


def test_quaternions_near_unit_length_are_normalised_and_listed(tmp_path: Path) -> None:
    world = World(3, duration_s=30.0)
    tables = tables_of(world, (*POLAR, "elevation_rad"))
    head = "gravity_aligned = true"
    code, clean = fuse(write_survey(tmp_path / "a" / "survey", 3, tables, head=head))
    tables["otter"]["odometry"].loc[::3, ["qx", "qy", "qz", "qw"]] *= 1.0004
    again, mended = fuse(write_survey(tmp_path / "b" / "survey", 3, tables, head=head))
    assert code == again == 0
    assert any("otter/odometry.csv" in text for text in mended.meta["survey"]["mended"])
    for name in world.robots:
        a, b = clean.trajectories[name].pose, mended.trajectories[name].pose
        np.testing.assert_allclose(a, b, atol=1e-6)


def test_unsorted_and_repeated_rows_change_nothing(tmp_path: Path) -> None:
    world = World(2, duration_s=30.0)
    tables = tables_of(world)
    _, clean = fuse(write_survey(tmp_path / "a" / "survey", 2, tables))
    rng = np.random.default_rng(1)
    for kinds in tables.values():
        for kind, table in kinds.items():
            double = pd.concat([table, table.iloc[5:8]])
            kinds[kind] = double.iloc[rng.permutation(len(double))]
    _, mended = fuse(write_survey(tmp_path / "b" / "survey", 2, tables))
    told = mended.meta["survey"]["mended"]
    for file in ("heron/odometry.csv", "otter/odometry.csv", "heron/sightings.csv"):
        assert sum(file in text for text in told) >= 2, told
    assert (clean.measurements["kind"] == "sighting").sum() == (
        mended.measurements["kind"] == "sighting"
    ).sum()
    for name in world.robots:
        np.testing.assert_array_equal(clean.trajectories[name].t_s, mended.trajectories[name].t_s)
        np.testing.assert_allclose(
            clean.trajectories[name].pose, mended.trajectories[name].pose, atol=1e-6
        )


def test_empty_tables(tmp_path: Path) -> None:
    world = World(2, duration_s=30.0)
    tables = tables_of(world)
    tables["heron"]["encounters"] = world.encounters("heron", "otter").iloc[:0]
    tables["otter"]["fixes"] = world.fixes("otter", 0.1, np.zeros(2), 5.0).iloc[:0]
    wide = {
        "closures": pd.DataFrame(
            columns=["robot_a", "t_a_s", "robot_b", "t_b_s", "x_m", "y_m", "yaw_rad"]
        ),
        "control_points": pd.DataFrame(
            columns=["landmark", "x_m", "y_m", "sigma_x_m", "sigma_y_m"]
        ),
    }
    code, reference = fuse(write_survey(tmp_path / "survey", 2, tables, wide=wide))
    assert code == 0
    assert set(reference.measurements["kind"]) == {"odometry", "sighting"}
    told = "\n".join(reference.meta["survey"]["mended"])
    for file in ("encounters.csv", "fixes.csv", "closures.csv", "control_points.csv"):
        assert f"{file}: the table has no rows" in told


def test_a_robot_whose_odometry_is_empty_is_left_out(tmp_path: Path) -> None:
    world = World(2, duration_s=30.0)
    tables = tables_of(world)
    tables["otter"]["odometry"] = tables["otter"]["odometry"].iloc[:0]
    _, reference = fuse(write_survey(tmp_path / "survey", 2, tables))
    assert list(reference.trajectories) == ["heron"]
    assert any("otter" in text for text in reference.meta["survey"]["mended"])


def test_an_association_to_nothing_is_listed_and_harmless(tmp_path: Path) -> None:
    world = World(2, duration_s=30.0)
    rows = [
        {"robot": n, "label": name, "landmark": name} for n in world.robots for name in world.landmarks
    ]  # fmt: skip
    rows.append({"robot": "heron", "label": "plate-777", "landmark": "plate-778"})
    wide = {"associations": pd.DataFrame(rows)}
    code, reference = fuse(write_survey(tmp_path / "survey", 2, tables_of(world), wide=wide))
    assert code == 0
    told = reference.meta["survey"]["mended"]
    assert any("heron never sighted 'plate-777'" in text for text in told)
    assert "plate-778" not in set(reference.landmarks["landmark"])


# Robots ------------------------------------------------------------------------------------------


def test_one_robot(tmp_path: Path) -> None:
    world = World(2, robots=("heron",), duration_s=40.0)
    code, reference = fuse(full_survey(world, tmp_path / "survey"))
    assert code == 0
    assert reference.meta["components"] == [["heron"]]
    seen = reference.landmarks.query("n_sightings > 5")["landmark"].tolist()
    assert landmark_error(world, reference, seen) < 0.06


def test_robots_that_nothing_ties_are_solved_apart(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    world = World(2)
    tables = tables_of(world)
    for name in world.robots:
        own = tables[name]["sightings"]
        tables[name]["sightings"] = own.assign(landmark=f"{name}-" + own["landmark"])
    folder = write_survey(tmp_path / "survey", 2, tables)
    code = main(["fuse", str(folder), "--out", str(tmp_path / "out")])
    assert code == 3
    last = capsys.readouterr().out.splitlines()[-1]
    assert last == (
        "disconnected: nothing ties these groups of robots to each other: heron | otter"
    )
    reference = read_reference(tmp_path / "out")
    assert reference.meta["components"] == [["heron"], ["otter"]]
    parts = {n: set(p.component.tolist()) for n, p in reference.trajectories.items()}
    assert parts["heron"].isdisjoint(parts["otter"])
    marks = reference.landmarks
    for name in world.robots:
        # Each begins at its own first pose, and its own shape is right.
        np.testing.assert_allclose(reference.trajectories[name].pose[0], 0.0, atol=1e-9)
        own = marks[marks["landmark"].str.startswith(name)]
        assert set(own["component"]) == parts[name]
        renamed = own.assign(landmark=own["landmark"].str.removeprefix(f"{name}-"))
        table = Reference(**{**reference.__dict__, "landmarks": renamed.reset_index(drop=True)})
        seen = renamed.query("n_sightings > 5")["landmark"].tolist()
        assert landmark_error(world, table, seen) < 0.08


# Landmarks ---------------------------------------------------------------------------------------


def test_a_landmark_seen_once_by_bearing_only(tmp_path: Path) -> None:
    world = World(2, duration_s=40.0)
    tables = tables_of(world)
    once = pd.DataFrame(
        [{"t_s": 1010.0, "sensor": "front", "landmark": "plate-900", "bearing_rad": 0.3}]
    )
    tables["heron"]["sightings"] = pd.concat([tables["heron"]["sightings"], once])
    code, reference = fuse(write_survey(tmp_path / "survey", 2, tables))
    assert code == 0
    rows = reference.measurements
    alone = rows[rows["target"] == "plate-900"]
    assert alone["verdict"].tolist() == ["unusable"]
    assert "not determined" in alone["reason"].iloc[0]
    assert "plate-900" not in set(reference.landmarks.dropna(subset="x_m")["landmark"])
    assert any("plate-900" in text for text in reference.meta["survey"]["mended"])
    assert set(reference.associations.query("label == 'plate-900'")["verdict"]) <= {"unusable"}


@pytest.mark.parametrize("dimension", [2, 3])
def test_landmarks_seen_by_bearing_only_from_many_poses(tmp_path: Path, dimension: int) -> None:
    world = World(dimension)
    head = "gravity_aligned = true" if dimension == 3 else ""
    tables = tables_of(world, ("bearing_rad", "elevation_rad"))
    code, reference = fuse(write_survey(tmp_path / "survey", dimension, tables, head=head))
    assert code == 0
    both = reference.landmarks.query("n_robots == 2 and n_sightings > 10")["landmark"].tolist()
    assert len(both) >= 6
    # A hundredth of a radian at some metres, averaged over tens of bearings.
    assert landmark_error(world, reference, both) < 0.06


def test_landmarks_seen_by_range_only(tmp_path: Path) -> None:
    world = World(2)
    code, reference = fuse(write_survey(tmp_path / "survey", 2, tables_of(world, ("range_m",))))
    assert code == 0
    both = reference.landmarks.query("n_robots == 2 and n_sightings > 10")["landmark"].tolist()
    assert len(both) >= 6
    assert landmark_error(world, reference, both) < 0.06


# Control points ----------------------------------------------------------------------------------


def _control(world: World, n: int, wrong: int | None = None) -> pd.DataFrame:
    rows = []
    for k, (name, place) in enumerate(list(world.landmarks.items())[:n]):
        x, y = place + (np.array([3.0, 0.0]) if k == wrong else 0.0)
        rows.append({"landmark": name, "x_m": x, "y_m": y, "sigma_x_m": 0.02, "sigma_y_m": 0.02})
    return pd.DataFrame(rows)


def site_error(world: World, reference: Reference) -> float:
    """RMS distance (m) of well-seen landmarks in the site frame, nothing aligned."""
    table = reference.landmarks.query("n_sightings > 10")
    true = np.array([world.landmarks[n] for n in table["landmark"]])
    return float(np.sqrt(np.mean(np.sum((table[["x_m", "y_m"]].to_numpy() - true) ** 2, axis=1))))


def test_one_control_point_of_five_contradicts_the_others(tmp_path: Path) -> None:
    world = World(2)
    wide = {"control_points": _control(world, 5, wrong=2)}
    folder = write_survey(
        tmp_path / "survey", 2, tables_of(world), wide=wide, head='[datum]\nkind = "control"'
    )
    code, reference = fuse(folder)
    assert code == 0
    rows = reference.measurements.query("kind == 'control'").set_index("landmark")
    assert rows["verdict"].to_dict() == {
        name: "rejected" if name == "plate-002" else "kept"
        for name in wide["control_points"]["landmark"]
    }
    # Its sightings are right and stay.
    seen = reference.measurements.query("kind == 'sighting' and target == 'plate-002'")
    assert (seen["verdict"] == "kept").mean() > 0.9
    suspect = reference.suspects.iloc[0]
    assert suspect["kind"] == "control"
    assert suspect["reason"].startswith("control point plate-002: ")
    assert site_error(world, reference) < 0.05


@pytest.mark.parametrize(("n", "wrong"), [(1, None), (2, 1), (3, 1)])
def test_control_that_cannot_be_trusted_is_said(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], n: int, wrong: int | None
) -> None:
    world = World(2)
    wide = {"control_points": _control(world, n, wrong)}
    folder = write_survey(
        tmp_path / "survey", 2, tables_of(world), wide=wide, head='[datum]\nkind = "control"'
    )
    code, reference = fuse(folder)
    assert code == 3
    last = capsys.readouterr().out.splitlines()[-1]
    assert last.startswith("weak: ")
    assert ("control points contradict the others" in last) == (wrong is not None)
    assert ("do not hold heron, otter in the site frame" in last) == (n < 3)
    assert json.loads((folder.parent / "out" / "reference.json").read_text())["status"] == "weak"
    if n == 3:
        assert site_error(world, reference) < 0.05

"""The user's edits: each one honoured by the fusion and found again in its result."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from tiny_survey import World, write_survey

import jointmap
from jointmap.products.reference import Reference
from jointmap.settings import Settings


@pytest.fixture(scope="module")
def world() -> World:
    return World(2, duration_s=40.0, seed=5)


def survey(world: World, folder: Path, edits: str, swap: bool = False) -> Path:
    """Own labels and an associations table; with ``swap`` one label of otter is wrong."""
    tables, rows = {}, []
    for name in world.robots:
        seen = world.sightings(name)
        tables[name] = {
            "odometry": world.odometry(name, stated=False),
            "sightings": seen.assign(landmark="mark-" + seen["landmark"].str[-3:]),
        }
        for plate in world.landmarks:
            claimed = plate
            if swap and name == "otter" and plate == busiest(world, seen):
                claimed = next(p for p in world.landmarks if p != plate)
            rows.append({"robot": name, "label": f"mark-{plate[-3:]}", "landmark": claimed})
    wide = {"associations": pd.DataFrame(rows)}
    write_survey(folder, 2, tables, wide=wide)
    (folder / "edits.toml").write_text(edits)
    return folder


def busiest(world: World, seen: pd.DataFrame) -> str:
    return str(seen["landmark"].value_counts().index[0])


def fused(folder: Path, settings: Settings | None = None) -> Reference:
    reference = jointmap.fuse(jointmap.read_survey(folder), settings or Settings())
    # Which edits stood behind a result is part of it.
    assert "edits.toml" in reference.meta["survey"]["inputs"]
    return reference


def verdict(reference: Reference, robot: str, label: str) -> pd.Series:
    rows = reference.associations.query("robot == @robot and label == @label")
    assert len(rows) == 1
    return rows.iloc[0]


def test_reject(world: World, tmp_path: Path) -> None:
    edit = '[[reject_association]]\nrobot = "otter"\nlabel = "{}"\n'
    label = "mark-" + busiest(world, world.sightings("otter"))[-3:]
    reference = fused(survey(world, tmp_path / "survey", edit.format(label)))
    row = verdict(reference, "otter", label)
    assert (row["verdict"], row["reason"]) == ("rejected", "rejected by an edit")
    # Its sightings stay, as a landmark of otter alone.
    mine = reference.measurements.query("robot == 'otter' and target == @label")
    assert (mine["verdict"] == "kept").mean() > 0.9
    assert set(mine["landmark"]) == {f"otter:{label}"}
    own = reference.landmarks[reference.landmarks["landmark"] == f"otter:{label}"]
    assert own["robots"].tolist() == ["otter"]
    # Suspects are what the user has not yet answered.
    assert label not in set(reference.suspects.query("kind == 'association'")["target"])


def test_an_edit_of_a_label_that_was_never_seen_is_said(world: World, tmp_path: Path) -> None:
    edit = '[[reject_association]]\nrobot = "otter"\nlabel = "mark-777"\n'
    reference = fused(survey(world, tmp_path / "survey", edit))
    assert any(
        "otter has no usable sighting of 'mark-777'" in text for text in reference.meta["distrust"]
    )


def test_force_where_the_table_is_wrong(world: World, tmp_path: Path) -> None:
    right = busiest(world, world.sightings("otter"))
    label = f"mark-{right[-3:]}"
    edit = f'[[force_association]]\nrobot = "otter"\nlabel = "{label}"\nlandmark = "{right}"\n'
    plain = fused(survey(world, tmp_path / "plain", "", swap=True))
    assert verdict(plain, "otter", label)["verdict"] == "rejected"
    forced = fused(survey(world, tmp_path / "forced", edit, swap=True))
    row = verdict(forced, "otter", label)
    assert (row["landmark"], row["verdict"], row["reason"]) == (right, "kept", "forced by an edit")
    shared = forced.landmarks[forced.landmarks["landmark"] == right]
    assert shared["robots"].tolist() == ["heron otter"]


@pytest.mark.parametrize("order", [1, -1])
def test_force_says_what_a_rejected_claim_is(world: World, tmp_path: Path, order: int) -> None:
    right = busiest(world, world.sightings("otter"))
    label = f"mark-{right[-3:]}"
    edits = [
        f'[[reject_association]]\nrobot = "otter"\nlabel = "{label}"\n',
        f'[[force_association]]\nrobot = "otter"\nlabel = "{label}"\nlandmark = "{right}"\n',
    ][::order]
    reference = fused(survey(world, tmp_path / "survey", "".join(edits), swap=True))
    assert verdict(reference, "otter", label)["verdict"] == "kept"


def test_mask(world: World, tmp_path: Path) -> None:
    edit = '[[mask]]\nrobot = "heron"\nsensor = "front"\nt_from_s = 1010.0\nt_to_s = 1015.0\n'
    reference = fused(survey(world, tmp_path / "survey", edit))
    rows = reference.measurements.query("kind == 'sighting'")
    hit = (rows["robot"] == "heron") & rows["t_s"].between(1010.0, 1015.0)
    assert hit.sum() > 10
    assert set(rows.loc[hit, "verdict"]) == {"unusable"}
    assert set(rows.loc[hit, "reason"]) == {"masked by an edit"}
    assert "masked by an edit" not in set(rows.loc[~hit, "reason"])


def test_split(world: World, tmp_path: Path) -> None:
    """The odometry jumps by two metres at a known time; the cut takes the jump out."""
    folder = survey(world, tmp_path / "survey", "")
    path = folder / "heron" / "odometry.csv"
    table = pd.read_csv(path)
    table.loc[table["t_s"] > 1020.1, "x_m"] += 2.0
    table.to_csv(path, index=False)
    (folder / "edits.toml").write_text('[[split_odometry]]\nrobot = "heron"\nt_s = 1020.1\n')
    reference = fused(folder)
    steps = reference.measurements.query("kind == 'odometry' and robot == 'heron'")
    assert not ((steps["verdict"] == "rejected") | (steps["verdict"] == "down-weighted")).any()
    # Sightings tie both sides: the path is whole and right.
    assert set(reference.trajectories["heron"].component) == {0}
    assert path_error(world, reference, "heron") < 0.1


def path_error(world: World, reference: Reference, robot: str) -> float:
    home = np.linalg.inv(world.truth["heron"][0])
    true = (home @ world.truth[robot])[:, :2, 2]
    gap = reference.trajectories[robot].pose[:, :2] - true
    return float(np.sqrt(np.mean(np.sum(gap**2, axis=1))))


@pytest.mark.parametrize("t_s", [900.0, 1000.0, 1040.5])
def test_a_split_outside_the_odometry_does_nothing_and_is_said(
    world: World, tmp_path: Path, t_s: float
) -> None:
    edit = f'[[split_odometry]]\nrobot = "heron"\nt_s = {t_s}\n'
    reference = fused(survey(world, tmp_path / "survey", edit))
    plain = fused(survey(world, tmp_path / "plain", ""))
    count = "kind == 'odometry' and robot == 'heron'"
    assert len(reference.measurements.query(count)) == len(plain.measurements.query(count))
    assert any("lies outside the odometry" in text for text in reference.meta["distrust"])


def test_fix_sigma_and_calibration(world: World, tmp_path: Path) -> None:
    edits = (
        '[[fix_sigma]]\nrobot = "heron"\nsensor = "front"\nname = "bearing_rad"\nvalue = 0.02\n'
        '[[fix_sigma]]\nrobot = "otter"\nname = "translation_per_sqrt_m"\nvalue = 0.03\n'
        '[[fix_calibration]]\nrobot = "otter"\nname = "odometry_scale"\nvalue = 1.03\n'
    )
    reference = fused(survey(world, tmp_path / "survey", edits))
    noise = reference.noise.set_index(["robot", "sensor", "component", "term"])["estimated"]
    told = noise[noise.index.get_level_values("robot") == "heron"]
    bearing = told[told.index.get_level_values("component") == "bearing_rad"]
    assert bearing.xs("constant", level="term").tolist() == [0.02]
    walked = reference.noise.query("robot == 'otter' and term == 'translation_per_sqrt_m'")
    assert walked["estimated"].tolist() == [0.03]
    table = reference.calibration.query("robot == 'otter' and parameter == 'odometry_scale'")
    assert table["value"].tolist() == pytest.approx([1.03], abs=1e-4)

"""Labels and wrong associations: exact shares, exact patterns."""

from __future__ import annotations

from collections import defaultdict
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from simulated_files import table

from jointmap.simulate import SimulationSettings, build, simulate


def told(folder: Path) -> pd.DataFrame:
    """What the associations file says beside what is true, one row per label."""
    said = table(folder, "associations.csv").set_index(["robot", "label"])["landmark"]
    true = table(folder, "truth/associations.csv").set_index(["robot", "label"])
    return true.assign(said=said)


def checkable(rows: pd.DataFrame) -> pd.Series:
    """Rows whose landmark another robot also sees."""
    return rows.groupby("landmark")["landmark"].transform("size") > 1


@pytest.mark.parametrize("pattern", ["random", "swapped", "shifted", "coherent"])
@pytest.mark.parametrize("share", [0.05, 0.3])
def test_share_is_exact_and_only_what_can_be_checked(
    pattern: str, share: float, tmp_path: Path
) -> None:
    settings = SimulationSettings(
        duration_s=200.0, landmarks=60, wrong_associations=share, wrong_pattern=pattern
    )
    report = simulate("quarry-2d", tmp_path / "s", settings, seed=4)
    rows = told(tmp_path / "s")
    wrong = rows["said"] != rows["landmark"]
    assert (wrong == rows["wrong"]).all()
    expected = round(share * checkable(rows).sum())
    slack = 1 if pattern in ("swapped", "coherent") else 0
    assert expected <= wrong.sum() <= expected + slack
    assert report.wrong_associations == wrong.sum()
    assert checkable(rows)[wrong].all()
    shared = set(rows["landmark"][checkable(rows)])
    assert set(rows["said"][wrong]) <= shared


def test_swaps_exchange_two_landmarks_of_one_robot(tmp_path: Path) -> None:
    settings = SimulationSettings(
        duration_s=200.0, landmarks=60, wrong_associations=0.2, wrong_pattern="swapped"
    )
    simulate("quarry-2d", tmp_path / "s", settings, seed=4)
    rows = told(tmp_path / "s")
    wrong = rows[rows["wrong"]].reset_index()
    pairs = set(zip(wrong["robot"], wrong["landmark"], wrong["said"], strict=True))
    assert len(pairs) > 10
    assert all((robot, said, true) in pairs for robot, true, said in pairs)


def test_shifted_blocks_name_the_next_landmark_along_the_wall(tmp_path: Path) -> None:
    settings = SimulationSettings(
        duration_s=200.0, landmarks=60, wrong_associations=0.3, wrong_pattern="shifted"
    )
    simulate("quarry-2d", tmp_path / "s", settings, seed=4)
    rows = told(tmp_path / "s")
    rows = rows[checkable(rows)].reset_index().sort_values(["robot", "landmark"])
    blocks = 0
    for _, own in rows.groupby("robot"):
        following = own["landmark"].shift(-1)
        wrong = own["wrong"].to_numpy()
        assert (own["said"][wrong] == following[wrong]).all()
        blocks += int(np.sum(np.diff(np.concatenate([[0], wrong.astype(int)])) == 1))
    assert 1 <= blocks <= 4


def test_own_labels_count_in_the_order_of_meeting(tmp_path: Path) -> None:
    settings = SimulationSettings(duration_s=200.0, landmarks=30, labels="own", robots=6)
    simulate("quarry-2d", tmp_path / "s", settings, seed=4)
    for robot, prefix in (("heron", "h"), ("swift", "s"), ("badger", "b"), ("marten", "m")):
        labels = table(tmp_path / "s", f"{robot}/sightings.csv")["landmark"]
        met = list(dict.fromkeys(labels))
        # plates of one frame are met at once
        numbers = [int(label.removeprefix(f"{prefix}-")) for label in met]
        assert sorted(numbers) == list(range(1, len(met) + 1))
        assert np.abs(np.array(numbers) - np.arange(1, len(met) + 1)).max() <= 6


def test_plate_names_need_no_associations(tmp_path: Path) -> None:
    simulate("quarry-2d", tmp_path / "s", SimulationSettings(duration_s=60.0), seed=4)
    assert not (tmp_path / "s/associations.csv").exists()
    rows = table(tmp_path / "s", "truth/associations.csv")
    assert (rows["label"] == rows["landmark"]).all()
    assert not rows["wrong"].any()


def test_unlisted_labels_are_left_out(tmp_path: Path) -> None:
    settings = SimulationSettings(duration_s=200.0, landmarks=60, unlisted=0.1)
    simulate("quarry-2d", tmp_path / "s", settings, seed=4)
    rows = told(tmp_path / "s")
    assert rows["said"].isna().sum() == round(0.1 * len(rows))
    assert not rows["wrong"].any()


def test_wrong_associations_leave_all_else_unchanged() -> None:
    plain = SimulationSettings(duration_s=100.0, landmarks=30, labels="own")
    wrong = SimulationSettings(duration_s=100.0, landmarks=30, labels="own", wrong_associations=0.2)
    a, b = build("quarry-3d", plain, 6), build("quarry-3d", wrong, 6)
    for name, seen in a.sightings.items():
        for column, values in seen.values.items():
            np.testing.assert_array_equal(values, b.sightings[name].values[column])
    assert a.associations.labels == b.associations.labels
    claims: dict[bool, int] = defaultdict(int)
    for value in b.associations.wrong:
        claims[bool(value)] += 1
    assert claims[True] > 0 and not a.associations.wrong.any()

"""Reference folders keep every number and word, and refuse what is broken."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from synthetic_reference import meta, reference

from jointmap.errors import LogFormatError, OutputExistsError, SurveyError
from jointmap.products.columns import META_KEYS, TABLES, complete
from jointmap.products.files import read_reference, write_reference
from jointmap.products.reference import Reference


@pytest.mark.parametrize("dimension", [2, 3])
def test_everything_comes_back_exactly(tmp_path: Path, dimension: int) -> None:
    written = reference(dimension)
    back = read_reference(write_reference(written, tmp_path / "ref"))
    assert list(back.trajectories) == ["heron", "otter"]
    for robot, path in written.trajectories.items():
        for name in ("t_s", "pose", "keyframe", "component", "trust"):
            np.testing.assert_array_equal(
                getattr(back.trajectories[robot], name), getattr(path, name)
            )
        # Only the upper triangle is stored, and the product that made it is symmetric to rounding.
        np.testing.assert_allclose(back.trajectories[robot].cov, path.cov, rtol=0, atol=1e-18)
    for name in TABLES:
        pd.testing.assert_frame_equal(back.tables[name], written.tables[name])
    assert back.meta == written.meta
    assert set(back.state) == set(written.state)
    for name, array in written.state.items():
        np.testing.assert_array_equal(back.state[name], array)


def test_the_folder_holds_the_files_and_columns_that_are_promised(tmp_path: Path) -> None:
    folder = write_reference(reference(2), tmp_path / "ref")
    assert sorted(str(p.relative_to(folder)) for p in folder.rglob("*") if p.is_file()) == [
        "associations.csv",
        "calibration.csv",
        "holdout.csv",
        "landmarks.csv",
        "measurements.parquet",
        "noise.csv",
        "reference.json",
        "robots.csv",
        "state.npz",
        "suspects.csv",
        "trajectory/heron.parquet",
        "trajectory/otter.parquet",
    ]
    # The words of the published table of outputs, written out here on purpose.
    assert pq.read_schema(folder / "trajectory/heron.parquet").names == [
        "t_s",
        "x_m",
        "y_m",
        "yaw_rad",
        "cov_x_x",
        "cov_x_y",
        "cov_x_yaw",
        "cov_y_y",
        "cov_y_yaw",
        "cov_yaw_yaw",
        "keyframe",
        "component",
        "trust",
    ]
    header = (folder / "associations.csv").read_text().splitlines()[0]
    assert header == "robot,label,landmark,n_sightings,verdict,reason,statistic,alternative"
    header = (folder / "noise.csv").read_text().splitlines()[0]
    assert header == "robot,sensor,component,term,given,estimated,sigma,redundancy"
    header = (folder / "calibration.csv").read_text().splitlines()[0]
    assert header == "robot,sensor,parameter,value,sigma,significant,observable,used"
    header = (folder / "suspects.csv").read_text().splitlines()[0]
    assert header == "kind,robot,t_from_s,t_to_s,target,statistic,reason,edit"
    header = (folder / "holdout.csv").read_text().splitlines()[0]
    assert header == "fold_kind,fold,n,n_effective,normalized_square,lower,upper"
    keys = json.loads((folder / "reference.json").read_text())
    assert list(keys) == list(META_KEYS)


def test_names_that_look_like_something_else_stay_names(tmp_path: Path) -> None:
    back = read_reference(write_reference(reference(2), tmp_path / "ref"))
    assert list(back.landmarks["landmark"]) == ["plate-017", "plate-018", "NA"]
    assert list(back.associations["label"]) == ["017", "true"]


def test_what_is_not_finite_is_null_in_json(tmp_path: Path) -> None:
    folder = write_reference(
        reference(2, evidence={"ratio": np.nan, "n": np.int64(3), "of": np.array([1.0, np.inf])}),
        tmp_path / "ref",
    )
    assert json.loads((folder / "reference.json").read_text())["evidence"] == {
        "ratio": None,
        "n": 3,
        "of": [1.0, None],
    }


def test_a_result_is_replaced_only_on_demand(tmp_path: Path) -> None:
    folder = write_reference(reference(2, seed=1), tmp_path / "ref")
    with pytest.raises(OutputExistsError, match="exists already"):
        write_reference(reference(2, seed=2), folder)
    assert read_reference(folder).meta["seed"] == 1
    write_reference(reference(2, seed=2), folder, replace=True)
    assert read_reference(folder).meta["seed"] == 2
    assert [p.name for p in tmp_path.iterdir()] == ["ref"]


def test_state_with_python_objects_is_refused() -> None:
    with pytest.raises(ValueError, match="Python objects"):
        replace(reference(2), state={"bad": np.array([{}], dtype=object)})


def _break_json(folder: Path) -> None:
    (folder / "reference.json").write_text("{")


def _wrong_format(folder: Path) -> None:
    (folder / "reference.json").write_text(json.dumps(meta(format=99)))


def _no_state(folder: Path) -> None:
    (folder / "state.npz").unlink()


def _cut_state(folder: Path) -> None:
    (folder / "state.npz").write_bytes(b"not an archive")


def _pickled_state(folder: Path) -> None:
    np.savez(folder / "state.npz", bad=np.array([{}], dtype=object))


def _no_column(folder: Path) -> None:
    frame = pd.read_csv(folder / "landmarks.csv").drop(columns="cov_x_y")
    frame.to_csv(folder / "landmarks.csv", index=False)


def _text_in_numbers(folder: Path) -> None:
    frame = pd.read_csv(folder / "noise.csv").assign(given="much")
    frame.to_csv(folder / "noise.csv", index=False)


def _other_words(folder: Path) -> None:
    frame = pd.read_csv(folder / "calibration.csv").assign(used="perhaps")
    frame.to_csv(folder / "calibration.csv", index=False)


def _unknown_trust(folder: Path) -> None:
    file = folder / "trajectory/otter.parquet"
    pd.read_parquet(file).assign(trust="good").to_parquet(file)


def _shuffled(folder: Path) -> None:
    file = folder / "trajectory/otter.parquet"
    pd.read_parquet(file).iloc[::-1].to_parquet(file)


def _no_parquet(folder: Path) -> None:
    (folder / "measurements.parquet").write_text("robot,t_s\n")


@pytest.mark.parametrize(
    ("harm", "said"),
    [
        (_break_json, r"ref/reference.json: not JSON"),
        (_wrong_format, r"column format: format is 99, this program reads 1"),
        (_no_state, r"ref/state.npz: the file is missing"),
        (_cut_state, r"ref/state.npz: cannot be read"),
        (_pickled_state, r"ref/state.npz: cannot be read"),
        (_no_column, r"ref/landmarks.csv, column cov_x_y: columns are missing"),
        (_text_in_numbers, r"ref/noise.csv: cannot be read.*much"),
        (_other_words, r"ref/calibration.csv: .*other words than true and false"),
        (_unknown_trust, r"trajectory/otter.parquet, column trust"),
        (_shuffled, r"trajectory/otter.parquet: trajectory stamps do not increase"),
        (_no_parquet, r"ref/measurements.parquet: cannot be read"),
    ],
)
def test_a_broken_folder_is_refused_with_the_file(tmp_path: Path, harm, said: str) -> None:  # type: ignore[no-untyped-def]
    folder = write_reference(reference(2), tmp_path / "ref")
    harm(folder)
    with pytest.raises(LogFormatError, match=said):
        read_reference(folder)


def test_a_missing_folder_is_refused(tmp_path: Path) -> None:
    with pytest.raises(SurveyError, match="not a folder"):
        read_reference(tmp_path / "nothing")


def test_complete_fills_and_refuses() -> None:
    made = complete("noise", 2, {"robot": ["heron"], "sigma": [0.1]})
    assert made.loc[0].isna().sum() == 6
    assert made.columns[0] == "robot"
    with pytest.raises(ValueError, match="no column sigmas"):
        complete("noise", 2, {"sigmas": [0.1]})


def test_a_reference_lists_what_its_json_lacks() -> None:
    good = reference(2)
    without = {k: v for k, v in good.meta.items() if k != "datum"}
    with pytest.raises(ValueError, match="datum"):
        Reference(**{**good.__dict__, "meta": without})
    with pytest.raises(ValueError, match="table noise"):
        replace(good, noise=good.noise.drop(columns="term"))
    with pytest.raises(ValueError, match="status"):
        replace(good, meta=meta(status="great"))


def test_arrays_are_read_only() -> None:
    path = reference(2).trajectories["heron"]
    with pytest.raises(ValueError, match="read-only"):
        path.pose[0, 0] = 1.0

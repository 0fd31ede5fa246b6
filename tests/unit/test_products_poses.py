"""Poses between rows: geodesic, covariance carried as rigid motion, refusals with reasons.

Rotations are checked against SciPy's Slerp, covariance against samples pushed through the formula.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.spatial.transform import Rotation, Slerp
from synthetic_reference import START_S, reference, with_trajectory

from jointmap import frames
from jointmap.errors import LogFormatError, OutputExistsError, SettingsError
from jointmap.products.reference import Trajectory, format_outages, parse_outages
from jointmap.products.stamps import answer, read_stamps, write_table


@pytest.mark.parametrize("dimension", [2, 3])
def test_rows_are_their_own_answer(dimension: int) -> None:
    whole = reference(dimension)
    path = whole.trajectories["heron"]
    pose, cov = whole.pose_at("heron", path.t_s)
    np.testing.assert_allclose(pose, path.pose, atol=1e-12)
    np.testing.assert_allclose(cov, path.cov, atol=1e-15)


def test_rotation_between_rows_is_slerp() -> None:
    path = reference(3).trajectories["heron"]
    t_s = np.linspace(path.t_s[0], path.t_s[-1], 333)
    pose, _ = reference(3).pose_at("heron", t_s)
    slerp = Slerp(path.t_s - START_S, Rotation.from_quat(path.pose[:, 3:]))(t_s - START_S)
    angle = (slerp.inv() * Rotation.from_quat(pose[:, 3:])).magnitude()
    np.testing.assert_allclose(angle, 0.0, atol=1e-9)


def test_a_planar_turn_runs_on_its_circle() -> None:
    # A quarter circle of radius 2 about (0, 2): start at the origin heading x, end at (2, 2).
    path = Trajectory(
        t_s=np.array([0.0, 1.0]),
        pose=np.array([[0.0, 0.0, 0.0], [2.0, 2.0, np.pi / 2]]),
        cov=np.zeros((2, 3, 3)),
        keyframe=np.ones(2, bool),
        component=np.zeros(2, int),
        trust=np.zeros(2, int),
    )
    whole = replace(reference(2), trajectories={"heron": path, "otter": path})
    share = np.linspace(0.0, 1.0, 7)
    pose, _ = whole.pose_at("heron", share)
    np.testing.assert_allclose(pose[:, 0], 2.0 * np.sin(share * np.pi / 2), atol=1e-12)
    np.testing.assert_allclose(pose[:, 1], 2.0 - 2.0 * np.cos(share * np.pi / 2), atol=1e-12)
    np.testing.assert_allclose(pose[:, 2], share * np.pi / 2, atol=1e-12)


def test_a_shared_rigid_error_is_carried_exactly() -> None:
    """Rows that share one error of the whole map: samples of that error give the covariance."""
    group = frames.SE2
    rng = np.random.default_rng(4)
    start, end = np.array([3.0, 1.0, 0.3]), np.array([3.6, 1.4, 0.9])
    error = rng.normal(0.0, [0.01, 0.02, 0.005], (200_000, 3))
    moved = [group.compose(group.exp(error), p) for p in (start, end)]
    covs = [
        group.covariance_to_table(p, np.cov(group.local(p, m).T))
        for p, m in zip((start, end), moved, strict=True)
    ]
    path = Trajectory(
        t_s=np.array([0.0, 1.0]),
        pose=np.stack([start, end]),
        cov=np.stack(covs),
        keyframe=np.ones(2, bool),
        component=np.zeros(2, int),
        trust=np.zeros(2, int),
    )
    whole = replace(reference(2), trajectories={"heron": path, "otter": path})
    pose, cov = whole.pose_at("heron", 0.4)
    middle = group.interpolate(moved[0], moved[1], np.full(len(error), 0.4))
    sampled = np.cov(group.local(pose, middle).T)
    # Both sides use the same samples; what is left is of second order in the error (1e-2 of it).
    np.testing.assert_allclose(
        group.covariance_from_table(pose, cov), sampled, rtol=0.02, atol=2e-7
    )


def test_independent_errors_are_bounded_from_above() -> None:
    """The true covariance of the interpolated pose never exceeds the stated one."""
    group = frames.SE3
    rng = np.random.default_rng(5)
    path = reference(3).trajectories["heron"]
    cov = np.broadcast_to(1e-4 * np.eye(6), path.cov.shape)
    whole = with_trajectory(reference(3), "heron", cov=cov)
    stamp = path.t_s[3] + 0.5 * (path.t_s[4] - path.t_s[3])
    pose, stated = whole.pose_at("heron", stamp)
    ends = group.from_rows(path.pose[3:5])
    body = group.covariance_from_table(ends, cov[3:5])
    noise = [rng.multivariate_normal(np.zeros(6), body[i], 50_000) for i in (0, 1)]
    middle = group.interpolate(
        group.retract(ends[0], noise[0]), group.retract(ends[1], noise[1]), np.full(50_000, 0.5)
    )
    true = np.cov(group.local(group.from_rows(pose), middle).T)
    slack = group.covariance_from_table(group.from_rows(pose), stated) - true
    assert np.linalg.eigvalsh(slack).min() > 0.0
    # Independent errors of equal size halve at the middle.
    assert np.trace(true) == pytest.approx(0.5 * 6e-4, rel=0.05)


def test_any_shape_of_stamps() -> None:
    whole = reference(2)
    one = whole.pose_at("heron", START_S + 1.23)
    assert one.pose.shape == (3,)
    assert one.cov.shape == (3, 3)
    grid = whole.pose_at("heron", np.full((2, 5), START_S + 1.23))
    np.testing.assert_array_equal(grid.pose, np.broadcast_to(one.pose, (2, 5, 3)))
    assert grid.reason.shape == (2, 5)
    assert whole.pose_at("heron", np.zeros(0)).pose.shape == (0, 3)


def test_outside_the_span_there_is_no_pose_but_a_reason() -> None:
    whole = reference(2)
    last = whole.trajectories["heron"].t_s[-1]
    found = whole.pose_at("heron", [START_S - 0.01, START_S, last, last + 0.01, np.nan])
    assert np.isnan(found.pose).all(axis=1).tolist() == [True, False, False, True, True]
    assert np.isnan(found.cov).all(axis=(1, 2)).tolist() == [True, False, False, True, True]
    assert found.reason[0].startswith("outside the robot's span 1700000000.000000 ..")
    assert found.reason[1] == found.reason[2] == ""
    assert found.reason[4] == "no stamp given"
    assert found.trust.tolist()[::3] == [-1, -1]


def test_nothing_is_interpolated_between_unconnected_parts() -> None:
    part = np.where(np.arange(40) < 20, 0, 1)
    whole = with_trajectory(reference(2), "heron", component=part)
    t = whole.trajectories["heron"].t_s
    found = whole.pose_at("heron", [t[19], (t[19] + t[20]) / 2, t[20]])
    assert found.component.tolist() == [0, -1, 1]
    assert found.reason.tolist() == ["", "between two parts that nothing connects", ""]
    assert np.isnan(found.pose[1]).all()


def test_in_an_outage_of_a_short_path_the_covariance_is_unknown() -> None:
    whole = reference(2)
    found = whole.pose_at("otter", START_S + np.array([0.95, 1.0, 1.05, 1.1, 1.15]))
    unknown = np.isnan(found.cov).any(axis=(1, 2))
    assert unknown.tolist() == [False, False, True, False, False]
    assert np.isfinite(found.pose).all()
    assert "outage" in found.reason[2]


def wandering(dimension: int, seed: int, n: int = 6000) -> Trajectory:
    """Ten minutes of a robot that changes its speed and turn rate every few seconds."""
    rng = np.random.default_rng(seed)
    group = frames.group(dimension)
    knots = rng.normal(0.0, 0.4, (n // 30 + 2, group.dof))
    where = np.arange(n) / 30
    step = np.stack([np.interp(where, np.arange(len(knots)), k) for k in knots.T], axis=-1) * 0.1
    poses = group.identity(n)
    for i in range(1, n):
        poses[i] = group.retract(poses[i - 1], step[i])
    return Trajectory(
        t_s=START_S + 0.1 * np.arange(n),
        pose=group.to_rows(poses),
        cov=np.broadcast_to(1e-10 * np.eye(group.dof), (n, group.dof, group.dof)),
        keyframe=np.ones(n, bool),
        component=np.zeros(n, int),
        trust=np.zeros(n, int),
    )


@pytest.mark.parametrize("dimension", [2, 3])
def test_in_an_outage_the_covariance_covers_what_the_robot_did(dimension: int) -> None:
    """Rows are taken out of a known path; the true poses there are held against the answers."""
    full = wandering(dimension, 7)
    n, gap = len(full), 21
    first = np.arange(100, n - 100, 150)
    hidden = (first[:, None] + np.arange(1, gap)).ravel()
    left = np.setdiff1d(np.arange(n), hidden)
    path = Trajectory(
        **{
            name: getattr(full, name)[left]
            for name in ("t_s", "pose", "cov", "keyframe", "component", "trust")
        }
    )
    intervals = np.stack([full.t_s[first], full.t_s[first + gap]], axis=1)
    base = reference(dimension)
    robots = base.robots.copy()
    robots.loc[robots["robot"] == "heron", "outages"] = format_outages(intervals)
    whole = replace(base, robots=robots, trajectories={**base.trajectories, "heron": path})
    group = frames.group(dimension)
    middle = first + gap // 2
    pose, cov = whole.pose_at("heron", full.t_s[middle])
    guess = group.from_rows(pose)
    error = group.local(guess, group.from_rows(full.pose[middle]))
    body = group.covariance_from_table(guess, cov)
    nees = np.einsum("ni,ni->n", error, np.linalg.solve(body, error[..., None])[..., 0])
    # 39 outages, nearly independent: the mean of chi-square with dof degrees of freedom has a
    # standard deviation of sqrt(2 dof / 39); four of them on either side, and one more above for
    # tails heavier than Gaussian.
    spread = np.sqrt(2.0 * group.dof / len(nees))
    assert len(nees) == 39
    assert group.dof - 4.0 * spread < nees.mean() < group.dof + 5.0 * spread
    # Without the departure the claim would be 1e-10 and absurd.
    assert np.median(np.linalg.norm(error[:, :dimension], axis=1)) > 0.02
    # Rows beside the outage keep their own covariance.
    beside = whole.pose_at("heron", intervals.ravel())
    np.testing.assert_allclose(np.trace(beside.cov, axis1=1, axis2=2), 1e-10 * group.dof, rtol=1e-6)


def test_trust_is_that_of_the_worse_neighbour() -> None:
    whole = reference(2)
    t = whole.trajectories["heron"].t_s
    assert whole.pose_at("heron", [t[0], t[1], (t[0] + t[1]) / 2]).trust.tolist() == [0, 1, 1]


def test_unknown_covariance_does_not_spread() -> None:
    path = reference(2).trajectories["heron"]
    cov = np.array(path.cov)
    cov[5] = np.nan
    whole = with_trajectory(reference(2), "heron", cov=cov)
    found = whole.pose_at("heron", path.t_s[[4, 5, 6]])
    assert np.isnan(found.cov).any(axis=(1, 2)).tolist() == [False, True, False]


def test_outages_survive_their_text() -> None:
    intervals = np.array([[1700000000.123456, 1700000001.5], [1700000009.0, 1700000010.25]])
    np.testing.assert_allclose(parse_outages(format_outages(intervals)), intervals, atol=1e-6)
    assert parse_outages("").shape == (0, 2)


@pytest.mark.parametrize("ending", [".csv", ".csv.gz", ".parquet"])
def test_a_file_of_stamps_is_answered_in_its_order(tmp_path: Path, ending: str) -> None:
    whole = reference(2)
    asked = pd.DataFrame(
        {"robot": ["otter", "heron", "otter"], "t_s": START_S + np.array([0.55, 0.25, 99.0])}
    )
    questions, out = tmp_path / f"q{ending}", tmp_path / f"a{ending}"
    asked.to_parquet(questions) if ending == ".parquet" else asked.to_csv(questions, index=False)
    write_table(answer(whole, read_stamps(questions, ("heron", "otter"))), out)
    got = pd.read_parquet(out) if ending == ".parquet" else pd.read_csv(out)
    assert list(got["robot"]) == ["otter", "heron", "otter"]
    pose, cov = whole.pose_at("otter", START_S + 0.55)
    np.testing.assert_allclose(got.loc[0, ["x_m", "y_m", "yaw_rad"]].astype(float), pose)
    upper = cov[np.triu_indices(3)]
    names = ["cov_x_x", "cov_x_y", "cov_x_yaw", "cov_y_y", "cov_y_yaw", "cov_yaw_yaw"]
    np.testing.assert_allclose(got.loc[0, names].astype(float), upper)
    assert got.loc[2, "reason"].startswith("outside the robot's span")
    assert got.loc[2, names].isna().all()
    with pytest.raises(OutputExistsError):
        write_table(got, out)


def test_bad_rows_are_named(tmp_path: Path) -> None:
    file = tmp_path / "q.csv"
    file.write_text("robot,t_s\nheron,1.0\nherron,2.0\nheron,\n,3.0\nheron,noon\n")
    with pytest.raises(LogFormatError) as caught:
        read_stamps(file, ("heron", "otter"))
    said = {(p.row, p.column) for p in caught.value.problems}
    assert {(3, "robot"), (4, "t_s"), (5, "robot"), (6, "t_s")} <= said
    assert "did you mean 'heron'?" in str(caught.value)


def test_missing_columns_and_files_are_named(tmp_path: Path) -> None:
    file = tmp_path / "q.csv"
    file.write_text("robot,time\nheron,1.0\n")
    with pytest.raises(LogFormatError, match="column t_s: the column is missing"):
        read_stamps(file, ("heron",))
    with pytest.raises(LogFormatError, match="no such file"):
        read_stamps(tmp_path / "none.csv", ("heron",))
    with pytest.raises(SettingsError, match="name the output"):
        write_table(pd.DataFrame(), tmp_path / "poses.xlsx")

"""The real five-robot run under default settings, judged against motion capture.

Leung, Halpern, Barfoot, Liu: The UTIAS multi-robot cooperative localization and mapping dataset,
Int. J. Robotics Research 30(8):969-974, 2011 (sub-dataset 6). The fusion never sees the truth: the
files are left out of what is imported. The limits are those that a survey of this kind is held to,
not figures read off this run.
"""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2


@pytest.fixture(scope="module")
def reference(real_reference):
    return real_reference


@pytest.fixture(scope="module")
def judged(reference, real_run: Path):
    """Position errors (n, 2), squared distances (n,), headings and robots at 5 Hz."""
    turn, shift, _ = _alignment(reference, real_run)
    angle = np.arctan2(turn[1, 0], turn[0, 0])
    errors, squares, spreads, headings, robots = [], [], [], [], []
    for robot, path in reference.trajectories.items():
        rows = np.loadtxt(real_run / f"Robot{robot.removeprefix('robot-')}_Groundtruth.dat")
        stamps = np.arange(max(path.t_s[0], rows[0, 0]), min(path.t_s[-1], rows[-1, 0]), 0.2)
        j = np.clip(np.searchsorted(path.t_s, stamps), 0, len(path) - 1)
        k = np.clip(np.searchsorted(rows[:, 0], path.t_s[j]), 1, len(rows) - 1)
        j = j[(rows[k, 0] - rows[k - 1, 0] < 0.5) & (path.trust[j] < 2)]
        t = path.t_s[j]
        true = [np.interp(t, rows[:, 0], rows[:, c]) for c in (1, 2)]
        e = path.pose[j, :2] @ turn.T + shift - np.stack(true, axis=1)
        cov = turn @ path.cov[j][:, :2, :2] @ turn.T
        h = path.pose[j, 2] + angle - np.interp(t, rows[:, 0], np.unwrap(rows[:, 3]))
        h = (h + np.pi) % (2 * np.pi) - np.pi
        h = (h - np.median(h) + np.pi) % (2 * np.pi) - np.pi
        errors.append(e)
        squares.append(np.einsum("ni,nij,nj->n", e, np.linalg.inv(cov), e))
        spreads.append(np.linalg.eigvalsh(cov)[:, 1])
        headings.append(h / np.sqrt(path.cov[j][:, 2, 2]))
        robots.append(np.full(len(j), robot, dtype=object))
    return tuple(map(np.concatenate, (errors, squares, spreads, headings, robots)))


def _alignment(reference, folder: Path):
    """Rigid transform of the landmarks to their true places (Umeyama 1991), and their RMSE."""
    table = reference.landmarks
    true = {int(r[0]): r[1:3] for r in np.loadtxt(folder / "Landmark_Groundtruth.dat")}
    a = table[["x_m", "y_m"]].to_numpy()
    b = np.array([true[int(re.findall(r"\d+", n)[-1])] for n in table["landmark"]])
    u, _, vt = np.linalg.svd((a - a.mean(axis=0)).T @ (b - b.mean(axis=0)))
    turn = vt.T @ np.diag([1.0, np.sign(np.linalg.det(vt.T @ u.T))]) @ u.T
    shift = b.mean(axis=0) - turn @ a.mean(axis=0)
    return turn, shift, float(np.sqrt(((a @ turn.T + shift - b) ** 2).sum(axis=1).mean()))


def test_it_can_be_trusted_as_it_is(reference) -> None:
    assert reference.status == "ok"
    assert (reference.associations["verdict"] == "kept").all()


def test_positions_and_landmarks(reference, judged, real_run: Path) -> None:
    assert np.sqrt((judged[0] ** 2).sum(axis=1).mean()) <= 0.075
    assert _alignment(reference, real_run)[2] <= 0.06


def test_claims_hold(judged) -> None:
    _, squares, spreads, headings, robots = judged
    inside = squares < chi2.ppf(0.95, 2)
    assert 0.90 <= inside.mean() <= 0.99
    assert 0.35 <= (squares < chi2.ppf(0.5, 2)).mean() <= 0.65
    for robot in np.unique(robots):
        assert inside[robots == robot].mean() >= 0.80
    quarter = np.searchsorted(np.quantile(spreads, [0.25, 0.5, 0.75]), spreads)
    for q in range(4):
        assert inside[quarter == q].mean() >= 0.80
    assert 0.88 <= (np.abs(headings) < 1.96).mean() <= 0.99


def test_claims_are_no_larger_than_needed(judged) -> None:
    errors, _, spreads, _, _ = judged
    size = np.linalg.norm(errors, axis=1)
    assert np.median(np.sqrt(chi2.ppf(0.95, 2) * spreads)) <= 1.4 * np.quantile(size, 0.95)


def test_most_of_the_run_is_graded(reference) -> None:
    for path in reference.trajectories.values():
        assert (path.trust < 2).mean() >= 0.95
        assert (path.trust == 1).mean() <= 0.30

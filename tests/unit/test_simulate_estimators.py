"""The textbook online estimators: error growth, claims, sharing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy.stats import chi2

import jointmap
from jointmap import frames
from jointmap.cli import main
from jointmap.errors import SurveyError
from jointmap.ingest import read_survey
from jointmap.simulate.estimators.ekf import Filter
from jointmap.simulate.estimators.motion import increments, twists
from jointmap.simulate.estimators.run import DEAD, INTERSECTION, LONE, NAIVE, estimate
from jointmap.simulate.estimators.share import join, take_as_measurement, take_by_intersection
from jointmap.simulate.settings import SimulationSettings

HEADING_WALK = np.array([0.0, 0.01, 0.0, 0.0, 0.0])
SHORT = SimulationSettings(robots=1, duration_s=20.0)
POSITION_WALK = np.array([0.02, 0.0, 0.0, 0.0, 0.0])


def straight(length_m: float, theta):
    """Covariance after a straight line at 1 m/s, rows once a second."""
    t_s = np.arange(length_m + 1)
    twist = np.tile([1.0, 0.0, 0.0], (len(t_s), 1))
    motion, cov = increments(t_s, twist, np.array([0.0, length_m]), theta)
    np.testing.assert_allclose(motion[0], [length_m, 0, 0], atol=1e-12)
    return cov[0]


def test_dead_reckoning_with_a_heading_walk():
    """Heading variance s^2 L, lateral s^2 L^3 / 3, covariance s^2 L^2 / 2 (random walk in heading)."""
    cov = straight(100.0, HEADING_WALK)
    assert cov[2, 2] == pytest.approx(0.01, rel=1e-12)
    # Steps of a metre: the sum differs from the integral by 1 / (4 N^2).
    assert cov[1, 1] == pytest.approx(100.0 / 3, rel=1e-4)
    assert cov[1, 2] == pytest.approx(0.5, rel=1e-12)


@pytest.mark.parametrize(("theta", "slope"), [(HEADING_WALK, 1.5), (POSITION_WALK, 0.5)])
def test_slope_of_error_growth(theta, slope):
    """Sigma grows with the power 3/2 of the path under a heading walk, 1/2 under a position walk."""
    sigma = [np.sqrt(straight(x, theta)[1, 1]) for x in (50.0, 200.0, 800.0)]
    found = np.diff(np.log(sigma)) / np.log(4.0)
    np.testing.assert_allclose(found, slope, atol=2e-4)


def test_increment_covariance_against_simulation():
    """Curved motion with every noise term against 20,000 noisy runs."""
    t_s = np.linspace(0.0, 4.0, 41)
    twist = np.tile([0.8, 0.1, 0.4], (41, 1))
    theta = np.array([0.03, 0.02, 0.03, 0.01, 0.01])
    motion, cov = increments(t_s, twist, np.array([0.0, 4.0]), theta)
    rng = np.random.default_rng(2)
    pose = np.zeros((20_000, 3))
    for _ in range(40):
        step = twist[0] * 0.1
        length = np.hypot(*step[:2])
        place = theta[0] ** 2 * length + theta[3] ** 2 * 0.1
        turn = theta[1] ** 2 * length + theta[2] ** 2 * abs(step[2]) + theta[4] ** 2 * 0.1
        noise = rng.standard_normal(pose.shape) * np.sqrt([place, place, turn])
        pose = frames.SE2.compose(pose, frames.SE2.exp(step + noise))
    sample = np.cov((pose - pose.mean(axis=0)).T)
    # Sampling error of a covariance: about sqrt(2 / n), five times that.
    np.testing.assert_allclose(cov[0], sample, rtol=0.05, atol=0.05 * sample.max())
    np.testing.assert_allclose(motion[0], pose.mean(axis=0), atol=5e-3)


def test_pose_form_and_twist_form_agree(tmp_path):
    """A path of constant twist, logged either way."""
    t_s = np.linspace(0.0, 3.0, 31)
    xi = np.array([0.5, 0.0, 0.3])
    pose = frames.SE2.exp(t_s[:, None] * xi)
    jointmap.simulate("quarry-2d", tmp_path / "s", SHORT, seed=0)
    log = read_survey(tmp_path / "s").robots["heron"]
    made = replace(log, odometry=replace(log.odometry, form="pose", t_s=t_s, pose=pose, twist=None))
    np.testing.assert_allclose(twists(made)[1][:-1], np.tile(xi, (30, 1)), atol=1e-9)


def test_filter_update_equals_least_squares():
    """One linear step: a landmark seen twice from a known pose, by the normal equations."""
    f = Filter()
    variance, mount = np.array([0.04, 0.0004]), np.zeros(3)
    f.see("plate-001", np.array([5.0, 0.0]), variance, mount)
    f.see("plate-001", np.array([5.2, 0.0]), variance, mount)
    np.testing.assert_allclose(f.x[3:], [5.1, 0.0], atol=1e-6)
    np.testing.assert_allclose(np.diag(f.p)[3:], [0.02, 0.0004 * 25 / 2], rtol=0.03)


def test_gross_sighting_is_left_out():
    f = Filter()
    for _ in range(3):
        f.see("plate-001", np.array([5.0, 0.0]), np.array([0.01, 1e-4]), np.zeros(3))
    before = f.x.copy()
    assert not f.see("plate-001", np.array([9.0, 0.0]), np.array([0.01, 1e-4]), np.zeros(3))
    np.testing.assert_array_equal(f.x, before)


def _pair():
    """Two filters that saw the same three plates from their own starts."""
    plates = np.array([[4.0, 1.0], [5.0, -2.0], [7.0, 0.5]])
    starts = (np.zeros(3), np.array([1.0, 0.5, 0.4]))
    out = []
    for start in starts:
        f = Filter()
        for k, p in enumerate(plates):
            local = frames.SE2.inverse_transform(start, p)
            observed = np.array([np.hypot(*local), np.arctan2(local[1], local[0])])
            f.see(f"plate-{k}", observed, np.array([1e-4, 1e-6]), np.zeros(3))
        out.append(f)
    return *out, starts[1]


def test_joining_finds_the_transform_between_frames():
    first, second, start = _pair()
    moved = join(second, first.snapshot())
    assert moved is not None
    np.testing.assert_allclose(moved.x[:3], start, atol=1e-3)
    assert np.linalg.eigvalsh(moved.p)[0] > -1e-9


def test_joining_needs_two_common_plates():
    first, second, _ = _pair()
    second.names = ["a", "b", "plate-2"]
    assert join(second, first.snapshot()) is None


def test_taking_the_same_twice_sharpens_only_the_naive_way():
    """What a filter sent comes back: by intersection nothing is gained, naively it counts again."""
    first, second, _ = _pair()
    moved = join(second, first.snapshot())
    before = np.trace(moved.p)
    echo = moved.snapshot()
    take_by_intersection(moved, echo)
    assert np.trace(moved.p) == pytest.approx(before, rel=1e-6)
    take_as_measurement(moved, echo)
    assert np.trace(moved.p) < 0.95 * before


@pytest.fixture(scope="module")
def simulated(tmp_path_factory):
    folder = tmp_path_factory.mktemp("online") / "survey"
    settings = SimulationSettings(robots=3, duration_s=150.0, landmarks=40, state_noise=True)
    jointmap.simulate("quarry-2d", folder, settings, seed=11)
    survey = read_survey(folder)
    return survey, {o.name: o for o in estimate(survey)}


def errors(survey, output, robot, start):
    """Errors relative to a true start, and their claims."""
    report = output.reports[robot]
    truth = {}
    for name in (robot, start):
        table = pd.read_csv(survey.path / "truth" / f"{name}.csv")
        yaw = np.unwrap(table["yaw_rad"])
        truth[name] = (table["t_s"], [table["x_m"], table["y_m"], yaw])
    t, rows = truth[robot]
    at = np.stack([np.interp(report.t_s, t, r) for r in rows], axis=1)
    origin = np.array([r.iloc[0] if hasattr(r, "iloc") else r[0] for r in truth[start][1]])
    true = frames.SE2.between(origin, at)
    e = report.pose - true
    e[:, 2] = frames.wrap(e[:, 2])
    return e, report.cov


def test_dead_reckoning_and_lone_filter_claim_what_they_err(simulated):
    """Normalised squares at the end of the run of three robots, one value each (99.9 %)."""
    survey, outputs = simulated
    for name in (DEAD, LONE):
        total = 0.0
        for robot in survey.robots:
            e, cov = errors(survey, outputs[name], robot, robot)
            total += e[-1] @ np.linalg.solve(cov[-1], e[-1])
        low, high = chi2.ppf([0.0005, 0.9995], 9)
        assert low < total < high


def test_sights_of_plates_help_and_sharing_overclaims(simulated):
    survey, outputs = simulated
    size, claim = {}, {}
    for name in (DEAD, LONE, NAIVE, INTERSECTION):
        starts = {r: r if name in (DEAD, LONE) else survey.datum_robot for r in survey.robots}
        made = [errors(survey, outputs[name], r, starts[r]) for r in outputs[name].reports]
        size[name] = np.sqrt(np.mean(np.concatenate([(e[:, :2] ** 2).sum(1) for e, _ in made])))
        half = [(e[len(e) // 2 :], c[len(c) // 2 :]) for e, c in made]
        square = np.concatenate([np.einsum("ni,ni->n", e, np.linalg.solve(c, e[..., None])[..., 0])
                                 for e, c in half])  # fmt: skip
        claim[name] = square.mean() / 3
    assert size[LONE] < size[DEAD]
    assert claim[NAIVE] > 3.0
    assert claim[INTERSECTION] < 2.0


def test_spatial_survey_is_refused(tmp_path):
    jointmap.simulate("quarry-3d", tmp_path / "s", SHORT, seed=0)
    with pytest.raises(SurveyError, match="planar"):
        estimate(read_survey(tmp_path / "s"))


def test_commands_write_online_folders(tmp_path, capsys):
    out = tmp_path / "survey"
    world = ["--robots", "2", "--duration-s", "30", "--landmarks", "20"]
    assert main(["simulate", "quarry-2d", "--out", str(out), "--online", *world]) == 0
    assert "dead-reckoning" in capsys.readouterr().out
    assert sorted(p.name for p in (out / "online").iterdir()) == sorted(
        [DEAD, LONE, NAIVE, INTERSECTION]
    )
    assert main(["estimate", str(out)]) == 2
    assert "exists already" in capsys.readouterr().err
    assert main(["estimate", str(out), "--replace"]) == 0
    assert main(["simulate", "quarry-3d", "--out", str(tmp_path / "x"), "--online", *world]) == 2
    assert not (tmp_path / "x").exists()

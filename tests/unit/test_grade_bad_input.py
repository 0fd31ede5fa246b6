"""What an estimate can have wrong with it: each said clearly, none touching another robot's score."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from made_estimates import SIGMA_M, frame_of, small_world, write_estimate

import jointmap
from jointmap import frames
from jointmap.errors import LogFormatError, SurveyError
from jointmap.grade import GradeSettings
from jointmap.grade.read import to_body
from jointmap.simulate.settings import SimulationSettings

SETTINGS = GradeSettings(instants=300, draws=60, bootstrap=200)
FIRST = "heron"


@pytest.fixture(scope="module")
def world(tmp_path_factory):
    survey, reference = small_world(tmp_path_factory.mktemp("world"))
    write_estimate(survey, reference, "good")
    return survey, reference


def graded(world, change=None, name="made", settings=SETTINGS, reference=None, **said):
    survey, own = world
    write_estimate(survey, own, name, change, **said)
    return jointmap.grade(reference or own, survey, settings, online=[name]).runs[0].estimators[0]


def only_first(change):
    """Change the first robot's table alone."""
    return lambda robot, table: change(table) if robot == FIRST else table


def flaws(card, kind):
    return [(f.robot, f.text) for f in card.flaws if f.kind == kind]


def others_unchanged(world, card, settings):
    """Scores per robot of the others equal those of the faultless estimate (aligned by robot)."""
    survey, reference = world
    good = jointmap.grade(reference, survey, settings, online=["good"]).runs[0].estimators[0]
    for robot in ("otter", "vole"):
        for quantity in ("position", "heading"):
            assert card.score(quantity, robot).graded == good.score(quantity, robot).graded


def test_good_estimate_has_no_flaw(world):
    card = graded(world)
    assert card.flaws == ()
    assert card.score("position").graded.raw == pytest.approx(SIGMA_M * np.sqrt(2), rel=0.2)


BY_ROBOT = replace(SETTINGS, alignment="robot")


def test_clock_without_overlap_names_the_offset(world):
    card = graded(world, only_first(lambda t: t.assign(t_s=t["t_s"] + 5000.0)), settings=BY_ROBOT)
    ((robot, text),) = flaws(card, "clock")
    assert robot == FIRST and "-5000.000 s" in text
    assert card.score("position", FIRST) is None
    others_unchanged(world, card, BY_ROBOT)


def test_no_robot_overlaps_is_refused(world):
    with pytest.raises(SurveyError, match=r"no estimate can be graded.*-5000\.000 s"):
        graded(world, lambda robot, t: t.assign(t_s=t["t_s"] + 5000.0))


def test_small_clock_offset_is_seen(world):
    """Poses stamped 0.8 s late stand where the robot was: an error of v dt along the way."""
    card = graded(world, only_first(lambda t: t.assign(t_s=t["t_s"] + 0.8)), settings=BY_ROBOT)
    found = flaws(card, "clock")
    assert found and found[0][0] == FIRST and "too late" in found[0][1]
    assert float(found[0][1].split("look ")[1].split(" s")[0]) == pytest.approx(
        0.8, abs=0.2
    )  # the alignment takes up a part of it
    others_unchanged(world, card, BY_ROBOT)


def test_unknown_robot_is_refused_with_the_close_match(world):
    survey, reference = world
    home = write_estimate(survey, reference, "made")
    (home / "ottter.csv").write_text((home / "otter.csv").read_text())
    with pytest.raises(LogFormatError, match=r"no robot 'ottter'.*did you mean 'otter'"):
        jointmap.grade(reference, survey, SETTINGS, online=["made"])


@pytest.mark.parametrize("key", ["frame", "covariance", "evidence", "data"])
def test_missing_declaration_is_asked_for_by_name(world, key):
    with pytest.raises(LogFormatError, match=rf"estimator\.toml, column {key}: the key is missing"):
        graded(world, **{key: None})


def test_wrong_word_in_the_declaration(world):
    with pytest.raises(LogFormatError, match="did you mean 'team'"):
        graded(world, frame="teams")


def test_turned_body_axes_are_named(world):
    def turn(table):
        return table.assign(yaw_rad=table["yaw_rad"] + np.pi / 2)

    card = graded(world, only_first(turn), settings=BY_ROBOT)
    ((robot, text),) = flaws(card, "frame")
    assert (robot == FIRST and "+90." in text) or "+89." in text
    others_unchanged(world, card, BY_ROBOT)


def test_covariance_in_another_order_is_found_out(world):
    """Yaw first, as rotation-first libraries write it: metres get the variance of the heading."""

    def swap(robot, table):
        order = [("x", "yaw"), ("y", "x"), ("yaw", "y")]
        source = dict(order)
        out = table.copy()
        axes = ("x", "y", "yaw")
        for p, a in enumerate(axes):
            for b in axes[p:]:
                c, d = sorted((source[a], source[b]), key=axes.index)
                out[f"cov_{a}_{b}"] = table[f"cov_{c}_{d}"]
        # Tiny heading variances make the mistake absurd.
        return out

    def sharp(robot, table):
        out = table.copy()
        for c in ("cov_x_yaw", "cov_y_yaw"):
            out[c] = 0.0
        out["cov_yaw_yaw"] = 1e-6
        out["yaw_rad"] = table["yaw_rad"]
        return swap(robot, out)

    card = graded(world, sharp)
    ((_, text),) = flaws(card, "covariance")
    assert "order" in text


def test_covariance_round_trip():
    """Fixed axes to body tangent and back is the identity, in both dimensions."""
    rng = np.random.default_rng(0)
    for dimension in (2, 3):
        g = frames.group(dimension)
        pose = g.exp(rng.normal(size=(20, g.dof)))
        root = rng.normal(size=(20, g.dof, g.dof))
        table = root @ np.swapaxes(root, 1, 2)
        back = g.covariance_to_table(pose, to_body(table, g, pose, "fixed-axes"))
        np.testing.assert_allclose(back, table, atol=1e-12)


def test_body_tangent_covariance_gives_the_same_verdict(world):
    """The same claims written about body axes and declared so."""

    def about_body(robot, table):
        g = frames.SE2
        pose = table[["x_m", "y_m", "yaw_rad"]].to_numpy()
        i, j = np.triu_indices(3)
        names = [c for c in table if c.startswith("cov")]
        cov = np.zeros((len(table), 3, 3))
        cov[:, i, j] = cov[:, j, i] = table[names].to_numpy()
        out = table.copy()
        out[names] = g.covariance_from_table(pose, cov)[:, i, j]
        return out

    plain = graded(world).verdict()
    body = graded(world, about_body, covariance="body-tangent").verdict()
    assert body.factor == pytest.approx(plain.factor, rel=1e-6)


def test_jump_is_named_with_its_time(world):
    def jump(table):
        out = table.copy()
        out.loc[len(out) // 2 :, "x_m"] += 3.0
        return out

    card = graded(world, only_first(jump), settings=BY_ROBOT)
    ((robot, text),) = flaws(card, "jump")
    middle = frame_of(world[1], FIRST)["t_s"].iloc[len(frame_of(world[1], FIRST)) // 2]
    assert robot == FIRST
    assert float(text.split(" at ")[1].split(" s")[0]) == pytest.approx(middle, abs=0.5)
    others_unchanged(world, card, BY_ROBOT)


def test_diverged_filter_is_named(world):
    def diverge(table):
        out = table.copy()
        t = out["t_s"] - out["t_s"].iloc[0]
        out["x_m"] += np.where(t > 100.0, (t - 100.0) ** 2, 0.0)
        return out

    card = graded(world, only_first(diverge), settings=BY_ROBOT)
    ((robot, text),) = flaws(card, "diverged")
    assert robot == FIRST and "diverged" in text
    others_unchanged(world, card, BY_ROBOT)


def test_nan_stretch_counts_as_a_gap(world):
    def hole(table):
        out = table.copy()
        out.loc[100:499, "x_m"] = np.nan
        return out

    card = graded(world, only_first(hole), settings=BY_ROBOT)
    assert flaws(card, "gaps")[0] == (FIRST, "400 rows without a usable pose count as gaps")
    mine = next(c for c in card.coverage if c.robot == FIRST)
    assert mine.completion == pytest.approx(1 - 400 / 1200, abs=0.02)
    others_unchanged(world, card, BY_ROBOT)


def test_empty_file_is_a_missed_run(world):
    card = graded(world, only_first(lambda t: t.iloc[:0]), settings=BY_ROBOT)
    assert flaws(card, "missing")[0][0] == FIRST
    assert card.score("position", FIRST) is None
    others_unchanged(world, card, BY_ROBOT)


def test_missing_file_is_a_missed_run(world):
    card = graded(world, lambda robot, t: None if robot == FIRST else t, settings=BY_ROBOT)
    assert flaws(card, "missing")[0][0] == FIRST
    others_unchanged(world, card, BY_ROBOT)


def test_file_without_pose_columns_is_refused(world):
    with pytest.raises(LogFormatError, match="column yaw_rad: the column is missing"):
        graded(world, only_first(lambda t: t.drop(columns="yaw_rad")))


def test_negative_covariance_loses_its_row_with_a_notice(world):
    survey, reference = world

    def negative(table):
        out = table.copy()
        out.loc[10:19, "cov_x_x"] = -1.0
        return out

    write_estimate(survey, reference, "made", only_first(negative))
    run = jointmap.grade(reference, survey, SETTINGS, online=["made"]).runs[0]
    assert any("negative eigenvalue" in n for n in run.notes)


def test_estimate_without_covariance_has_no_verdict(world):
    card = graded(world, lambda r, t: t[[c for c in t if not c.startswith("cov")]])
    assert card.consistency == () and card.score("position") is not None


def test_doubtful_reference_makes_the_grades_doubtful(world):
    survey, reference = world
    write_estimate(survey, reference, "made")
    weak = replace(reference, meta={**reference.meta, "status": "weak", "reasons": ["no ties"]})
    card = jointmap.grade(weak, survey, SETTINGS, online=["made"])
    assert card.status == "doubtful" and "weak" in card.reasons[0]
    assert any("no ties" in n for n in card.runs[0].notes)


def test_survey_of_another_run_is_refused(world, tmp_path):
    _, reference = world
    jointmap.simulate(
        "quarry-2d", tmp_path / "other", SimulationSettings(robots=2, duration_s=20.0), seed=1
    )
    other = jointmap.read_survey(tmp_path / "other")
    with pytest.raises(SurveyError, match="no robot vole"):
        jointmap.grade(reference, other, SETTINGS)


def test_no_estimates_at_all(world, tmp_path):
    _, reference = world
    moved = replace(world[0], path=tmp_path)
    with pytest.raises(SurveyError, match="no online estimates"):
        jointmap.grade(reference, moved, SETTINGS)
    with pytest.raises(SurveyError, match=r"no estimator 'goood'.*did you mean 'good'"):
        jointmap.grade(reference, world[0], SETTINGS, online=["goood"])

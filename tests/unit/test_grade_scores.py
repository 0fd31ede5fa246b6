"""Scores, verdicts and folders of a small run: laws that hold whatever the numbers."""

from __future__ import annotations

import json
import re
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from made_estimates import SIGMA_M, small_world, write_estimate

import jointmap
from jointmap import frames, schema
from jointmap.cli import main
from jointmap.errors import OutputExistsError, SettingsError, SurveyError
from jointmap.grade import GradeSettings
from jointmap.grade.compare import over_runs
from jointmap.grade.figures import Figure, figure, grade
from jointmap.grade.files import write_scores
from jointmap.grade.page import grade_page
from jointmap.schema import pose_columns

SETTINGS = GradeSettings(instants=300, draws=100, bootstrap=200)


@pytest.fixture(scope="module", params=[2, 3])
def world(request, tmp_path_factory):
    survey, reference = small_world(tmp_path_factory.mktemp("world"), request.param)
    write_estimate(survey, reference, "made")
    return survey, reference


@pytest.fixture(scope="module")
def card(world):
    survey, reference = world
    return jointmap.grade(reference, survey, SETTINGS)


def test_floor_is_the_references_own_uncertainty(world, card):
    """Floor squared, over checked rows, is about the trace of the trajectory's covariance."""
    _, reference = world
    floor = card.runs[0].estimator("made").score("position").graded.floor
    d = reference.dimension
    paths = reference.trajectories.values()
    trace = np.concatenate([np.einsum("nii->n", t.cov[t.trust == 0, :d, :d]) for t in paths])
    # The datum differs (landmarks, alignment over poses): of one size, not the same.
    assert 0.5 * np.sqrt(trace.mean()) < floor < 1.5 * np.sqrt(trace.mean())


def test_corrected_value_lies_above_the_raw_one_with_the_same_data(card):
    for s in card.runs[0].estimator("made").scores:
        g = s.graded
        if g.n and s.quantity == "position":
            assert g.raw < g.value and g.lower <= g.value <= g.upper


def test_independent_data_are_corrected_downwards(world):
    survey, reference = world
    settings = replace(SETTINGS, data="independent")
    g = jointmap.grade(reference, survey, settings).runs[0].estimators[0].score("position").graded
    assert g.value < g.raw
    assert g.value**2 == pytest.approx(g.raw**2 - g.floor**2, rel=0.1)


def test_unknown_dependence_gives_bounds_and_no_verdict(world):
    survey, reference = world
    settings = replace(SETTINGS, data="unknown")
    made = jointmap.grade(reference, survey, settings).runs[0].estimators[0]
    g = made.score("position").graded
    assert (
        np.isnan(g.value) and g.lower <= g.raw - 0.5 * g.floor and g.upper >= g.raw + 0.5 * g.floor
    )
    assert made.verdict().verdict in ("no verdict", "overconfident")
    assert "proves nothing" in made.verdict().reason or "whatever" in made.verdict().reason


def test_per_robot_alignment_has_no_score_between_robots(world, card):
    survey, reference = world
    settings = replace(SETTINGS, alignment="robot")
    made = jointmap.grade(reference, survey, settings).runs[0].estimators[0]
    assert made.score("between position") is None
    assert card.runs[0].estimator("made").score("between position") is not None
    freedom = 3 if reference.dimension == 2 else 4
    assert made.dof == freedom * len(reference.trajectories)


def test_alignment_undoes_any_motion_of_the_frame(world, card):
    """A turned and shifted team frame changes no score."""
    survey, reference = world
    g = frames.group(reference.dimension)
    motion = g.build(g.rotation(g.exp(_heading(g, 0.7))), np.arange(1.0, 1.0 + g.dim))
    names = list(pose_columns(g.dim))

    def move(robot, table):
        out = table.copy()
        out[names] = g.to_rows(g.compose(motion, g.from_rows(table[names].to_numpy())))
        return out[["t_s", *names]]

    write_estimate(survey, reference, "moved", move)
    moved = jointmap.grade(reference, survey, SETTINGS, online=["moved"]).runs[0].estimators[0]
    plain = card.runs[0].estimator("made")
    for quantity in ("position", "heading", "between position"):
        assert moved.score(quantity).graded.raw == pytest.approx(
            plain.score(quantity).graded.raw, rel=1e-5
        )


def _heading(g, angle):
    xi = np.zeros(g.dof)
    xi[2] = angle
    return xi


def test_scale_is_estimated_only_when_asked(world):
    survey, reference = world
    g = frames.group(reference.dimension)
    place = list(pose_columns(g.dim))[: g.dim]

    def grow(robot, table):
        out = table.copy()
        out[place] = 1.3 * table[place]
        return out[["t_s", *pose_columns(g.dim)]]

    write_estimate(survey, reference, "large", grow)
    raw = {}
    for scale in (False, True):
        settings = replace(SETTINGS, scale=scale)
        made = jointmap.grade(reference, survey, settings, online=["large"]).runs[0].estimators[0]
        raw[scale] = made.score("position").graded.raw
    assert raw[True] < 0.3 * raw[False]


def test_claims_scaled_by_four_are_found(world):
    """Variances four times too small: the factor is four times that of the honest claim."""
    survey, reference = world
    factor = {}
    for name, share in (("honest", 1.0), ("sharp", 0.25), ("blunt", 16.0)):

        def claim(robot, table, share=share):
            out = table.copy()
            names = [c for c in table if c.startswith("cov")]
            out[names] = share * table[names]
            return out

        write_estimate(survey, reference, name, claim)
        made = jointmap.grade(reference, survey, SETTINGS, online=[name]).runs[0].estimators[0]
        factor[name] = made.verdict()
    assert factor["sharp"].factor == pytest.approx(4 * factor["honest"].factor, rel=1e-3)
    assert factor["sharp"].verdict == "overconfident"
    assert factor["blunt"].verdict == "conservative"
    assert factor["honest"].verdict == "not contradicted"


def test_an_enlarged_reference_accuses_nobody_of_impossible_claims(world):
    """Sigmas doubled after the solution and said so: the honest claim is not called impossible."""
    survey, reference = world
    paths = {n: replace(t, cov=16.0 * t.cov) for n, t in reference.trajectories.items()}
    evidence = {**reference.meta["evidence"], "holdout": {"sigma_factor": 4.0}}
    wide = replace(reference, trajectories=paths, meta={**reference.meta, "evidence": evidence})
    made = jointmap.grade(wide, survey, SETTINGS, online=["made"]).runs[0].estimators[0]
    assert made.verdict().verdict != "overconfident"


def test_unchecked_parts_are_not_graded_and_weak_ones_apart(world):
    survey, reference = world
    paths = {}
    for name, t in reference.trajectories.items():
        trust = np.zeros(len(t), int)
        trust[len(t) // 2 :] = 2
        trust[len(t) // 4 : len(t) // 2] = 1
        paths[name] = replace(t, trust=trust)
    parted = replace(reference, trajectories=paths)

    def wild(robot, table):
        out = table.copy()
        # Kilometres off where nothing checks the reference: it must not show.
        out.loc[len(out) // 2 + 5 :, "x_m"] += 1000.0
        return out

    write_estimate(survey, reference, "wild", wild)
    made = jointmap.grade(parted, survey, SETTINGS, online=["wild"])
    one = made.runs[0].estimators[0]
    assert made.runs[0].reference["share_unchecked"] == pytest.approx(0.5, abs=0.02)
    assert one.score("position", part="checked").graded.raw < 5 * SIGMA_M
    assert one.score("position", part="weak").graded.raw < 5 * SIGMA_M
    assert "not graded" in grade_page(made)


def test_ranking_only_over_common_instants(world):
    """B errs wildly where A is silent; over what both report B is better."""
    survey, reference = world
    cut = np.median(np.concatenate([t.t_s for t in reference.trajectories.values()]))

    def first_half(robot, table):
        return table[table["t_s"] < cut]

    def half_size(robot, table):
        out = table.copy()
        path = reference.trajectories[robot]
        g = frames.group(reference.dimension)
        names = list(pose_columns(g.dim))
        known, own = g.from_rows(path.pose), g.from_rows(table[names].to_numpy())
        # The last common instant may take its estimate from just after the cut.
        share = np.where(table["t_s"] < cut + 1.0, 0.3, 20.0)
        out[names] = g.to_rows(g.retract(known, share[:, None] * g.local(known, own)))
        return out

    write_estimate(survey, reference, "a", first_half)
    write_estimate(survey, reference, "b", half_size)
    run = jointmap.grade(reference, survey, SETTINGS, online=["a", "b"]).runs[0]
    (row,) = [c for c in run.comparisons if c.quantity == "position"]
    assert row.support < 0.6 and "both report" in row.verdict
    assert row.verdict.startswith("b is better than a")
    assert run.order.places[0].estimator == "b" and run.order.support < 0.6
    assert run.estimator("b").score("position").graded.raw > 0.5


def test_equal_estimators_are_not_resolved(world):
    """An estimate cannot be told from itself."""
    survey, reference = world
    write_estimate(survey, reference, "twin")
    run = jointmap.grade(reference, survey, SETTINGS, online=["made", "twin"]).runs[0]
    (row,) = [c for c in run.comparisons if c.quantity == "position"]
    assert row.value == pytest.approx(0.0, abs=1e-9)
    assert row.verdict.startswith("not resolved")


def test_no_p_value_under_six_runs(world, card):
    survey, reference = world
    write_estimate(survey, reference, "twin")
    run = jointmap.grade(reference, survey, SETTINGS, online=["made", "twin"]).runs[0]
    five = over_runs([run.comparisons] * 5)
    assert five and all(r["p"] is None and "no p-value" in r["note"] for r in five)
    better = [replace(c, value=0.1 + 0.01 * k) for k, c in enumerate(run.comparisons[:1])]
    six = over_runs([[replace(better[0], value=0.1 + 0.01 * k)] for k in range(6)])
    # Six pairs of one sign: the smallest two-sided p-value there is, 2 / 2^6.
    assert six[0]["p"] == pytest.approx(0.03125)


def test_relative_errors_print_length_and_segment_count(card):
    made = card.runs[0].estimator("made")
    relative = [s for s in made.scores if s.quantity == "relative position" and s.robot == "team"]
    assert {s.over for s in relative} == {"length_m", "time_s"}
    assert all(s.size > 0 and s.independent >= 6 for s in relative)


def test_tables_have_exactly_the_columns_of_the_schema(card, tmp_path):
    write_scores(card, tmp_path / "scores")
    for name, stem in schema.SCORE_FILES.items():
        file = tmp_path / "scores" / f"{stem}.csv"
        if name == "runs":
            assert not file.exists()
            continue
        known = {c.name for c in schema.output_table(name).columns}
        assert set(pd.read_csv(file, nrows=3).columns) <= known
    told = json.loads((tmp_path / "scores" / "scorecard.json").read_text())
    assert told["status"] == card.status and told["runs"][0]["estimators"]
    with pytest.raises(OutputExistsError):
        write_scores(card, tmp_path / "scores")
    write_scores(card, tmp_path / "scores", replace=True)


def test_page_never_says_truth_of_the_reference(card):
    """The word stands only in the caveat, which denies it."""
    page = " ".join(grade_page(card).split())
    assert "not against ground truth" in page
    assert not re.search(r"truth", page.replace("not against ground truth", "").replace(
        "no truth needed", ""))  # fmt: skip
    assert "floor" in page and "batch" in page


def test_same_seed_same_grades(world, card):
    survey, reference = world
    again = jointmap.grade(reference, survey, SETTINGS, online=["made"]).runs[0].estimators[0]
    for one, two in zip(card.runs[0].estimator("made").scores, again.scores, strict=True):
        assert one.row() == pytest.approx(two.row(), nan_ok=True)


def test_figures_of_a_known_case():
    """d fixed, f normal: moments of the corrected square are known in closed form."""
    rng = np.random.default_rng(0)
    d = np.full((50, 1), 0.3)
    f = 0.1 * rng.standard_normal((20_000, 50, 1))
    f = np.concatenate([f, -f])
    zero = np.zeros(len(f))
    same = figure(d, f, "same").values(zero)
    assert same.mean() == pytest.approx(0.09 + 0.01, rel=1e-3)
    # Var = (4 * 0.09 * 0.01 + 2 * 0.01^2) / 50.
    assert same.std() == pytest.approx(np.sqrt((4 * 0.0009 + 0.0002) / 50), rel=0.02)
    free = figure(d, f, "independent").values(zero)
    assert free.mean() == pytest.approx(0.09 - 0.01, rel=2e-3)
    bounds = grade(figure(d, f, "unknown"), zero, 0.95)
    assert bounds.lower == pytest.approx(0.2, abs=0.03)
    assert bounds.upper == pytest.approx(0.4, abs=0.03)


def test_below_the_floor_only_a_limit_is_given():
    made = Figure(0.01, np.zeros(100), np.full(100, 0.04), 10, "independent")
    found = grade(made, np.zeros(100), 0.95)
    assert np.isnan(found.value) and "floor" in found.note


@pytest.mark.parametrize(
    "wrong", [{"draws": 3}, {"level": 1.0}, {"alignment": "any"}, {"tolerance_s": -1.0}]
)
def test_settings_say_what_is_allowed(wrong):
    with pytest.raises(SettingsError, match=next(iter(wrong))):
        GradeSettings(**wrong)


def test_references_and_surveys_must_be_as_many(world):
    survey, reference = world
    with pytest.raises(SurveyError, match="give as many"):
        jointmap.grade([reference, reference], [survey])


def test_command_writes_a_scores_folder(world, tmp_path, capsys):
    survey, reference = world
    write_estimate(survey, reference, "made")
    jointmap.write_reference(reference, tmp_path / "reference")
    arguments = ["grade", str(tmp_path / "reference"), "--online", "made", "--out"]
    code = 0 if reference.status == "ok" else 3
    assert main([*arguments, str(tmp_path / "scores"), "--survey", str(survey.path)]) == code
    page = capsys.readouterr().out
    last = page.rstrip().splitlines()[-1]
    assert last == "ok: 1 estimator graded on 1 run" if code == 0 else last.startswith("doubtful")
    assert all(len(line) <= 100 for line in page.splitlines())
    assert main([*arguments, str(tmp_path / "scores")]) == 2
    assert "exists already" in capsys.readouterr().err
    assert main([*arguments, str(tmp_path / "json"), "--json"]) == code
    assert json.loads(capsys.readouterr().out)["format"] == 1

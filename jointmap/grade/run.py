"""Grading, in order: read, prepare the reference, match, align, score, judge, compare."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap.errors import SurveyError
from jointmap.grade.aligned import Aligned, aligned, mode_of, transform_of
from jointmap.grade.compare import Entry, compare, order_of_finish, over_runs
from jointmap.grade.consistency import Basis, Consistency, basis_of, judge
from jointmap.grade.figures import log_scales
from jointmap.grade.flaws import Flaw, covariance_flaws, coverage_flaws, pose_flaws
from jointmap.grade.match import Coverage, Matched, match
from jointmap.grade.online import OnlineEstimate
from jointmap.grade.read import read_online
from jointmap.grade.scorecard import EstimatorCard, RunCard, Scorecard
from jointmap.grade.scores import (
    TEAM,
    Score,
    Scorer,
    absolute_scores,
    map_scores,
    relative_scores,
)
from jointmap.grade.settings import GradeSettings
from jointmap.grade.sharing import WORDS, Sharing, sharing_of
from jointmap.grade.stage import Stage, make_stage
from jointmap.ingest import read_survey
from jointmap.ingest.survey import Survey
from jointmap.products.columns import TRUST
from jointmap.products.reference import Reference
from jointmap.progress import Progress, choose

Floats = NDArray[np.float64]


def grade(
    reference: Reference | Sequence[Reference],
    survey: Survey | Sequence[Survey] | None = None,
    settings: GradeSettings | None = None,
    *,
    online: Sequence[str] | None = None,
    progress: Progress | None = None,
) -> Scorecard:
    """Grade online estimates against references of the same runs.

    Parameters
    ----------
    reference : Reference or sequence of Reference
        One per run.
    survey : Survey or sequence of Survey, optional
        The surveys with the estimates (``online/NAME``); found through the references by default.
    settings : GradeSettings, optional
    online : sequence of str, optional
        Estimators to grade; all by default.
    progress : Progress, optional

    Returns
    -------
    Scorecard

    Raises
    ------
    SurveyError
        There is nothing to grade, or the survey is not the reference's.
    LogFormatError
        Estimates cannot be used as they are; carries every problem of every file.
    """
    references = [reference] if isinstance(reference, Reference) else list(reference)
    surveys: list[Survey | None]
    if survey is None:
        surveys = [None] * len(references)
    else:
        surveys = [survey] if isinstance(survey, Survey) else list(survey)
    if len(surveys) != len(references) or not references:
        raise SurveyError(f"{len(references)} references and {len(surveys)} surveys: give as many")
    chosen, shown = settings or GradeSettings(), progress or choose(quiet=True)
    runs = []
    for one, its in zip(references, surveys, strict=True):
        runs.append(_run(one, its or survey_of(one), chosen, online, shown))
    across = over_runs([r.comparisons for r in runs]) if len(runs) > 1 else []
    reasons = [
        f"the reference of {r.reference['name']} is {r.reference['status']}"
        for r in runs
        if r.reference["status"] != "ok"
    ]
    return Scorecard(
        tuple(runs),
        tuple(across),
        chosen.to_dict(),
        "doubtful" if reasons else "ok",
        tuple(reasons),
    )


def survey_of(reference: Reference) -> Survey:
    """The survey that a reference was built from, where it said.

    Raises
    ------
    SurveyError
        Nothing stands there any more.
    """
    path = str(reference.meta["survey"].get("path", ""))
    if not path or not Path(path).is_dir():
        raise SurveyError(
            f"the survey of the reference is not at {path!r} any more; name it with --survey"
        )
    return read_survey(path)


def _run(
    reference: Reference,
    survey: Survey,
    settings: GradeSettings,
    online: Sequence[str] | None,
    progress: Progress,
) -> RunCard:
    _check_pair(reference, survey)
    progress.stage("read estimates")
    estimates, problems = read_online(survey, online)
    progress.stage("prepare the reference")
    stage = make_stage(reference, settings)
    log_scale = log_scales(len(stage.posterior), settings)
    shared = sharing_of(stage, settings.share_window_s)
    cards, entries = [], []
    for estimate in estimates:
        progress.stage(f"grade {estimate.name}")
        card, entry = _estimator(estimate, stage, settings, log_scale, shared)
        cards.append(card)
        if entry is not None:
            entries.append(entry)
    if not entries:
        told = "; ".join(f"{f.estimator} {f.robot}: {f.text}" for c in cards for f in c.flaws)
        raise SurveyError(f"no estimate can be graded against this reference: {told}")
    progress.stage("compare")
    comparisons = compare(entries, stage, settings, log_scale)
    order = order_of_finish(entries, stage, settings, log_scale)
    return RunCard(
        _reference_facts(reference, stage),
        stage.robots,
        stage.spacing_s,
        tuple(cards),
        tuple(comparisons),
        order,
        tuple(shared.rows(stage)),
        (*(str(p) for p in problems), *_notes(reference)),
    )


def _check_pair(reference: Reference, survey: Survey) -> None:
    if survey.dimension != reference.dimension:
        raise SurveyError(
            f"the survey has {survey.dimension} dimensions, the reference {reference.dimension}: "
            "they are of different runs"
        )
    missing = [r for r in reference.trajectories if r not in survey.robots]
    if missing:
        raise SurveyError(
            f"the survey {survey.name!r} has no robot {', '.join(missing)}, which the reference "
            "has: name the survey that it was built from"
        )


def _reference_facts(reference: Reference, stage: Stage) -> dict[str, Any]:
    """What a reader must know of the reference."""
    trust = stage.located.trust
    meta = reference.meta
    facts: dict[str, Any] = {
        "name": meta["survey"].get("name", ""),
        "path": meta["survey"].get("path", ""),
        "status": reference.status,
        "reasons": list(meta["reasons"]),
        "datum": meta["datum"],
        "site_frame": stage.site,
        "floor_m": float(np.sqrt(stage.floor[trust < 2].mean())) if (trust < 2).any() else None,
    }
    for code, word in enumerate(TRUST):
        facts[f"share_{word}"] = float((trust == code).mean())
    if meta.get("chi2") is not None and meta.get("dof"):
        dof = int(meta["dof"])
        facts["chi2_per_dof"] = float(meta["chi2"]) / dof
        facts["chi2_band"] = [float(chi2.ppf(p, dof)) / dof for p in (0.025, 0.975)]
    return facts


def _notes(reference: Reference) -> list[str]:
    notes = []
    if reference.status != "ok":
        why = "; ".join(str(r) for r in reference.meta["reasons"]) or "see its page"
        notes.append(f"the reference is {reference.status} ({why}): every grade rests on it")
    if len(reference.meta["components"] or []) > 1:
        notes.append("the reference falls into parts without a common frame; each is aligned alone")
    return notes


def _estimator(
    estimate: OnlineEstimate,
    stage: Stage,
    settings: GradeSettings,
    log_scale: Floats,
    shared: Sharing,
) -> tuple[EstimatorCard, Entry | None]:
    case = estimate.data if settings.data == "declared" else settings.data
    mode, why = mode_of(estimate, stage, settings)
    matched, coverage = match(estimate, stage, settings)
    matched = matched.take(stage.gradeable[matched.row])
    flaws = coverage_flaws(estimate.name, coverage)
    declared = {
        "frame": estimate.frame, "covariance": estimate.covariance,
        "evidence": estimate.evidence, "data": estimate.data,
    }  # fmt: skip
    if len(matched) < 2:
        empty = EstimatorCard(
            estimate.name, declared, case, mode, why, 0, len(matched), 0, coverage, tuple(flaws),
            (), (), pd.DataFrame(),
        )  # fmt: skip
        return empty, None
    made = aligned(matched, stage, mode, scale=settings.scale)
    checked = matched.take(stage.located.trust[matched.row] == 0)
    scorer = Scorer(stage, settings, log_scale, case, estimate.name)
    scores = absolute_scores(scorer, made)
    scores += _by_tie(scorer, made, shared)
    scores += relative_scores(scorer, checked, mode)
    scores += _map(scorer, estimate, made)
    flaws += pose_flaws(estimate, matched, made, stage)
    basis = basis_of(estimate, matched, made, stage)
    judged = _judge(estimate, basis, matched, stage, settings, case)
    team = next((c for c in judged if c.robot == TEAM), None)
    if team is not None:
        factor = team.factor if np.isfinite(team.factor) else team.lower
        flaws += covariance_flaws(estimate, matched, basis, factor, stage)
    card = EstimatorCard(
        estimate.name, declared, case, mode, why, made.dof, len(matched), len(checked), coverage,
        tuple(flaws), tuple(scores), tuple(judged), _curve(estimate.name, made, stage, shared),
    )  # fmt: skip
    return card, Entry(estimate.name, checked, mode, case)


def _by_tie(scorer: Scorer, made: Aligned, shared: Sharing) -> list[Score]:
    """Position errors by what the robot had in common with others."""
    stage = scorer.stage
    trust = stage.located.trust[made.matched.row]
    state = shared.state[made.matched.row]
    instant = stage.instant[made.matched.row]
    out = []
    for code, word in enumerate(WORDS):
        mine = (state == code) & (trust == 0) & ~made.unaligned
        if mine.sum() < 20:
            continue
        out.append(
            scorer.score("position", "m", made.place[mine], made.place_draws[:, mine],
                         instant[mine], TEAM, "checked", over=f"tie:{word}")
        )  # fmt: skip
    return out


def _map(scorer: Scorer, estimate: OnlineEstimate, made: Aligned) -> list[Score]:
    """Landmark scores of every robot's map, moved like its poses."""
    robots: list[str] = []
    landmarks: list[str] = []
    turned: list[int] = []
    positions = []
    labels = [b.label for b in made.blocks]
    for robot, own in estimate.maps.items():
        transform = transform_of(made, robot)
        if transform is None or not len(own.landmarks):
            continue
        positions.append(transform.points(own.position))
        robots += [robot] * len(own.landmarks)
        landmarks += list(own.landmarks)
        block = labels.index(robot) if robot in labels else labels.index(TEAM)
        turned += [block] * len(own.landmarks)
    if not positions:
        return []
    return map_scores(scorer, robots, np.concatenate(positions), landmarks, turned, made)


def _judge(
    estimate: OnlineEstimate,
    basis: Basis | None,
    matched: Matched,
    stage: Stage,
    settings: GradeSettings,
    case: str,
) -> list[Consistency]:
    """Judgement for the team and each robot, over checked instants."""
    if basis is None:
        return []
    row = matched.row[basis.rows]
    checked = stage.located.trust[row] == 0
    robot = stage.located.robot[row]
    groups = [(TEAM, checked)]
    groups += [(stage.robots[r], checked & (robot == r)) for r in np.unique(robot)]
    shares = estimate.evidence in ("shared-now", "shared-ever")
    found = (
        judge(estimate.name, name, basis, chosen, matched, stage, settings, case, shares=shares)
        for name, chosen in groups
    )
    return [c for c in found if c is not None]


def _curve(name: str, made: Aligned, stage: Stage, shared: Sharing) -> pd.DataFrame:
    """Errors over time, one row per graded instant."""
    row = made.matched.row
    axes = ("x_m", "y_m", "z_m")[: stage.group.dim]
    table: dict[str, Any] = {
        "estimator": name,
        "robot": np.array(stage.robots, dtype=object)[stage.located.robot[row]],
        "t_s": made.matched.t_s,
        "position_m": np.linalg.norm(made.place, axis=1),
    }
    table |= {f"error_{a}": made.place[:, k] for k, a in enumerate(axes)}
    table["error_heading_rad"] = made.turn[:, -1]
    table["reference_sigma_m"] = np.sqrt((made.place_draws**2).sum(axis=2).mean(axis=0))
    table["path_m"] = stage.path_m[row]
    table["tie"] = np.array(WORDS, dtype=object)[shared.state[row]]
    table["since_tie_s"] = shared.since_s[row]
    table["trust"] = np.array(TRUST, dtype=object)[stage.located.trust[row]]
    return pd.DataFrame(table)


def completion_of(coverage: Sequence[Coverage]) -> float:
    """Share of the team's run with an estimate."""
    whole = sum(c.instants for c in coverage)
    return sum(c.answered for c in coverage) / whole if whole else 0.0


def flaws_of(card: EstimatorCard, kind: str) -> list[Flaw]:
    """Flaws of one kind."""
    return [f for f in card.flaws if f.kind == kind]

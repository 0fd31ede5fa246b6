"""Grades against the known truth beside grades against a reference, for one simulated survey."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pandas as pd

import jointmap
from jointmap import frames
from jointmap.grade import GradeSettings
from jointmap.grade.aligned import aligned, mode_of
from jointmap.grade.figures import log_scales
from jointmap.grade.match import match
from jointmap.grade.read import read_online
from jointmap.grade.relative import by_length, relative_errors
from jointmap.grade.stage import make_stage
from jointmap.schema import pose_columns


def truth_at(folder: Path, robot: str, t_s, dimension: int):
    """True poses at survey times, interpolated on the group."""
    table = pd.read_csv(folder / "truth" / f"{robot}.csv")
    g = frames.group(dimension)
    pose = g.from_rows(table[list(pose_columns(dimension))].to_numpy(float))
    known = table["t_s"].to_numpy(float)
    k = np.clip(np.searchsorted(known, t_s, side="right") - 1, 0, len(known) - 2)
    share = np.clip((t_s - known[k]) / (known[k + 1] - known[k]), 0.0, 1.0)
    return g.interpolate(pose[k], pose[k + 1], share)


def with_truth(matched, stage, folder: Path):
    """The matched instants with the truth in place of the reference."""
    pose = matched.reference.copy()
    robot = stage.located.robot[matched.row]
    for r in np.unique(robot):
        mine = robot == r
        pose[mine] = truth_at(folder, stage.robots[r], matched.t_s[mine], stage.group.dim)
    return replace(matched, reference=pose)


@dataclass(frozen=True)
class Case:
    """One figure: what the grade says and what the truth says."""

    estimator: str
    quantity: str
    raw: float
    value: float
    lower: float
    upper: float
    truth: float


def cases_of(folder: Path, reference, settings: GradeSettings, card=None):
    """Figures of every estimator of a survey, and paired differences, with their truths."""
    survey = jointmap.read_survey(folder)
    run = (card or jointmap.grade(reference, survey, settings)).runs[0]
    stage = make_stage(reference, settings)
    log_scales(len(stage.posterior), settings)
    cases, errors = [], {}
    for estimate in read_online(survey)[0]:
        card = run.estimator(estimate.name)
        matched, _ = match(estimate, stage, settings)
        matched = matched.take(stage.gradeable[matched.row])
        true = with_truth(matched, stage, folder)
        made = aligned(true, stage, mode_of(estimate, stage, settings)[0])
        checked = stage.located.trust[matched.row] == 0
        robot = stage.located.robot[matched.row]
        for name in (*stage.robots, "team"):
            mine = checked & ((robot == stage.robots.index(name)) if name != "team" else True)
            for quantity, what in (("position", made.place), ("heading", made.turn)):
                score = card.score(quantity, name)
                if score is None:
                    continue
                value = float(np.sqrt((what[mine] ** 2).sum(axis=1).mean()))
                g = score.graded
                cases.append(
                    Case(estimate.name, f"{quantity} {'team' if name == 'team' else 'robot'}",
                         g.raw, g.value, g.lower, g.upper, value)
                )  # fmt: skip
        chosen, reference_only = true.take(checked), matched.take(checked)
        for segments in by_length(stage, reference_only):
            made_r = relative_errors(stage, chosen.take(segments.start), chosen.take(segments.end))
            value = float(np.sqrt((made_r.place**2).sum(axis=1).mean()))
            for s in card.scores:
                if (s.quantity, s.over, s.size, s.robot) == (
                    "relative position", segments.kind, segments.size, "team",
                ):  # fmt: skip
                    g = s.graded
                    cases.append(
                        Case(estimate.name, "relative", g.raw, g.value, g.lower, g.upper, value)
                    )
        errors[estimate.name] = (chosen, mode_of(estimate, stage, settings)[0])
    verdicts = []
    for c in run.comparisons:
        if c.quantity != "position":
            continue
        rows = np.intersect1d(errors[c.a][0].row, errors[c.b][0].row)
        roots = []
        for name in (c.a, c.b):
            m = errors[name][0]
            part = aligned(m.take(np.searchsorted(m.row, rows)), stage, c.alignment)
            roots.append(float(np.sqrt((part.place**2).sum(axis=1).mean())))
        verdicts.append(
            Case(
                f"{c.a}|{c.b}",
                "difference",
                c.value,
                c.value,
                c.lower,
                c.upper,
                roots[0] - roots[1],
            )
        )
    return cases, verdicts, run

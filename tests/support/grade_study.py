"""Grades against the known truth beside grades against a reference, for one simulated survey."""

from __future__ import annotations

import shutil
import tempfile
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
from jointmap.products.columns import pack_covariance
from jointmap.schema import covariance_columns, pose_columns
from jointmap.simulate.estimators.write import write_online
from jointmap.simulate.settings import SimulationSettings


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


STUDY = GradeSettings(draws=200, instants=400, bootstrap=200)


def planar(seed: int, folder: Path):
    """A planar survey with the four textbook estimators."""
    world = SimulationSettings(state_noise=True, duration_s=200.0, landmarks=40, robots=3)
    jointmap.simulate("quarry-2d", folder, world, seed=seed)
    survey = jointmap.read_survey(folder)
    write_online(survey)
    return cases_of(folder, jointmap.fuse(survey), STUDY)


def spatial(seed: int, folder: Path):
    """A spatial survey with two estimators that saw a part of its data: odometry, and a batch
    solution of every second sighting.
    """
    world = SimulationSettings(state_noise=True, duration_s=150.0, landmarks=40, robots=3)
    jointmap.simulate("quarry-3d", folder / "whole", world, seed=seed)
    survey = jointmap.read_survey(folder / "whole")
    shutil.copytree(folder / "whole", folder / "half")
    for file in (folder / "half").glob("*/sightings.csv"):
        pd.read_csv(file).iloc[::2].to_csv(file, index=False)
    half = jointmap.fuse(jointmap.read_survey(folder / "half"))
    names = list(pose_columns(3))
    for name, frame in (("half", "team"), ("odometry", "own")):
        home = survey.path / "online" / name
        home.mkdir(parents=True)
        (home / "estimator.toml").write_text(
            f'frame = "{frame}"\ncovariance = "fixed-axes"\nevidence = "unknown"\ndata = "same"\n'
        )
        for robot, log in survey.robots.items():
            if name == "odometry":
                pose, stamps, cov = log.odometry.pose, log.odometry.t_s, None
            else:
                path = half.trajectories[robot]
                pose, stamps, cov = path.pose, path.t_s, pack_covariance(path.cov)
            table = {"t_s": stamps} | dict(zip(names, pose.T, strict=True))
            if cov is not None:
                table |= dict(zip(covariance_columns(3), cov.T, strict=True))
            pd.DataFrame(table).to_csv(home / f"{robot}.csv", index=False)
    return cases_of(folder / "whole", jointmap.fuse(survey), STUDY)


def one_seed(kind: str, seed: int):
    """Cases, differences and verdicts of one seed, small enough to send between processes."""
    with tempfile.TemporaryDirectory() as name:
        cases, gaps, run = {"planar": planar, "spatial": spatial}[kind](seed, Path(name) / "s")
    verdicts = {e.name: v.verdict for e in run.estimators if (v := e.verdict()) is not None}
    return cases, gaps, verdicts

"""What is in a survey before anything is solved: as plain values, and as a page."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

import numpy as np

from jointmap.errors import LogProblem
from jointmap.ingest.naming import landmarks_of
from jointmap.ingest.survey import Edits, RobotLog, Survey
from jointmap.products.text import clock, count, section, table, wrap

MOST_PROBLEMS = 40


def check_summary(survey: Survey) -> dict[str, Any]:
    """Counts, spans and problems of a survey; plain values for JSON."""
    robots = {name: _robot_summary(log, survey) for name, log in survey.robots.items()}
    seen_by = _seen_by(survey)
    closures, control, rows = survey.closures, survey.control_points, survey.associations
    return {
        "ok": True,
        "name": survey.name,
        "dimension": survey.dimension,
        "datum": {"kind": survey.datum_kind, "robot": survey.datum_robot},
        "robots": robots,
        "landmarks": len(seen_by),
        "shared_landmarks": sum(n > 1 for n in seen_by.values()),
        "closures": 0 if closures is None else len(closures.t_a_s),
        "control_points": 0 if control is None else len(control.landmarks),
        "association_rows": 0 if rows is None else len(rows.labels),
        "edits": _edit_count(survey.edits),
        "inputs": dict(survey.inputs),
        "problems": [asdict(problem) for problem in survey.problems],
    }


def refusal_summary(problems: Sequence[LogProblem], message: str) -> dict[str, Any]:
    """What ``--json`` says about a survey that was refused."""
    return {"ok": False, "message": message, "problems": [asdict(p) for p in problems]}


def _robot_summary(log: RobotLog, survey: Survey) -> dict[str, Any]:
    stamps = log.odometry.t_s
    step = np.diff(stamps)
    seen = log.sightings
    names = () if seen is None else landmarks_of(log.name, seen, survey.associations)[1]
    return {
        "odometry_rows": len(stamps),
        "odometry_form": log.odometry.form,
        "first_s": float(stamps[0]) if len(stamps) else None,
        "last_s": float(stamps[-1]) if len(stamps) else None,
        "median_step_s": float(np.median(step)) if len(step) else None,
        "largest_step_s": float(step.max()) if len(step) else None,
        "sensors": sorted(log.sensors),
        "sightings": 0 if seen is None else len(seen.t_s),
        "landmarks": len(names),
        "encounters": 0 if log.encounters is None else len(log.encounters.t_s),
        "fixes": 0 if log.fixes is None else len(log.fixes.t_s),
    }


def _seen_by(survey: Survey) -> Counter[str]:
    """How many robots see each landmark."""
    return Counter(
        name
        for log in survey.robots.values()
        if log.sightings is not None
        for name in landmarks_of(log.name, log.sightings, survey.associations)[1]
    )


def _edit_count(edits: Edits) -> int:
    return len(edits.associations) + len(edits.masks) + len(edits.splits) + len(edits.values)


def check_page(survey: Survey, width: int = 80) -> str:
    """The page of ``jointmap check``; the last line says whether the survey can be fused."""
    summary = check_summary(survey)
    inner = width - 2
    title = f"Survey {survey.name}"
    lines = [title, "=" * len(title), ""]
    lines += section("What is there", _contents(summary, inner))
    if survey.problems:
        lines += section("What was mended while reading", problem_lines(survey.problems, inner))
    lines += section("What to look at", _remarks(summary, inner))
    mended = count(len(survey.problems), "mended problem") if survey.problems else "no problems"
    return "\n".join([*lines, f"ok: the survey can be fused ({mended})"]) + "\n"


def _contents(summary: dict[str, Any], width: int) -> list[str]:
    header = ["robot", "odometry", "every", "time", "sightings", "landmarks"]
    header += ["encounters", "fixes"]
    rows = []
    for name, log in summary["robots"].items():
        step = log["median_step_s"]
        rows.append(
            [
                name,
                f"{log['odometry_rows']:,}",
                "?" if step is None else f"{step:.3g} s",
                clock(_span(log)),
                f"{log['sightings']:,}",
                f"{log['landmarks']:,}",
                f"{log['encounters']:,}",
                f"{log['fixes']:,}",
            ]
        )
    marks = count(summary["landmarks"], "landmark")
    parts = [f"{marks}, {summary['shared_landmarks']:,} of them seen by more than one robot."]
    for key, one in (
        ("closures", "closure"),
        ("control_points", "control point"),
        ("association_rows", "association row"),
        ("edits", "edit"),
    ):
        if summary[key]:
            parts.append(f"{count(summary[key], one)}.")
    return [*table(header, rows), *wrap(" ".join(parts), width)]


def _span(log: dict[str, Any]) -> float:
    return float(log["last_s"] - log["first_s"]) if log["odometry_rows"] else 0.0


def _remarks(summary: dict[str, Any], width: int) -> list[str]:
    """What will weaken the result; nothing here stops a fusion."""
    remarks = []
    for name, log in summary["robots"].items():
        if not (log["sightings"] or log["encounters"] or log["fixes"]):
            remarks.append(f"{name} has odometry only: nothing checks its path.")
        gap, step = log["largest_step_s"], log["median_step_s"]
        if gap is not None and step and gap > max(1.0, 10 * step):
            remarks.append(f"{name} has up to {clock(gap)} without odometry rows.")
    several = len(summary["robots"]) > 1
    met = any(log["encounters"] for log in summary["robots"].values())
    if several and not (summary["shared_landmarks"] or met or summary["closures"]):
        remarks.append("No landmark, encounter or closure ties one robot to another.")
    if not remarks:
        return ["Nothing in particular."]
    return [line for remark in remarks for line in wrap(remark, width, "- ")]


def problem_lines(problems: Sequence[LogProblem], width: int) -> list[str]:
    """One entry per problem, the first ones only where they are very many."""
    lines = [line for p in problems[:MOST_PROBLEMS] for line in wrap(str(p), width, "- ")]
    more = len(problems) - MOST_PROBLEMS
    return [*lines, f"… and {more} more (--json lists all)."] if more > 0 else lines

"""The page that a grading prints: what a person should know in a minute."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from jointmap.grade.match import Coverage
from jointmap.grade.scorecard import EstimatorCard, RunCard, Scorecard
from jointmap.grade.scores import TEAM, Score
from jointmap.products.text import count, degrees, metres, section, table, wrap

_CASES = {
    "same": "its data are a part of the reference's: scores are corrected upwards for the error "
    "that both share",
    "independent": "its data are independent: the reference's own error is taken out of the scores",
    "unknown": "how it depends on the reference is unknown: bounds only, no value",
}
_FILES = (
    "scorecard.json (everything), scores.csv, consistency.csv, compare.csv, order.csv, "
    "coverage.csv, sharing.csv, flaws.csv, errors.csv (over time), page.txt"
)
CAVEAT = (
    "Scores are against a reference built from the same run, not against ground truth. Errors that "
    "estimator and reference share (a scale, a mounting, an association that is wrong for both) do "
    "not show here."
)


def grade_page(scorecard: Scorecard, width: int = 80, path: Path | str | None = None) -> str:
    """The page about a scorecard, plain text; the last line is the status."""
    lines: list[str] = []
    for run in scorecard.runs:
        lines += _run(run, width)
    if scorecard.across:
        lines += section("Over all runs", _across(scorecard.across))
    if path is not None:
        lines += section(f"Files in {path}", wrap(_FILES, width - 2))
    return "\n".join([*lines, *wrap(CAVEAT, width), status_line(scorecard)]) + "\n"


def status_line(scorecard: Scorecard) -> str:
    """The last line."""
    graded = len({e.name for run in scorecard.runs for e in run.estimators if e.graded})
    if scorecard.status == "ok":
        runs = count(len(scorecard.runs), "run")
        return f"ok: {count(graded, 'estimator')} graded on {runs}"
    return f"{scorecard.status}: {'; '.join(scorecard.reasons)}"


def _run(run: RunCard, width: int) -> list[str]:
    inner = width - 2
    lines = [f"Grades of {run.reference['name'] or 'a run'}", ""]
    lines += section("The reference (batch)", _reference(run, inner))
    lines += section("Position and heading, whole team", _absolute(run, inner))
    lines += section("Relative errors, whole team", _relative(run, inner))
    lines += section("Does it know how wrong it is?", _consistency(run, inner))
    lines += section("Which is better?", _compare(run, inner))
    lines += section("What the robots had in common", _sharing(run))
    flaws = [
        f"{f.estimator} {f.robot}: {f.text}".replace(" :", ":")
        for e in run.estimators
        for f in e.flaws
    ]
    if flaws or run.notes:
        found = [line for text in (*flaws, *run.notes) for line in wrap(text, inner, "- ")]
        lines += section("What to mind", found)
    return lines


def _reference(run: RunCard, width: int) -> list[str]:
    facts = run.reference
    lines = wrap(
        f"its own uncertainty makes an estimator without any error score "
        f"{metres(_number(facts['floor_m']))} (the floor)",
        width,
    )
    graded = facts["share_checked"] + facts["share_weak"]
    lines += wrap(
        f"{_percent(graded)} of the run can be graded ({_percent(facts['share_weak'])} apart, since "
        f"it is only weakly checked); {_percent(facts['share_unchecked'])} is dead reckoning that "
        "nothing checks and is not graded",
        width,
    )
    if "chi2_per_dof" in facts:
        low, high = facts["chi2_band"]
        ratio = facts["chi2_per_dof"]
        words = f"chi-square per degree of freedom {ratio:.3f} (95 % band {low:.3f} to {high:.3f})"
        if not low <= ratio <= high:
            words += ": its variances may be off by as much, which the verdicts below allow for"
        lines += wrap(words, width)
    return lines


def _absolute(run: RunCard, width: int) -> list[str]:
    rows = []
    for card in run.estimators:
        position, heading = card.score("position"), card.score("heading")
        rows.append(
            [
                card.name, _percent(_completion(card.coverage)), card.alignment,
                _value(position), _interval(position), _raw(position),
                degrees(heading.graded.value) if heading else "-",
            ]
        )  # fmt: skip
    head = ["estimator", "reported", "aligned", "position", "95 %", "raw", "heading"]
    lines = table(head, rows)
    for case in dict.fromkeys(card.case for card in run.estimators):
        names = ", ".join(c.name for c in run.estimators if c.case == case)
        lines += wrap(f"{names}: {_CASES[case]}", width)
    used = {c.alignment: (c.dof, c.alignment_reason) for c in run.estimators if c.graded}
    for mode, (dof, why) in used.items():
        words = f"aligned by {mode}: {why}; {dof} degrees of freedom taken out of the errors"
        if mode == "robot":
            words += ", and no score between robots"
        lines += wrap(words if mode != "none" else f"not aligned: {why}", width)
    return lines


def _relative(run: RunCard, width: int) -> list[str]:
    sizes: dict[tuple[str, float], None] = {}
    for card in run.estimators:
        for s in card.scores:
            if s.quantity == "relative position" and s.robot == TEAM:
                sizes.setdefault((s.over, s.size))
    chosen = [k for k in sizes if k[0] == "length_m"][:3]
    rows = []
    for card in run.estimators:
        cells = [card.name]
        for key in chosen:
            cells.append(_value(_relative_score(card, *key)))
        between = card.score("between position")
        cells.append(
            _value(between) if between else "no frame" if card.alignment == "robot" else "-"
        )
        rows.append(cells)
    counts = []
    for over, size in chosen:
        found = [_relative_score(card, over, size) for card in run.estimators]
        fitting = max(int(f.independent) for f in found if f is not None)
        counts.append(f"{size:g} m ({fitting})")
    lines = table(["estimator", *counts, "between robots"], rows)
    return lines + wrap("in brackets: how many segments fit without overlap", width)


def _relative_score(card: EstimatorCard, over: str, size: float) -> Score | None:
    for s in card.scores:
        if (s.quantity, s.robot, s.over, s.size) == ("relative position", TEAM, over, size):
            return s
    return None


def _consistency(run: RunCard, width: int) -> list[str]:
    lines = []
    for card in run.estimators:
        judged = card.verdict()
        if judged is None:
            lines += wrap(f"{card.name}: reports no covariance that can be judged", width, "- ")
            continue
        lines += wrap(f"{card.name}: {judged.verdict}; {judged.reason}", width, "- ")
        if judged.growth_lower > 1.0 and judged.verdict == "overconfident":
            lines += wrap(
                f"it grows along the run ({judged.growth:.2g} times from the first half to the "
                "second): the mark of information that is counted twice",
                width,
                "  ",
            )
    return lines


def _compare(run: RunCard, width: int) -> list[str]:
    lines = []
    if run.order.places:
        names = [
            f"{p.rank}. {p.estimator} {metres(p.value)}"
            + (f" ({_percent(p.certainty)} sure)" if p.rank < len(run.order.places) else "")
            for p in run.order.places
        ]
        lines += wrap("position: " + ", ".join(names), width)
        lines += wrap(
            f"over the {_percent(run.order.support)} of the run that all report, aligned by "
            f"{run.order.alignment}",
            width,
        )
    if run.order.note:
        lines += wrap(run.order.note, width)
    for c in run.comparisons:
        if c.quantity == "position":
            lines += wrap(f"{c.a} and {c.b}: {c.verdict}", width, "- ")
    return lines or ["one estimator: nothing to compare"]


def _sharing(run: RunCard) -> list[str]:
    rows = [
        [
            str(s["robot"]), _percent(s["share_now"]), _percent(s["share_earlier"]),
            f"{s['encounters']:,}",
            "-" if s["longest_without_s"] is None else f"{s['longest_without_s']:.0f} s",
        ]
        for s in run.sharing
    ]  # fmt: skip
    return table(["robot", "tied now", "to earlier", "encounters", "longest without"], rows)


def _across(rows: Sequence[Any]) -> list[str]:
    return [
        f"{r['a']} minus {r['b']}, {r['quantity']}: mean {r['mean']:+.3g} over {r['runs']} runs, "
        + (f"p {r['p']:.3f}" if r["p"] is not None else r["note"])
        for r in rows
    ]


def _completion(coverage: Sequence[Coverage]) -> float:
    whole = sum(c.instants for c in coverage)
    return sum(c.answered for c in coverage) / whole if whole else 0.0


def _value(score: Score | None) -> str:
    if score is None:
        return "-"
    value = score.graded.value
    return metres(value) if math.isfinite(value) else "no value"


def _raw(score: Score | None) -> str:
    return "-" if score is None else metres(score.graded.raw)


def _interval(score: Score | None) -> str:
    if score is None:
        return "-"
    return f"{metres(score.graded.lower)} to {metres(score.graded.upper)}"


def _percent(share: float) -> str:
    return f"{100 * share:.0f} %"


def _number(value: float | None) -> float:
    return float("nan") if value is None else value

"""The page that a fusion prints: what went in, what was done with it, how far to believe it."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import combinations
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from jointmap.products.columns import VERDICTS
from jointmap.products.page_quality import noise_section, quality_section
from jointmap.products.reference import Reference
from jointmap.products.text import clock, count, metres, number, section, table, wrap

#: Longer lists are cut on the page; the files hold them whole.
MOST_SUSPECTS = 5
MOST_PAIRS = 12
MOST_REASONS = 5
MOST_DISTRUST = 8

CAVEAT = (
    "A reference is the best answer these logs give. It is not ground truth and not for "
    "navigation or construction; licensed survey practice comes first."
)


def fuse_page(reference: Reference, width: int = 80, path: Path | str | None = None) -> str:
    """The page about a reference, plain text, lines ended by newlines.

    Parameters
    ----------
    reference : Reference
    width : int
        Characters to a line; tables and lines to paste may be wider.
    path : path, optional
        Where the reference was written.

    Returns
    -------
    str
        The last line is the status and its reason.
    """
    inner = width - 2
    lines = [
        *_head(reference),
        *section("What went in", _inputs(reference, inner)),
        *section("How the robots are tied together", _ties(reference, inner)),
        *section("What was left out, and why", _rejected(reference, inner)),
        *section("Noise of the logs", noise_section(reference, inner)),
        *section("How good it is", quality_section(reference, inner)),
        *section("What to distrust first", _distrust(reference, inner)),
    ]
    if path is not None:
        lines += section("Files", _files(reference, path))
    return "\n".join([*lines, *wrap(CAVEAT, width), status_line(reference)]) + "\n"


def status_line(reference: Reference) -> str:
    """``ok: …``, or the status and its reasons, on one line."""
    reasons = "; ".join(str(reason) for reason in reference.meta["reasons"] or [])
    if not reasons and reference.status == "ok":
        robots = count(len(reference.trajectories), "robot")
        reasons = f"{robots} in {count(_parts(reference), 'common frame', 'separate frames')}"
    return f"{reference.status}: {reasons or 'no reason was recorded'}"


def _parts(reference: Reference) -> int:
    return max(len(reference.meta["components"] or []), 1)


def _head(reference: Reference) -> list[str]:
    survey = reference.meta["survey"] or {}
    title = f"Reference of {survey.get('name') or 'a survey'}"
    return [title, "=" * len(title), ""]


def _inputs(reference: Reference, width: int) -> list[str]:
    counts = reference.measurements.groupby(["robot", "kind"]).size().to_dict()
    paths = reference.robots.set_index("robot")["path_m"]

    rows = [
        [
            robot,
            f"{len(path):,}",
            clock(float(path.t_s[-1] - path.t_s[0]) if len(path) else 0.0),
            metres(float(paths.get(robot, np.nan))),
            *(f"{counts.get((robot, kind), 0):,}" for kind in ("sighting", "encounter", "fix")),
        ]
        for robot, path in reference.trajectories.items()
    ]
    header = ["robot", "odometry", "time", "path", "sightings", "encounters", "fixes"]
    n = reference.landmarks["n_robots"]
    marks = count(len(n), "landmark")
    shared = f"{marks}, {int((n > 1).sum()):,} of them used by more than one robot."
    extra = [
        count(int((reference.measurements["kind"] == kind).sum()), one, many)
        for kind, one, many in (
            ("closure", "closure", "closures"),
            ("control", "control point", "control points"),
        )
        if (reference.measurements["kind"] == kind).any()
    ]
    also = wrap(f"Also {' and '.join(extra)}.", width) if extra else []
    return [*table(header, rows), *wrap(shared, width), *also]


def _ties(reference: Reference, width: int) -> list[str]:
    lines = _frames(reference, width)
    robots = list(reference.trajectories)
    if len(robots) < 2:
        return [*lines, *wrap("There is one robot; nothing to tie.", width)]
    ties = pair_ties(reference)
    ordered = ties.sort_values(["landmarks", "encounters", "closures"], kind="stable")
    rows = [
        [f"{r.robot_a} - {r.robot_b}", f"{r.landmarks:,}", f"{r.encounters:,}", f"{r.closures:,}"]
        for r in ordered.head(MOST_PAIRS).itertuples()
    ]
    lines += table(["pair (weakest first)", "shared landmarks", "encounters", "closures"], rows)
    if len(ordered) > MOST_PAIRS:
        lines += wrap(f"… and {len(ordered) - MOST_PAIRS} better tied pairs.", width)
    return lines


def _frames(reference: Reference, width: int) -> list[str]:
    """Which robots share a frame, and where its coordinates start."""
    lines: list[str] = []
    datum: Mapping[str, Any] = reference.meta["datum"] or {}
    words = list(datum.get("components") or [])
    for i, robots in enumerate(reference.meta["components"] or []):
        lines += wrap(f"Frame {i}: {', '.join(robots)}.", width)
        if i < len(words):
            lines += wrap(f"Datum: {words[i]}.", width, "  ")
    return lines


def pair_ties(reference: Reference) -> pd.DataFrame:
    """What connects each pair of robots: columns robot_a robot_b landmarks encounters closures.

    Only measurements that the result uses count.
    """
    robots = list(reference.trajectories)
    used = reference.measurements
    used = used[used["verdict"].isin(["kept", "down-weighted"])]
    seen = used.loc[used["kind"] == "sighting", ["robot", "landmark"]].dropna().drop_duplicates()
    sees = pd.crosstab(seen["robot"], seen["landmark"]).reindex(robots, fill_value=0).to_numpy()
    shared = sees @ sees.T
    direct = {kind: _meetings(used, kind, robots) for kind in ("encounter", "closure")}
    pairs = np.array(list(combinations(range(len(robots)), 2)), dtype=np.int64).reshape(-1, 2)
    a, b = pairs[:, 0], pairs[:, 1]
    names = np.array(robots, dtype=object)
    return pd.DataFrame(
        {
            "robot_a": names[a],
            "robot_b": names[b],
            "landmarks": shared[a, b],
            "encounters": direct["encounter"][a, b],
            "closures": direct["closure"][a, b],
        }
    )


def _meetings(used: pd.DataFrame, kind: str, robots: list[str]) -> Any:
    """Symmetric counts (R, R) of the measurements of one kind between robots."""
    rows = used[used["kind"] == kind]
    met = pd.crosstab(rows["robot"], rows["target"])
    square = met.reindex(index=robots, columns=robots, fill_value=0).to_numpy()
    return square + square.T


def _rejected(reference: Reference, width: int) -> list[str]:
    measured = reference.measurements
    lines: list[str] = []
    if len(measured):
        found = pd.crosstab(measured["kind"], measured["verdict"])
        found = found.reindex(columns=list(VERDICTS), fill_value=0)
        rows = [[str(kind), *(f"{int(n):,}" for n in row)] for kind, row in zip(
            found.index, found.to_numpy(), strict=True)]  # fmt: skip
        lines += table(["measurements", *VERDICTS], rows)
        out = measured.loc[measured["verdict"].isin(["rejected", "unusable"]), "reason"].dropna()
        for reason, n in _alike(out).head(MOST_REASONS).items():
            lines += wrap(f"{count(n, 'row')}: {reason}", width, "- ")
    refused = reference.associations[reference.associations["verdict"] == "rejected"]
    kept = len(reference.associations) - len(refused)
    lines += wrap(f"Associations: {kept:,} kept, {len(refused):,} rejected.", width)
    return [*lines, *_suspects(reference, width)]


def _alike(reasons: pd.Series[Any]) -> pd.Series[Any]:
    """Counts of reasons that differ in nothing but their numbers, the most frequent first."""
    kinds = reasons.str.replace(r"[-+]?\d[\d.,]*(e[-+]?\d+)?", "…", regex=True)
    groups = reasons.groupby(kinds, sort=False).agg(["first", "size", "nunique"])
    text = groups["first"].where(groups["nunique"] == 1, groups.index.to_series())
    return pd.Series(groups["size"].to_numpy(), index=text).sort_values(
        ascending=False, kind="stable"
    )


def _suspects(reference: Reference, width: int) -> list[str]:
    suspects = reference.suspects
    if suspects.empty:
        return ["No suspects."]
    shown = suspects.head(MOST_SUSPECTS)
    more = f" (first {len(shown)}; all in suspects.csv)" if len(suspects) > len(shown) else ""
    lead = f"Suspects, worst first{more}; paste the lines into edits.toml to mend:"
    lines = wrap(lead, width)
    for rank, row in enumerate(shown.itertuples(), 1):
        what = f"{row.kind}: {row.reason} (statistic {number(row.statistic)})"
        lines += wrap(what, width, f"{rank}. ")
        if isinstance(row.edit, str):
            lines += [f"     {line}" for line in row.edit.splitlines()]
    return lines


def _distrust(reference: Reference, width: int) -> list[str]:
    found = [str(text) for text in reference.meta["distrust"] or []]
    if not found:
        return ["Nothing in particular."]
    lines = [
        line
        for rank, text in enumerate(found[:MOST_DISTRUST], 1)
        for line in wrap(text, width, f"{rank}. ")
    ]
    more = len(found) - MOST_DISTRUST
    return [*lines, f"… and {more} more in reference.json."] if more > 0 else lines


def _files(reference: Reference, path: Path | str) -> list[str]:
    rows = [
        ("trajectory/", ", ".join(f"{name}.parquet" for name in reference.trajectories)),
        ("landmarks.csv", "with covariance and trust"),
        ("measurements.parquet", "every measurement with its verdict"),
        ("suspects.csv", "what to mend, with the lines for edits.toml"),
        ("reference.json", "status, settings, versions, evidence"),
    ]
    return [str(path), *(f"  {name:<22}{what}" for name, what in rows)]

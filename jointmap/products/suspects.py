"""What is most likely wrong in the logs, ranked, with the lines that mend it."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from jointmap.graph.clock import SurveyClock
from jointmap.ingest.edits import format_edit
from jointmap.ingest.survey import MaskEdit, SplitEdit
from jointmap.products.columns import complete
from jointmap.products.listed import association_edit, association_table
from jointmap.trust.outcome import Outcome

#: At most this many suspects of one kind are listed; the rest is counted in the page.
MOST = 200
#: Rejected rows of one burst, sensor and target are one suspect.
_BURST = ["kind", "robot", "sensor", "target", "burst"]


def suspect_table(outcome: Outcome, measurements: pd.DataFrame) -> pd.DataFrame:
    """suspects.csv."""
    rows = [
        *_associations(outcome),
        *_jumps(outcome, measurements),
        *_bursts(outcome, measurements),
        *_links(outcome),
    ]
    columns = ["kind", "robot", "t_from_s", "t_to_s", "target", "statistic", "reason", "edit"]
    frame = pd.DataFrame(rows, columns=columns)
    rank = frame["kind"].map({"association": 0, "odometry": 1, "link": 2}).fillna(3)
    order = np.lexsort((-frame["statistic"].fillna(0.0).to_numpy(dtype=float), rank.to_numpy()))
    return complete("suspects", outcome.problem.dimension, frame.iloc[order])


def _associations(outcome: Outcome) -> list[dict[str, Any]]:
    table = association_table(outcome)
    tracks = np.flatnonzero(outcome.problem.tracks.claim >= 0)
    out = []
    for track, row in zip(tracks, table.itertuples(), strict=True):
        if row.verdict != "rejected" or row.reason == "rejected by an edit":
            continue
        out.append(
            {
                "kind": "association",
                "robot": row.robot,
                "t_from_s": np.nan,
                "t_to_s": np.nan,
                "target": row.label,
                "statistic": row.statistic,
                "reason": f"{row.label} of {row.robot} is not {row.landmark}: {row.reason}",
                "edit": association_edit(outcome, int(track)),
            }
        )
    return out


def _jumps(outcome: Outcome, measurements: pd.DataFrame) -> list[dict[str, Any]]:
    doubted = measurements[
        (measurements["kind"] == "odometry")
        & measurements["verdict"].isin(["down-weighted", "rejected"])
    ].nlargest(MOST, "w")
    clock = SurveyClock(outcome.survey)
    out = []
    for row in doubted.itertuples():
        # The row is the first of the step; the cut goes just behind it.
        stamp = float(clock.log_time(str(row.robot), np.array([row.t_s]))[0])
        out.append(
            {
                "kind": "odometry",
                "robot": row.robot,
                "t_from_s": row.t_s,
                "t_to_s": row.t_s,
                "target": None,
                "statistic": row.w,
                "reason": f"{row.robot} at {row.t_s:.3f} s: {row.reason}",
                "edit": format_edit(SplitEdit(str(row.robot), stamp + 1e-3)),
            }
        )
    return out


def _bursts(outcome: Outcome, measurements: pd.DataFrame) -> list[dict[str, Any]]:
    rejected = measurements[
        (measurements["verdict"] == "rejected") & (measurements["kind"] != "odometry")
    ].copy()
    control = rejected["kind"] == "control"
    rejected.loc[control, "target"] = rejected.loc[control, "landmark"]
    if rejected.empty:
        return []
    groups = rejected.groupby(_BURST, dropna=False, sort=False)
    table = groups.agg(
        t_from_s=("t_s", "min"), t_to_s=("t_s", "max"), n=("t_s", "size"), w=("w", "max")
    ).reset_index()
    worst = rejected.loc[groups["w"].idxmax().to_numpy(), "reason"].to_numpy()
    table["reason"] = worst
    table = table.nlargest(MOST, "w")
    clock = SurveyClock(outcome.survey)
    out = []
    for row in table.itertuples():
        robot = str(row.robot)
        edit = None
        if row.kind in ("sighting", "encounter") and isinstance(row.sensor, str):
            ends = clock.log_time(robot, np.array([row.t_from_s, row.t_to_s]))
            edit = format_edit(
                MaskEdit(robot, row.sensor, float(ends[0]) - 1e-3, float(ends[1]) + 1e-3)
            )
        target = row.target if isinstance(row.target, str) else ""
        told = f"{target or str(row.kind)} by {robot} at {row.t_from_s:.3f} s ({row.n} rows)"
        if row.kind == "control":
            robot, told = "", f"control point {target}: its coordinates contradict the others"
        out.append(
            {
                "kind": row.kind,
                "robot": robot or None,
                "t_from_s": row.t_from_s,
                "t_to_s": row.t_to_s,
                "target": target or None,
                "statistic": row.w,
                "reason": f"{told}: {row.reason}",
                "edit": edit,
            }
        )
    return out


def _links(outcome: Outcome) -> list[dict[str, Any]]:
    return [
        {
            "kind": "link",
            "robot": link.robot_a,
            "t_from_s": np.nan,
            "t_to_s": np.nan,
            "target": link.robot_b,
            "statistic": float(link.runner_up),
            "reason": f"the frames of {link.robot_a} and {link.robot_b} could also be tied another "
            f"way ({link.support} against {link.runner_up} agreements)",
            "edit": None,
        }
        for link in outcome.start.links
        if link.ambiguous
    ]

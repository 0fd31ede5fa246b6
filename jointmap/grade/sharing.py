"""What the robots had in common, from the measurements that the reference kept.

A robot is tied *now* when it sees a landmark that another robot saw within a window of this, or
when it meets another robot; it is tied *earlier* when it sees a landmark that another robot saw at
any time before. One common landmark gives no orientation by itself.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

NONE, EARLIER, NOW = 0, 1, 2
WORDS = ("none", "earlier", "now")
_USED = ("kept", "down-weighted")


@dataclass(frozen=True)
class Sharing:
    """``state`` (m,) of every located stamp: NONE, EARLIER or NOW; ``since_s`` (m,) since the last
    tie of either kind, NaN before the first; ``encounters`` (R,) counts.
    """

    state: Ints
    since_s: Floats
    encounters: Ints

    def rows(self, stage: Stage) -> list[dict[str, Any]]:
        """Per robot: shares of time, encounters, longest time without a tie."""
        out = []
        for r, name in enumerate(stage.robots):
            mine = stage.located.robot == r
            n = max(int(mine.sum()), 1)
            since = self.since_s[mine]
            known = np.isfinite(since)
            out.append(
                {
                    "robot": name,
                    "share_now": float((self.state[mine] == NOW).sum() / n),
                    "share_earlier": float((self.state[mine] == EARLIER).sum() / n),
                    "encounters": int(self.encounters[r]),
                    "longest_without_s": float(since[known].max()) if known.any() else None,
                }
            )
        return out


def sharing_of(stage: Stage, window_s: float) -> Sharing:
    """Ties of every robot over time."""
    table = stage.reference.measurements
    used = table[table["verdict"].isin(_USED)]
    number = {name: r for r, name in enumerate(stage.robots)}
    seen = used[used["kind"] == "sighting"]
    robot = seen["robot"].map(number).to_numpy(dtype=np.float64)
    known = np.isfinite(robot) & seen["landmark"].notna().to_numpy()
    owner = np.asarray(robot[known], dtype=np.int64)
    t_s = seen["t_s"].to_numpy(dtype=np.float64)[known]
    names, landmark = np.unique(
        seen["landmark"].to_numpy(dtype=object)[known].astype(str), return_inverse=True
    )
    number_of = np.asarray(landmark, dtype=np.int64)
    now, earlier = _ties(owner, t_s, number_of, len(names), window_s)
    met = used[used["kind"] == "encounter"]
    a = met["robot"].map(number).to_numpy(dtype=np.float64)
    b = met["target"].map(number).to_numpy(dtype=np.float64)
    both = np.isfinite(a) & np.isfinite(b)
    met_s = met["t_s"].to_numpy(dtype=np.float64)[both]
    pair = np.stack([a[both], b[both]]).astype(np.int64)
    state = np.zeros(len(stage.located), dtype=np.int64)
    since = np.full(len(stage.located), np.nan)
    encounters = np.zeros(len(stage.robots), dtype=np.int64)
    for r in range(len(stage.robots)):
        mine = np.flatnonzero(stage.located.robot == r)
        at = stage.instants_s[stage.instant[mine]]
        meetings = np.sort(met_s[(pair == r).any(axis=0)])
        encounters[r] = len(meetings)
        own = owner == r
        now_s = np.sort(np.concatenate([t_s[own & now], meetings]))
        any_s = np.sort(np.concatenate([t_s[own & (now | earlier)], meetings]))
        state[mine[_within(any_s, at, window_s)]] = EARLIER
        state[mine[_within(now_s, at, window_s)]] = NOW
        last = np.searchsorted(any_s, at, side="right") - 1
        since[mine] = (
            np.where(last >= 0, at - any_s[np.maximum(last, 0)], np.nan) if len(any_s) else np.nan
        )
    return Sharing(state, since, encounters)


def _ties(
    robot: Ints, t_s: Floats, landmark: Ints, landmarks: int, window_s: float
) -> tuple[Bools, Bools]:
    """Which sightings tie their robot to another one now, and which to an earlier one."""
    now, earlier = np.zeros(len(t_s), bool), np.zeros(len(t_s), bool)
    order = np.lexsort((t_s, landmark))
    edges = np.searchsorted(landmark[order], np.arange(landmarks + 1))
    for lo, hi in itertools.pairwise(edges):
        rows = order[lo:hi]
        for r in np.unique(robot[rows]):
            mine, others = rows[robot[rows] == r], t_s[rows[robot[rows] != r]]
            if not len(others):
                continue
            now[mine] = _within(others, t_s[mine], window_s, both=True)
            earlier[mine] = others[0] <= t_s[mine]
    return now, earlier


def _within(events: Floats, at: Floats, window_s: float, *, both: bool = False) -> Bools:
    """Whether a sorted event lies within the window before ``at`` (or on either side)."""
    if not len(events):
        return np.zeros(len(at), dtype=bool)
    first = np.searchsorted(events, at - window_s, side="left")
    last = np.searchsorted(events, at + (window_s if both else 0.0), side="right")
    return np.asarray(last > first)

"""Association in time: the reference interpolated to the estimate's own stamps.

Nothing is extrapolated: an estimate stands for an instant only when its own stamp lies within the
tolerance of it, and the reference is taken at that stamp, on the geodesic between its rows.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from jointmap.grade.online import OnlineEstimate, RobotEstimate
from jointmap.grade.settings import GradeSettings
from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Matched:
    """An estimator at the stage's instants.

    Parameters
    ----------
    name : str
    row : (n,) int
        Index into ``stage.located``; increasing.
    t_s : (n,) float
        The estimate's own stamp.
    reference, estimate : (n, *pose shape) float
    cov : (n, dof, dof) float
        The estimate's own covariance, body tangent; NaN where it states none.
    """

    name: str
    row: Ints
    t_s: Floats
    reference: Floats
    estimate: Floats
    cov: Floats

    def take(self, index: Ints | Bools) -> Matched:
        """Some of the instants."""
        names = ("row", "t_s", "reference", "estimate", "cov")
        return replace(self, **{n: getattr(self, n)[index] for n in names})

    def __len__(self) -> int:
        return len(self.row)


@dataclass(frozen=True)
class Coverage:
    """How much of one robot's run an estimator answered for.

    ``instants`` that the reference has, ``answered`` ones, ``gradeable`` answered ones that are
    checked at least weakly, ``weak`` ones among them; ``tolerance_s``; ``dropped`` rows without a
    pose; ``clock_s`` the offset that would give overlap where there is none.
    """

    robot: str
    instants: int
    answered: int
    gradeable: int
    weak: int
    tolerance_s: float
    rows: int
    dropped: int
    clock_s: float | None

    @property
    def completion(self) -> float:
        """Share of the run with an estimate."""
        return self.answered / self.instants if self.instants else 0.0

    def to_dict(self) -> dict[str, Any]:
        """Plain values."""
        return {**self.__dict__, "completion": self.completion}


def match(
    estimate: OnlineEstimate, stage: Stage, settings: GradeSettings
) -> tuple[Matched, tuple[Coverage, ...]]:
    """Bring an estimator to the stage's instants."""
    parts: list[Matched] = []
    coverage = []
    for r, robot in enumerate(stage.robots):
        rows = stage.row[r]
        have = np.flatnonzero(rows >= 0)
        given = estimate.robots.get(robot)
        if given is None or not len(given):
            dropped = given.dropped if given is not None else 0
            coverage.append(Coverage(robot, len(have), 0, 0, 0, 0.0, 0, dropped, None))
            continue
        made, tolerance = _robot(given, robot, rows, have, stage, settings)
        trust = stage.located.trust[made.row]
        coverage.append(
            Coverage(
                robot,
                len(have),
                len(made),
                int((trust < 2).sum()),
                int((trust == 1).sum()),
                tolerance,
                len(given),
                given.dropped,
                None if len(made) else _clock_offset(given.t_s, stage, robot),
            )
        )
        parts.append(made)
    if not parts:
        dof, shape = stage.group.dof, stage.group.shape
        empty = np.zeros((0, *shape))
        none = np.zeros(0, np.int64)
        return Matched(
            estimate.name, none, np.zeros(0), empty, empty, np.zeros((0, dof, dof))
        ), tuple(coverage)
    joined = {
        n: np.concatenate([getattr(p, n) for p in parts])
        for n in ("row", "t_s", "reference", "estimate", "cov")
    }
    return Matched(estimate.name, **joined), tuple(coverage)


def _robot(
    given: RobotEstimate,
    robot: str,
    rows: Ints,
    have: Ints,
    stage: Stage,
    settings: GradeSettings,
) -> tuple[Matched, float]:
    tolerance = settings.tolerance_s
    if tolerance is None:
        own = float(np.median(np.diff(given.t_s))) if len(given) > 1 else 0.0
        tolerance = 0.5 * max(stage.spacing_s, own)
    wanted = stage.instants_s[have]
    nearest = _nearest(given.t_s, wanted)
    inside = np.abs(given.t_s[nearest] - wanted) <= tolerance + 1e-9
    path = stage.reference.trajectories[robot].t_s
    # The estimate's own stamp must lie inside the reference too.
    inside &= (given.t_s[nearest] >= path[0]) & (given.t_s[nearest] <= path[-1])
    chosen, instant = nearest[inside], have[inside]
    # A slow estimator's row stands for the instant that it is nearest to, and no other.
    if len(chosen):
        gap = np.abs(given.t_s[chosen] - stage.instants_s[instant])
        order = np.lexsort((gap, chosen))
        first = np.ones(len(order), dtype=bool)
        first[1:] = chosen[order][1:] != chosen[order][:-1]
        keep = np.sort(order[first])
        chosen, instant = chosen[keep], instant[keep]
    dof = stage.group.dof
    cov = given.cov[chosen] if given.cov is not None else np.full((len(chosen), dof, dof), np.nan)
    t_s = given.t_s[chosen]
    made = Matched("", rows[instant], t_s, poses_of(stage, robot, t_s), given.pose[chosen], cov)
    return made, float(tolerance)


def _nearest(t_s: Floats, wanted: Floats) -> Ints:
    after = np.clip(np.searchsorted(t_s, wanted), 0, len(t_s) - 1)
    before = np.maximum(after - 1, 0)
    back = np.abs(t_s[before] - wanted) <= np.abs(t_s[after] - wanted)
    return np.where(back, before, after).astype(np.int64)


def poses_of(stage: Stage, robot: str, t_s: Floats) -> Floats:
    """Poses (n, *shape) of the reference on the geodesic between its rows; stamps lie inside."""
    path = stage.reference.trajectories[robot]
    row = np.clip(np.searchsorted(path.t_s, t_s, side="right") - 1, 0, max(len(path) - 2, 0))
    after = np.minimum(row + 1, len(path) - 1)
    gap = path.t_s[after] - path.t_s[row]
    share = np.clip((t_s - path.t_s[row]) / np.where(gap > 0, gap, 1.0), 0.0, 1.0)
    start, end = stage.group.from_rows(path.pose[row]), stage.group.from_rows(path.pose[after])
    return stage.group.interpolate(start, end, share)


def _clock_offset(t_s: Floats, stage: Stage, robot: str) -> float:
    """Seconds to add to the estimate's stamps so that its middle meets the reference's."""
    path = stage.reference.trajectories[robot].t_s
    return float(0.5 * (path[0] + path[-1]) - 0.5 * (t_s[0] + t_s[-1]))

"""The scores of one estimator: absolute, relative, between robots, drift, map."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from jointmap.grade.aligned import Aligned
from jointmap.grade.figures import Figure, Graded, figure, grade
from jointmap.grade.match import Matched
from jointmap.grade.relative import (
    Segments,
    between_robots,
    by_length,
    by_time,
    ends,
    relative_errors,
)
from jointmap.grade.series import block_length, block_means, effective_size
from jointmap.grade.settings import GradeSettings
from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

TEAM = "team"


@dataclass(frozen=True)
class Score:
    """One row of scores.csv; see the schema for the columns."""

    estimator: str
    robot: str
    part: str
    quantity: str
    over: str
    size: float
    unit: str
    figure: Figure
    graded: Graded
    independent: float
    repeat_lower: float
    repeat_upper: float
    block_s: float
    blocks: int

    def row(self) -> dict[str, Any]:
        """Plain values by column."""
        out = {
            k: getattr(self, k)
            for k in ("estimator", "robot", "part", "quantity", "over", "size", "unit")
        }
        out |= asdict(self.graded)
        names = ("independent", "repeat_lower", "repeat_upper", "block_s", "blocks")
        return out | {k: getattr(self, k) for k in names} | {"case": self.figure.case}


@dataclass(frozen=True)
class Scorer:
    """Makes scores of one estimator: what all of them need."""

    stage: Stage
    settings: GradeSettings
    log_scale: Floats
    case: str
    estimator: str

    def score(
        self,
        quantity: str,
        unit: str,
        error: Floats,
        draws: Floats,
        instant: Ints,
        robot: str,
        part: str,
        *,
        over: str = "",
        size: float = 0.0,
        independent: float | None = None,
    ) -> Score:
        """Score of errors (n, k) with the reference's draws (S, n, k) at instants (n,)."""
        made = figure(error, draws, self.case)
        graded = grade(made, self.log_scale, self.settings.level)
        low, high, block_s, blocks, n_eff = self._repeat(error, draws, instant)
        return Score(
            self.estimator, robot, part, quantity, over, size, unit, made, graded,
            n_eff if independent is None else independent, low, high, block_s, blocks,
        )  # fmt: skip

    def _repeat(
        self, error: Floats, draws: Floats, instant: Ints
    ) -> tuple[float, float, float, int, float]:
        """Interval of another stretch like this: block bootstrap over time."""
        nan = float("nan")
        if len(error) < 8:
            return nan, nan, nan, 0, float(len(error) > 0)
        sign = {"same": 1.0, "independent": -1.0}.get(self.case, 0.0)
        square = (error**2).sum(axis=1)
        if sign:
            square = square + sign * np.einsum("snk,snk->n", draws, draws) / len(draws)
        lo, hi = int(instant.min()), int(instant.max()) + 1
        sums = np.bincount(instant - lo, square, hi - lo)
        counts = np.bincount(instant - lo, minlength=hi - lo).astype(np.float64)
        series = sums[counts > 0] / counts[counts > 0]
        length = block_length(series)
        size = min(length * (hi - lo) / len(series), float(hi - lo))
        means, blocks = block_means(
            sums, counts, size, self.settings.bootstrap, self.settings.seed + 2
        )
        tail = 0.5 * (1.0 - self.settings.level)
        ends_ = np.sqrt(np.maximum(np.quantile(means, [tail, 1.0 - tail]), 0.0))
        return (
            float(ends_[0]), float(ends_[1]), float(size * self.stage.spacing_s), blocks,
            effective_size(series),
        )  # fmt: skip


def absolute_scores(scorer: Scorer, made: Aligned) -> list[Score]:
    """ATE: position with its axes, heading (in space attitude too), by robot and for the team."""
    stage = scorer.stage
    trust = stage.located.trust[made.matched.row]
    robot = stage.located.robot[made.matched.row]
    instant = stage.instant[made.matched.row]
    out = []
    for part, code in (("checked", 0), ("weak", 1)):
        inside = (trust == code) & ~made.unaligned
        for name, mine in _by_robot(stage, robot, inside):
            if not mine.any():
                continue
            for quantity, unit, axes, turn in _quantities(stage.group.dim):
                error = (made.turn if turn else made.place)[mine][:, axes]
                draws = (made.turn_draws if turn else made.place_draws)[:, mine][:, :, axes]
                out.append(scorer.score(quantity, unit, error, draws, instant[mine], name, part))
    return out


def _by_robot(stage: Stage, robot: Ints, inside: Bools) -> list[tuple[str, Bools]]:
    each = [(name, inside & (robot == r)) for r, name in enumerate(stage.robots)]
    return [*each, (TEAM, inside)]


def _quantities(dimension: int) -> list[tuple[str, str, list[int], bool]]:
    """Quantity, unit, axes, whether of rotation."""
    if dimension == 2:
        return [
            ("position", "m", [0, 1], False), ("x", "m", [0], False), ("y", "m", [1], False),
            ("heading", "rad", [0], True),
        ]  # fmt: skip
    return [
        ("position", "m", [0, 1, 2], False), ("horizontal", "m", [0, 1], False),
        ("x", "m", [0], False), ("y", "m", [1], False), ("height", "m", [2], False),
        ("heading", "rad", [2], True), ("attitude", "rad", [0, 1, 2], True),
    ]  # fmt: skip


def relative_scores(scorer: Scorer, matched: Matched, mode: str) -> list[Score]:
    """RPE over lengths and times, between robots, and drift at the end; free of alignment.

    ``matched`` holds the checked instants only: both ends of a segment are checked.
    """
    stage = scorer.stage
    out = []
    for segments in (*by_length(stage, matched), *by_time(stage, matched)):
        out += _segment_scores(scorer, matched, segments, "relative")
    if mode != "robot":
        pairs = between_robots(stage, matched)
        if len(pairs.start):
            out += _segment_scores(scorer, matched, pairs, "between")
    out += _end_drift(scorer, matched)
    return out


def _segment_scores(scorer: Scorer, matched: Matched, segments: Segments, name: str) -> list[Score]:
    stage = scorer.stage
    errors = relative_errors(stage, matched.take(segments.start), matched.take(segments.end))
    instant = stage.instant[matched.row[segments.start]]
    groups: list[tuple[str, Bools]] = [(TEAM, np.ones(len(instant), dtype=bool))]
    if name == "relative":
        groups += [(stage.robots[r], segments.robot == r) for r in np.unique(segments.robot)]
    out = []
    for robot, mine in groups:
        count = None
        if segments.independent:
            count = float(
                sum(segments.independent.values())
                if robot == TEAM
                else segments.independent[stage.robots.index(robot)]
            )
        for quantity, unit, error, draws in (
            ("position", "m", errors.place, errors.place_draws),
            (
                "heading" if stage.group.dim == 2 else "attitude",
                "rad",
                errors.turn,
                errors.turn_draws,
            ),
        ):
            out.append(
                scorer.score(
                    f"{name} {quantity}", unit, error[mine], draws[:, mine], instant[mine], robot,
                    "checked", over=segments.kind, size=segments.size, independent=count,
                )
            )  # fmt: skip
    return out


def _end_drift(scorer: Scorer, matched: Matched) -> list[Score]:
    """Position error at the end relative to the start, per metre of path."""
    stage = scorer.stage
    if not len(matched):
        return []
    pair = ends(stage, matched)
    errors = relative_errors(stage, matched.take(pair.start), matched.take(pair.end))
    length = stage.path_m[matched.row[pair.end]] - stage.path_m[matched.row[pair.start]]
    good = (length > 0.0) & (
        stage.located.component[matched.row[pair.start]]
        == stage.located.component[matched.row[pair.end]]
    )
    out = []
    for k in np.flatnonzero(good):
        share = 1.0 / length[k]
        out.append(
            scorer.score(
                "end drift", "m/m", errors.place[k : k + 1] * share,
                errors.place_draws[:, k : k + 1] * share, np.zeros(1, np.int64),
                stage.robots[pair.robot[k]], "checked", over="length_m", size=float(length[k]),
                independent=1.0,
            )
        )  # fmt: skip
    return out


def map_scores(
    scorer: Scorer,
    robots: list[str],
    positions: Floats,
    landmarks: list[str],
    turned: list[int],
    made: Aligned,
) -> list[Score]:
    """Landmark errors; ``positions`` (n, d) stand in the map already, ``turned`` block of each."""
    stage = scorer.stage
    names = list(stage.posterior.landmark_names)
    table = stage.reference.landmarks.set_index("landmark")
    columns = ["x_m", "y_m", "z_m"][: stage.group.dim]
    keep = [
        k
        for k, name in enumerate(landmarks)
        if name in names and name in table.index and table.loc[name, "trust"] == "checked"
    ]
    if not keep:
        return []
    chosen = np.array(keep)
    where = np.array([names.index(landmarks[k]) for k in keep])
    truth = table.loc[[landmarks[k] for k in keep], columns].to_numpy(np.float64)
    error = positions[chosen] - truth
    draws = stage.posterior.landmarks[:, where]
    for b, block in enumerate(made.blocks):
        rows = np.array([turned[k] == b for k in keep])
        if not rows.any() or not block.projection.motions.shape[2]:
            continue
        fitted = block.projection.fit(stage.place[:, made.matched.row[block.rows]])
        centre = stage.group.translation(made.matched.reference[block.rows]).mean(axis=0)
        moved = _motions_at(truth[rows], centre, block.projection.motions.shape[2], stage)
        draws[:, rows] -= np.einsum("ndq,sq->snd", moved, fitted)
    out = []
    owner = np.array([robots[k] for k in keep], dtype=object)
    for name in (*dict.fromkeys(owner.tolist()), TEAM):
        mine = np.ones(len(owner), bool) if name == TEAM else owner == name
        out.append(
            scorer.score(
                "landmarks", "m", error[mine], draws[:, mine], np.arange(int(mine.sum())), name,
                "checked", independent=float(mine.sum()),
            )
        )  # fmt: skip
    return out


def _motions_at(points: Floats, centre: Floats, q: int, stage: Stage) -> Floats:
    """Columns of the alignment's motions at other points, about the same centroid."""
    from jointmap._rotations import skew

    d = stage.group.dim
    out = np.zeros((len(points), d, q))
    out[:, :, :d] = np.eye(d)
    about = points - centre
    turns = 3 if d == 3 and not stage.gravity_aligned else 1
    if turns == 1:
        out[:, 0, d], out[:, 1, d] = -about[:, 1], about[:, 0]
    else:
        out[:, :, d : d + 3] = -skew(about)
    if q > d + turns:
        out[:, :, -1] = about
    return out

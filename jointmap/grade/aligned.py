"""Errors of an estimator in the map frame, after the alignment that its frame asks for."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.grade.align import (
    Projection,
    Transform,
    align,
    alignment_dof,
    identity,
    projection,
)
from jointmap.grade.match import Matched
from jointmap.grade.online import OnlineEstimate
from jointmap.grade.settings import GradeSettings
from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Rounds of aligning and weighing.
ROUNDS = 3
#: How the estimate's frame is brought to the map: nothing, one transform, one per robot.
MODES = ("none", "team", "robot")


@dataclass(frozen=True)
class Block:
    """Rows of one transform: a component, or a robot in it."""

    label: str
    rows: Ints
    transform: Transform
    projection: Projection


@dataclass(frozen=True)
class Aligned:
    """An estimator's errors against the reference.

    Parameters
    ----------
    matched : Matched
        The graded instants only.
    mode : ``none``, ``team`` or ``robot``
    blocks : tuple of Block
    pose : (n, *pose shape)
        Estimates in the map.
    place, turn : (n, d), (n, 1 or 3)
        Errors of position and rotation vector, map axes.
    place_draws, turn_draws : (S, n, d), (S, n, 1 or 3)
        The reference's drawn errors after the same alignment.
    unaligned : (n,) bool
        Rows whose points determine no transform; their errors are NaN.
    """

    matched: Matched
    mode: str
    blocks: tuple[Block, ...]
    pose: Floats
    place: Floats
    turn: Floats
    place_draws: Floats
    turn_draws: Floats
    unaligned: NDArray[np.bool_]

    @property
    def dof(self) -> int:
        """Degrees of freedom spent on alignment."""
        return sum(b.transform.dof for b in self.blocks)


def mode_of(estimate: OnlineEstimate, stage: Stage, settings: GradeSettings) -> tuple[str, str]:
    """Mode of alignment, and why."""
    if settings.alignment != "auto":
        return settings.alignment, "asked for"
    if estimate.frame == "own":
        return "robot", "every robot reports in its own frame"
    if estimate.frame == "team":
        return "team", "the team reports in one frame"
    if stage.site:
        return "none", "estimates and reference stand in the site frame"
    return "team", "the reference is not tied to the site frame, so that frame is aligned"


def aligned(
    matched: Matched,
    stage: Stage,
    mode: str,
    *,
    scale: bool = False,
    equal: bool = False,
    draws: bool = True,
) -> Aligned:
    """Align the rows of an estimator and take its errors.

    ``equal`` weighs all rows alike, so that the reference's draws are the same for every estimator
    with these rows; ``draws=False`` leaves them out.
    """
    g, n = stage.group, len(matched)
    dof = 0 if mode == "none" else alignment_dof(g.dim, stage.gravity_aligned)
    floor = stage.floor[matched.row] / g.dim
    pose = matched.estimate.copy()
    turn_size = 1 if g.dim == 2 else 3
    drawn = slice(None) if draws else slice(0, 0)
    place_draws = stage.place[drawn, matched.row]
    turn_draws = stage.turn[drawn, matched.row]
    lost = np.zeros(n, dtype=bool)
    blocks = []
    for label, rows in _groups(matched, stage, mode):
        x, y = g.translation(matched.estimate[rows]), g.translation(matched.reference[rows])
        transform, weight = _fit(x, y, floor[rows], dof, scale, 1 if equal else ROUNDS)
        if transform is None:
            lost[rows] = True
            continue
        pose[rows] = transform.poses(matched.estimate[rows], g)
        made = projection(y, weight, dof, scale=scale)
        fitted = made.fit(place_draws[:, rows])
        place_draws[:, rows] = made.remove(place_draws[:, rows], fitted)
        if fitted.shape[1]:
            turn_draws[:, rows] -= fitted[:, None, made.turns]
        blocks.append(Block(label, rows, transform, made))
    place = g.translation(pose) - g.translation(matched.reference)
    turn = _turns(stage, matched.reference, pose)
    place[lost], turn[lost] = np.nan, np.nan
    assert turn.shape[1] == turn_size
    return Aligned(matched, mode, tuple(blocks), pose, place, turn, place_draws, turn_draws, lost)


def _groups(matched: Matched, stage: Stage, mode: str) -> list[tuple[str, Ints]]:
    """Rows that one transform serves."""
    component = stage.located.component[matched.row]
    robot = stage.located.robot[matched.row]
    out = []
    for c in np.unique(component):
        mine = np.flatnonzero(component == c)
        if mode != "robot":
            out.append(("team" if c == 0 else f"part {c}", mine))
            continue
        for r in np.unique(robot[mine]):
            out.append((stage.robots[r], mine[robot[mine] == r]))
    return out


def _fit(
    x: Floats, y: Floats, floor: Floats, dof: int, scale: bool, rounds: int
) -> tuple[Transform | None, Floats]:
    """Transform and weights: inverse variances of the reference plus the errors' own."""
    weight = np.ones(len(x))
    if dof == 0:
        return identity(x.shape[1]), weight
    transform, fresh = None, weight
    for _ in range(rounds):
        weight = fresh
        transform = align(x, y, weight, dof, scale=scale)
        if transform is None:
            return None, weight
        residual = float(((transform.points(x) - y) ** 2).mean())
        # The estimate's errors are taken as equal: what it claims of them is what is on trial.
        fresh = 1.0 / np.maximum(floor + residual, 1e-12)
        fresh /= fresh.mean()
    return transform, weight


def _turns(stage: Stage, reference: Floats, pose: Floats) -> Floats:
    """Rotation vector (n, 1 or 3) from the reference to the estimate, map axes."""
    g = stage.group
    xi = g.local(reference, pose)
    if g.dim == 2:
        return xi[:, 2:]
    return np.asarray(np.einsum("nij,nj->ni", g.rotation(reference), xi[:, :3]))


def transform_of(made: Aligned, robot: str) -> Transform | None:
    """The transform that served a robot, for what it reports besides poses."""
    table: Mapping[str, Transform] = {b.label: b.transform for b in made.blocks}
    return table.get(robot) or table.get("team")

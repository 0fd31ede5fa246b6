"""Odometry steps that a closure between the same two keyframes contradicts.

Both say how the robot moved over one step, and nothing near tells which of them is wrong: the
wheels may have slipped, or the place was recognised wrongly. They are alternatives; what the rest
of the survey says must choose, so neither may be taken for granted.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from jointmap import frames
from jointmap.graph.problem import Problem

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Probability that two right statements about one step agree.
_GATE = 1.0 - 1e-6


@dataclass(frozen=True)
class Disputes:
    """Steps in dispute: ``block`` and ``row`` (n,) of the odometry, ``apart`` (n, dof) the largest
    disagreement with a closure (body tangent at the later keyframe); ``closure_block`` and
    ``closure_row`` (m,) the closures that contradict.
    """

    block: Ints
    row: Ints
    apart: Floats
    closure_block: Ints
    closure_row: Ints


def any_between_neighbours(problem: Problem) -> bool:
    """Whether any closure ties two neighbouring keyframes, so that there may be a dispute."""
    return any(b.kind == "closure" and bool((np.abs(b.b - b.a) == 1).any()) for b in problem.blocks)


def disputed_steps(problem: Problem, covariances: Sequence[Floats]) -> Disputes:
    """Find the steps that a closure contradicts.

    Parameters
    ----------
    covariances : per block (n, m, m)
        Noise of its rows; only those of odometry and closures are read.

    Notes
    -----
    A closure Z between frames A and B of bodies X and Y says ``X^-1 Y = A Z B^-1``; its error moves
    to the body of Y by the adjoint of B.
    """
    lie = frames.group(problem.dimension)
    step_of = np.full((2, len(problem.keyframes.robot)), -1, dtype=np.int64)
    for at, block in enumerate(problem.blocks):
        if block.kind == "odometry":
            step_of[0, block.a], step_of[1, block.a] = at, np.arange(block.n)
    limit = chi2.ppf(_GATE, lie.dof)
    found: dict[tuple[int, int], Floats] = {}
    against: list[tuple[int, int]] = []
    for at, block in enumerate(problem.blocks):
        if block.kind != "closure" or block.components != ("pose",):
            continue
        early = np.minimum(block.a, block.b)
        rows = np.flatnonzero((np.abs(block.b - block.a) == 1) & (step_of[0, early] >= 0))
        if not len(rows):
            continue
        frame_a, frame_b = (
            np.broadcast_to(f, (block.n, *lie.shape))[rows] for f in (block.frame_a, block.frame_b)
        )
        said = lie.compose(lie.compose(frame_a, block.obs[rows]), lie.inverse(frame_b))
        move = lie.adjoint(frame_b)
        own = move @ covariances[at][rows] @ np.swapaxes(move, -1, -2)
        back = block.b[rows] < block.a[rows]
        turn = lie.adjoint(said)
        own = np.where(back[:, None, None], turn @ own @ np.swapaxes(turn, -1, -2), own)
        said = np.where(back.reshape(-1, *[1] * (said.ndim - 1)), lie.inverse(said), said)
        blocks, steps = step_of[:, early[rows]]
        for k, (b, s) in enumerate(zip(blocks.tolist(), steps.tolist(), strict=True)):
            gap = lie.local(problem.blocks[b].obs[s], said[k])
            size = gap @ np.linalg.solve(covariances[b][s] + own[k], gap)
            if size > limit:
                against.append((at, int(rows[k])))
                before = found.get((b, s))
                if before is None or gap @ gap > before @ before:
                    found[b, s] = gap
    keys = np.array(list(found), dtype=np.int64).reshape(-1, 2)
    apart = np.array(list(found.values())).reshape(-1, lie.dof)
    other = np.array(against, dtype=np.int64).reshape(-1, 2)
    return Disputes(keys[:, 0], keys[:, 1], apart, other[:, 0], other[:, 1])

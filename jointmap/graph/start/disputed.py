"""Steps in dispute on their way into start values: loose odometry and a closure in its stead."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.disputes import any_between_neighbours, disputed_steps
from jointmap.graph.noise import Noise, block_covariance
from jointmap.graph.problem import Problem
from jointmap.graph.start.chunks import HEADING_LIMIT
from jointmap.graph.start.gather import Material, Met

Floats = NDArray[np.float64]


def with_alternatives(problem: Problem, noise: Noise, material: Material) -> Material:
    """Make the odometry of disputed steps one closure among others.

    The step itself becomes as uncertain as the two statements are apart, and enough for a chunk to
    end there: within a chunk nothing could put a wrong step right.
    """
    if not any_between_neighbours(problem):
        return material
    empty = np.zeros((0, 0, 0))
    kinds = ("odometry", "closure")
    covariances = [
        block_covariance(b, problem, noise) if b.kind in kinds else empty for b in problem.blocks
    ]
    disputes = disputed_steps(problem, covariances)
    if not len(disputes.row):
        return material
    pairs = list(zip(disputes.block.tolist(), disputes.row.tolist(), strict=True))
    later = np.array([problem.blocks[b].b[s] for b, s in pairs])
    pose = np.stack([problem.blocks[b].obs[s] for b, s in pairs])
    covariance = np.stack([covariances[b][s] for b, s in pairs])
    linear = slice(0, 2) if problem.dimension == 2 else slice(3, 6)
    angular = slice(2, 3) if problem.dimension == 2 else slice(0, 3)
    turn, shift = material.steps.turn_variance.copy(), material.steps.shift_variance.copy()
    turn[later] += (disputes.apart[:, angular] ** 2).sum(axis=1) + 4.0 * HEADING_LIMIT**2
    shift[later] += (disputes.apart[:, linear] ** 2).sum(axis=1)
    steps = replace(material.steps, turn_variance=turn, shift_variance=shift)
    earlier = np.array([problem.blocks[b].a[s] for b, s in pairs])
    met = _joined(material.met, earlier, later, pose, covariance, problem.dimension)
    return replace(material, steps=steps, met=met)


def _joined(
    met: Met,
    a: NDArray[np.int64],
    b: NDArray[np.int64],
    pose: Floats,
    covariance: Floats,
    dimension: int,
) -> Met:
    n, one = len(a), frames.group(dimension).identity(len(a))
    nothing = np.full((n, 6), np.nan)
    true = np.ones(n, dtype=bool)
    burst = int(met.burst.max(initial=-1)) + 1 + np.arange(n)
    added = Met(a, b, one, one, pose, covariance, nothing, nothing, true, true, burst)
    columns = Met.__dataclass_fields__
    return Met(*(np.concatenate([getattr(met, c), getattr(added, c)]) for c in columns))

"""Kernels where a closure contradicts a step of the odometry.

The convex kernel of odometry never gives a step up: against one closure that says otherwise, which
a redescending kernel does give up, the step would always win. In dispute both get the same kernel,
after a first solve in which neither of them pulls, so that the rest of the survey chooses.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.disputes import Disputes, any_between_neighbours, disputed_steps
from jointmap.graph.problem import Problem
from jointmap.solve.kernels import RobustLoss

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

#: Weights of a step in dispute and of the closure against it while neither may pull. Where nothing
#: else tells, the odometry stands.
_STEP_SHARE, _CLOSURE_SHARE = 1e-8, 1e-11


@dataclass(frozen=True)
class Mixed:
    """One kernel for the rows of a part in ``mask`` (n,), another for the rest."""

    mask: Bools
    inside: RobustLoss
    outside: RobustLoss

    def loss(self, norm: Floats, d: int) -> Floats:
        """Loss rho (n,) of whitened norms (n,) of all rows of the part."""
        return np.where(self.mask, self.inside.loss(norm, d), self.outside.loss(norm, d))

    def weight(self, norm: Floats, d: int) -> Floats:
        """Weight rho'(x) / x (n,) of whitened norms (n,) of all rows of the part."""
        return np.where(self.mask, self.inside.weight(norm, d), self.outside.weight(norm, d))


@dataclass(frozen=True)
class Undecided:
    """A kernel that leaves steps in dispute to the rest of the survey."""

    kernel: RobustLoss

    def loss(self, norm: Floats, d: int) -> Floats:
        """Loss rho (n,) of whitened norms (n,)."""
        return self.kernel.loss(norm, d)

    def weight(self, norm: Floats, d: int) -> Floats:
        """Weight rho'(x) / x (n,) of whitened norms (n,)."""
        return self.kernel.weight(norm, d)


@dataclass(frozen=True)
class Loose:
    """No kernel, but next to no weight: what is otherwise undetermined stays where it is said."""

    share: float

    def loss(self, norm: Floats, d: int) -> Floats:
        """Loss rho (n,) of whitened norms (n,)."""
        return np.asarray(0.5 * self.share * np.square(norm))

    def weight(self, norm: Floats, d: int) -> Floats:
        """Weight rho'(x) / x (n,) of whitened norms (n,)."""
        return np.full(np.shape(norm), self.share)


def disputes_of(problem: Problem, whiten: tuple[Floats, ...]) -> Disputes:
    """Steps in dispute under the noise in force, from the whitening of every block."""
    kinds = ("odometry", "closure")
    covariances = [
        np.asarray(np.linalg.inv(np.swapaxes(w, 1, 2) @ w)) if b.kind in kinds else w
        for b, w in zip(problem.blocks, whiten, strict=True)
    ]
    return disputed_steps(problem, covariances)


def with_disputes(
    problem: Problem,
    whiten: tuple[Floats, ...],
    used: tuple[Bools, ...],
    kernel: RobustLoss,
    kernels: tuple[RobustLoss | None, ...],
) -> tuple[RobustLoss | None, ...]:
    """Kernels of all blocks, with ``kernel`` for steps in dispute; while it is undecided, neither
    the steps nor the closures against them pull.
    """
    if not any_between_neighbours(problem):
        return kernels
    disputes = disputes_of(problem, whiten)
    undecided = isinstance(kernel, Undecided)
    steps: RobustLoss = Loose(_STEP_SHARE) if undecided else kernel
    out = _mixed(list(kernels), problem, used, disputes.block, disputes.row, steps)
    if undecided:
        at, row = disputes.closure_block, disputes.closure_row
        out = _mixed(out, problem, used, at, row, Loose(_CLOSURE_SHARE))
    return tuple(out)


def _mixed(
    kernels: list[RobustLoss | None],
    problem: Problem,
    used: tuple[Bools, ...],
    block: Ints,
    row: Ints,
    inside: RobustLoss,
) -> list[RobustLoss | None]:
    out = list(kernels)
    for at in np.unique(block).tolist():
        mask = np.zeros(problem.blocks[at].n, dtype=bool)
        mask[row[block == at]] = True
        plain = kernels[at]
        if plain is not None:
            out[at] = Mixed(mask[used[at]], inside, plain)
    return out

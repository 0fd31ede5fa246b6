"""Graduated non-convexity as a loop of solves.

Odometry counts as known to be right while the schedule runs (without it nothing would hold a robot
together) and gets its own kernel back in the last solve, which is that of the truncated loss itself
from where the schedule ended.

References
----------
Yang, H., Antonante, P., Tzoumas, V., Carlone, L. (2020). Graduated non-convexity for robust spatial
perception: from non-minimal solvers to global outlier rejection. IEEE Robotics and Automation
Letters 5(2), 1127-1134.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import State
from jointmap.solve import gnc
from jointmap.solve.kernels import RobustLoss
from jointmap.solve.optimise import Optimised
from jointmap.solve.system import System, whitened_norm, whitened_residual

Floats = NDArray[np.float64]

#: Stages at most; the schedule starts at 1e-6 at the lowest and is sharp to 1e-4 before 1e4.
MAX_STAGES = 80

Solve = Callable[[System, State], Optimised]


def graduate(system: System, start: State, solve: Solve) -> Optimised:
    """Solve a system whose measurements carry :class:`~jointmap.solve.gnc.Graduated` kernels.

    Parameters
    ----------
    system : System
        Rows with such a kernel are graduated, all others are taken as right.
    start : State
        Where the first solve, with all weights 1, starts.
    solve : callable
        Solves a system from a state; its own tolerances rule every stage.

    Returns
    -------
    Optimised
        The solution under the truncated loss.
    """
    state = solve(_with(system, None), start).state
    ratio = _ratios(system, state)
    mu = gnc.initial_mu("truncated", ratio, 1.0)
    for _ in range(MAX_STAGES):
        if mu is None:
            break
        state = solve(_with(system, mu), state).state
        ratio = _ratios(system, state)
        if gnc.finished("truncated", mu, gnc.weights("truncated", ratio, 1.0, mu)):
            break
        mu = gnc.next_mu("truncated", mu)
    return solve(system, state)


def _with(system: System, mu: float | None) -> System:
    """The system at one stage (None: all weights 1)."""

    def stage(kernel: RobustLoss | None) -> RobustLoss | None:
        if mu is None or not isinstance(kernel, gnc.Graduated):
            return None
        return replace(kernel, mu=mu)

    return replace(system, parts=tuple(replace(p, kernel=stage(p.kernel)) for p in system.parts))


def _ratios(system: System, state: State) -> Floats:
    """Squared whitened norms (n,) of all graduated rows in units of their limits."""
    out = [np.zeros(0)]
    for part in system.parts:
        if isinstance(part.kernel, gnc.Graduated):
            norm = whitened_norm(whitened_residual(system, part, state))
            out.append(norm**2 / part.kernel.limit(part.whiten.shape[1]))
    return np.concatenate(out)

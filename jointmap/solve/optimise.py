"""Robust Gauss-Newton with Levenberg-Marquardt damping where a step fails.

Iteratively reweighted least squares (Holland & Welsch 1977): at each state the kernel's weights
enter the linear system; GTSAM eliminates it. Where a step raises the robust objective and is
mostly a motion of the whole, that motion is applied exactly (:mod:`jointmap.solve.rigid`); if it
still does, it is repeated with Marquardt's diagonal damping (Marquardt 1963).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import gtsam
import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import State
from jointmap.solve.linear import LinearGraph, eliminate, step, system_order
from jointmap.solve.rigid import common_motion, move, without
from jointmap.solve.system import LinearisedSystem, System, cost, linearise_system, retract

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

Report = Callable[[str], None]

#: A step is mostly a motion of the whole when what remains of it is below this share.
MOSTLY_COMMON = 0.25
#: A step whose coordinates are this share of their standard deviations (rms) changes nothing.
REST_SIGMA = 1e-4


@dataclass(frozen=True)
class OptimiseSettings:
    """When to stop: relative decrease of the objective below ``relative`` in two steps running,
    or no step of a variable above ``step`` (metres, radians); at most ``iterations``.

    ``rest``: also stop where an undamped step would move nothing by more than this (metres,
    radians), nor by more than REST_SIGMA standard deviations (root mean square over the unknowns).
    That step is left out, so that its elimination is exactly that of the result; 0: go on.
    """

    iterations: int = 50
    relative: float = 1e-7
    step: float = 1e-7
    rest: float = 0.0
    first_damping: float = 1e-5
    last_damping: float = 1e8


@dataclass(frozen=True)
class Optimised:
    """Outcome: the best state, its objective, how it went, and the ordering for further use.

    ``last`` holds the linearisation at the state and its elimination, where ``rest`` ended the
    solve.
    """

    state: State
    cost: float
    iterations: int
    converged: bool
    ordering: gtsam.Ordering
    start_cost: float
    last: tuple[LinearisedSystem, gtsam.GaussianBayesTree] | None = None


def optimise(
    system: System,
    start: State,
    settings: OptimiseSettings | None = None,
    ordering: gtsam.Ordering | None = None,
    report: Report | None = None,
) -> Optimised:
    """Minimise the robust objective of a system from a start.

    Raises
    ------
    IndeterminateError
        The undamped system is singular at the start and damping does not mend it.
    """
    settings = settings or OptimiseSettings()
    state, damping, small = start, 0.0, 0
    first = now = np.inf
    converged, last = False, None
    iteration = 0
    for iteration in range(1, settings.iterations + 1):
        lin = linearise_system(system, state)
        now = lin.cost
        first = now if iteration == 1 else first
        if ordering is None:
            ordering = system_order(system, lin.graph)
        damped = damping
        moved, new, damping, size, tree = _descend(system, state, lin, ordering, damping, settings)
        if report is not None:
            report(f"iteration {iteration}: objective {min(new, now):.6g}")
        if moved is None:
            # No damping helps any more: a stationary point up to rounding, or a failure.
            converged = size < 1e3 * settings.step or now < 1e-12
            break
        plain = damped == damping == 0.0
        if tree is not None and plain and _negligible(now - new, size, settings.rest, system):
            converged, last = True, (lin, tree)
            break
        state = moved
        small = small + 1 if now - new <= settings.relative * (now + 1e-12) else 0
        now = new
        if size < settings.step or (small >= 2) or (small >= 1 and damping == 0.0):
            converged = True
            break
    assert ordering is not None
    return Optimised(state, now, iteration, converged, ordering, first, last)


def _negligible(gain: float, size: float, rest: float, system: System) -> bool:
    """Whether a step of this gain in the objective and largest move is not worth taking.

    Half the squared length of a Gauss-Newton step in standard deviations is its gain.
    """
    return size < rest and gain < 0.5 * REST_SIGMA**2 * float(system.layout.offset[-1])


def _descend(
    system: System,
    state: State,
    lin: LinearisedSystem,
    ordering: gtsam.Ordering,
    damping: float,
    settings: OptimiseSettings,
) -> tuple[State | None, float, float, float, gtsam.GaussianBayesTree | None]:
    """One accepted step: new state, its objective, the damping to go on with, largest move.

    Last the elimination that gave the step.
    """
    graph, now = lin.graph, lin.cost
    diagonal: Floats | None = None
    size = np.inf
    while True:
        used = graph
        if damping > 0.0:
            if diagonal is None:
                diagonal = hessian_diagonal(graph, system.layout.offset[-1])
            used = LinearGraph(gtsam.GaussianFactorGraph())
            used.graph.push_back(graph.graph)
            used.damp(system.layout.dims, np.sqrt(damping * diagonal))
        try:
            tree = eliminate(used, ordering)
            delta = step(tree)
            ok = bool(np.isfinite(delta).all())
        except Exception:
            if damping >= 1e-2:
                raise
            ok = False
        if ok:
            motion = common_motion(system, lin.gauge, state, delta)
            rest = without(system, state, delta, motion)
            size = float(np.abs(rest).max(initial=0.0))
            whole = float(np.abs(delta).max(initial=0.0))
            for exact in (False, True) if size < MOSTLY_COMMON * whole else (False,):
                if exact:
                    moved = move(system, retract(system, state, rest), motion)
                else:
                    moved = retract(system, state, delta)
                new = cost(system, moved)
                if new <= now * (1 + 1e-12) + 1e-12:
                    smaller = damping * 0.1
                    left = 0.0 if smaller < settings.first_damping else smaller
                    return moved, new, left, size, tree
        damping = max(damping * 10.0, settings.first_damping)
        if damping > settings.last_damping or size < 1e-12:
            return None, now, damping, size, None


def hessian_diagonal(graph: LinearGraph, n: int) -> Floats:
    """Diagonal (n,) of the information matrix, lifted where it is almost nothing."""
    _, j, value = _triplets(graph)
    out = np.bincount(j, weights=value**2, minlength=n + 1)[:n]
    return np.asarray(np.maximum(out, 1e-6 * max(float(np.median(out)), 1e-12)))


def _triplets(graph: LinearGraph) -> tuple[Ints, Ints, Floats]:
    i, j, value = np.asarray(graph.graph.sparseJacobian_())
    return i.astype(np.int64) - 1, j.astype(np.int64) - 1, value

"""Relative pose errors: over path lengths and times, and between robots.

With ``B_ij`` the relative pose by the reference and ``O_ij`` by the estimate the error is
``E = B_ij^-1 O_ij``, its translation and its rotation vector. A reference that is off by body
tangents e_i and e_j changes it to first order in these, whatever E:

    E -> exp(f) E,   f = e_j - Ad(B_ij^-1) e_i.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.frames import Group, skew
from jointmap.grade.kernels import relative_draws, turned_draws
from jointmap.grade.match import Matched
from jointmap.grade.stage import Stage

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Path lengths (m) and times (s) that are tried.
LENGTHS_M = (1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 200.0, 500.0, 1000.0, 2000.0, 5000.0)
TIMES_S = (1.0, 2.0, 5.0, 10.0, 30.0, 60.0, 120.0, 300.0, 600.0, 1800.0)
#: Fewest independent segments of the team that make a length worth printing.
FEWEST = 6
#: Segments per robot and length at most; they overlap anyway.
MOST = 300
#: Lengths and times that are printed at most, evenly from the short to the long ones.
MOST_SIZES = 5


@dataclass(frozen=True)
class Segments:
    """Pairs of matched instants: ``start``, ``end`` (p,), ``robot`` (p,) of the start.

    ``kind`` ``length_m``, ``time_s``, ``between`` or ``end``, ``size`` the length or time;
    ``independent`` by robot: how many fit into the run without overlap.
    """

    kind: str
    size: float
    start: Ints
    end: Ints
    robot: Ints
    independent: dict[int, int]


@dataclass(frozen=True)
class RelativeErrors:
    """Translation (p, d) and rotation (p, 1 or 3) errors, and the drawn ones of the reference."""

    place: Floats
    turn: Floats
    place_draws: Floats
    turn_draws: Floats


def relative_errors(
    stage: Stage, start: Matched, end: Matched, *, estimate: bool = True
) -> RelativeErrors:
    """Errors of pairs: instants of ``start`` and ``end`` side by side."""
    g = stage.group
    between = g.between(start.reference, end.reference)
    error = g.between(between, g.between(start.estimate, end.estimate))
    back = g.adjoint(g.inverse(between))
    f = relative_draws(stage.posterior.errors, start.row, end.row, back)
    return _errors(g, error, f)


def _errors(g: Group, error: Floats, f: Floats) -> RelativeErrors:
    place = g.translation(error)
    xi = g.log(error)
    if g.dim == 2:
        turned = np.stack([-place[:, 1], place[:, 0]], axis=1).astype(f.dtype)
        place_draws = f[..., :2] + f[..., 2:] * turned[None]
        return RelativeErrors(place, xi[:, 2:], place_draws, f[..., 2:])
    # w x p = -skew(p) w
    moved = turned_draws(-skew(place), np.ascontiguousarray(f[..., :3]))
    return RelativeErrors(place, xi[:, :3], f[..., 3:] + moved, f[..., :3])


def by_length(stage: Stage, matched: Matched) -> list[Segments]:
    """Segments over path lengths of the reference, started evenly in path, not in time.

    A length is taken when the team has at least ``FEWEST`` independent segments of it and it is
    some four times what a robot goes between instants.
    """
    path = stage.path_m[matched.row]
    return _segments(stage, matched, path, "length_m", LENGTHS_M)


def by_time(stage: Stage, matched: Matched) -> list[Segments]:
    """The same over times."""
    t_s = stage.instants_s[stage.instant[matched.row]]
    return _segments(stage, matched, t_s, "time_s", TIMES_S)


def _segments(
    stage: Stage, matched: Matched, along: Floats, kind: str, sizes: tuple[float, ...]
) -> list[Segments]:
    robot = stage.located.robot[matched.row]
    out = []
    pieces = [(r, np.flatnonzero(robot == r)) for r in np.unique(robot)]
    steps = [np.median(np.diff(along[rows])) for _, rows in pieces if len(rows) > 1]
    finest = 4.0 * max([float(s) for s in steps] or [0.0])
    for size in sizes:
        if size < finest:
            continue
        starts, ends, owner, independent = [], [], [], {}
        for r, rows in pieces:
            s = along[rows]
            total = float(s[-1] - s[0]) if len(s) else 0.0
            fitting = int(total // size)
            if fitting < 1:
                continue
            independent[int(r)] = fitting
            wanted = np.linspace(s[0], s[-1] - size, min(MOST, max(1, len(rows))))
            begin = np.unique(np.clip(np.searchsorted(s, wanted), 0, len(s) - 1))
            finish = np.clip(np.searchsorted(s, s[begin] + size), 0, len(s) - 1)
            # Nothing is stretched: a segment that a gap makes much longer is none of this size.
            good = np.abs(s[finish] - s[begin] - size) <= 0.25 * size
            part = stage.located.component[matched.row[rows]]
            good &= part[finish] == part[begin]
            starts.append(rows[begin[good]])
            ends.append(rows[finish[good]])
            owner.append(np.full(int(good.sum()), r))
        if sum(independent.values()) < FEWEST or not starts:
            continue
        made = Segments(
            kind,
            size,
            np.concatenate(starts),
            np.concatenate(ends),
            np.concatenate(owner),
            independent,
        )
        if len(made.start):
            out.append(made)
    kept = np.unique(np.linspace(0, len(out) - 1, min(MOST_SIZES, len(out))).astype(int))
    return [out[k] for k in kept]


def between_robots(stage: Stage, matched: Matched, most: int = 300) -> Segments:
    """Pairs of robots at the same instants, at most ``most`` instants, evenly spread."""
    robot, instant = stage.located.robot[matched.row], stage.instant[matched.row]
    chosen = np.unique(instant)
    chosen = chosen[np.unique(np.linspace(0, len(chosen) - 1, min(most, len(chosen))).astype(int))]
    table = np.full((len(stage.robots), len(stage.instants_s)), -1)
    table[robot, instant] = np.arange(len(robot))
    starts, ends = [], []
    for a in range(len(stage.robots)):
        for b in range(a + 1, len(stage.robots)):
            both = chosen[(table[a, chosen] >= 0) & (table[b, chosen] >= 0)]
            both = both[
                stage.located.component[matched.row[table[a, both]]]
                == stage.located.component[matched.row[table[b, both]]]
            ]
            starts.append(table[a, both])
            ends.append(table[b, both])
    start = np.concatenate(starts) if starts else np.zeros(0, np.int64)
    end = np.concatenate(ends) if ends else np.zeros(0, np.int64)
    return Segments("between", 0.0, start, end, robot[start], {})


def ends(stage: Stage, matched: Matched) -> Segments:
    """First and last graded instant of every robot; ``size`` is not used."""
    robot = stage.located.robot[matched.row]
    first = [int(np.flatnonzero(robot == r)[0]) for r in np.unique(robot)]
    last = [int(np.flatnonzero(robot == r)[-1]) for r in np.unique(robot)]
    start, end = np.array(first, np.int64), np.array(last, np.int64)
    return Segments("end", 0.0, start, end, robot[start], {})

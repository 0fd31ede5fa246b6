"""What a singular system leaves undetermined: by name, and the ties that fail to hold it.

The null space of the information matrix is found by inverse iteration, since the variable at which
an elimination stops may be a neighbour of the one that is loose. A loose stretch of a trajectory
moves as a whole against the rest: the rows between the two do not place it (one bearing to one
landmark, ranges between two robots that met once). Without them it is a component of its own.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.graph.problem import Problem, State
from jointmap.solve.layout import Layout
from jointmap.solve.system import System, linearise_system
from jointmap.trust.elimination import loose_keys

Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Share of the largest movement at which a variable counts as moving: a turn of one radian about a
#: point a kilometre away, squared.
MOVES = 1e-6
#: Names listed at most.
_MOST = 3


@dataclass(frozen=True)
class Loose:
    """The loose variables of a system.

    ``words`` names them; ``links`` (k,) are tracks, ``rows`` per block of the problem (n,) bool the
    measurements, that tie them to the rest without placing them.
    """

    words: str
    links: Ints
    rows: tuple[Bools, ...]

    @property
    def cuttable(self) -> bool:
        """Whether there is a tie to cut."""
        return bool(len(self.links)) or any(rows.any() for rows in self.rows)


def find_loose(system: System, state: State) -> Loose:
    """The loose variables of a system that an elimination refused, and their ties."""
    graph = linearise_system(system, state).graph.graph
    layout = system.layout
    keys = loose_keys(graph, layout.dims, count=layout.n, least=MOVES)
    words = _words(system.problem, layout, keys)
    loose = np.zeros(layout.n, dtype=bool)
    loose[keys] = True
    poses = loose.copy()
    poses[layout.n_keyframes :] = False
    if not poses.any():
        return Loose(words, np.zeros(0, dtype=np.int64), _sightings_of(system, loose))
    _own_landmarks(system, poses)
    key = layout.key_of_landmark
    links = system.links
    cut = poses[key[links.own]] != poses[key[links.shared]]
    rows = [np.zeros(block.n, dtype=bool) for block in system.problem.blocks]
    for part in system.parts:
        if part.block.kind in ("sighting", "encounter", "closure"):
            rows[part.at][part.index] = poses[part.key_a] != poses[part.key_b]
    return Loose(words, links.track[cut], tuple(rows))


def _sightings_of(system: System, loose: Bools) -> tuple[Bools, ...]:
    """Rows (per block) of landmarks that their own sightings do not place."""
    rows = [np.zeros(block.n, dtype=bool) for block in system.problem.blocks]
    for part in system.parts:
        if part.block.kind == "sighting":
            rows[part.at][part.index] = loose[part.key_b]
    return tuple(rows)


def _own_landmarks(system: System, loose: Bools) -> None:
    """Add landmarks that loose keyframes alone hold to the loose variables, in place."""
    seen, elsewhere = np.zeros(len(loose), dtype=bool), np.zeros(len(loose), dtype=bool)
    for part in system.parts:
        if part.block.kind == "sighting":
            seen[part.key_b] = True
            elsewhere[part.key_b[~loose[part.key_a]]] = True
    key = system.layout.key_of_landmark
    own, shared = key[system.links.own], key[system.links.shared]
    loose |= seen & ~elsewhere
    kept = np.zeros(len(loose), dtype=bool)
    kept[shared[~loose[own]]] = True
    held = np.zeros(len(loose), dtype=bool)
    held[shared[loose[own]]] = True
    loose |= held & ~kept


def _words(problem: Problem, layout: Layout, keys: Ints) -> str:
    """Names of variables: stretches of robots with their survey time, then landmarks."""
    frames, k = problem.keyframes, layout.n_keyframes
    out = []
    for robot, name in enumerate(problem.robots):
        mine = np.sort(keys[(keys < k)][frames.robot[keys[keys < k]] == robot])
        for run in np.split(mine, np.flatnonzero(np.diff(mine) > 1) + 1):
            if len(run) == 1:
                out.append(f"the pose of {name} at {frames.t_s[run[0]]:.3f} s")
            elif len(run):
                first, last = frames.t_s[run[0]], frames.t_s[run[-1]]
                out.append(f"{len(run)} poses of {name} from {first:.3f} to {last:.3f} s")
    if not out:
        out += [_landmark(problem, layout, int(key)) for key in keys[keys >= k]]
    listed = out[:_MOST] + ([f"{len(out) - _MOST} more"] if len(out) > _MOST else [])
    return ", ".join(listed)


def _landmark(problem: Problem, layout: Layout, key: int) -> str:
    at = key - layout.n_keyframes
    if at >= len(layout.landmark_of_key):
        return "a calibration value"
    landmark = int(layout.landmark_of_key[at])
    shared = len(problem.tracks.landmarks)
    if landmark < shared:
        return f"landmark {problem.tracks.landmarks[landmark]}"
    track = landmark - shared
    robot = problem.robots[problem.tracks.robot[track]]
    return f"landmark {problem.tracks.labels[track]} of {robot}"

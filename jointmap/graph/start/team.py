"""Start values of a whole team, from measurements alone.

1. Every run by itself: chunks over which odometry holds are fitted to the growing map of the run
   and relaxed (:mod:`solo`).
2. Runs grow into teams by what they both know: landmarks, meetings, closures; fixes and control
   points tie them to the site (:mod:`merge`).
3. All runs of a team are relaxed together with the landmarks that agree; keyframes, landmarks and
   tags follow (:mod:`joint`, :mod:`spread`).

Runs that nothing ties stay in frames of their own: there is never a made-up link.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph.noise import Noise
from jointmap.graph.problem import Problem
from jointmap.graph.start import features as collect
from jointmap.graph.start.align import form_of
from jointmap.graph.start.disputed import with_alternatives
from jointmap.graph.start.doubt import feature_covariance
from jointmap.graph.start.gather import Material, assumed_noise, gather
from jointmap.graph.start.joint import Joined, join_teams
from jointmap.graph.start.merge import Material as LinkMaterial
from jointmap.graph.start.merge import Teams, UnitLink, grow
from jointmap.graph.start.solo import Solo, solve_alone
from jointmap.graph.start.spread import keyframe_poses, track_points, track_turns

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Name of the site frame in the report of links.
SITE = "site"
#: Meetings and closures of two robots within the same stretch of this length count once (s).
_OCCASION_S = 5.0


@dataclass(frozen=True)
class StartLink:
    """One link that was made between two robots (or a robot and the site).

    ``kind`` is what most of its support is made of; ``agreed`` of ``offered`` shared landmarks,
    meetings, closures agree, with weight ``support``; ``runner_up`` is the weight of the best
    contradicting transform, ``ambiguous`` whether that is nearly as good; ``accidents`` how many
    such agreements chance alone would make.
    """

    robot_a: str
    robot_b: str
    kind: str
    agreed: int
    offered: int
    support: float
    runner_up: float
    accidents: float
    ambiguous: bool


@dataclass(frozen=True)
class StartResult:
    """Start values.

    Attributes
    ----------
    poses : (K, *shape)
        Keyframes, each in the frame of its component.
    points : (T, dim)
        Landmark of each track in the frame of its robot's component, NaN where undetermined.
    turns : (T, dim, dim) or None
        Orientation of tags, NaN where none was seen; None when no track is oriented.
    track_accepted : (T,)
        Tracks that place the shared landmark they claim where the others of its component do.
    component_of_robot : (R,)
        Connected component, numbered by first robot.
    component_of_keyframe : (K,)
        Differs from its robot's only where nothing ties the parts of a broken run.
    sited : (components,)
        Whether the component stands in the site frame (fixes, control points).
    map_T_odom : (R, *shape)
        Pose of each robot's odometry frame in its component, at its first keyframe.
    odometry_scale : (R, 2)
        Motion / odometry of translation and rotation as found (1 where it could not be told).
    links, notes
        What was tied by what, and what the user should know.
    """

    poses: Floats
    points: Floats
    turns: Floats | None
    track_accepted: Bools
    component_of_robot: Ints
    component_of_keyframe: Ints
    sited: Bools
    map_T_odom: Floats
    odometry_scale: Floats
    links: tuple[StartLink, ...]
    notes: tuple[str, ...]


def initial_state(problem: Problem, noise: Noise | None = None, seed: int = 0) -> StartResult:
    """Return start values for every variable of a problem.

    Parameters
    ----------
    problem : Problem
    noise : Noise
        Terms in force; None takes the documented defaults.
    seed : int
        Of the random samples that cross-check links.
    """
    noise = assumed_noise(problem) if noise is None else noise
    material = with_alternatives(problem, noise, gather(problem, noise))
    solo = solve_alone(problem, material)
    teams = grow(_link_material(problem, material, solo), _apart(problem, solo), seed)
    joined = join_teams(problem, material, solo, teams)
    return _result(problem, material, solo, teams, joined)


def _apart(problem: Problem, solo: Solo) -> Teams:
    """Every unit, and the site, in its own group."""
    lie = frames.group(problem.dimension)
    count = solo.units + 1
    return Teams(np.arange(count), lie.identity(count), np.zeros((count, lie.dof, lie.dof)))


def landmark_keys(problem: Problem) -> Ints:
    """Return what each track (T,) is compared by: its claim, or itself within its own robot."""
    tracks = problem.tracks
    own = len(tracks.landmarks) + np.arange(len(tracks.claim))
    return np.where((tracks.claim >= 0) & ~tracks.rejected, tracks.claim, own)


def _link_material(problem: Problem, material: Material, solo: Solo) -> LinkMaterial:
    gatherer = collect.Collector(problem.dimension)
    absolute, site = material.absolute, solo.units
    collect.add_landmarks(
        gatherer,
        solo.point_unit,
        landmark_keys(problem)[solo.point_track],
        solo.points,
        absolute.control,
        absolute.control_position,
        absolute.control_sigma,
        site,
    )
    met = material.met
    moment = np.floor(problem.keyframes.t_s / _OCCASION_S).astype(np.int64)
    collect.add_meetings(gatherer, solo.condensed, met, solo.unit, solo.poses, moment)
    collect.add_closures(gatherer, solo.condensed, met, solo.unit, solo.poses, moment)
    collect.add_fixes(gatherer, solo.condensed, absolute, solo.unit, solo.poses, site)
    features, pairings = gatherer.done()
    doubt = feature_covariance(
        features, solo.net, solo.poses, solo.points, solo.unit, solo.point_unit
    )
    doubt += [(np.zeros(0, np.int64), np.zeros((0, 0, problem.dimension, problem.dimension)))] * (
        site + 1 - len(doubt)
    )
    form = form_of(problem.dimension, problem.gravity_aligned)
    return LinkMaterial(features, pairings, doubt, form)


def _result(
    problem: Problem, material: Material, solo: Solo, teams: Teams, joined: Joined
) -> StartResult:
    lie = frames.group(problem.dimension)
    poses = keyframe_poses(solo.chunks, joined.poses, solo.unit, problem.dimension)
    unit_of_keyframe = solo.unit[solo.chunks.of_keyframe]
    poses = _anchored(problem, solo, teams, poses, unit_of_keyframe)
    tracks = len(problem.tracks.robot)
    found = track_points(material.sighted, poses, tracks, problem.dimension)
    points = np.where(found.determined[:, None], found.position, np.nan)
    oriented = bool(problem.tracks.oriented.any())
    turns = track_turns(material.sighted, poses, tracks, problem.dimension) if oriented else None
    component, sited = _components(problem, solo, teams)
    first = problem.keyframes.first[:-1]
    of_keyframe = component[unit_of_keyframe]
    return StartResult(
        poses=poses,
        points=points,
        turns=turns,
        track_accepted=joined.accepted,
        component_of_robot=_main_component(problem, of_keyframe),
        component_of_keyframe=of_keyframe,
        sited=sited,
        map_T_odom=lie.compose(poses[first], lie.inverse(problem.dead_reckoning[first])),
        odometry_scale=solo.scale.T,
        links=tuple(_named(problem, solo, link) for link in teams.links),
        notes=_notes(problem, solo, teams, of_keyframe),
    )


def _anchored(problem: Problem, solo: Solo, teams: Teams, poses: Floats, unit: Ints) -> Floats:
    """Let every group that is not sited start at its first keyframe's dead-reckoned pose."""
    lie = frames.group(problem.dimension)
    poses = poses.copy()
    group = teams.group[unit]
    for g in np.unique(group):
        if g == teams.group[-1]:
            continue
        mine = np.flatnonzero(group == g)
        move = lie.compose(problem.dead_reckoning[mine[0]], lie.inverse(poses[mine[0]]))
        poses[mine] = lie.compose(move, poses[mine])
    return poses


def _components(problem: Problem, solo: Solo, teams: Teams) -> tuple[Ints, Bools]:
    """Return the component of each unit, numbered by first unit, and which are sited."""
    groups, first = np.unique(teams.group[: solo.units], return_index=True)
    order = groups[np.argsort(first)]
    number = np.full(solo.units + 1, -1)
    number[order] = np.arange(len(order))
    return number[teams.group[: solo.units]], order == teams.group[-1]


def _main_component(problem: Problem, of_keyframe: Ints) -> Ints:
    """Return for each robot the component that holds most of its keyframes."""
    first = problem.keyframes.first
    return np.array(
        [
            np.argmax(np.bincount(of_keyframe[first[r] : first[r + 1]], minlength=1))
            for r in range(len(problem.robots))
        ],
        dtype=np.int64,
    )


def _named(problem: Problem, solo: Solo, link: UnitLink) -> StartLink:
    robot_of_unit = np.zeros(solo.units, dtype=np.int64)
    robot_of_unit[solo.unit] = solo.chunks.robot
    names = [problem.robots[r] for r in robot_of_unit] + [SITE]
    return StartLink(
        names[link.unit_a],
        names[link.unit_b],
        link.kind,
        link.agreed,
        link.offered,
        link.weight,
        link.runner_up,
        link.accidents,
        link.ambiguous,
    )


def _notes(problem: Problem, solo: Solo, teams: Teams, of_keyframe: Ints) -> tuple[str, ...]:
    notes = []
    for link in (_named(problem, solo, x) for x in teams.links):
        if link.ambiguous:
            notes.append(
                f"the link between {link.robot_a} and {link.robot_b} is ambiguous: support "
                f"{link.support:g}, a contradicting reading has {link.runner_up:g}"
            )
    for robot, (translation, rotation) in zip(problem.robots, solo.scale.T, strict=True):
        if abs(translation - 1.0) > 0.01 or abs(rotation - 1.0) > 0.01:
            notes.append(
                f"{robot}: the motion is {translation:.3f} times the odometry's translation and "
                f"{rotation:.3f} times its rotation (used for start values)"
            )
    first = problem.keyframes.first
    for r, robot in enumerate(problem.robots):
        if len(np.unique(of_keyframe[first[r] : first[r + 1]])) > 1:
            notes.append(f"{robot}: nothing ties the parts of its broken odometry together")
    return tuple(notes)

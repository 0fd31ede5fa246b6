"""One simulated survey in memory: world, team, motion and everything that is measured."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from jointmap.errors import SettingsError
from jointmap.simulate.absolute import (
    ClosureLog,
    Columns,
    log_fixes,
    recognise_places,
    survey_control,
)
from jointmap.simulate.associations import AssociationTable, associate
from jointmap.simulate.clocks import LogClock
from jointmap.simulate.motion import Motion, move
from jointmap.simulate.observe import (
    Observed,
    Scene,
    merge,
    report,
    see_plates,
    see_robots,
    sensor_frames,
)
from jointmap.simulate.odometry import OdometryLog, log_odometry
from jointmap.simulate.plan import Plan, Plates, hang_plates, make_plan
from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.streams import Streams
from jointmap.simulate.team import RobotSpec, make_team

Ints = NDArray[np.int64]

#: Worlds by name, with their dimension.
WORLDS: Mapping[str, int] = {"quarry-2d": 2, "quarry-3d": 3}


@dataclass(frozen=True)
class Simulation:
    """Everything about one simulated survey, by robot name where robots differ."""

    world: str
    seed: int
    settings: SimulationSettings
    plan: Plan
    plates: Plates
    team: tuple[RobotSpec, ...]
    motions: Mapping[str, Motion]
    clocks: Mapping[str, LogClock]
    odometry: Mapping[str, OdometryLog]
    sightings: Mapping[str, Observed]
    encounters: Mapping[str, Observed]
    fixes: Mapping[str, Columns]
    closures: ClosureLog | None
    control: Columns | None
    associations: AssociationTable

    @property
    def dimension(self) -> int:
        """2 or 3."""
        return WORLDS[self.world]


def build(world: str, settings: SimulationSettings, seed: int) -> Simulation:
    """Simulate a survey without writing it.

    Raises
    ------
    SettingsError
        If the world is unknown or settings do not fit it.
    """
    if world not in WORLDS:
        raise SettingsError(f"world: {world!r} is none of {', '.join(WORLDS)}")
    if seed < 0:
        raise SettingsError(f"seed: {seed} is negative")
    dimension = WORLDS[world]
    streams = Streams(seed)
    plan = make_plan(dimension, settings.landmarks, streams.get("plan", world))
    plates = hang_plates(plan, settings.landmarks, settings.tags, streams.get("plates"))
    team = make_team(dimension, settings, streams)
    motions = {r.name: move(plan, r, k, settings, streams) for k, r in enumerate(team)}
    clocks = {
        r.name: LogClock.starting(
            float(motions[r.name].t_s[0]) - r.lag_s, r.clock_offset_s, r.clock_drift_ppm
        )
        for r in team
    }
    odometry = {
        r.name: log_odometry(motions[r.name], r, clocks[r.name], settings, streams) for r in team
    }
    sightings, encounters = _look(
        Scene(plates, plan.walls(), settings, streams), team, motions, clocks
    )
    seen = {name: _first_met(o.target) for name, o in sightings.items()}
    return Simulation(
        world,
        seed,
        settings,
        plan,
        plates,
        team,
        motions,
        clocks,
        odometry,
        sightings,
        encounters,
        {
            r.name: log_fixes(motions[r.name], r, clocks[r.name], settings, streams)
            for r in team
            if r.name in settings.fixes
        },
        recognise_places(motions, clocks, settings, streams) if settings.closures else None,
        survey_control(plates, settings, streams) if settings.control_points else None,
        associate(seen, plates.names, settings, streams),
    )


def _look(
    scene: Scene,
    team: tuple[RobotSpec, ...],
    motions: Mapping[str, Motion],
    clocks: Mapping[str, LogClock],
) -> tuple[dict[str, Observed], dict[str, Observed]]:
    """Sightings and encounters of every robot."""
    sightings: dict[str, Observed] = {}
    encounters: dict[str, Observed] = {}
    for robot in team:
        others = {k: (motions[o.name], o) for k, o in enumerate(team) if o.name != robot.name}
        plates, robots = [], []
        for sensor in robot.sensors:
            name = (robot.name, sensor.name)
            frames = sensor_frames(motions[robot.name], robot, sensor, clocks[robot.name], scene)
            seen = see_plates(frames, robot, sensor, scene)
            plates.append(report(frames, seen, sensor, scene, "sighting", *name))
            if scene.settings.encounters and others:
                seen = see_robots(frames, others, robot, sensor, scene)
                robots.append(report(frames, seen, sensor, scene, "encounter", *name))
        sightings[robot.name] = merge(plates)
        if robots:
            encounters[robot.name] = merge(robots)
    return sightings, encounters


def _first_met(target: Ints) -> Ints:
    """Each plate once, in the order of its first sighting."""
    plates, first = np.unique(target, return_index=True)
    return plates[np.argsort(first)]

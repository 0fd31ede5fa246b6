"""The four textbook estimators over a planar survey."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from jointmap.errors import SurveyError
from jointmap.graph.clock import SurveyClock
from jointmap.ingest.survey import Survey
from jointmap.simulate.estimators.ekf import Filter, Snapshot
from jointmap.simulate.estimators.motion import increments, noise_of, twists
from jointmap.simulate.estimators.share import join, take_as_measurement, take_by_intersection
from jointmap.simulate.estimators.sightings import Sightings, sightings_of

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

DEAD, LONE, NAIVE, INTERSECTION = "dead-reckoning", "lone-filter", "sharing", "intersection"
#: What each estimator declares of itself.
DECLARED: Mapping[str, tuple[str, str]] = {
    DEAD: ("own", "alone"),
    LONE: ("own", "alone"),
    NAIVE: ("team", "shared-ever"),
    INTERSECTION: ("team", "shared-ever"),
}

Take = Callable[[Filter, Snapshot], None]


@dataclass(frozen=True)
class EstimatorSettings:
    """``output_s`` between reports and ``share_s`` between exchanges, seconds."""

    output_s: float = 0.25
    share_s: float = 5.0


class Report(NamedTuple):
    """One robot's reports: stamps by its clock, poses (n, 3), covariances (n, 3, 3)."""

    t_s: Floats
    pose: Floats
    cov: Floats


@dataclass(frozen=True)
class Output:
    """What one estimator wrote: reports and maps (names, positions, covariances) by robot."""

    name: str
    reports: Mapping[str, Report]
    maps: Mapping[str, Snapshot]


def estimate(survey: Survey, settings: EstimatorSettings | None = None) -> tuple[Output, ...]:
    """Run all four estimators.

    Raises
    ------
    SurveyError
        The survey is not planar.
    """
    if survey.dimension != 2:
        raise SurveyError("the textbook estimators are planar; this survey has three dimensions")
    chosen = settings or EstimatorSettings()
    players = {name: _Player(survey, name, chosen) for name in survey.robots}
    outputs = [_alone(players, DEAD, see=False), _alone(players, LONE, see=True)]
    for name, take in ((NAIVE, take_as_measurement), (INTERSECTION, take_by_intersection)):
        outputs.append(_together(players, name, take, survey.datum_robot, chosen.share_s))
    return tuple(outputs)


class _Player:
    """One robot's log as a list of events."""

    def __init__(self, survey: Survey, name: str, settings: EstimatorSettings) -> None:
        log = survey.robots[name]
        self.clock = SurveyClock(survey)
        self.name = name
        t_s, twist = twists(log)
        self.seen: Sightings = sightings_of(log, survey.associations)
        count = int((t_s[-1] - t_s[0]) / settings.output_s)
        stamps = t_s[0] + settings.output_s * np.arange(count + 1)
        inside = (self.seen.t_s >= t_s[0]) & (self.seen.t_s <= t_s[-1])
        self.first_row = int(np.argmax(inside)) if inside.any() else len(self.seen.t_s)
        rows = self.seen.t_s[inside]
        # Reports come after what was seen at the same stamp.
        self.edges = np.concatenate([[t_s[0]], rows, stamps])
        kind = np.concatenate(
            [[-1], self.first_row + np.arange(len(rows)), np.full(len(stamps), -2)]
        )
        order = np.lexsort((kind == -2, self.edges))
        self.edges, self.kind = self.edges[order], kind[order]
        self.motion, self.cov = increments(t_s, twist, self.edges, noise_of(log))
        self.survey_s = self.clock.survey_time(name, self.edges)


class _Run:
    """One robot's filter on its way through its events."""

    def __init__(self, player: _Player, see: bool) -> None:
        self.player, self.see, self.filter = player, see, Filter()
        self.at, self.joined = 0, True
        self.t: list[float] = []
        self.pose: list[Floats] = []
        self.cov: list[Floats] = []

    def until(self, survey_s: float) -> None:
        """Go through the events up to a survey time."""
        player, f = self.player, self.filter
        while self.at < len(player.edges) and player.survey_s[self.at] <= survey_s:
            k = self.at
            if k:
                f.predict(player.motion[k - 1], player.cov[k - 1])
            row = int(player.kind[k])
            if row >= 0 and self.see:
                seen = player.seen
                f.see(
                    seen.names[seen.target[row]],
                    seen.range_bearing[row],
                    seen.variance[row],
                    seen.mount[row],
                )
            elif row == -2 and self.joined:
                self.t.append(float(player.edges[k]))
                self.pose.append(f.x[:3].copy())
                self.cov.append(f.p[:3, :3].copy())
            self.at += 1

    def report(self) -> Report:
        """Everything reported."""
        n = len(self.t)
        return Report(
            np.array(self.t), np.array(self.pose).reshape(n, 3), np.array(self.cov).reshape(n, 3, 3)
        )


def _alone(players: Mapping[str, _Player], name: str, *, see: bool) -> Output:
    runs = {robot: _Run(player, see) for robot, player in players.items()}
    for run in runs.values():
        run.until(np.inf)
    return _output(name, runs)


def _together(
    players: Mapping[str, _Player], name: str, take: Take, first: str, share_s: float
) -> Output:
    """Filters that exchange landmarks; ``first`` is the robot whose start is the team's frame."""
    runs = {robot: _Run(player, True) for robot, player in players.items()}
    for robot, run in runs.items():
        run.joined = robot == first
    begin = min(p.survey_s[0] for p in players.values())
    end = max(p.survey_s[-1] for p in players.values())
    for now in np.arange(begin + share_s, end + share_s, share_s):
        for run in runs.values():
            run.until(float(now))
        sent = {r: run.filter.snapshot() for r, run in runs.items() if run.joined}
        for robot, run in runs.items():
            others = [s for r, s in sent.items() if r != robot]
            if run.joined:
                for other in others:
                    take(run.filter, other)
                continue
            ranked = sorted(others, key=lambda o: -len(set(o.names) & set(run.filter.names)))
            moved = next((m for o in ranked if (m := join(run.filter, o)) is not None), None)
            if moved is not None:
                run.filter, run.joined = moved, True
    return _output(name, {r: run for r, run in runs.items() if run.joined})


def _output(name: str, runs: Mapping[str, _Run]) -> Output:
    reports = {robot: run.report() for robot, run in runs.items()}
    maps = {robot: run.filter.snapshot() for robot, run in runs.items() if run.see}
    return Output(name, reports, maps)

"""Survey -> Problem: keyframes, integrated odometry, tracks and measurement blocks.

Measurements first say when they need a pose; those instants, thinned and filled, become keyframes;
then every table turns into blocks of rows with equal kind, robot, sensor and components.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from jointmap import frames
from jointmap.graph import blocks as make
from jointmap.graph.clock import SurveyClock, fixed_values
from jointmap.graph.keyframes import choose_instants, join
from jointmap.graph.motion import Motion, odometry_blocks, prepare_motion
from jointmap.graph.problem import Block, Keyframes, Kind, Problem, Tracks, Unusable
from jointmap.graph.tracks import TrackTable
from jointmap.ingest.survey import Observations, Survey

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class BuildSettings:
    """How a survey becomes a graph.

    ``merge_s``: instants this close share a keyframe (their rows are moved to it by odometry).
    ``spacing_s``: neighbouring keyframes are never further apart. ``max_gap_s``: longer stretches
    without odometry rows become weak factors (None: from the log's own rate). ``burst_gap_s``:
    sightings of one target by one sensor that follow each other within it are one burst, which
    ends after ``burst_window_s`` at the latest: rows of a burst share a part of their error.
    """

    merge_s: float = 1e-3
    spacing_s: float = 5.0
    max_gap_s: float | None = None
    burst_gap_s: float = 3.0
    burst_window_s: float = 2.0


def build_problem(
    survey: Survey,
    settings: BuildSettings | None = None,
    calibration: dict[tuple[str, str, str], float] | None = None,
) -> Problem:
    """The factor graph of a survey.

    Parameters
    ----------
    survey : Survey
    settings : BuildSettings
    calibration : values of ``odometry_scale``, ``odometry_turn_scale``, ``odometry_lag_s`` and
        ``lag_s`` by (robot, sensor or '', parameter); they override the survey's own, and the
        user's edits override both.

    Returns
    -------
    Problem
    """
    settings = settings or BuildSettings()
    values = {**(calibration or {}), **fixed_values(survey, "calibration")}
    context = _Context.of(survey, settings, values)
    keyframes = context.keyframes
    tracks = TrackTable(survey)
    all_blocks: list[Block] = []
    unusable: list[Unusable] = []
    notes: list[str] = []
    reckoned, breaks = [], []
    for r in range(len(survey.robots)):
        made = odometry_blocks(context.motions[r], keyframes, r, survey, settings.max_gap_s)
        all_blocks += made.blocks
        notes += made.notes
        reckoned.append(made.poses)
        breaks.append(made.breaks)
    context = replace(context, reckoned=np.concatenate(reckoned))
    for r, log in enumerate(survey.robots.values()):
        tables: tuple[tuple[Observations | None, Kind], ...] = (
            (log.sightings, "sighting"),
            (log.encounters, "encounter"),
        )
        for table, kind in tables:
            if table is None or len(table.t_s) == 0:
                continue
            rows = context.rows(r, table)
            made_rows = make.observation_blocks(context, r, table, rows, kind, tracks)
            all_blocks += made_rows.blocks
            unusable += made_rows.unusable
        if log.fixes is not None and len(log.fixes.t_s):
            made_rows = make.fix_blocks(context, r, log.fixes)
            all_blocks += made_rows.blocks
            unusable += made_rows.unusable
        if survey.dimension == 3 and survey.gravity_aligned:
            all_blocks.append(make.gravity_block(context, r))
    if survey.closures is not None and len(survey.closures.t_a_s):
        made_rows = make.closure_blocks(context, survey.closures)
        all_blocks += made_rows.blocks
        unusable += made_rows.unusable
    frozen = tracks.freeze()
    notes += _idle_edits(survey, frozen)
    if survey.control_points is not None and len(survey.control_points.landmarks):
        all_blocks.append(make.control_block(survey.control_points, frozen, survey.dimension))
    return Problem(
        dimension=survey.dimension,
        gravity_aligned=survey.gravity_aligned,
        robots=tuple(survey.robots),
        keyframes=keyframes,
        tracks=frozen,
        blocks=tuple(all_blocks),
        dead_reckoning=context.reckoned,
        breaks=np.concatenate(breaks),
        unusable=tuple(unusable),
        notes=tuple(notes),
    )


def _idle_edits(survey: Survey, tracks: Tracks) -> list[str]:
    """Edits of associations that no sighting belongs to."""
    names = list(survey.robots)
    used = {(names[r], label) for r, label in zip(tracks.robot, tracks.labels, strict=True)}
    return [
        f"edits.toml: {e.robot} has no usable sighting of {e.label!r}; the edit does nothing"
        for e in survey.edits.associations
        if (e.robot, e.label) not in used
    ]


@dataclass(frozen=True)
class _Context:
    """What every table needs on its way into blocks; satisfies ``blocks.Context``."""

    survey: Survey
    settings: BuildSettings
    clock: SurveyClock
    motions: tuple[Motion, ...]
    keyframes: Keyframes
    reckoned: Floats
    lags: dict[tuple[str, str], float]

    @classmethod
    def of(
        cls, survey: Survey, settings: BuildSettings, values: dict[tuple[str, str, str], float]
    ) -> _Context:
        clock = SurveyClock(survey)
        motions = tuple(prepare_motion(survey, clock, name, values) for name in survey.robots)
        lags = {
            (name, sensor.name): values.get((name, sensor.name, "lag_s"), sensor.lag_s)
            for name, log in survey.robots.items()
            for sensor in log.sensors.values()
        }
        first = cls(
            survey,
            settings,
            clock,
            motions,
            Keyframes(np.zeros(0, int), np.zeros(0), np.zeros(1, int)),
            np.zeros((0, *frames.group(survey.dimension).shape)),
            lags,
        )
        return replace(first, keyframes=first._choose())

    def times(self, robot: int, table: Observations) -> Floats:
        """Survey time (n,) of the instants that a table's rows describe."""
        name = list(self.survey.robots)[robot]
        lag = np.array([self.lags.get((name, s), 0.0) for s in table.sensors] or [0.0])
        return np.asarray(self.clock.survey_time(name, table.t_s) + lag[table.sensor])

    def rows(self, robot: int, table: Observations) -> Bools:
        """Rows (n,) that the user's masks leave."""
        name = list(self.survey.robots)[robot]
        keep = np.ones(len(table.t_s), dtype=bool)
        for mask in self.survey.edits.masks:
            if mask.robot != name:
                continue
            hit = (table.t_s >= mask.t_from_s) & (table.t_s <= mask.t_to_s)
            if mask.sensor is not None:
                codes = [i for i, s in enumerate(table.sensors) if s == mask.sensor]
                hit &= np.isin(table.sensor, codes)
            keep &= ~hit
        return keep

    def _choose(self) -> Keyframes:
        names = list(self.survey.robots)
        needed: list[list[Floats]] = [[] for _ in names]
        for r, log in enumerate(self.survey.robots.values()):
            if log.sightings is not None:
                needed[r].append(self.times(r, log.sightings)[self.rows(r, log.sightings)])
            if log.encounters is not None:
                keep = self.rows(r, log.encounters)
                stamps = self.times(r, log.encounters)[keep]
                needed[r].append(stamps)
                for code, other in enumerate(log.encounters.targets):
                    if other in names:
                        seen = log.encounters.target[keep] == code
                        needed[names.index(other)].append(stamps[seen])
            if log.fixes is not None:
                needed[r].append(self.clock.survey_time(names[r], log.fixes.t_s))
        for robot, stamps in _closure_stamps(self.survey, self.clock):
            needed[robot].append(stamps)
        stamps_of = [
            choose_instants(
                np.concatenate([*needed[r], np.zeros(0)]),
                self.motions[r].span,
                self.settings.merge_s,
                self.settings.spacing_s,
            )
            for r in range(len(names))
        ]
        return join(stamps_of)


def _closure_stamps(survey: Survey, clock: SurveyClock) -> list[tuple[int, Floats]]:
    table = survey.closures
    if table is None:
        return []
    out = []
    names = list(survey.robots)
    for code, name in enumerate(table.robots):
        if name not in names:
            continue
        for side, stamps in ((table.robot_a, table.t_a_s), (table.robot_b, table.t_b_s)):
            out.append((names.index(name), clock.survey_time(name, stamps[side == code])))
    return out

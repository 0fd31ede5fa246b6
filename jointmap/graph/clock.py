"""From each robot's log time to survey time: clocks and lags."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from jointmap.ingest.survey import RobotLog, Survey

Floats = NDArray[np.float64]


def fixed_values(survey: Survey, what: str) -> Mapping[tuple[str, str, str], float]:
    """Values that the user's edits hold: (robot, sensor or '', name) -> value."""
    return {
        (e.robot, e.sensor or "", e.name): e.value for e in survey.edits.values if e.what == what
    }


class SurveyClock:
    """Survey time = log time - offset - drift * (log time - first log time), per robot.

    The first log time of a robot is the earliest stamp in any of its tables.
    """

    def __init__(self, survey: Survey) -> None:
        edits = fixed_values(survey, "clock")
        self._parameters: dict[str, tuple[float, float, float]] = {}
        for name, log in survey.robots.items():
            offset = edits.get((name, "", "offset_s"), log.clock.offset_s)
            drift = edits.get((name, "", "drift_ppm"), log.clock.drift_ppm) * 1e-6
            self._parameters[name] = (offset, drift, first_stamp(log))

    def survey_time(self, robot: str, log_time: Floats) -> Floats:
        """Survey time (n,) of stamps (n,) by a robot's own clock."""
        offset, drift, first = self._parameters[robot]
        return np.asarray(log_time - offset - drift * (log_time - first), dtype=np.float64)

    def log_time(self, robot: str, survey_time: Floats) -> Floats:
        """The inverse of :meth:`survey_time`."""
        offset, drift, first = self._parameters[robot]
        return np.asarray((survey_time + offset - drift * first) / (1.0 - drift))


def first_stamp(log: RobotLog) -> float:
    """Earliest stamp of a robot in any table, by its own clock."""
    stamps = [log.odometry.t_s[:1]]
    stamps += [t.t_s[:1] for t in (log.sightings, log.encounters, log.fixes) if t is not None]
    return float(np.min(np.concatenate(stamps)))

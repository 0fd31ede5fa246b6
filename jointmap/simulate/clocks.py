"""Clocks of robots: survey time = log time - offset - drift * (log time - first log time)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class LogClock:
    """Clock of one robot.

    ``offset_s`` and ``drift`` (seconds per second) as in survey.toml; ``first_log_s`` stamp of the
    robot's first row.
    """

    offset_s: float
    drift: float
    first_log_s: float

    @classmethod
    def starting(cls, first_survey_s: float, offset_s: float, drift_ppm: float) -> LogClock:
        """The clock of a robot whose first row describes the stated survey time."""
        return cls(offset_s, drift_ppm * 1e-6, float(np.round(first_survey_s + offset_s, 6)))

    def log(self, survey_s: Floats) -> Floats:
        """Stamps of survey times."""
        first = self.first_log_s - self.offset_s
        return np.asarray(
            self.first_log_s + (survey_s - first) / (1 - self.drift), dtype=np.float64
        )

    def survey(self, log_s: Floats) -> Floats:
        """Survey times of stamps."""
        return np.asarray(
            log_s - self.offset_s - self.drift * (log_s - self.first_log_s), dtype=np.float64
        )

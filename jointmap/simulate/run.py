"""One simulated survey, from settings to a folder."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from jointmap.atomic import new_folder
from jointmap.simulate.build import Simulation, build
from jointmap.simulate.settings import SimulationSettings
from jointmap.simulate.survey_folder import write_survey


@dataclass(frozen=True)
class SimulationReport:
    """What was written.

    ``counts`` rows by kind; ``wrong_associations`` and ``wrong_share`` of the associations that
    another robot can check.
    """

    out: Path
    world: str
    seed: int
    robots: tuple[str, ...]
    counts: Mapping[str, int]
    wrong_associations: int
    wrong_share: float

    def lines(self) -> list[str]:
        """The report as text."""
        what = ", ".join(f"{n} {kind}" for kind, n in self.counts.items())
        wrong = (
            f"wrong associations: {self.wrong_associations}"
            f" ({100 * self.wrong_share:.1f} % of those that another robot can check)"
        )
        return [
            f"{self.world}, seed {self.seed}: {', '.join(self.robots)}",
            what,
            wrong,
            f"written to {self.out}",
        ]


def simulate(
    world: str,
    out: Path | str,
    settings: SimulationSettings | None = None,
    *,
    seed: int,
    replace: bool = False,
) -> SimulationReport:
    """Simulate a survey with known truth and write its folder.

    Parameters
    ----------
    world : {"quarry-2d", "quarry-3d"}
        Galleries of a disused slate quarry, on one floor or on benches joined by ramps.
    out : path
        Folder to write; :mod:`jointmap.schema` says what it holds. The truth goes to ``truth/``.
    settings : SimulationSettings, optional
        Team, world, sensors and errors.
    seed : int
        Seed; equal seeds and settings give equal files.
    replace : bool
        Replace an existing survey folder.

    Returns
    -------
    SimulationReport

    Raises
    ------
    SettingsError
        If a setting does not fit.
    OutputExistsError
        If ``out`` exists and may not be replaced.
    """
    simulation = build(world, settings or SimulationSettings(), seed)
    with new_folder(out, replace=replace, marker="survey.toml") as folder:
        write_survey(simulation, folder)
    return _report(simulation, Path(out))


def _report(simulation: Simulation, out: Path) -> SimulationReport:
    table = simulation.associations
    _, where, counts = np.unique(table.plate, return_inverse=True, return_counts=True)
    checked = int((counts[where] > 1).sum())
    wrong = int(table.wrong.sum())
    rows = {
        "odometry rows": sum(len(o.log_s) for o in simulation.odometry.values()),
        "sightings": sum(len(o.log_s) for o in simulation.sightings.values()),
        "encounters": sum(len(o.log_s) for o in simulation.encounters.values()),
        "landmarks seen": len(counts),
        "fixes": sum(len(f["t_s"]) for f in simulation.fixes.values()),
        "closures": 0 if simulation.closures is None else len(simulation.closures.wrong),
    }
    return SimulationReport(
        out,
        simulation.world,
        simulation.seed,
        tuple(r.name for r in simulation.team),
        {k: n for k, n in rows.items() if n},
        wrong,
        wrong / checked if checked else 0.0,
    )

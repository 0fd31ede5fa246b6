"""Worlds with known truth: survey folders exactly as TABLES.md says, and the truth beside them."""

from jointmap.simulate.run import WORLDS, Simulation, SimulationReport, build, simulate
from jointmap.simulate.settings import SimulationSettings

__all__ = [
    "WORLDS",
    "Simulation",
    "SimulationReport",
    "SimulationSettings",
    "build",
    "simulate",
]

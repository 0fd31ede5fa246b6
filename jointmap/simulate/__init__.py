"""Worlds with known truth: survey folders exactly as the schema says, and the truth beside them."""

from jointmap.simulate.build import WORLDS, Simulation, build
from jointmap.simulate.run import SimulationReport, simulate
from jointmap.simulate.settings import SimulationSettings

__all__ = [
    "WORLDS",
    "Simulation",
    "SimulationReport",
    "SimulationSettings",
    "build",
    "simulate",
]

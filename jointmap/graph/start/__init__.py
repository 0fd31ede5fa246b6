"""Start values from measurements alone: alignment, consistent sets, triangulation, chunks, team."""

from jointmap.graph.start.team import StartLink, StartResult, initial_state

__all__ = ["StartLink", "StartResult", "initial_state"]

"""Start values from measurements alone: alignment, consistent sets, triangulation, chunks, team."""

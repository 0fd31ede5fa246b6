"""Survey folder to :class:`~jointmap.ingest.survey.Survey`, its checks, and importers."""

from jointmap.ingest.edits import format_edit
from jointmap.ingest.read import read_survey

__all__ = ["format_edit", "read_survey"]

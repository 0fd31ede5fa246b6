"""Exceptions of the package, and the problems that a log file can have.

One base class; everything a user can mend is also a ``ValueError``.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class LogProblem:
    """One thing found wrong in one place of the input.

    Parameters
    ----------
    path : str
        File, relative to the survey folder.
    row : int or None
        Row as a text editor counts it (the header of a CSV is row 1), for Parquet the
        1-based record; ``None`` for the file as a whole.
    column : str or None
        Column or TOML key.
    message : str
        What is wrong.
    mend : str
        What the user can do, or what was done (``mended`` is true).
    mended : bool
        The reader went on with the stated mend; otherwise the input is refused.
    """

    path: str
    row: int | None
    column: str | None
    message: str
    mend: str
    mended: bool = False

    def __str__(self) -> str:
        place = self.path
        if self.row is not None:
            place += f", row {self.row}"
        if self.column is not None:
            place += f", column {self.column}"
        return f"{place}: {self.message} ({'mended' if self.mended else 'mend'}: {self.mend})"


class JointMapError(Exception):
    """Base of every exception that the package raises on purpose."""


class SurveyError(JointMapError, ValueError):
    """The survey as a whole cannot be used (no robots, contradicting control points)."""


class LogFormatError(SurveyError):
    """Files of the survey are malformed; carries every problem that was found."""

    def __init__(self, problems: Iterable[LogProblem]) -> None:
        self.problems: tuple[LogProblem, ...] = tuple(problems)
        super().__init__("\n".join(str(p) for p in self.problems))


class SettingsError(JointMapError, ValueError):
    """A setting has a value outside its stated domain."""


class OutputExistsError(JointMapError, ValueError):
    """A finished result stands where the new one should go, and replacing was not asked for."""


class GaugeError(JointMapError, ValueError):
    """The datum asked for cannot be realised; names the components."""


class IndeterminateError(JointMapError, ValueError):
    """The measurements leave a variable undetermined; names robot, time or landmark."""


class MissingPackageError(JointMapError, ImportError):
    """An optional package that this needs is not installed; says how to install it."""

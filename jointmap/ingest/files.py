"""Finding files inside the survey folder, and their fingerprints."""

from __future__ import annotations

import hashlib
import os
from pathlib import Path, PurePosixPath, PureWindowsPath

from jointmap.ingest.problems import Problems, did_you_mean

TABLE_ENDINGS = (".csv", ".csv.gz", ".parquet")


class SurveyFiles:
    """The files of one survey folder; remembers the SHA-256 of every one that is read."""

    def __init__(self, folder: Path, problems: Problems) -> None:
        self.folder = folder
        self.problems = problems
        self.digests: dict[str, str] = {}

    def locate(self, name: str, asked_by: str, key: str) -> Path | None:
        """Absolute path of a file named in the survey, ``None`` (and a problem) when unusable.

        ``asked_by`` and ``key`` say where it is named. The name must be relative, must not climb
        out of the folder by ``..`` and must not lead out of it through a symbolic link.
        """
        if not self._inside(name):
            self.problems.add(
                asked_by,
                f"{name!r} leads out of the survey folder",
                "put the file into the survey folder and name it relative to survey.toml",
                column=key or None,
            )
            return None
        path = self.folder / name
        if not path.is_file():
            self.problems.add(
                asked_by, f"{name!r} is missing", self._hint(name), column=key or None
            )
            return None
        return path

    def _inside(self, name: str) -> bool:
        """Whether a relative name stays in the folder, links followed."""
        absolute = PurePosixPath(name).is_absolute() or PureWindowsPath(name).is_absolute()
        parts = {*PurePosixPath(name).parts, *PureWindowsPath(name).parts}
        if not name or absolute or ".." in parts or PureWindowsPath(name).drive or "\0" in name:
            return False
        try:
            return (self.folder / name).resolve().is_relative_to(self.folder.resolve())
        except (OSError, RuntimeError):  # a loop of links
            return False

    def _hint(self, name: str) -> str:
        """Close file names in the same folder."""
        parent = (self.folder / name).parent
        if not parent.is_dir():
            return f"there is no folder {str(Path(name).parent)!r} in the survey folder"
        names = [p.name for p in parent.iterdir() if p.is_file()]
        return did_you_mean(Path(name).name, names)

    def default(self, stem: str) -> str | None:
        """Name of a survey-wide table when present; two formats of one table are refused."""
        found = [stem + e for e in TABLE_ENDINGS if os.path.lexists(self.folder / (stem + e))]
        if len(found) > 1:
            self.problems.add(
                found[0],
                f"the same table in {len(found)} formats: {', '.join(found)}",
                "keep one of them",
            )
            return None
        return found[0] if found else None

    def digest(self, name: str, data: bytes | memoryview) -> None:
        """Remember the SHA-256 of a file from its bytes."""
        self.digests[name] = hashlib.sha256(data).hexdigest()

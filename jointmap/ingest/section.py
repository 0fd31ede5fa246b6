"""One section of a TOML file: typed reading that reports every wrong and every unknown key."""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from jointmap.ingest.files import SurveyFiles
from jointmap.ingest.problems import Problems, close_match
from jointmap.ingest.survey import Floats


def load_toml(files: SurveyFiles, name: str) -> dict[str, Any] | None:
    """A TOML file of the survey; ``None`` and a problem with its row when it cannot be parsed."""
    path = files.locate(name, name, "")
    if path is None:
        return None
    data = path.read_bytes()
    files.digest(name, data)
    try:
        return tomllib.loads(data.decode("utf-8"))
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        files.problems.add(name, "the text is not UTF-8", "save the file as UTF-8", row=line)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"line (\d+)", str(error))
        row = int(found.group(1)) if found else None
        files.problems.add(name, f"is not TOML: {error}", "mend the line", row=row)
    return None


class Section:
    """Keys of one TOML table.

    Every key that is asked for counts as known; ``done`` reports the others: refused when they
    look like a known one (a slip of the pen would silently change the result), ignored otherwise.
    """

    def __init__(
        self, path: str, where: str, values: Mapping[str, Any], problems: Problems
    ) -> None:
        self.path, self.where, self.values, self.problems = path, where, values, problems
        self._asked: set[str] = set()

    def key(self, name: str) -> str:
        """Full name of a key."""
        return f"{self.where}.{name}" if self.where else name

    def wrong(self, name: str, message: str, mend: str, *, mended: bool = False) -> None:
        """Record a problem of one key."""
        self.problems.add(self.path, message, mend, column=self.key(name), mended=mended)

    def has(self, name: str) -> bool:
        """Whether the key is there; it counts as known from now on."""
        self._asked.add(name)
        return name in self.values

    def number(
        self,
        name: str,
        default: float | None = None,
        *,
        least: float = -math.inf,
        above: float = -math.inf,
    ) -> float | None:
        """A finite number, not under ``least`` and over ``above``; the default where missing."""
        if not self.has(name):
            return default
        value = self.values[name]
        if isinstance(value, bool) or not isinstance(value, int | float):
            self.wrong(name, f"{value!r} is not a number", "write a number without quotes")
        elif not math.isfinite(value):
            self.wrong(name, f"{value} is not finite", "write a finite number")
        elif value < least or value <= above:
            bound = f"at least {least:g}" if value < least else f"larger than {above:g}"
            self.wrong(name, f"{value} is out of range", f"it must be {bound}")
        else:
            return float(value)
        return default

    def text(self, name: str, default: str | None = None) -> str | None:
        """A text."""
        if not self.has(name):
            return default
        value = self.values[name]
        if isinstance(value, str) and value.strip():
            return value.strip()
        self.wrong(name, f"{value!r} is not a text", "write a text in quotes")
        return default

    def choice(self, name: str, known: Sequence[str], default: str) -> str:
        """One word of a list."""
        value = self.text(name, default)
        if value in known:
            return str(value)
        match = close_match(str(value), known)
        mend = f"did you mean {match!r}?" if match else "one of " + ", ".join(known)
        self.wrong(name, f"{value!r} is not known", mend)
        return default

    def flag(self, name: str, default: bool) -> bool:
        """True or false."""
        if not self.has(name):
            return default
        value = self.values[name]
        if isinstance(value, bool):
            return value
        self.wrong(name, f"{value!r} is not true or false", "write true or false without quotes")
        return default

    def vector(self, name: str, lengths: Sequence[int], default: Sequence[float]) -> Floats:
        """A list of finite numbers of one of some lengths."""
        fallback = np.array(default, dtype=np.float64)
        if not self.has(name):
            return fallback
        value = self.values[name]
        numbers = isinstance(value, list) and all(
            isinstance(v, int | float) and not isinstance(v, bool) and math.isfinite(v)
            for v in value
        )
        if numbers and len(value) in lengths:
            return np.array(value, dtype=np.float64)
        wanted = " or ".join(str(n) for n in lengths)
        message = f"{value!r} is not a list of {wanted} finite numbers"
        self.wrong(name, message, f"write {wanted} numbers in brackets")
        return fallback

    def names(self, name: str) -> tuple[str, ...]:
        """A text or a list of texts."""
        if not self.has(name):
            return ()
        value = self.values[name]
        items = value if isinstance(value, list) else [value]
        if items and all(isinstance(v, str) and v for v in items):
            return tuple(items)
        self.wrong(name, f"{value!r} names no files", "write a file name or a list of them")
        return ()

    def section(self, name: str) -> Section:
        """A sub-section, empty where missing."""
        value = self.values.get(name, {})
        self._asked.add(name)
        if not isinstance(value, dict):
            self.wrong(name, f"{value!r} is not a section", f"write it as [{self.key(name)}]")
            value = {}
        return Section(self.path, self.key(name), value, self.problems)

    def done(self) -> None:
        """Report the keys that nobody asked for."""
        for name in sorted(set(self.values) - self._asked):
            match = close_match(name, self._asked)
            if match is not None:
                self.wrong(name, "unknown key", f"did you mean {match!r}?")
            else:
                self.wrong(name, "unknown key", "it is ignored", mended=True)

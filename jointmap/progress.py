"""Telling the user how far long work has come, and how long each stage took."""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Protocol, TextIO


class Progress(Protocol):
    """What long work reports to. Stages follow each other; a new one ends the one before."""

    def stage(self, name: str, total: int | None = None) -> None:
        """Start a stage of ``total`` steps (None: not known)."""

    def update(self, n: int, text: str = "") -> None:
        """``n`` steps of the stage are done; ``text`` is a short remark (cost, counts)."""

    def finish(self) -> None:
        """End the last stage."""

    @property
    def timings(self) -> dict[str, float]:
        """Seconds spent in each stage so far, in the order of their first start."""
        ...


class Silent:
    """Reports nothing, but times the stages."""

    def __init__(self) -> None:
        self._seconds: dict[str, float] = {}
        self._name: str | None = None
        self._since = 0.0

    def stage(self, name: str, total: int | None = None) -> None:
        """Start a stage; a name that returns adds to its earlier time."""
        self.finish()
        self._name = name
        self._since = time.perf_counter()
        self._seconds.setdefault(name, 0.0)

    def update(self, n: int, text: str = "") -> None:
        """Nothing to show."""

    def finish(self) -> None:
        """End the last stage."""
        if self._name is not None:
            self._seconds[self._name] += time.perf_counter() - self._since
            self._name = None

    @property
    def timings(self) -> dict[str, float]:
        """Seconds of each stage, the running one included."""
        seconds = dict(self._seconds)
        if self._name is not None:
            seconds[self._name] += time.perf_counter() - self._since
        return seconds


class Terminal(Silent):
    """One line on a terminal, rewritten in place and erased at the end.

    Parameters
    ----------
    stream : text stream
        Where to draw; the caller has made sure that it is a terminal.
    interval_s : float
        The line is drawn again at most this often, so that fast loops are not slowed down.
    """

    _BAR = 24

    def __init__(self, stream: TextIO | None = None, interval_s: float = 0.1) -> None:
        super().__init__()
        self._stream = stream if stream is not None else sys.stderr
        self._interval_s = interval_s
        self._total: int | None = None
        self._drawn = 0.0
        self._width = 0

    def stage(self, name: str, total: int | None = None) -> None:
        """Start a stage and show its name at once."""
        super().stage(name, total)
        self._total = total
        self._drawn = 0.0
        self.update(0)

    def update(self, n: int, text: str = "") -> None:
        """Show the step and the remark, unless the line was drawn a moment ago."""
        now = time.perf_counter()
        last_step = self._total is not None and n >= self._total
        if now - self._drawn < self._interval_s and not last_step:
            return
        self._drawn = now
        self._write(self._line(n, text))

    def finish(self) -> None:
        """End the last stage and erase the line."""
        super().finish()
        if self._width:
            self._stream.write("\r" + " " * self._width + "\r")
            self._stream.flush()
            self._width = 0

    def _line(self, n: int, text: str) -> str:
        name = self._name or ""
        if self._total:
            share = min(max(n / self._total, 0.0), 1.0)
            full = round(share * self._BAR)
            bar = "#" * full + "." * (self._BAR - full)
            return f"{name} [{bar}] {n}/{self._total}  {text}"
        return f"{name}  {n if n else ''} {text}"

    def _write(self, line: str) -> None:
        line = line.rstrip()[: _columns(self._stream)]
        self._stream.write("\r" + line.ljust(self._width))
        self._stream.flush()
        self._width = len(line)


def _columns(stream: TextIO) -> int:
    """Characters that fit on one line; one less than the width so that no terminal wraps."""
    try:
        columns = os.get_terminal_size(stream.fileno()).columns
    except (OSError, ValueError):
        columns = 0
    # Some terminals (serial lines, containers) do not know their width and say 0.
    return max(columns - 1, 20) if columns else 79


def choose(quiet: bool = False, stream: TextIO | None = None) -> Silent:
    """A bar on a terminal, silence in a pipe, under ``quiet`` or on a dumb terminal."""
    stream = stream if stream is not None else sys.stderr
    dumb = os.environ.get("TERM", "") == "dumb"
    return Silent() if quiet or dumb or not stream.isatty() else Terminal(stream)


@contextmanager
def staged(progress: Progress, name: str, total: int | None = None) -> Iterator[Progress]:
    """A stage that ends with the block, also when the block raises."""
    progress.stage(name, total)
    try:
        yield progress
    finally:
        progress.finish()

"""Plain text for terminals: headed sections, aligned tables, wrapped lists, numbers people read."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence
from typing import Any

MIN_WIDTH = 40


def section(title: str, lines: Sequence[str]) -> list[str]:
    """A title, its lines indented by two, and an empty line."""
    return [title, *(f"  {line}".rstrip() for line in lines), ""]


def table(header: Sequence[str], rows: Sequence[Sequence[str]]) -> list[str]:
    """Columns aligned; the first column to the left, the others to the right."""
    grid = [list(header), *(list(row) for row in rows)]
    widths = [max(len(row[i]) for row in grid) for i in range(len(header))]
    return [
        "  ".join(
            cell.ljust(width) if i == 0 else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in grid
    ]


def wrap(text: str, width: int, first: str = "", rest: str | None = None) -> list[str]:
    """Text over several lines; ``first`` leads the first one, ``rest`` (or blanks) the others."""
    follow = " " * len(first) if rest is None else rest
    return textwrap.wrap(
        text,
        max(width, MIN_WIDTH),
        initial_indent=first,
        subsequent_indent=follow,
        break_long_words=False,
        break_on_hyphens=False,
    ) or [first.rstrip()]


def count(n: float, one: str, many: str | None = None) -> str:
    """``1 robot``, ``3 robots``, ``1,204 sightings``."""
    word = one if n == 1 else (many or one + "s")
    return f"{int(n):,} {word}"


def metres(value: float) -> str:
    """A length with a unit that keeps three digits readable; ``?`` when not known."""
    if not math.isfinite(value):
        return "?"
    if abs(value) < 0.0995:
        return f"{1000 * value:.1f} mm" if abs(value) < 0.00995 else f"{100 * value:.1f} cm"
    return f"{value:.2f} m" if abs(value) < 99.5 else f"{value:,.0f} m"


def degrees(radians: float) -> str:
    """An angle for reading; ``?`` when not known."""
    return f"{math.degrees(radians):.2f} deg" if math.isfinite(radians) else "?"


def percent(share: float) -> str:
    """A share as whole per cent; ``<1 %`` rather than a zero that is none."""
    if not math.isfinite(share):
        return "?"
    if 0.0 < share < 0.005:
        return "<1 %"
    if 0.995 <= share < 1.0:
        return ">99 %"
    return f"{100 * share:.0f} %"


def number(value: Any) -> str:
    """A cell of a table with up to three significant digits; ``-`` when not known."""
    return f"{float(value):.3g}" if math.isfinite(value) else "-"


def clock(seconds: float) -> str:
    """A duration: ``42.0 s``, ``25 min 06 s``, ``1 h 05 min``."""
    if not math.isfinite(seconds):
        return "?"
    if seconds < 60:
        return f"{seconds:.1f} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 60:
        return f"{minutes} min {rest:02d} s"
    return f"{minutes // 60} h {minutes % 60:02d} min"

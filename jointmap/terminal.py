"""What a person at the terminal sees besides results: refusals, faults, width and style."""

from __future__ import annotations

import io
import json
import os
import shutil
import sys
import traceback
from dataclasses import asdict

from jointmap.errors import JointMapError, LogFormatError


def say(text: str) -> None:
    """Print to stdout; a reader that went away (``| head``) is no fault and loses no result."""
    if isinstance(sys.stdout, io.TextIOWrapper):
        # A terminal without UTF-8 shows a question mark for what it cannot show.
        sys.stdout.reconfigure(errors="replace")
    try:
        print(text.rstrip("\n"), flush=True)
    except BrokenPipeError:
        # Otherwise the interpreter flushes into the closed pipe once more at its end.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def refuse(error: JointMapError, *, as_json: bool) -> None:
    """Say what was refused: every problem of the logs, or the message."""
    problems = error.problems if isinstance(error, LogFormatError) else ()
    if as_json:
        told = {"ok": False, "message": str(error), "problems": [asdict(p) for p in problems]}
        say(json.dumps(told, indent=2, ensure_ascii=False))
    refused = [p for p in problems if not p.mended]
    for problem in problems:
        print(problem, file=sys.stderr)
    if refused:
        n = len(refused)
        summary = f"the input was refused: {n} problem{'s' if n > 1 else ''} to mend"
    else:
        summary = str(error)
    print(f"jointmap: {summary}", file=sys.stderr)


def fault(error: Exception) -> None:
    """Say that the program is at fault; the traceback only on demand."""
    wanted = os.environ.get("JOINTMAP_TRACEBACK", "0") not in ("", "0")
    if wanted:
        traceback.print_exc()
    kind = type(error).__name__
    print(f"jointmap: this is a fault of the program ({kind}: {error})", file=sys.stderr)
    if not wanted:
        print("set JOINTMAP_TRACEBACK=1 to see where it happened", file=sys.stderr)


def tell(done: str | None) -> None:
    """Say what the recovery of a broken replacement did."""
    if done:
        print(f"jointmap: {done}", file=sys.stderr)


def width() -> int:
    """Characters to a line of a page: those of the terminal, but neither too few nor too many."""
    return min(max(shutil.get_terminal_size((80, 24)).columns, 60), 100)


def styled(page: str) -> str:
    """Titles in bold on a terminal that may have colours (NO_COLOR is respected)."""
    plain = os.environ.get("NO_COLOR") or os.environ.get("TERM", "") in ("", "dumb")
    if plain or not sys.stdout.isatty():
        return page
    titles = (
        f"\033[1m{line}\033[0m" if line[:1].isalpha() and line[-1:].isalpha() else line
        for line in page.splitlines()
    )
    return "\n".join(titles)

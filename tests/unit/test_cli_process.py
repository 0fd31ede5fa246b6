"""The program as a process: start-up, signals, pipes, terminals."""

from __future__ import annotations

import os
import pty
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pytest

import jointmap

ROOT = Path(jointmap.__file__).resolve().parent.parent
ENV = {**os.environ, "PYTHONPATH": str(ROOT)}
COMMAND = [sys.executable, "-m", "jointmap"]

#: The command line with a fusion that sleeps, announced by the file named first.
SLEEPER = textwrap.dedent(
    """
    import pathlib, signal, sys, time, types
    # A shell that starts this in the background leaves the interrupt ignored.
    signal.signal(signal.SIGINT, signal.default_int_handler)
    ready = pathlib.Path(sys.argv.pop(1))
    def fuse(survey, settings, progress):
        progress.stage("solve", 1000)
        ready.touch()
        for n in range(1000):
            time.sleep(0.05)
            progress.update(n, "cost 12.5")
    module = types.ModuleType("jointmap.fuse")
    module.fuse = fuse
    sys.modules["jointmap.fuse"] = module
    from jointmap.cli import main
    sys.exit(main())
    """
)


@pytest.fixture(scope="module")
def survey(tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("logs") / "gallery"
    words = ["simulate", "quarry-2d", "--out", str(out), "--robots", "2", "--duration-s", "10"]
    subprocess.run([*COMMAND, *words], env=ENV, check=True, stdout=subprocess.DEVNULL)
    return out


def test_help_starts_at_once_and_loads_nothing_heavy() -> None:
    code = textwrap.dedent(
        """
        import sys
        from jointmap.cli import main
        try:
            main(["--help"])
        except SystemExit:
            pass
        heavy = {"numpy", "pandas", "pyarrow", "gtsam", "scipy", "numba"} & set(sys.modules)
        print("loaded", sorted(heavy))
        """
    )
    done = subprocess.run(
        [sys.executable, "-c", code], env=ENV, capture_output=True, text=True, check=True
    )
    assert done.stdout.splitlines()[-1] == "loaded []"
    # Processor time against that of an interpreter which only imports what any command needs:
    # other work on the machine counts for neither. Measured 1.8; the solver would make it 20.
    bare = [sys.executable, "-c", "import argparse, pathlib, traceback, json, shutil, dataclasses"]
    assert processor_time([*COMMAND, "--help"]) < 3.0 * processor_time(bare)


def processor_time(words: list[str]) -> float:
    """Smallest processor time of five runs of a command."""
    spent = []
    for _ in range(5):
        before = os.times()
        subprocess.run(words, env=ENV, check=True, stdout=subprocess.DEVNULL)
        after = os.times()
        spent.append(
            after.children_user
            - before.children_user
            + after.children_system
            - before.children_system
        )
    return min(spent)


def test_reading_a_reference_needs_no_solver() -> None:
    code = """
import sys, jointmap
jointmap.read_reference
print({"gtsam", "numba", "jointmap.solve", "jointmap.graph"} & set(sys.modules))
"""
    done = subprocess.run(
        [sys.executable, "-c", code], env=ENV, capture_output=True, text=True, check=True
    )
    assert done.stdout == "set()\n"


def test_every_command_has_help() -> None:
    for name in ("simulate", "import", "check", "fuse", "poses"):
        done = subprocess.run(
            [*COMMAND, name, "--help"], env=ENV, capture_output=True, text=True, check=True
        )
        assert f"usage: jointmap {name}" in done.stdout
    version = subprocess.run(
        [*COMMAND, "--version"], env=ENV, capture_output=True, text=True, check=True
    )
    assert version.stdout == f"jointmap {jointmap.__version__}\n"


@pytest.mark.parametrize("signum", [signal.SIGINT, signal.SIGTERM])
def test_signals_end_it_cleanly(survey: Path, tmp_path: Path, signum: int) -> None:
    ready, out = tmp_path / "ready", tmp_path / "ref"
    running = subprocess.Popen(
        [sys.executable, "-c", SLEEPER, str(ready), "fuse", str(survey), "--out", str(out)],
        env=ENV,
        stderr=subprocess.PIPE,
        text=True,
    )
    deadline = time.monotonic() + 60
    while not ready.exists() and time.monotonic() < deadline:
        time.sleep(0.02)
    running.send_signal(signum)
    _, err = running.communicate(timeout=30)
    assert running.returncode == 130
    assert err == "interrupted: no result was written\n"
    assert os.listdir(tmp_path) == ["ready"]


def test_a_reader_that_goes_away_is_no_fault(survey: Path) -> None:
    running = subprocess.Popen(
        [*COMMAND, "check", str(survey)], env=ENV, stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert running.stdout is not None
    running.stdout.close()
    assert running.stderr is not None
    err = running.stderr.read()
    running.stderr.close()
    assert running.wait(timeout=60) == 0
    assert err == b""


def _on_a_terminal(words: list[str], until: bytes, env: dict[str, str]) -> bytes:
    """What a command shows on a pseudo-terminal until some text appears; then it is stopped."""
    main_end, command_end = pty.openpty()
    running = subprocess.Popen(
        words, env=env, stdin=command_end, stdout=command_end, stderr=command_end
    )
    os.close(command_end)
    shown = b""
    try:
        while until not in shown:
            shown += os.read(main_end, 4096)
    finally:
        running.send_signal(signal.SIGTERM)
        running.wait(timeout=30)
        os.close(main_end)
    return shown


def test_progress_is_drawn_on_a_terminal(survey: Path, tmp_path: Path) -> None:
    words = [sys.executable, "-c", SLEEPER, str(tmp_path / "ready"), "fuse", str(survey)]
    words += ["--out", str(tmp_path / "ref")]
    shown = _on_a_terminal(words, b"cost 12.5", {**ENV, "TERM": "xterm"})
    assert b"\rsolve [" in shown
    assert b"/1000  cost 12.5" in shown


def test_a_terminal_of_another_alphabet_is_no_fault(survey: Path) -> None:
    code = "from jointmap.terminal import say; say('odometry … µ')"
    done = subprocess.run(
        [sys.executable, "-c", code],
        env={**ENV, "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"},
        capture_output=True,
        check=True,
    )
    assert done.stdout == b"odometry ? ?\n"


@pytest.mark.parametrize(
    ("env", "bold"),
    [
        ({"TERM": "xterm"}, True),
        ({"TERM": "xterm", "NO_COLOR": "1"}, False),
        ({"TERM": "dumb"}, False),
    ],
)
def test_titles_are_bold_where_that_is_wanted(env: dict[str, str], bold: bool) -> None:
    code = "from jointmap.terminal import say, styled\n"
    code += "say(styled('What went in\\n  heron\\n')); input()"
    clean = {name: value for name, value in ENV.items() if name != "NO_COLOR"}
    shown = _on_a_terminal([sys.executable, "-c", code], b"heron", {**clean, **env})
    assert (b"\x1b[1mWhat went in\x1b[0m" in shown) == bold
    assert b"What went in" in shown

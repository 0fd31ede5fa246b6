"""Progress: timings add up, a terminal gets one line, a pipe gets nothing."""

from __future__ import annotations

import io

import pytest

from jointmap import progress as module
from jointmap.progress import Silent, Terminal, choose, staged


class Clock:
    """A clock that the test turns."""

    now = 100.0

    def perf_counter(self) -> float:
        return self.now


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Clock:
    made = Clock()
    monkeypatch.setattr(module, "time", made)
    return made


class Screen(io.StringIO):
    """A stream that says that it is a terminal."""

    def isatty(self) -> bool:
        return True


def shown(text: str) -> str:
    """What a terminal shows in its line after some output."""
    line: list[str] = []
    at = 0
    for letter in text:
        if letter == "\r":
            at = 0
            continue
        line[at : at + 1] = [letter]
        at += 1
    return "".join(line).rstrip()


def test_timings_by_stage_in_order_of_their_start(clock: Clock) -> None:
    bar = Silent()
    bar.stage("build")
    clock.now += 2.0
    bar.stage("solve")
    clock.now += 3.0
    bar.stage("build")
    clock.now += 1.0
    assert bar.timings == {"build": 3.0, "solve": 3.0}
    bar.finish()
    clock.now += 10.0
    bar.finish()
    assert list(bar.timings.items()) == [("build", 3.0), ("solve", 3.0)]


def test_a_stage_ends_with_its_block(clock: Clock) -> None:
    bar = Silent()
    with pytest.raises(ZeroDivisionError), staged(bar, "solve"):
        clock.now += 1.5
        raise ZeroDivisionError
    clock.now += 5.0
    assert bar.timings == {"solve": 1.5}


def test_one_line_that_is_erased_at_the_end(clock: Clock) -> None:
    screen = Screen()
    bar = Terminal(screen)
    bar.stage("solve", 4)
    assert shown(screen.getvalue()) == "solve [........................] 0/4"
    clock.now += 1.0
    bar.update(2, "cost 12.5")
    assert shown(screen.getvalue()) == "solve [############............] 2/4  cost 12.5"
    clock.now += 0.01
    bar.update(3, "cost 11")  # too soon after the last drawing
    assert "cost 11" not in screen.getvalue()
    bar.update(4)  # the last step is always drawn
    assert shown(screen.getvalue()) == "solve [########################] 4/4"
    bar.finish()
    assert shown(screen.getvalue()) == ""
    assert "\n" not in screen.getvalue()


def test_a_stage_without_a_known_end(clock: Clock) -> None:
    screen = Screen()
    bar = Terminal(screen)
    bar.stage("robust solve")
    clock.now += 1.0
    bar.update(7, "cost 3")
    assert shown(screen.getvalue()) == "robust solve  7 cost 3"


def test_a_line_never_wraps(clock: Clock) -> None:
    screen = Screen()
    bar = Terminal(screen)
    bar.stage("solve")
    clock.now += 1.0
    bar.update(1, "x" * 500)
    assert len(shown(screen.getvalue())) == 79


def test_only_a_terminal_gets_a_bar(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("TERM", "xterm")
    assert isinstance(choose(stream=Screen()), Terminal)
    assert type(choose(stream=io.StringIO())) is Silent
    assert type(choose(quiet=True, stream=Screen())) is Silent
    monkeypatch.setenv("TERM", "dumb")
    assert type(choose(stream=Screen())) is Silent

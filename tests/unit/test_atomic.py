"""A result is whole or absent, at whatever step its writer is killed.

A child process writes a folder while every call that changes the disk is counted; at the n-th the
child kills itself, before or after the call. All n are tried.
"""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pytest

import jointmap
from jointmap.atomic import new_file, new_folder, recover
from jointmap.errors import OutputExistsError

ROOT = Path(jointmap.__file__).resolve().parent.parent

WRITER = textwrap.dedent(
    """
    import os, shutil, signal, sys
    from jointmap.atomic import new_file, new_folder

    target, kind, text, fatal, when = sys.argv[1:]
    count = 0

    def counted(call):
        def wrapper(*args, **kwargs):
            global count
            count += 1
            mine = count == int(fatal)
            if mine and when == "before":
                strike()
            out = call(*args, **kwargs)
            if mine and when == "after":
                strike()
            return out
        return wrapper

    def strike():
        if kind.endswith("interrupt"):
            raise KeyboardInterrupt
        os.kill(os.getpid(), signal.SIGKILL)

    for name in ("rename", "replace", "mkdir", "unlink", "rmdir", "fsync", "open"):
        setattr(os, name, counted(getattr(os, name)))

    if kind.startswith("folder"):
        with new_folder(target, replace=True, marker="mark.txt") as folder:
            for name in ("mark.txt", "a.txt", "b.txt"):
                (folder / name).write_text(text)
    else:
        with new_file(target, replace=True) as file:
            file.write_text(text)
    print("whole", count)
    """
)


def child(target: Path, kind: str, text: str, fatal: int, when: str) -> subprocess.CompletedProcess:  # type: ignore[type-arg]
    return subprocess.run(
        [sys.executable, "-c", WRITER, str(target), kind, text, str(fatal), when],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        check=False,
    )


def content(target: Path) -> str | None:
    """Text of a whole folder or file, None where there is nothing; fails on a mixture."""
    if not target.exists():
        return None
    if target.is_file():
        return target.read_text()
    files = sorted(p.name for p in target.iterdir())
    assert files == ["a.txt", "b.txt", "mark.txt"]
    texts = {p.read_text() for p in target.iterdir()}
    assert len(texts) == 1
    return texts.pop()


def old_result(target: Path, kind: str) -> None:
    if kind.startswith("file"):
        target.write_text("old")
        return
    target.mkdir()
    for name in ("mark.txt", "a.txt", "b.txt"):
        (target / name).write_text("old")


def steps(tmp_path: Path, kind: str) -> int:
    """Calls that a whole replacement makes."""
    target = tmp_path / "count"
    old_result(target, kind)
    done = child(target, kind, "new", 0, "before")
    assert done.returncode == 0, done.stderr
    return int(done.stdout.split()[-1])


@pytest.mark.parametrize("had_old", [True, False], ids=["replacing", "first"])
@pytest.mark.parametrize("kind", ["folder", "folder-interrupt", "file", "file-interrupt"])
def test_a_break_at_any_step_leaves_old_new_or_none(
    tmp_path: Path, kind: str, had_old: bool
) -> None:
    seen = set()
    for fatal in range(1, steps(tmp_path, kind) + 1):
        for when in ("before", "after"):
            target = tmp_path / f"{fatal}{when}" / "result"
            target.parent.mkdir()
            if had_old:
                old_result(target, kind)
            done = child(target, kind, "new", fatal, when)
            assert done.returncode != 0 or "whole" in done.stdout
            recover(target)
            found = content(target)
            assert found in (("old", "new") if had_old else (None, "new")), (fatal, when)
            seen.add(found)
            if kind.startswith("folder"):
                assert os.listdir(target.parent) == ([target.name] if found else [])
            # The next run works, whatever the break left.
            assert child(target, kind, "next", 0, "before").returncode == 0
            assert content(target) == "next"
            assert os.listdir(target.parent) == [target.name]
    assert seen == ({"old", "new"} if had_old else {None, "new"})


def test_recovery_says_what_it_did(tmp_path: Path) -> None:
    target = tmp_path / "result"
    assert recover(target) is None
    old_result(tmp_path / ".result.new", "folder")
    old_result(tmp_path / ".result.old", "folder")
    assert "finished replacing" in str(recover(target))
    assert content(target) == "old"
    target.rename(tmp_path / ".result.old")
    assert "put back the earlier" in str(recover(target))
    assert content(target) == "old"
    (tmp_path / ".result.gone").mkdir()
    assert "removed the earlier" in str(recover(target))
    assert os.listdir(tmp_path) == ["result"]


def test_a_second_writer_is_refused_and_does_no_harm(tmp_path: Path) -> None:
    target = tmp_path / "result"
    ready = tmp_path / "ready"
    code = textwrap.dedent(
        f"""
        import time, pathlib
        from jointmap.atomic import new_folder
        with new_folder({str(target)!r}, marker="mark.txt") as folder:
            (folder / "mark.txt").write_text("first")
            pathlib.Path({str(ready)!r}).touch()
            time.sleep(60)
        """
    )
    first = subprocess.Popen(
        [sys.executable, "-c", code], env={**os.environ, "PYTHONPATH": str(ROOT)}
    )
    try:
        deadline = time.monotonic() + 30
        while not ready.exists() and time.monotonic() < deadline:
            time.sleep(0.02)
        with (
            pytest.raises(OutputExistsError, match="another program is writing"),
            new_folder(target, marker="mark.txt"),
        ):
            pytest.fail("the lock was not respected")
        assert recover(target) is None
        assert (tmp_path / ".result.new" / "mark.txt").read_text() == "first"
    finally:
        first.send_signal(signal.SIGKILL)
        first.wait()
    # A killed writer blocks nobody.
    with new_folder(target, marker="mark.txt") as folder:
        (folder / "mark.txt").write_text("second")
    assert (target / "mark.txt").read_text() == "second"
    assert sorted(os.listdir(tmp_path)) == ["ready", "result"]


def test_other_data_is_never_replaced(tmp_path: Path) -> None:
    target = tmp_path / "photos"
    target.mkdir()
    (target / "quarry.jpg").write_text("precious")
    with (
        pytest.raises(OutputExistsError, match="holds other files"),
        new_folder(target, replace=True, marker="mark.txt"),
    ):
        pytest.fail("the folder was taken for a result")
    assert (target / "quarry.jpg").read_text() == "precious"
    with (
        pytest.raises(OutputExistsError, match="is not a folder"),
        new_folder(target / "quarry.jpg", replace=True, marker="mark.txt"),
    ):
        pytest.fail("the file was taken for a result")


def test_a_result_that_exists_is_kept_without_replace(tmp_path: Path) -> None:
    target = tmp_path / "result"
    old_result(target, "folder")
    with (
        pytest.raises(OutputExistsError, match="exists already"),
        new_folder(target, marker="mark.txt"),
    ):
        pytest.fail("the result was open for writing")
    file = tmp_path / "poses.csv"
    file.write_text("old")
    with pytest.raises(OutputExistsError, match="exists already"), new_file(file):
        pytest.fail("the file was open for writing")
    with pytest.raises(OutputExistsError, match="is a folder"), new_file(target, replace=True):
        pytest.fail("the folder was open for writing")
    assert content(target) == "old"
    assert file.read_text() == "old"


def test_an_exception_in_the_block_leaves_the_old(tmp_path: Path) -> None:
    target = tmp_path / "result"
    old_result(target, "folder")
    with (
        pytest.raises(ZeroDivisionError),
        new_folder(target, replace=True, marker="mark.txt") as folder,
    ):
        (folder / "mark.txt").write_text("half")
        raise ZeroDivisionError
    assert content(target) == "old"
    assert os.listdir(tmp_path) == ["result"]


def test_an_empty_folder_and_missing_parents_are_fine(tmp_path: Path) -> None:
    empty = tmp_path / "empty"
    empty.mkdir()
    for target in (empty, tmp_path / "a" / "b"):
        with new_folder(target, marker="mark.txt") as folder:
            (folder / "mark.txt").write_text("whole")
        assert (target / "mark.txt").read_text() == "whole"


def test_a_link_is_followed(tmp_path: Path) -> None:
    real, link = tmp_path / "real", tmp_path / "link"
    old_result(real, "folder")
    link.symlink_to(real)
    with new_folder(link, replace=True, marker="mark.txt") as folder:
        (folder / "mark.txt").write_text("new")
    assert link.is_symlink()
    assert (real / "mark.txt").read_text() == "new"

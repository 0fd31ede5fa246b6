"""Results that are there whole or not at all, whatever stops the program.

A new folder ``result`` is written as its hidden sibling ``.result.new`` under a lock, flushed to
disk, and then swapped in:

1. rename ``result`` to ``.result.old`` (when replacing),
2. rename ``.result.new`` to ``result``,
3. rename ``.result.old`` to ``.result.gone`` and remove that.

Whatever the moment of a break, what lies there tells how far it came (:func:`recover`):

===========  =================  =================  =====================================
``result``   ``.result.new``    ``.result.old``    meaning, and what recovery does
===========  =================  =================  =====================================
any          there              absent             broken while writing: remove the new
absent       there              there              between 1 and 2: rename the new in
there        absent             there              before 3: remove the old
absent       absent             there              undo 1: rename the old back
===========  =================  =================  =====================================

``.result.gone`` may be half removed, therefore it has a name of its own and never comes back.

The lock is an advisory one of the operating system: it ends with its process, so that a killed
writer blocks nobody. Its file ``.result.lock`` is removed with the last writer or by recovery.
"""

from __future__ import annotations

import errno
import fcntl
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from jointmap.errors import OutputExistsError


@contextmanager
def new_folder(path: Path | str, *, replace: bool = False, marker: str) -> Iterator[Path]:
    """A folder to write into; it becomes ``path`` when the block ends without an exception.

    Parameters
    ----------
    path : path
        Where the result goes. Missing parents are made; a symbolic link is followed.
    replace : bool
        An earlier result may be replaced.
    marker : str
        File that every result of this kind holds (``reference.json``, ``survey.toml``). A folder
        without it is somebody's other data and is never replaced.

    Yields
    ------
    Path
        The temporary folder, empty.

    Raises
    ------
    OutputExistsError
        Something stands there and may not be replaced, or another program is writing there.
    """
    target = Path(os.path.realpath(path))
    _refuse(target, replace, marker)
    target.parent.mkdir(parents=True, exist_ok=True)
    with _locked(target):
        _settle(target)
        # Another writer may have finished since the first look.
        _refuse(target, replace, marker)
        new = _sibling(target, "new")
        new.mkdir()
        try:
            yield new
            _flush_tree(new)
            _swap(target)
        finally:
            # After a success nothing is left to settle; after a failure this undoes or finishes.
            _settle(target)


@contextmanager
def new_file(path: Path | str, *, replace: bool = False) -> Iterator[Path]:
    """A file to write; it becomes ``path`` when the block ends without an exception.

    The temporary name ends like the final one, so that writers which look at the ending work.

    Raises
    ------
    OutputExistsError
        Something stands there and may not be replaced, or another program is writing there.
    """
    target = Path(os.path.realpath(path))
    if target.is_dir() or (target.exists() and not replace):
        raise _exists(target, "is a folder" if target.is_dir() else "exists already", replace)
    target.parent.mkdir(parents=True, exist_ok=True)
    with _locked(target):
        new = target.with_name(f".new.{target.name}")
        try:
            yield new
            _flush(new)
            if target.exists() and not replace:
                raise _exists(target, "exists already", replace)
            os.replace(new, target)
            _flush(target.parent)
        finally:
            new.unlink(missing_ok=True)


def recover(path: Path | str) -> str | None:
    """Finish or undo what a killed program left at ``path``; to be called before reading there.

    Returns
    -------
    str or None
        What was done, for the user; ``None`` when there was nothing to do, or when the traces
        belong to a program that is still writing.
    """
    target = Path(os.path.realpath(path))
    traces = [_sibling(target, kind) for kind in ("new", "old", "gone", "lock")]
    if not any(os.path.lexists(p) for p in traces):
        return None
    try:
        with _locked(target):
            return _settle(target)
    except (OutputExistsError, PermissionError):
        # Somebody is at work there, or the folder may only be read: nothing to mend from here.
        return None


def check_free(path: Path | str, *, replace: bool, marker: str) -> None:
    """Raise what :func:`new_folder` would raise, before long work instead of after it.

    Raises
    ------
    OutputExistsError
    """
    _refuse(Path(os.path.realpath(path)), replace, marker)


def _refuse(target: Path, replace: bool, marker: str) -> None:
    """Raise unless a result may go to ``target``; an empty folder counts as nothing."""
    if not os.path.lexists(target):
        return
    if not target.is_dir():
        raise _exists(target, "is not a folder", replace=True)
    if not any(target.iterdir()):
        return
    if not (target / marker).is_file():
        raise _exists(target, f"holds other files (no {marker})", replace=True)
    if not replace:
        raise _exists(target, "exists already", replace)


def _exists(target: Path, what: str, replace: bool) -> OutputExistsError:
    mend = (
        "choose another name" if replace else "choose another name or ask to replace it (--replace)"
    )
    return OutputExistsError(f"{target} {what}; {mend}")


def _sibling(target: Path, kind: str) -> Path:
    return target.with_name(f".{target.name}.{kind}")


def _swap(target: Path) -> None:
    """Steps 1 to 3; each rename is on disk before the next."""
    new, old = _sibling(target, "new"), _sibling(target, "old")
    if target.exists():
        os.rename(target, old)
        _flush(target.parent)
    os.rename(new, target)
    _flush(target.parent)
    _discard(target, old)


def _settle(target: Path) -> str | None:
    """Bring the siblings of ``target`` in order; the table at the top of the module."""
    new, old = _sibling(target, "new"), _sibling(target, "old")
    done = None
    if new.exists() and old.exists() and not target.exists():
        os.rename(new, target)
        _flush(target.parent)
        done = f"finished replacing {target}, which was interrupted"
    elif old.exists() and not target.exists():
        os.rename(old, target)
        _flush(target.parent)
        done = f"put back the earlier {target} after an interrupted replacement"
    if new.exists():
        _discard(target, new)
        done = f"removed what an interrupted program had begun to write for {target}"
    if old.exists() or _sibling(target, "gone").exists():
        _discard(target, old)
        done = done or f"removed the earlier {target} after an interrupted replacement"
    return done


def _discard(target: Path, folder: Path) -> None:
    """Remove a sibling under a name of its own: half removed, it must not pass for whole."""
    gone = _sibling(target, "gone")
    if gone.exists():
        shutil.rmtree(gone)
    if folder.exists():
        os.rename(folder, gone)
        shutil.rmtree(gone)


@contextmanager
def _locked(target: Path) -> Iterator[None]:
    """Hold the lock of ``target``; OutputExistsError when another program holds it."""
    path = _sibling(target, "lock")
    handle = _acquire(path, target)
    try:
        yield
    finally:
        # Removed while held: whoever waits on the old file finds that its name is gone.
        path.unlink(missing_ok=True)
        os.close(handle)


def _acquire(path: Path, target: Path) -> int:
    while True:
        handle = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            os.close(handle)
            if error.errno in (errno.EWOULDBLOCK, errno.EACCES):
                raise OutputExistsError(
                    f"another program is writing {target}; wait for it or choose another name"
                ) from None
            raise
        # The file may have been removed by its last holder between open and lock.
        try:
            if os.fstat(handle).st_ino == os.stat(path).st_ino:
                return handle
        except FileNotFoundError:
            pass
        os.close(handle)


def _flush_tree(folder: Path) -> None:
    for root, _, files in os.walk(folder):
        for name in files:
            _flush(Path(root, name))
        _flush(Path(root))


def _flush(path: Path) -> None:
    """Force a file or a folder's entries to disk."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)

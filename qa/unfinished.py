"""Folders of audits under way: each is marked as in use while its audit lives, so that what a killed one left is known."""

from __future__ import annotations

import contextlib
import os
import shutil
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path

PREFIX = ".pingworthy-"
MARK = ".under-way"
"""File that names the target; its audit holds a lock on it, which the system lifts when the process ends."""


@contextlib.contextmanager
def folder_beside(target: Path) -> Iterator[Path]:
    """A new folder beside the target, gone afterwards; first, those that killed audits of this target left are removed.

    Raises
    ------
    OSError
        If no folder can be made there.
    """
    target.parent.mkdir(parents=True, exist_ok=True)
    for left in leftovers(target):
        shutil.rmtree(left, ignore_errors=True)
    folder = Path(tempfile.mkdtemp(prefix=PREFIX, dir=target.parent))
    try:
        handle = os.open(folder / MARK, os.O_RDWR | os.O_CREAT)
        try:
            _lock(handle)
            os.write(handle, _named(target))
            yield folder
        finally:
            os.close(handle)
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def leftovers(target: Path) -> list[Path]:
    """Folders that audits of this target left when they were killed: named by it, and in use by no process."""
    found = []
    with contextlib.suppress(OSError):
        for folder in sorted(target.parent.glob(f"{PREFIX}*")):
            with contextlib.suppress(OSError):
                if _left(folder / MARK, target):
                    found.append(folder)
    return found


def _left(mark: Path, target: Path) -> bool:
    handle = os.open(mark, os.O_RDWR)
    try:
        return _lock(handle) and os.read(handle, 65_536) == _named(target)
    finally:
        os.close(handle)


def _named(target: Path) -> bytes:
    return os.fsencode(target.resolve())


def _lock(handle: int) -> bool:
    """Take the lock on a file that is open, if no other process has it; it falls when the file is closed."""
    try:
        if sys.platform == "win32":
            import msvcrt

            # Far behind what is written, since there a locked stretch cannot be read by others.
            os.lseek(handle, 1 << 20, os.SEEK_SET)
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
            os.lseek(handle, 0, os.SEEK_SET)
        else:
            import fcntl

            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True

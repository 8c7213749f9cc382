"""Files written whole or not at all, and the lock that keeps two refits apart."""

from __future__ import annotations

import fcntl
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

LOCK_NAME = ".refit.lock"


def write_whole(path: Path, content: bytes) -> None:
    """Write a file beside its place, sync it and rename it: readers see the old or the new one.

    A killed writer leaves a file that starts with a dot and ends with ``.new``; the next write
    replaces it, since there is one writer at a time.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    fresh = path.with_name(f".{path.name}.new")
    with fresh.open("wb") as handle:
        handle.write(content)
        handle.flush()
        os.fsync(handle.fileno())
    fresh.replace(path)


@contextmanager
def locked(folder: Path) -> Iterator[bool]:
    """Hold the folder's lock; give False, without waiting, if another process holds it.

    The kernel drops the lock when its holder ends, however it ends, so that no stale lock is left
    to clear by hand. The file stays: removing it would let two holders in.
    """
    folder.mkdir(parents=True, exist_ok=True)
    with (folder / LOCK_NAME).open("a") as handle:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            yield False
            return
        yield True


def append_once(path: Path, line: str) -> bool:
    """Append a line to a log unless it is there already; say whether it was written.

    What makes a line unique is the line itself: it carries the moment its result was made. A last
    line without a line break was cut off by a kill while it was written; it is removed first.

    Parameters
    ----------
    path
        The log; only leakpipe writes to it.
    line
        One line, with or without its line break.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    wanted = line.rstrip("\n").encode() + b"\n"
    with path.open("a+b") as handle:
        handle.seek(0)
        content = handle.read()
        whole = content.rfind(b"\n") + 1
        if whole != len(content):
            handle.truncate(whole)
        if content.startswith(wanted) or b"\n" + wanted in content:
            return False
        handle.write(wanted)
        handle.flush()
        os.fsync(handle.fileno())
    return True

"""Files that appear whole or not at all: written under a partial name, flushed, renamed."""

from __future__ import annotations

import errno
import os
import socket
import time
from contextlib import suppress
from pathlib import Path

ABANDONED_AFTER = 24 * 3600.0
"""Seconds after which a partial file of another machine counts as left behind: longer than any write."""


def partial_path(path: Path) -> Path:
    """Return the name a file of this process has in the folder of `path` until it is complete."""
    return path.with_name(f".{path.name}.{socket.gethostname()}.{os.getpid()}.partial")


def reserve(partial: Path) -> None:
    """Make the file system set aside every block of a file, so that no later write into it lacks room.

    Raises
    ------
    OSError
        Where there is no room.
    """
    descriptor = os.open(partial, os.O_RDWR)
    try:
        os.posix_fallocate(descriptor, 0, os.fstat(descriptor).st_size)
    finally:
        os.close(descriptor)


def lacks_room(error: OSError) -> bool:
    """Whether a write failed because the disk or the user's quota is full."""
    return error.errno in (errno.ENOSPC, errno.EDQUOT)


def publish(partial: Path, path: Path) -> None:
    """Flush `partial` to the disk and give it the name `path` in one step."""
    flush_to_disk(partial)
    partial.replace(path)
    flush_to_disk(path.parent)


def write_text_whole(path: Path, text: str) -> None:
    """Write a small text file so that a reader sees the old or the new text, never a part.

    Raises
    ------
    OSError
        Where it cannot be written; the old file is then untouched.
    """
    partial = partial_path(path)
    try:
        partial.write_text(text, encoding="utf-8")
        publish(partial, path)
    except OSError:
        discard(partial)
        raise


def flush_to_disk(path: Path) -> None:
    """Make a file's content, or a folder's list of names, survive a power failure."""
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def discard(partial: Path) -> None:
    """Remove a partial file if it is there."""
    with suppress(OSError):
        partial.unlink()


def remove_abandoned(path: Path) -> None:
    """Remove partial files of `path` whose writers are dead."""
    for other in path.parent.glob(f".{path.name}.*.partial"):
        with suppress(OSError):
            if _abandoned(other):
                other.unlink()


def _abandoned(partial: Path) -> bool:
    """Whether the process that wrote `partial` has ended, as far as this machine can tell."""
    host, _, process = partial.name.removesuffix(".partial").rpartition(".")
    if host.endswith(f".{socket.gethostname()}") and process.isdigit():
        return not process_alive(int(process))
    return time.time() - partial.stat().st_mtime > ABANDONED_AFTER


def process_alive(process: int) -> bool:
    """Whether a process with this id runs on this machine."""
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True

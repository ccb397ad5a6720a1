"""One run per folder: a lock that a dead process lets go of by itself."""

from __future__ import annotations

import errno
import fcntl
import json
import os
import socket
import time
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path

from lattice.errors import LatticeError
from lattice.store.replacement import process_alive

LOOKS = 5
"""Times a lock that is held is tried again: who only looks whether it is held has it for an instant, too."""
_NO_LOCKS = (errno.ENOLCK, errno.EOPNOTSUPP, errno.ENOSYS)


@dataclass(frozen=True)
class Holder:
    """Who holds a run folder.

    Parameters
    ----------
    host : str
        Name of the machine.
    process : int
        Process id of rank 0 there.
    since : str
        Coordinated universal time of taking it, ISO 8601.
    scheduler_job : str
        The scheduler's job id, empty outside one.
    """

    host: str
    process: int
    since: str
    scheduler_job: str = ""

    @classmethod
    def here(cls, environ: Mapping[str, str] = os.environ) -> Holder:
        """Return the holder this process would be."""
        job = environ.get("SLURM_JOB_ID") or environ.get("PBS_JOBID") or ""
        return cls(socket.gethostname(), os.getpid(), datetime.now(UTC).isoformat(timespec="seconds"), job)


class FolderLock:
    """The lock of a run folder, held by rank 0 for as long as the run lasts.

    The operating system drops the lock with the process, however that ends. Where the file system has no
    locks, the process id in the file decides. A file left by another machine counts as held, unless it is
    from the same scheduler job, which then was started again elsewhere.

    Parameters
    ----------
    path : Path
        The lock file.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._descriptor: int | None = None

    def take(self) -> None:
        """Take the lock.

        Raises
        ------
        LatticeError
            If another run holds it.
        OSError
            If the lock file cannot be written.
        """
        me = Holder.here()
        descriptor = self._open_locked()
        try:
            other = read_holder(self.path)
            if other is not None and other.host != me.host and not _same_job(other, me):
                raise LatticeError(_refusal(self.path, other))
            os.ftruncate(descriptor, 0)
            os.pwrite(descriptor, json.dumps(asdict(me)).encode() + b"\n", 0)
        except BaseException:
            os.close(descriptor)
            raise
        self._descriptor = descriptor

    def release(self) -> None:
        """Remove the lock file and let go; nothing happens where the lock is not held."""
        if self._descriptor is None:
            return
        with suppress(OSError):
            self.path.unlink()
        os.close(self._descriptor)
        self._descriptor = None

    def _open_locked(self) -> int:
        """Return a descriptor of the lock file that no other process has locked."""
        while True:
            descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
            try:
                self._lock(descriptor)
                if _still_named(self.path, descriptor):
                    return descriptor
            except BaseException:
                os.close(descriptor)
                raise
            # Its former holder removed it between our opening and locking it.
            os.close(descriptor)

    def _lock(self, descriptor: int) -> None:
        try:
            _take_patiently(descriptor)
        except OSError as error:
            other = read_holder(self.path)
            if error.errno in _NO_LOCKS and (other is None or _is_dead(other)):
                return
            if error.errno in _NO_LOCKS or isinstance(error, BlockingIOError):
                raise LatticeError(_refusal(self.path, other)) from error
            raise


def _take_patiently(descriptor: int) -> None:
    for _ in range(LOOKS - 1):
        try:
            return fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            time.sleep(0.05)
    return fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)


def is_held(path: Path) -> bool:
    """Whether a living run holds a lock file, as far as this machine can see."""
    try:
        descriptor = os.open(path, os.O_RDONLY)
    except OSError:
        return False
    try:
        fcntl.flock(descriptor, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        return True
    except OSError:
        return False
    finally:
        os.close(descriptor)
    return False


def read_holder(path: Path) -> Holder | None:
    """Return who wrote a lock file, None where there is no file or no sense in it."""
    try:
        return Holder(**json.loads(path.read_text(encoding="utf-8")))
    except (OSError, ValueError, TypeError):
        return None


def _still_named(path: Path, descriptor: int) -> bool:
    try:
        return os.path.samestat(path.stat(), os.fstat(descriptor))
    except FileNotFoundError:
        return False


def _is_dead(other: Holder) -> bool:
    return other.host == socket.gethostname() and not process_alive(other.process)


def _same_job(other: Holder, me: Holder) -> bool:
    return bool(me.scheduler_job) and other.scheduler_job == me.scheduler_job


def _refusal(path: Path, other: Holder | None) -> str:
    if other is None:
        return f"folder {path.parent} is in use by another run; choose another one with --out"
    run = f"a run on {other.host} (process {other.process}, since {other.since})"
    remedy = f"choose another one with --out, or, if that run has ended, remove {path}"
    return f"folder {path.parent} is in use by {run}; {remedy}"

"""One attempt at a member: a process of its own, or one left by a campaign that was killed.

The first process of a run inherits a lock on `member.lock` and holds it for as long as it lives, whatever
becomes of the campaign that started it: a member that still runs is never started a second time.
"""

from __future__ import annotations

import errno
import fcntl
import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from contextlib import suppress
from pathlib import Path

from lattice.campaign.folder import MemberFiles
from lattice.environment import without_launcher
from lattice.errors import LatticeError
from lattice.store.lock import FolderLock, read_holder
from lattice.store.replacement import discard, process_alive, write_text_whole

STOP_GRACE = 25.0
"""Seconds a member has to keep its state after it was asked to stop; schedulers often grant 30."""
KILL_GRACE = 5.0
"""Seconds between its termination and its end by force."""
_NO_LOCKS = (errno.ENOLCK, errno.EOPNOTSUPP, errno.ENOSYS)
LOST = "lost"
"""How an attempt that nobody waited for has ended."""


class Attempt:
    """A running member.

    Parameters
    ----------
    number : int
        The member's.
    files : MemberFiles
        Its paths.
    """

    def __init__(self, number: int, files: MemberFiles) -> None:
        self.number, self.files = number, files
        self.began = time.monotonic()
        self.stage = 0
        self.limited = False
        self._deadline: float | None = None
        self._ended: float | None = None
        self._process: subprocess.Popen[bytes] | None = None

    @property
    def adopted(self) -> bool:
        """Whether another process than this one has started it."""
        return self._process is None

    @property
    def seconds(self) -> float:
        """Wall time from its beginning to now, or to when it was seen to have ended."""
        return (self._ended or time.monotonic()) - self.began

    def start(self, command: Sequence[str], environ: Mapping[str, str], record: str) -> None:
        """Start it, in a process group of its own, its words going to its log.

        Parameters
        ----------
        command : sequence of str
        environ : mapping of str to str
        record : str
            What outcome.json says until it has ended.

        Raises
        ------
        LatticeError
            Where the member runs already.
        """
        self.files.run.mkdir(parents=True, exist_ok=True)
        lock = _taken(self.files)
        if lock is None:
            raise LatticeError(f"member {self.number} runs already, see {self.files.lock}")
        try:
            os.ftruncate(lock, 0)
            # What a summary says from now on is about this attempt.
            discard(self.files.summary)
            write_text_whole(self.files.outcome, record)
            with self.files.log.open("ab") as log:
                self._process = subprocess.Popen(
                    list(command),
                    stdin=subprocess.DEVNULL,
                    stdout=log,
                    stderr=subprocess.STDOUT,
                    env=dict(environ),
                    start_new_session=True,
                    pass_fds=(lock,),
                )
            _sign(lock, self._process.pid)
        finally:
            os.close(lock)

    def poll(self) -> int | str | None:
        """Return None while it runs, then its exit code, `LOST` for one that another process started."""
        code: int | str | None = self._process.poll() if self._process is not None else LOST
        if self._process is None and is_running(self.files):
            code = None
        if code is not None and self._ended is None:
            self._ended = time.monotonic()
        return code

    def ask_to_stop(self, grace: float | None) -> None:
        """Ask it to stop at its next step; with a time limit it is then terminated, and ended by force."""
        if self.stage == 0:
            self.stage = 1
            self._send(signal.SIGUSR1)
        if grace is not None:
            self._deadline = min(self._deadline or float("inf"), time.monotonic() + grace)

    def go_on_stopping(self, at_once: bool = False) -> None:
        """Take the next stage of stopping when its time has come, or at once."""
        due = self._deadline is not None and time.monotonic() >= self._deadline
        if not (due or at_once):
            return
        self.stage += 1
        self._deadline = time.monotonic() + KILL_GRACE
        self._send(signal.SIGTERM if self.stage <= 2 else signal.SIGKILL)

    def _send(self, number: signal.Signals) -> None:
        process = self._process.pid if self._process is not None else _holder(self.files)
        if process is None or (self._process is not None and self._process.poll() is not None):
            return
        with suppress(ProcessLookupError, PermissionError):
            if number == signal.SIGKILL:
                os.killpg(process, number)
            else:
                os.kill(process, number)


def adopt(number: int, files: MemberFiles) -> Attempt | None:
    """Return the attempt at a member that another process has started and that still runs, if any."""
    if not is_running(files):
        return None
    attempt = Attempt(number, files)
    with suppress(OSError):
        attempt.began -= max(0.0, time.time() - files.lock.stat().st_mtime)
    return attempt


def whereabouts(files: MemberFiles) -> str:
    """Return where a member runs, as far as its locks tell, and what to do if it does not."""
    signed, other = _signature(files), read_holder(files.run / "run.lock")
    host, process = signed or ((other.host, other.process) if other is not None else ("", 0))
    left = files.run / "run.lock" if other is not None else files.lock
    where = f" on {host} (process {process})" if host else ""
    return f"runs already{where}; if that process is gone, remove {left}"


def is_running(files: MemberFiles) -> bool:
    """Whether a process works on a member, here or on another machine."""
    if not files.run.is_dir():
        return False
    if files.lock.exists():
        lock = _locked(files.lock)
        if lock is None:
            return not _first_process_ended(files) or _run_lock_held(files.run)
        os.close(lock)
    return _run_lock_held(files.run)


def _first_process_ended(files: MemberFiles) -> bool:
    """Whether the process that a held lock was given to is gone: what MPI starts beside it may linger."""
    holder = _signature(files)
    return holder is not None and holder[0] == socket.gethostname() and not process_alive(holder[1])


def own_environment(environ: Mapping[str, str]) -> dict[str, str]:
    """Return the environment of a member's process, which is not a rank of whatever started this one."""
    return {**without_launcher(environ), "PYTHONUNBUFFERED": "1"}


def solve_command(files: MemberFiles, ranks: int, launcher: str | None, resume: bool) -> list[str]:
    """Return the command line that solves a member's job in its folder."""
    command = [sys.executable, "-m", "lattice", "solve", str(files.job), "--out", str(files.run)]
    command += ["--resume" if resume else "--force"]
    if ranks > 1:
        command += ["--ranks", str(ranks)]
        command += ["--launcher", launcher] if launcher else []
    return command


def _taken(files: MemberFiles) -> int | None:
    """Return a descriptor that holds a member's lock, None where the member runs."""
    lock = _locked(files.lock)
    if lock is None and not is_running(files):
        # Held by what MPI left behind: that keeps the old file, the member gets a new one.
        discard(files.lock)
        lock = _locked(files.lock)
    if lock is not None and _run_lock_held(files.run):
        os.close(lock)
        lock = None
    return lock


def _locked(path: Path) -> int | None:
    """Return a descriptor that holds the lock on a file, None where another process has it."""
    descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        os.close(descriptor)
        return None
    except OSError as error:
        # Without locks the run's own lock still tells, by its process id.
        if error.errno not in _NO_LOCKS:
            os.close(descriptor)
            raise
    return descriptor


def _sign(lock: int, process: int) -> None:
    text = json.dumps({"host": socket.gethostname(), "process": process})
    with suppress(OSError):
        os.pwrite(lock, text.encode(), 0)


def _signature(files: MemberFiles) -> tuple[str, int] | None:
    """Return host and process that a lock was given to, None where it is not signed yet."""
    with suppress(OSError, ValueError, KeyError, TypeError):
        content = json.loads(files.lock.read_text(encoding="utf-8"))
        return str(content["host"]), int(content["process"])
    return None


def _holder(files: MemberFiles) -> int | None:
    """Return the process to signal of a member started by another process of this machine."""
    signed = _signature(files)
    if signed is None:
        other = read_holder(files.run / "run.lock")
        signed = (other.host, other.process) if other is not None else None
    return signed[1] if signed is not None and signed[0] == socket.gethostname() else None


def _run_lock_held(run: Path) -> bool:
    """Whether the run folder's own lock is held; one left behind by a dead run is not."""
    if not (run / "run.lock").exists():
        return False
    lock = FolderLock(run / "run.lock")
    try:
        lock.take()
    except LatticeError:
        return True
    except OSError:
        return False
    lock.release()
    return False

"""Background processes in the place of a scheduler, each script in a session of its own.

A session of its own has no terminal, so that the end of the user's session does not reach it.
"""

from __future__ import annotations

import os
import signal
import subprocess
from collections.abc import Mapping, Sequence
from contextlib import suppress
from pathlib import Path

from lattice.batch.scheduler import QueuedJob, SchedulerError, clean_environment
from lattice.store.replacement import process_alive


class Local:
    """Jobs as background processes; a job's id is that of its process and, on Linux, when that started."""

    def submit(self, script: Path, after: str | None) -> str:
        """Start a script in the background; it waits for `after` by itself."""
        process = subprocess.Popen(
            ["/bin/bash", str(script)],
            stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL,
            start_new_session=True, close_fds=True,
            env=clean_environment(os.environ) | {"LATTICE_AFTER": after or "", "LATTICE_MEMBER": ""},
        )  # fmt: skip
        job = job_of(process.pid)
        # It must outlive this process; who waits for it then is the system.
        process.returncode = 0
        return job

    def jobs(self, ids: Sequence[str]) -> dict[str, QueuedJob] | None:
        """Return which processes still run."""
        return {
            job: QueuedJob("running", "running") if _runs(job) else QueuedJob("ended", "ended") for job in ids
        }

    def warn(self, job: str) -> None:
        """Send SIGUSR1 to the script."""
        _send(job, signal.SIGUSR1)

    def cancel(self, job: str) -> None:
        """Send SIGTERM to the script."""
        _send(job, signal.SIGTERM)

    def requeue(self, job: str) -> None:
        """Refuse: here a run goes on as a new process."""
        raise SchedulerError("this machine has no queue; use chain = 'submit'")

    def own_job(self, environ: Mapping[str, str]) -> str:
        """Return the job of the script that started this process; a study's member is one by itself."""
        return job_of(os.getpid() if environ.get("LATTICE_MEMBER") else os.getppid())

    def member(self, array: str, place: int) -> str:
        """Return the id of a study's member: all run in one job."""
        return array

    def own_member(self, environ: Mapping[str, str]) -> int | None:
        """Return None: the members of a study run one after another in one job."""
        return None


def job_of(process: int) -> str:
    """Return the id of the job that is a process."""
    return f"{process}.{_started(process)}"


def _started(process: int) -> str:
    """Return the clock ticks after boot at which a process started; proc(5), field 22."""
    with suppress(OSError, IndexError):
        return Path(f"/proc/{process}/stat").read_text(encoding="utf-8").rpartition(")")[2].split()[19]
    return "0"


def _state(process: int) -> str:
    with suppress(OSError, IndexError):
        return Path(f"/proc/{process}/stat").read_text(encoding="utf-8").rpartition(")")[2].split()[0]
    return ""


def _runs(job: str) -> bool:
    number, _, started = job.partition(".")
    if not number.isdigit() or not process_alive(int(number)) or _state(int(number)) == "Z":
        return False
    return started in ("", "0", _started(int(number)))


def _send(job: str, number: signal.Signals) -> None:
    if not _runs(job):
        raise SchedulerError(f"job {job} does not run any more")
    os.kill(int(job.partition(".")[0]), number)


SCHEDULER = Local()

"""Slurm."""

from __future__ import annotations

import getpass
import re
from collections.abc import Mapping, Sequence
from pathlib import Path

from lattice.batch.scheduler import QueuedJob, SchedulerError, ask

_WAITING = {"PENDING", "CONFIGURING", "REQUEUED", "REQUEUE_HOLD", "REQUEUE_FED", "SPECIAL_EXIT", "SUSPENDED"}
_RUNNING = {"RUNNING", "COMPLETING", "STAGE_OUT", "SIGNALING", "RESIZING", "STOPPED"}


class Slurm:
    """Jobs by sbatch, squeue, scancel and scontrol; no accounting is needed."""

    def submit(self, script: Path, after: str | None) -> str:
        """Hand over a script; return the job's id."""
        dependency = [f"--dependency=afterany:{after}"] if after else []
        answer = ask(["sbatch", "--parsable", *dependency, str(script)])
        return answer.strip().splitlines()[-1].partition(";")[0]

    def jobs(self, ids: Sequence[str]) -> dict[str, QueuedJob] | None:
        """Return what squeue knows of jobs; it forgets those that ended some minutes ago."""
        layout = "%i|%T|%r|%M|%l|%S"
        try:
            answer = ask(["squeue", "-h", "-r", "-t", "all", "-u", getpass.getuser(), "-o", layout])
        except SchedulerError:
            return None
        rows = [line.split("|") for line in answer.splitlines()]
        known = {row[0]: _job(row) for row in rows if len(row) == 6}
        return {job: known.get(job, QueuedJob("ended", "unknown")) for job in ids}

    def warn(self, job: str) -> None:
        """Send SIGUSR1 to the script; without `--batch` it would reach nobody."""
        ask(["scancel", "--batch", "--signal=USR1", job])

    def cancel(self, job: str) -> None:
        """End a job."""
        ask(["scancel", job])

    def requeue(self, job: str) -> None:
        """Put a job back."""
        ask(["scontrol", "requeue", job])

    def own_job(self, environ: Mapping[str, str]) -> str:
        """Return the job's id; a member of an array has its place in it."""
        array, place = environ.get("SLURM_ARRAY_JOB_ID"), environ.get("SLURM_ARRAY_TASK_ID")
        return f"{array}_{place}" if array and place else environ.get("SLURM_JOB_ID", "")

    def member(self, array: str, place: int) -> str:
        """Return the id of an array's member."""
        return f"{array}_{place}"

    def own_member(self, environ: Mapping[str, str]) -> int | None:
        """Return the place in the array."""
        place = environ.get("SLURM_ARRAY_TASK_ID", "")
        return int(place) if place.isdigit() else None


def _job(row: Sequence[str]) -> QueuedJob:
    _, state, reason, elapsed, limit, start = row
    kind = "waiting" if state in _WAITING else "running" if state in _RUNNING else "ended"
    word = f"{state} ({reason})" if reason not in ("", "None") and kind == "waiting" else state
    starts = start if kind == "waiting" and start not in ("", "N/A") else ""
    return QueuedJob(kind, word, clock_seconds(elapsed), clock_seconds(limit), starts)


def clock_seconds(text: str) -> int | None:
    """Return the seconds of a time as Slurm prints it, None where it is none.

    Examples
    --------
    >>> [clock_seconds(text) for text in ("1-02:00:00", "2:03", "UNLIMITED")]
    [93600, 123, None]
    """
    found = re.fullmatch(r"(?:(\d+)-)?(?:(\d+):)?(\d+):(\d+)", text)
    if found is None:
        return None
    days, hours, minutes, seconds = (int(part or 0) for part in found.groups())
    return ((days * 24 + hours) * 60 + minutes) * 60 + seconds


SCHEDULER = Slurm()

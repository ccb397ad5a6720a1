"""PBS Professional and OpenPBS.

Commands, attributes and letters of states are those of the PBS Professional Reference Guide, sections on
qsub, qstat, qsig, qdel and job states (from memory).
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from lattice.batch.scheduler import QueuedJob, SchedulerError, ask
from lattice.batch.slurm import clock_seconds

_WORDS = {
    "B": "array begun", "E": "exiting", "F": "finished", "H": "held", "M": "moved", "Q": "queued",
    "R": "running", "S": "suspended", "T": "moving", "U": "suspended for a user", "W": "waiting",
    "X": "finished",
}  # fmt: skip
_RUNNING, _ENDED = "RBEU", "FXM"


class Pbs:
    """Jobs by qsub, qstat, qsig, qdel and qrerun."""

    def submit(self, script: Path, after: str | None) -> str:
        """Hand over a script; return the job's id."""
        dependency = ["-W", f"depend=afterany:{after}"] if after else []
        return ask(["qsub", *dependency, str(script)]).strip().splitlines()[-1]

    def jobs(self, ids: Sequence[str]) -> dict[str, QueuedJob] | None:
        """Return what qstat knows of jobs; where some are unknown it complains, and tells of the others."""
        if not ids:
            return {}
        try:
            answer = ask(["sh", "-c", 'qstat -x -t -f -F json "$@"; [ $? -lt 126 ]', "sh", *ids])
            known = json.loads(answer or "{}").get("Jobs", {})
        except (SchedulerError, ValueError):
            return None
        return {job: _job(known[job]) if job in known else QueuedJob("ended", "unknown") for job in ids}

    def warn(self, job: str) -> None:
        """Send SIGUSR1."""
        ask(["qsig", "-s", "SIGUSR1", job])

    def cancel(self, job: str) -> None:
        """End a job."""
        ask(["qdel", job])

    def requeue(self, job: str) -> None:
        """Put a job back."""
        ask(["qrerun", job])

    def own_job(self, environ: Mapping[str, str]) -> str:
        """Return the job's id."""
        return environ.get("PBS_JOBID", "")

    def member(self, array: str, place: int) -> str:
        """Return the id of an array's member.

        Examples
        --------
        >>> Pbs().member("123[].server", 4)
        '123[4].server'
        """
        return re.sub(r"\[\]", f"[{place}]", array, count=1)

    def own_member(self, environ: Mapping[str, str]) -> int | None:
        """Return the place in the array."""
        place = environ.get("PBS_ARRAY_INDEX", "")
        return int(place) if place.isdigit() else None


def _job(known: Mapping[str, Any]) -> QueuedJob:
    letter = str(known.get("job_state", ""))
    kind = "running" if letter in _RUNNING else "ended" if letter in _ENDED else "waiting"
    comment = str(known.get("comment", "")) if kind == "waiting" else ""
    word = f"{_WORDS.get(letter, letter)} ({comment})" if comment else _WORDS.get(letter, letter)
    elapsed = clock_seconds(str(known.get("resources_used", {}).get("walltime", "")))
    limit = clock_seconds(str(known.get("Resource_List", {}).get("walltime", "")))
    return QueuedJob(kind, word, elapsed, limit, str(known.get("estimated", {}).get("start_time", "")))


SCHEDULER = Pbs()

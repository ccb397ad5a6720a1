"""What the program asks of a scheduler; each one is a module, named in `SCHEDULERS`."""

from __future__ import annotations

import importlib
import os
import subprocess
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol

from lattice.errors import LatticeError

SCHEDULERS = {"slurm": "lattice.batch.slurm", "pbs": "lattice.batch.pbs", "local": "lattice.batch.local"}
PATIENCE = 20.0
"""Seconds a scheduler has for an answer; one that is down may keep its commands waiting for minutes."""


class SchedulerError(LatticeError):
    """A scheduler that refused, or gave no answer."""


@dataclass(frozen=True)
class QueuedJob:
    """A job as the scheduler tells of it.

    Parameters
    ----------
    state : str
        "waiting", "running" or "ended".
    word : str
        The scheduler's own word for it, with its reason.
    elapsed, limit : int or None
        Seconds of wall clock, where known.
    starts : str
        Expected start of a job that waits, empty where unknown.
    """

    state: str
    word: str
    elapsed: int | None = None
    limit: int | None = None
    starts: str = ""


class Scheduler(Protocol):
    """A batch system, or this machine in its place."""

    def submit(self, script: Path, after: str | None) -> str:
        """Hand over a script that may start when the job `after` has ended; return the job's id."""

    def jobs(self, ids: Sequence[str]) -> dict[str, QueuedJob] | None:
        """Return what is known of jobs, by one question for all; None where there is no answer."""

    def warn(self, job: str) -> None:
        """Send SIGUSR1 to the script of a running job."""

    def cancel(self, job: str) -> None:
        """End a job, waiting or running."""

    def requeue(self, job: str) -> None:
        """Put the running job back into its queue; it ends here."""

    def own_job(self, environ: Mapping[str, str]) -> str:
        """Return the id of the job this process belongs to, empty where it is none."""

    def member(self, array: str, place: int) -> str:
        """Return the id of a member of a job array."""

    def own_member(self, environ: Mapping[str, str]) -> int | None:
        """Return this process's place in a job array, None outside one."""


def scheduler(name: str) -> Scheduler:
    """Return a scheduler by its name."""
    made: Scheduler = importlib.import_module(SCHEDULERS[name]).SCHEDULER
    return made


def ask(command: Sequence[str]) -> str:
    """Return what a scheduler's command prints.

    Raises
    ------
    SchedulerError
        With the command's own complaint.
    """
    try:
        done = subprocess.run(
            list(command), capture_output=True, text=True, timeout=PATIENCE, check=False,
            stdin=subprocess.DEVNULL, env=clean_environment(os.environ),
        )  # fmt: skip
    except FileNotFoundError:
        raise SchedulerError(f"{command[0]} is not found; is this a login node of the site?") from None
    except (OSError, subprocess.TimeoutExpired) as error:
        raise SchedulerError(f"{command[0]} gave no answer: {error}") from None
    if done.returncode != 0:
        complaint = " ".join((done.stderr or done.stdout).split())
        raise SchedulerError(f"{command[0]} ended with code {done.returncode}: {complaint}")
    return done.stdout


def clean_environment(environ: Mapping[str, str]) -> dict[str, str]:
    """Return an environment without what belongs to the job or the ranks that this process may be in.

    A job hands its environment on to those it submits.
    """
    inherited = ("SLURM_", "SLURMD_", "SBATCH_", "PBS_", "OMPI_", "PMIX_", "PMI_")
    return {
        name: value
        for name, value in environ.items()
        if name in ("SLURM_CONF", "PBS_CONF_FILE", "PBS_EXEC") or not name.startswith(inherited)
    }

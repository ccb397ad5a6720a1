"""Hands scripts to a scheduler and notes it in the run's folder."""

from __future__ import annotations

from pathlib import Path

from lattice.batch.legs import LegLog
from lattice.batch.render import Script, render
from lattice.batch.scheduler import Scheduler
from lattice.store.replacement import write_text_whole


def write_script(script: Script) -> Path:
    """Write a script into its folder and return its path."""
    write_text_whole(script.path, render(script))
    script.path.chmod(0o755)
    return script.path


def hand_over(script: Script, system: Scheduler, log: LegLog, after: str | None) -> str:
    """Submit a run's leg, note it, and return the job's id.

    Raises
    ------
    SchedulerError
        Where the scheduler refuses.
    """
    path = write_script(script)
    job = system.submit(path, after)
    ranks = script.ticket.ranks_of(script.leg)
    log.append("submitted", leg=script.leg, ranks=ranks, job=job, after=after or "")
    return job

"""`lattice cancel RUN`: stop a submitted run, wherever it runs or waits."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from lattice.errors import InputError

if TYPE_CHECKING:
    from lattice.batch.scheduler import Scheduler
    from lattice.batch.watch import RunView

EPILOG = """\
A run that waits is taken out of the queue. One that runs is asked to stop at its next step and keeps its
state; with --now its job is ended at once, and the state is that of the last step. No further leg starts.
`lattice submit --resume RUN` goes on.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.add_argument("runs", metavar="RUN", nargs="+", help="run folders")
    parser.add_argument("--now", action="store_true", help="do not wait for the step to end")


def run(options: argparse.Namespace) -> int:
    """Run the command and return the exit code."""
    from lattice.batch.watch import view_runs

    views = view_runs([Path(given) for given in options.runs])
    for view in views:
        _check(view)
    for view in views:
        print(f"{view.folder}: {_cancel(view, options.now)}")
    return 0


def _check(view: RunView) -> None:
    if not view.job:
        raise InputError("holds no submitted run; end a `lattice solve` with Ctrl-C", file=str(view.folder))
    if not view.active:
        raise InputError(
            f"holds a run that is {view.outcome}; nothing is left to cancel", file=str(view.folder)
        )


def _cancel(view: RunView, now: bool) -> str:
    from lattice.batch.leg import stop_run
    from lattice.batch.scheduler import SchedulerError, scheduler
    from lattice.batch.ticket import read_ticket

    kind = read_ticket(view.folder).site.scheduler
    system: Scheduler = scheduler(kind)
    # First, so that whatever ends the job, no further leg follows.
    stop_run(view.folder, "lattice cancel")
    if kind == "local" and not view.begun:
        return f"job {view.job} will not begin it"
    try:
        if view.outcome == "waiting" or now:
            system.cancel(view.job)
            return f"job {view.job} is cancelled"
        system.warn(view.job)
    except SchedulerError as error:
        return f"no further leg will start, but job {view.job} could not be reached: {error}"
    return f"job {view.job} stops at its next step, the state is kept"

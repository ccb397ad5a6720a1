"""One leg of a run: what a batch script calls, on the first node of the job."""

from __future__ import annotations

import os
import socket
import sys
import time
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

from lattice.batch.chain import LegEnd, decide
from lattice.batch.codes import CONVERGED, INTERRUPTED
from lattice.batch.ending import Ending
from lattice.batch.legs import LegLog, is_cancelled, last
from lattice.batch.render import Script
from lattice.batch.scheduler import Scheduler, scheduler
from lattice.batch.submission import hand_over
from lattice.batch.supervise import Supervisor
from lattice.batch.ticket import Ticket, read_ticket
from lattice.batch.watch import view_run
from lattice.errors import LatticeError
from lattice.store.aftermath import kept_steps
from lattice.store.runfolder import read_summary
from lattice.store.stopnote import write_stop_note

WAIT_POLL = 2.0


def run_leg(folder: Path, number: int, output: IO[bytes] | None = None) -> int:
    """Run a leg, note how it ended, submit the next one where there is to be one.

    Parameters
    ----------
    folder : Path
        The run's folder.
    number : int
        Which leg, counted from 1; a job that is put back into its queue has the same number again.
    output : binary file, optional
        Where the run's output goes, instead of this process's own.

    Returns
    -------
    int
        The run's exit code.
    """
    ticket, log = read_ticket(folder), LegLog(folder)
    system = scheduler(ticket.site.scheduler)
    _wait_for(system, os.environ.get("LATTICE_AFTER", ""))
    if is_cancelled(log.events()) or _waits_on(folder, ticket, number, log, system):
        return INTERRUPTED
    return _Leg(folder, ticket, number, log, system).go(output)


def _wait_for(system: Scheduler, job: str) -> None:
    """Wait for another job's end where the scheduler leaves that to the job itself."""
    while job and (known := (system.jobs([job]) or {}).get(job)) and known.state != "ended":
        time.sleep(WAIT_POLL)


def _waits_on(folder: Path, ticket: Ticket, number: int, log: LegLog, system: Scheduler) -> bool:
    """Queue behind the run to wait for, where that has gone on in a further job meanwhile."""
    newest = last(log.events(), "submitted")
    if not ticket.after or newest is None:
        return False
    other = view_run(Path(ticket.after))
    if other.outcome not in ("running", "waiting") or other.job == newest.get("after"):
        return False
    hand_over(Script(ticket, folder, number), system, log, after=other.job)
    return True


@dataclass(frozen=True)
class _Leg:
    folder: Path
    ticket: Ticket
    number: int
    log: LegLog
    system: Scheduler

    def go(self, output: IO[bytes] | None) -> int:
        ranks = self.ticket.ranks_of(self.number)
        self._note(
            "began", leg=self.number, ranks=ranks, job=self.system.own_job(os.environ),
            host=socket.gethostname(), process=os.getpid(),
        )  # fmt: skip
        steps = kept_steps(self.folder)
        ending = Ending(self.folder, ranks, resumes=True)
        write = ending.note
        with Supervisor(self.ticket.seconds, self.ticket.warning(), write) as supervisor:
            command = [sys.executable, "-m", "lattice", *self.ticket.arguments(self.number)]
            code = ending.conclude(supervisor.run(command, self.folder, output))
            end = self._end(code, supervisor)
            self._conclude(end, kept_steps(self.folder) - steps, supervisor.elapsed())
        return code

    def _end(self, code: int, supervisor: Supervisor) -> LegEnd:
        told: dict[str, Any] = {}
        with suppress(LatticeError):
            told = read_summary(self.folder / "summary.json")
        outcome = str(told.get("outcome") or ("converged" if code == CONVERGED else "failed"))
        reason = str(told.get("reason") or f"exit code {code}; the output tells why")
        by_request = bool(supervisor.asked) and not supervisor.at_limit
        return LegEnd(code, outcome, reason, supervisor.at_limit, told.get("lost") is True, by_request)

    def _conclude(self, end: LegEnd, new_steps: int, seconds: float) -> None:
        """Note the end with what follows from it, then submit the next leg where one is to follow."""
        cores = self.ticket.site.cores(self.ticket.ranks_of(self.number))
        facts: dict[str, Any] = {
            "leg": self.number, "code": end.code, "outcome": end.outcome, "reason": end.reason,
            "by_request": end.by_request, "new_steps": new_steps,
            "seconds": round(seconds, 1), "core_hours": cores * seconds / 3600,
        }  # fmt: skip
        decision = decide(self.ticket, [*self.log.events(), {"event": "ended", **facts}], end)
        self._note("ended", **facts, goes_on=decision.goes_on, halt=decision.reason)
        if not decision.goes_on:
            return
        try:
            self._submit_next()
        except (LatticeError, OSError) as error:
            self._note("halted", reason=f"the next leg could not be submitted: {error}")

    def _submit_next(self) -> None:
        own = self.system.own_job(os.environ)
        if self.ticket.site.chain == "requeue":
            self._note("submitted", leg=self.number, ranks=self.ticket.ranks_of(self.number), job=own)
            self.system.requeue(own)
            return
        script = Script(self.ticket, self.folder, self.number + 1)
        hand_over(script, self.system, self.log, after=own or None)

    def _note(self, event: str, **facts: Any) -> None:
        """Add to the log; a full disk costs the entry, not the run."""
        try:
            self.log.append(event, **facts)
        except OSError as error:
            sys.stderr.write(f"caution: {self.log.folder}: {event} is not noted: {error.strerror}\n")


def stop_run(folder: Path, reason: str) -> None:
    """Leave the reason of a stop, and keep further legs from starting."""
    write_stop_note(folder, reason)
    LegLog(folder).append("cancelled", reason=reason)

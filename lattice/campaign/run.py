"""Runs a campaign: its members one after another or several at once, each in a process group of its own."""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Callable
from dataclasses import dataclass, replace

from lattice.campaign.attempt import (
    LOST,
    STOP_GRACE,
    Attempt,
    adopt,
    is_running,
    own_environment,
    solve_command,
    whereabouts,
)
from lattice.campaign.ending import CONVERGED, FAILED, RUNNING, Ending, ending
from lattice.campaign.folder import CampaignFolder, Record
from lattice.campaign.keep import drop_fields
from lattice.campaign.reader import Campaign, Member
from lattice.campaign.report import judge_all, write_tables
from lattice.campaign.room import check_room, shortage
from lattice.campaign.signals import Signals
from lattice.campaign.tally import Row, Tally
from lattice.campaign.vary import label
from lattice.errors import InputError, LatticeError
from lattice.job.resolve import changed
from lattice.job.writer import job_to_toml
from lattice.store.lock import FolderLock
from lattice.store.replacement import write_text_whole

Report = Callable[[str], None]
POLL = 0.2
MOST_LOST = 2
"""Attempts that ended unseen, without a word, after which a member counts as failed."""


@dataclass(frozen=True)
class CampaignResult:
    """How a call of `run_campaign` ended.

    Parameters
    ----------
    rows : tuple of Row
        The table of outcomes.
    tally : Tally
        Counts over it.
    stopped : str
        Why members are still to run; empty where none is.
    """

    rows: tuple[Row, ...]
    tally: Tally
    stopped: str


@dataclass(frozen=True)
class Choices:
    """What a call may choose.

    Parameters
    ----------
    retry : bool
        Run members again that failed or were stopped at their limit.
    force : bool
        Run members again whose job has changed.
    launcher : str, optional
        What starts the ranks of a member.
    """

    retry: bool = False
    force: bool = False
    launcher: str | None = None


def run_campaign(
    campaign: Campaign, report: Report = print, choices: Choices | None = None, only: int | None = None
) -> CampaignResult:
    """Run all members that have not ended, and put the outcomes together.

    Not collective: call it in one process that has not started MPI; every member is a process of its own.

    Parameters
    ----------
    campaign : Campaign
        From `read_campaign`.
    report : callable
        Takes lines for the user.
    choices : Choices, optional
    only : int, optional
        Run this member alone, as one element of a job array does; others may run elsewhere.

    Returns
    -------
    CampaignResult

    Raises
    ------
    InputError
        Where the folder holds members whose jobs differ, or the disk lacks room.
    LatticeError
        Where another process runs this campaign, or the folder cannot be used.
    """
    choices = choices or Choices()
    folder = CampaignFolder(campaign.folder.absolute())
    lock = FolderLock(folder.lock)
    try:
        folder.path.mkdir(parents=True, exist_ok=True)
        if only is None:
            lock.take()
        try:
            _compare_plans(campaign, folder, choices.force)
            folder.keep_plan(plan_of(campaign), campaign.file)
            with Signals() as signals:
                return _Runner(campaign, folder, report, choices, signals, only).go()
        finally:
            lock.release()
    except OSError as error:
        raise LatticeError(f"cannot use folder {campaign.folder}: {error}; choose another --out") from error


def plan_of(campaign: Campaign) -> list[dict[str, object]]:
    """Return number, values and digest of every member."""
    return [{"member": m.number, "values": m.values, "digest": m.digest} for m in campaign.members]


def _compare_plans(campaign: Campaign, folder: CampaignFolder, force: bool) -> None:
    """Refuse a folder that holds members whose jobs are others now; with force, forget those."""
    now = {member.number: member.digest for member in campaign.members}
    for stored in folder.stored_members():
        number = int(stored["member"])
        files = folder.member(number)
        if now.get(number) == stored["digest"] or folder.record(number) is None:
            continue
        if not force:
            raise InputError(
                f"holds member {number}, whose job has changed since it ran; choose another --out, or --force"
                " to run such members again",
                file=str(campaign.folder),
            )
        if is_running(files):
            raise LatticeError(
                f"member {number}, whose job has changed, still runs in {files.run}; stop it first"
            )
        shutil.rmtree(files.run)


class _Runner:
    """The state of a campaign between its members."""

    def __init__(
        self,
        campaign: Campaign,
        folder: CampaignFolder,
        report: Report,
        choices: Choices,
        signals: Signals,
        only: int | None,
    ) -> None:
        self.campaign, self.folder, self.report, self.choices = campaign, folder, report, choices
        self.signals, self.only = signals, only
        self.began, self.environ = time.monotonic(), own_environment(os.environ)
        self.active: list[Attempt] = []
        self.queue: list[int] = []
        self.lost: dict[int, int] = {}
        self.stopped = ""

    def go(self) -> CampaignResult:
        """Run what is to run."""
        members = self.campaign.members if self.only is None else [self.campaign.members[self.only]]
        for member in members:
            self._look_at(member)
        check_room(self.campaign, self.queue)
        self._put_together()
        try:
            while self.active or (self.queue and not self.stopped):
                self._begin_some()
                self._collect()
                self._mind_the_clock()
                if self.active:
                    time.sleep(POLL)
        except BaseException:
            self._stop_all()
            raise
        rows, tally = self._put_together()
        return CampaignResult(tuple(rows), tally, self.stopped)

    def _look_at(self, member: Member) -> None:
        """Find out whether a member has ended, runs, ended unseen, or is to run."""
        files = self.folder.member(member.number)
        running = adopt(member.number, files)
        if running is not None:
            if self.only is not None:
                raise InputError(whereabouts(files), key=f"member {member.number}")
            self.report(f"member {member.number} ({member.label}): waiting for it, it {whereabouts(files)}")
            self.active.append(running)
            return
        record = self.folder.record(member.number)
        if record is not None and record.outcome == RUNNING:
            found = ending(files, LOST, False, None)
            record = self._settled(member, record, found, LOST, None) if found else record
        if record is None or self._is_open(record):
            self.queue.append(member.number)

    def _is_open(self, record: Record) -> bool:
        """Whether a member goes on: interrupted, stopped at less time than it has now, or tried again."""
        if not record.final:
            return True
        most = self.campaign.limits.member_seconds
        if record.limit is not None and (self.choices.retry or most is None or most > record.limit):
            return True
        return self.choices.retry and record.outcome == FAILED

    def _begin_some(self) -> None:
        while self.queue and not self.stopped and len(self.active) < self.campaign.limits.at_once:
            number = self.queue[0]
            reason = shortage(self.campaign, number, [attempt.number for attempt in self.active])
            if reason:
                self.stopped = "" if self.active else reason
                return
            self.queue.pop(0)
            self.active.append(self._begin(self.campaign.members[number]))

    def _begin(self, member: Member) -> Attempt:
        assert member.job is not None
        files = self.folder.member(member.number)
        known = self.folder.record(member.number) or Record(member.number, RUNNING, attempts=0)
        # A failed or changed job begins anew; what was interrupted goes on from its state.
        resume = known.attempts > 0 and known.outcome != FAILED and files.state.exists()
        files.run.mkdir(parents=True, exist_ok=True)
        job = changed(member.job, output=changed(member.job.output, folder=str(files.run)))
        write_text_whole(files.job, job_to_toml(job))
        limits = self.campaign.limits
        record = Record(
            member.number,
            RUNNING,
            final=False,
            attempts=known.attempts + 1,
            seconds=known.seconds,
            ranks=limits.ranks,
            values=member.values,
        )
        attempt = Attempt(member.number, files)
        try:
            attempt.start(
                solve_command(files, limits.ranks, self.choices.launcher, resume),
                self.environ,
                record.to_json(),
            )
        except LatticeError:
            other = adopt(member.number, files)
            if other is None:
                raise
            return other
        return attempt

    def _collect(self) -> None:
        """Take in the members that have ended."""
        codes = [(attempt, attempt.poll()) for attempt in self.active]
        settled = [self._take_in(attempt, code) for attempt, code in codes if code is not None]
        records = [record for record in settled if record is not None]
        if records:
            rows, tally = self._put_together()
            for record in records:
                self.report(_line(rows[record.member], record, tally))

    def _take_in(self, attempt: Attempt, code: int | str) -> Record | None:
        self.active.remove(attempt)
        limit = self.campaign.limits.member_seconds if attempt.limited else None
        found = ending(attempt.files, code, attempt.stage > 0, limit) or self._try_again(attempt.number)
        known = self.folder.record(attempt.number)
        if found is None or known is None:
            return None
        return self._settled(self.campaign.members[attempt.number], known, found, code, attempt)

    def _try_again(self, number: int) -> Ending | None:
        """Queue a member that ended unseen and left nothing; after some times it has failed."""
        self.lost[number] = self.lost.get(number, 0) + 1
        if self.lost[number] > MOST_LOST:
            return Ending(FAILED, "ended several times without a word", True, {})
        self.queue.insert(0, number)
        return None

    def _settled(
        self, member: Member, known: Record, found: Ending, code: int | str, attempt: Attempt | None
    ) -> Record:
        """Write and return the record of a member that has ended or was interrupted."""
        spent = attempt.seconds if attempt is not None else found.seconds or 0.0
        limited = attempt is not None and attempt.limited and found.final and found.outcome == "interrupted"
        record = replace(
            known,
            outcome=found.outcome,
            reason=found.reason,
            final=found.final,
            limit=self.campaign.limits.member_seconds if limited else None,
            exit_code=None if code == LOST else int(code),
            seconds=known.seconds + spent,
            values=member.values,
            numbers=found.numbers,
            judged=False,
            kept=(self.folder.member(member.number).state).exists(),
        )
        self.folder.keep_record(record)
        return record

    def _put_together(self) -> tuple[list[Row], Tally]:
        """Judge new states, keep what is to be kept, write the tables."""
        numbers = [member.number for member in self.campaign.members]
        if self.only is None:
            judge_all(self.folder, numbers, self.report)
            drop_fields(self.folder, self.folder.records(numbers), self.campaign.output)
        return write_tables(self.folder, only_count=self.only is not None)

    def _mind_the_clock(self) -> None:
        """Answer signals, stop what has had its time."""
        if self.signals.answer(self.active):
            self.stopped = self.signals.seen
            self._say_stopping(f"{self.signals.seen}: members stop at their next step, states are kept")
        limits = self.campaign.limits
        spent = time.monotonic() - self.began
        if limits.total_seconds is not None and spent > limits.total_seconds and not self.stopped:
            self.stopped = f"limits.total_seconds = {limits.total_seconds:g} is used up"
            self._say_stopping(f"{self.stopped}: members stop at their next step, states are kept")
            for attempt in self.active:
                attempt.ask_to_stop(STOP_GRACE)
        for attempt in self.active:
            over = limits.member_seconds is not None and attempt.seconds > limits.member_seconds
            if over and attempt.stage == 0:
                attempt.limited = True
                attempt.ask_to_stop(STOP_GRACE)
            attempt.go_on_stopping()

    def _say_stopping(self, text: str) -> None:
        if self.active:
            self.report(text)

    def _stop_all(self) -> None:
        """Stop every member when the campaign itself cannot go on; the next call finds what they leave."""
        for attempt in self.active:
            attempt.ask_to_stop(STOP_GRACE)
        while any(attempt.poll() is None for attempt in self.active):
            for attempt in self.active:
                attempt.go_on_stopping()
            time.sleep(POLL)


def _line(row: Row, record: Record, tally: Tally) -> str:
    residual = record.numbers.get("residual_rms")
    parts = [row.outcome]
    if residual is not None:
        parts.append(f"residual_rms {residual:.1e}")
    if record.outcome != CONVERGED and record.reason:
        parts.append(record.reason)
    parts.append(f"{record.seconds:.1f} s")
    ended = f"{tally.ended} of {tally.members} ended, {tally.states} distinct state(s)"
    return f"member {row.member} ({label(row.values)}): {', '.join(parts)}; {ended}"

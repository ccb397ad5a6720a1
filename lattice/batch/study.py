"""Runs that are submitted together, as one job array."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path
from types import FrameType

from lattice.batch.codes import CONVERGED
from lattice.batch.leg import run_leg
from lattice.batch.scheduler import scheduler
from lattice.batch.ticket import LOG, read_ticket
from lattice.errors import InputError
from lattice.store.replacement import write_text_whole

NAME = "study.json"
POLL = 0.2


@dataclass(frozen=True)
class Study:
    """The members of a study.

    Parameters
    ----------
    members : tuple of Path
        Their run folders, absolute.
    concurrent : int
        How many run at once.
    """

    members: tuple[Path, ...]
    concurrent: int


def write_study(folder: Path, study: Study) -> None:
    """Keep a study in its folder."""
    content = {"members": [str(member) for member in study.members], "concurrent": study.concurrent}
    write_text_whole(folder / NAME, json.dumps(content, indent=2) + "\n")


def read_study(folder: Path) -> Study:
    """Return the study of a folder.

    Raises
    ------
    InputError
        Where there is none.
    """
    try:
        content = json.loads((folder / NAME).read_text(encoding="utf-8"))
        return Study(tuple(Path(member) for member in content["members"]), int(content["concurrent"]))
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise InputError(f"holds no study: {error}", file=str(folder)) from None


def run_members(folder: Path) -> int:
    """Run the member whose place in the job array this process has; all of them where there is no array."""
    study = read_study(folder)
    place = scheduler(read_ticket(study.members[0]).site.scheduler).own_member(os.environ)
    if place is None:
        return _run_all(study)
    member = study.members[place]
    with (member / LOG).open("ab") as output:
        return run_leg(member, 1, output)


def _run_all(study: Study) -> int:
    """Run all members, some at once; return 0 if all converged, else the largest exit code."""
    pool = _Pool(study.concurrent)
    for number in (signal.SIGUSR1, signal.SIGTERM):
        signal.signal(number, pool.pass_on)
    for member in study.members:
        pool.start(member)
    return max(pool.finish(), default=CONVERGED)


class _Pool:
    """Processes of which no more than a given number run at once."""

    def __init__(self, most: int) -> None:
        self._most = most
        self._running: list[subprocess.Popen[bytes]] = []
        self._codes: list[int] = []
        self._stopped = False

    def pass_on(self, number: int, frame: FrameType | None) -> None:
        """Pass a signal on to all, and start no more."""
        self._stopped = True
        for process in self._running:
            with contextlib.suppress(ProcessLookupError):
                process.send_signal(number)

    def start(self, member: Path) -> None:
        """Start a member's leg as soon as there is room."""
        while len(self._running) >= self._most:
            self._reap()
        if self._stopped:
            return
        command = [sys.executable, "-m", "lattice", "leg", str(member), "--number", "1"]
        with (member / LOG).open("ab") as output:
            self._running.append(
                subprocess.Popen(
                    command,
                    stdin=subprocess.DEVNULL,
                    stdout=output,
                    stderr=output,
                    env={**os.environ, "LATTICE_MEMBER": "1"},
                )
            )

    def finish(self) -> list[int]:
        """Return all exit codes once all have ended."""
        while self._running:
            self._reap()
        return self._codes

    def _reap(self) -> None:
        ended = [process for process in self._running if process.poll() is not None]
        self._codes += [process.returncode for process in ended]
        self._running = [process for process in self._running if process not in ended]
        if not ended:
            time.sleep(POLL)

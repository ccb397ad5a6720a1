"""Runs the process of one leg: passes signals on, and ends it before the wall clock does."""

from __future__ import annotations

import contextlib
import signal
import subprocess
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from types import FrameType
from typing import IO, Any

from lattice.batch.kinship import end_with_parent

POLL = 0.2
EARLY = 120.0
"""Seconds by which a scheduler's warning may come before the time it was asked for; Slurm's may by 60."""
LATE = 60.0
"""Seconds before the end from which SIGTERM is the scheduler's: its clock began before ours."""
WALL_CLOCK = "the end of the wall clock"
KILL_AFTER = 10.0


class Supervisor:
    """The process of a leg, with the leg's wall clock.

    `warning` seconds before the end it sends SIGUSR1, on which a run keeps its state and ends; a third of
    that time before the end, SIGTERM twice, which ends it within a step.

    Parameters
    ----------
    seconds : int or None
        Wall clock of the leg, from now on; None without limit.
    warning : int
        Seconds before its end.
    note : callable
        Takes in words what asks for a stop, before the process is asked.

    Attributes
    ----------
    at_limit : bool
        Whether it was the wall clock that asked for the end.
    asked : str
        What asked for it first, empty where nothing did.
    """

    def __init__(self, seconds: int | None, warning: int, note: Callable[[str], None]) -> None:
        self._note, self._seconds, self._warning = note, seconds, warning
        self._pending: list[int] = []
        # A clock that nobody sets: the time of day may jump.
        self._began = time.monotonic()
        self._stages: list[tuple[float, Callable[[subprocess.Popen[bytes]], None]]] = []
        if seconds is not None:
            self._stages = [
                (seconds - warning, self._warn),
                (seconds - warning / 3, self._terminate),
                (seconds - warning / 3 + KILL_AFTER, self._kill),
            ]
        self.at_limit = False
        self.asked = ""
        self._before: dict[int, Any] = {}

    def __enter__(self) -> Supervisor:
        for number in (signal.SIGUSR1, signal.SIGTERM, signal.SIGINT, signal.SIGHUP):
            self._before[number] = signal.signal(number, self._remember)
        return self

    def __exit__(self, *failure: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler)

    def _remember(self, number: int, frame: FrameType | None) -> None:
        self._pending.append(number)

    def run(self, command: Sequence[str], cwd: Path, output: IO[bytes] | None = None) -> int:
        """Run a command to its end; return its exit code, 128 + n where signal n ended it."""
        process = subprocess.Popen(
            list(command), cwd=cwd, stdin=subprocess.DEVNULL, stdout=output, stderr=output,
            # What is sent to this process's group must not reach it twice.
            start_new_session=True, preexec_fn=end_with_parent(),
        )  # fmt: skip
        while True:
            with contextlib.suppress(subprocess.TimeoutExpired):
                code = process.wait(POLL)
                return code if code >= 0 else 128 - code
            while self._pending:
                self._answer(process, signal.Signals(self._pending.pop(0)))
            while self._stages and self.elapsed() > self._stages[0][0]:
                self._stages.pop(0)[1](process)

    def elapsed(self) -> float:
        """Return the seconds since the leg began."""
        return time.monotonic() - self._began

    def _answer(self, process: subprocess.Popen[bytes], number: signal.Signals) -> None:
        """Pass a signal on; tell a scheduler's, near the end, from a person's."""
        at_limit = self._is_schedulers(number)
        if self.at_limit and not at_limit:
            self.asked = ""  # somebody ends what was about to go on
        self._ask(WALL_CLOCK if at_limit else number.name, at_limit)
        process.send_signal(number if number == signal.SIGUSR1 else signal.SIGTERM)

    def _is_schedulers(self, number: signal.Signals) -> bool:
        if self._seconds is None:
            return False
        early = self._warning + EARLY if number == signal.SIGUSR1 else min(LATE, self._warning / 2)
        return self.elapsed() > self._seconds - early

    def _ask(self, why: str, at_limit: bool) -> None:
        if not self.asked:
            self.asked, self.at_limit = why, at_limit
            self._note(why)

    def _warn(self, process: subprocess.Popen[bytes]) -> None:
        self._ask(WALL_CLOCK, at_limit=True)
        process.send_signal(signal.SIGUSR1)

    def _terminate(self, process: subprocess.Popen[bytes]) -> None:
        """End the ranks: a run that is asked once waits for its step."""
        self._ask(WALL_CLOCK, at_limit=True)
        process.send_signal(signal.SIGTERM)
        time.sleep(2 * POLL)
        process.send_signal(signal.SIGTERM)

    def _kill(self, process: subprocess.Popen[bytes]) -> None:
        process.kill()

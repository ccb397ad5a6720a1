"""The signals by which a campaign is stopped."""

from __future__ import annotations

import signal
from contextlib import suppress
from types import FrameType
from typing import Any

from lattice.campaign.attempt import STOP_GRACE, Attempt

STOPPING = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP, signal.SIGUSR1)


class Signals:
    """Notes signals while its `with` block lasts, and stops members by them.

    The first asks members to stop at their next step; SIGTERM and SIGHUP give them 25 s for it. Any but
    SIGUSR1 that comes again terminates them, a third one ends them by force.
    """

    def __init__(self) -> None:
        self._pending: list[signal.Signals] = []
        self._before: dict[int, Any] = {}
        self.seen = ""

    def __enter__(self) -> Signals:
        for number in STOPPING:
            with suppress(ValueError):  # only the main thread may set handlers
                self._before[number] = signal.signal(number, self._note)
        return self

    def __exit__(self, *failure: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler if handler is not None else signal.SIG_DFL)

    def _note(self, number: int, frame: FrameType | None) -> None:
        self._pending.append(signal.Signals(number))

    def answer(self, active: list[Attempt]) -> bool:
        """Pass on what has come; return whether it was the first."""
        first = False
        while self._pending:
            number = self._pending.pop(0)
            if not self.seen:
                first, self.seen = True, number.name
            elif number != signal.SIGUSR1:
                for attempt in active:
                    attempt.go_on_stopping(at_once=True)
            if number in (signal.SIGTERM, signal.SIGHUP):
                for attempt in active:
                    attempt.ask_to_stop(STOP_GRACE)
        for attempt in active if self.seen else []:
            attempt.ask_to_stop(None)
        return first

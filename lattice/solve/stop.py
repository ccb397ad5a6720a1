"""Stopping a run from outside: signals set a flag, and all ranks look at it together."""

from __future__ import annotations

import signal
from contextlib import suppress
from types import FrameType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from mpi4py import MPI

WATCHED = ("SIGINT", "SIGTERM", "SIGUSR1")


class StopFlag:
    """Remembers a signal until every rank has agreed to stop.

    Install it after PETSc is initialised, which takes some signals for itself.

    Parameters
    ----------
    comm : MPI.Comm
        The ranks that stop together.
    """

    def __init__(self, comm: MPI.Comm) -> None:
        self._comm, self._seen = comm, 0
        self.agreed = 0
        self._before: dict[int, Any] = {}

    def __enter__(self) -> StopFlag:
        for name in WATCHED:
            number = getattr(signal, name, None)
            if number is not None:
                with suppress(ValueError):  # only the main thread may set handlers
                    self._before[number] = signal.signal(number, self._remember)
        return self

    def __exit__(self, *_: object) -> None:
        for number, handler in self._before.items():
            signal.signal(number, handler if handler is not None else signal.SIG_DFL)

    def _remember(self, number: int, frame: FrameType | None) -> None:
        if number == signal.SIGINT and self._seen:
            raise KeyboardInterrupt  # asked twice: at once, without waiting for the next step
        self._seen = number

    def poll(self) -> bool:
        """Return whether any rank has seen a signal, the same on every rank. Collective."""
        from mpi4py import MPI

        self.agreed = self._comm.allreduce(self._seen, op=MPI.MAX)
        return self.agreed != 0

    @property
    def name(self) -> str:
        """Name of the signal agreed on."""
        return signal.Signals(self.agreed).name if self.agreed else ""

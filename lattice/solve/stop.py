"""Stopping a run from outside: signals set a flag, and all ranks look at it together."""

from __future__ import annotations

import signal
from contextlib import suppress
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

from lattice.store.stopnote import read_stop_note

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
    folder : Path, optional
        The run's folder, where whoever asks may have left a note that says why.
    """

    def __init__(self, comm: MPI.Comm, folder: Path | None = None) -> None:
        self._comm, self._folder, self._seen, self._note = comm, folder, 0, ""
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
        if self.agreed and not self._note and self._folder is not None:
            self._note = self._comm.bcast(read_stop_note(self._folder) or self._signal())
        return self.agreed != 0

    def _signal(self) -> str:
        name = signal.Signals(self.agreed).name if self.agreed else ""
        return "Ctrl-C" if name == "SIGINT" else name

    @property
    def name(self) -> str:
        """What has asked to stop: the note in the run's folder, else the signal agreed on."""
        return self._note or self._signal()

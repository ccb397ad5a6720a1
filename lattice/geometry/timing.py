"""Named phases of a run: PETSc log events, so that `-log_view` shows where the time goes.

While a `Ledger` is open, every phase also adds up what it used of some counters, the clock among them,
without what phases inside it used: the phases are then disjoint, whatever calls what.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

Counters = NDArray[np.float64]


class Ledger:
    """What each phase has used of some counters; one may be open at a time, for a `with` block.

    Parameters
    ----------
    read : callable
        Returns the counters, which only grow, as an array that is the caller's.

    Attributes
    ----------
    used : dict of str to ndarray
        By phase: the differences of the counters, without those of phases inside it.
    calls : dict of str to int
        How often each phase was entered.
    """

    def __init__(self, read: Callable[[], Counters]) -> None:
        self.read = read
        self.used: dict[str, Counters] = {}
        self.calls: dict[str, int] = {}
        self._inside: list[tuple[Counters, Counters]] = []

    def __enter__(self) -> Ledger:
        _OPEN.append(self)
        return self

    def __exit__(self, *failure: object) -> None:
        _OPEN.remove(self)

    def enter(self) -> None:
        """Begin a phase."""
        before = self.read()
        self._inside.append((before, np.zeros_like(before)))

    def leave(self, name: str) -> None:
        """End the phase begun last, and book what it used."""
        before, of_others = self._inside.pop()
        whole = self.read() - before
        if self._inside:
            self._inside[-1][1][...] += whole
        self.used[name] = self.used.get(name, 0.0) + (whole - of_others)
        self.calls[name] = self.calls.get(name, 0) + 1


_OPEN: list[Ledger] = []


class Phase:
    """A context manager: one PETSc log event, booked in the ledger that is open."""

    def __init__(self, name: str) -> None:
        from petsc4py import PETSc

        self.name, self._event = name, PETSc.Log.Event(f"Lattice {name}")

    def __enter__(self) -> Phase:
        if _OPEN:
            _OPEN[-1].enter()
        self._event.begin()
        return self

    def __exit__(self, *failure: object) -> None:
        self._event.end()
        if _OPEN:
            _OPEN[-1].leave(self.name)


@cache
def event(name: str) -> Any:
    """Return the phase of a name, to be used as a context manager."""
    return Phase(name)

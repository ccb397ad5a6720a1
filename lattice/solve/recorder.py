"""What a run tells and keeps: lines of progress, the history of its steps, its state file."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.show.progress import header, step_line
from lattice.store.runfolder import RunFolder, peak_memory_mb
from lattice.store.statefile import write_state
from lattice.store.statemeta import StateMeta
from lattice.store.versions import versions

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.solve.progress import Progress
    from lattice.system.system import System

Report = Callable[[str], None]
WRITING_SHARE = 0.025
"""Largest share of the time that goes into state files where steps are quick."""


@dataclass(frozen=True)
class Done:
    """One step as it is recorded.

    Parameters
    ----------
    stage : str
    number : int
        Within its leg; 0 is the leg's start.
    residual_rms : float
    linear_iterations : int
    more : dict
        Further keys of the history's entry.
    columns : dict of str to float
        Further numbers of the line of progress, after the scalars.
    """

    stage: str
    number: int
    residual_rms: float
    linear_iterations: int
    more: Mapping[str, Any] = field(default_factory=dict)
    columns: Mapping[str, float] = field(default_factory=dict)


class Recorder:
    """Keeps the record of one run.

    Collective, as all methods that take vectors.

    Parameters
    ----------
    files : RunFolder
    comm : MPI.Intracomm
    report : callable
        Takes lines for the user.
    job_text : str
        The resolved job in TOML.
    """

    def __init__(self, files: RunFolder, comm: MPI.Intracomm, report: Report, job_text: str) -> None:
        self.files, self.comm, self.report, self.job_text = files, comm, report, job_text
        self.versions = versions()
        self.began = time.perf_counter()
        self.history: list[dict[str, Any]] = []
        self.residual_max = self.mean_square = math.nan
        self.writing = 0.0
        self._base = 0
        self._written_at = -math.inf
        self._write_took = 0.0

    def go_on(self, meta: StateMeta, first: int) -> None:
        """Take over the history of a kept state; its present leg begins at the entry `first`."""
        self.history = list(meta.history)
        self.residual_max, self.mean_square = meta.residual_max, meta.mean_square
        self.began -= self.history[-1]["seconds"]
        self._base = self.history[first]["step"] if first < len(self.history) else self.history[-1]["step"]
        self.files.rewrite_steps(self.history)

    @property
    def elapsed(self) -> float:
        """Seconds since the run began, those before it went on included."""
        return time.perf_counter() - self.began

    @property
    def linear_iterations(self) -> int:
        """Linear iterations of all steps."""
        return sum(entry["linear_iterations"] for entry in self.history)

    def begin_leg(self, names: list[str]) -> None:
        """Print the header of a leg's steps, which are counted on from those before."""
        self._base = self.history[-1]["step"] if self.history else 0
        self.report(header(names))

    def step(self, done: Done, system: System, x: Any, residual: Any) -> None:
        """Tell of a step and append it to the history."""
        values = system.values_of(x)
        self._measure(system, x, residual)
        memory = peak_memory_mb(self.comm)
        free = {u.name: values[u.name] for u in system.unknowns}
        number, elapsed = self._base + done.number, self.elapsed
        shown = {**free, **done.columns}
        self.report(step_line(number, done.residual_rms, shown, done.linear_iterations, elapsed, memory))
        entry = {
            "step": number,
            "stage": done.stage,
            "residual_rms": done.residual_rms,
            "residual_max": self.residual_max,
            "scalars": free,
            "linear_iterations": done.linear_iterations,
            "seconds": elapsed,
            "peak_memory_mb": memory,
            **done.more,
        }
        self.history.append(entry)
        self.files.append_step(entry)

    def _measure(self, system: System, x: Any, residual: Any) -> None:
        """Set the largest residual and the mean square of the field."""
        from mpi4py import MPI

        count = system.blocks.owned_size
        found = residual.getArray(readonly=1)[:count]
        numbers = x.getArray(readonly=1)[:count]
        self.residual_max = self.comm.allreduce(float(np.abs(found).max()), op=MPI.MAX)
        self.mean_square = self.comm.allreduce(float(numbers @ numbers)) / system.lattice.nodes

    def is_due(self) -> bool:
        """Tell whether a state should be written where steps are quick, the same on all ranks. Collective."""
        since = time.perf_counter() - self._written_at
        due: bool = self.comm.bcast(since * WRITING_SHARE >= self._write_took)
        return due

    def write(
        self,
        system: System,
        x: Any,
        outcome: str,
        progress: Progress,
        classification: Mapping[str, Any] | None = None,
        path: Path | None = None,
    ) -> None:
        """Replace the state file, or write one elsewhere."""
        began = time.perf_counter()
        meta = StateMeta.of_law(
            system.law,
            system.whole_lattice,
            system.values_of(x),
            free=tuple(u.name for u in system.unknowns),
            residual_rms=self.history[-1]["residual_rms"] if self.history else math.nan,
            residual_max=self.residual_max,
            mean_square=self.mean_square,
            outcome=outcome,
            history=tuple(self.history),
            versions=self.versions,
            job_text=self.job_text,
            classification=dict(classification or {}),
            progress=progress.record(),
        )
        write_state(
            path or self.files.state, system.whole_field(x), system.whole_blocks.block, meta, self.comm
        )
        self._written_at = time.perf_counter()
        self._write_took = self._written_at - began
        self.writing += self._write_took

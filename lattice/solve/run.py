"""A run: start, Newton's method, state file, summary."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from contextlib import suppress
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import LatticeError, StateFileError
from lattice.geometry.lattice import Lattice
from lattice.show.progress import header, step_line
from lattice.solve.newton import Newton, NewtonResult, Step
from lattice.solve.petsc import start_petsc
from lattice.solve.refine import carry
from lattice.solve.registry import make_preconditioner
from lattice.solve.stop import StopFlag
from lattice.starts import STARTS
from lattice.store.runfolder import RunFolder, Summary, peak_memory_mb
from lattice.store.statefile import read_meta, write_state
from lattice.store.statemeta import StateMeta
from lattice.store.versions import versions
from lattice.system.system import System
from lattice.system.unknowns import Values

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.job.schema import Job

Report = Callable[[str], None]
CONVERGED, NOT_CONVERGED, INTERRUPTED = 0, 3, 4
TRIVIAL = 1e-16
"""Mean square below which a state is nothing but the rounding of zero."""


@dataclass(frozen=True)
class Outcome:
    """How a run ended: the process exit code and the content of summary.json."""

    exit_code: int
    summary: Summary


def run_job(
    job: Job,
    folder: Path,
    comm: MPI.Intracomm,
    petsc_options: Sequence[str],
    report: Report,
    job_text: str,
    resume: bool = False,
) -> Outcome:
    """Run a job and keep its files in a folder.

    Collective.

    Parameters
    ----------
    job : Job
        Resolved, the same on all ranks.
    folder : Path
        Made if it is not there; held by this run until it ends.
    comm : MPI.Intracomm
    petsc_options : sequence of str
        As typed after `--`.
    report : callable
        Takes lines for the user; silent on all ranks but one.
    job_text : str
        The resolved job in TOML, for the folder and the state file.
    resume : bool
        Go on from the folder's state, where it holds one of this lattice, and with its steps.

    Returns
    -------
    Outcome

    Raises
    ------
    LatticeError
        If the folder cannot be used, the start cannot be made, or a factorisation fails for good.
    """
    start_petsc(petsc_options)
    with RunFolder(folder, comm) as files, StopFlag(comm, folder) as stop:
        files.begin(job_text, resume)
        return _Run(job, files, comm, stop, report, job_text, resume).go()


class _Run:
    """The state of a run between its steps."""

    def __init__(
        self,
        job: Job,
        files: RunFolder,
        comm: MPI.Intracomm,
        stop: StopFlag,
        report: Report,
        job_text: str,
        resume: bool,
    ) -> None:
        self.kept = _kept(files, comm, job.make_lattice()) if resume else None
        self.job, self.files, self.comm, self.stop, self.report = job, files, comm, stop, report
        self.job_text, self.versions = job_text, versions()
        self.law, self.lattice = job.make_law(), job.make_lattice()
        self.began = time.perf_counter()
        self.seconds: dict[str, float] = {}
        self.history: list[dict[str, Any]] = []
        self.linear_iterations = 0
        self.residual_max = self.mean_square = math.nan
        self.system: System
        self.newton: Newton
        self._coarser: tuple[System, NDArray[np.float64], Values] | None = None

    def go(self) -> Outcome:
        """Solve on every lattice of the nest, the job's own last."""
        lattices = nested_lattices(self.lattice, 0 if self.kept else self.job.solve.nested)
        for lattice in lattices[:-1]:
            self.report(f"nested iteration: {_shape(lattice)} nodes first")
            x = self._begin(lattice)
            outcome = self._solve(x, last=False)
            if outcome is not None:
                return outcome
        outcome = self._solve(self._begin(self.lattice), last=True)
        assert outcome is not None
        return outcome

    def _solve(self, x: Any, last: bool) -> Outcome | None:
        """Solve on one lattice; return the outcome if the run ends there."""
        began, options = time.perf_counter(), self.job.solve
        made = make_preconditioner(options.preconditioner, self.system, options, self.report)
        self.newton = Newton(self.system, made, options, self.stop, self._after_step)
        self.report(header([u.name for u in self.system.unknowns]))
        outcome = self._conclude(x, last, began)
        # Freeing is collective: where one rank has failed, it would wait for the others for ever.
        self.newton.destroy()
        x.destroy()
        if last:
            self.system.destroy()
        return outcome

    def _conclude(self, x: Any, last: bool, began: float) -> Outcome | None:
        """Solve, then finish the run or keep the state for the next lattice."""
        result = self.newton.solve(x)
        if last or not result.converged:
            return self._finish(x, result)
        spent = time.perf_counter() - began
        self.seconds[f"nested {_shape(self.system.lattice)}"] = spent
        self.report(
            f"{_shape(self.system.lattice)} nodes took {spent:.1f} s and"
            f" {result.linear_iterations} linear iterations"
        )
        self._coarser = (self.system, self.system.field_of(x), self.system.values_of(x))
        return None

    def _begin(self, lattice: Lattice) -> Any:
        """Make the system of a lattice and its start; return the vector of unknowns."""
        job, comm = self.job, self.comm
        values = job.make_values()
        self.system = System(self.law, lattice, values, job.solve.free or (), job.solve.mean, comm)
        unknowns = self.system.blocks.size + len(self.system.unknowns)
        grid = " x ".join(str(p) for p in self.system.blocks.grid)
        self.report(
            f"{self.law.title or self.law.name}: {unknowns} unknowns on {_shape(lattice)} nodes, "
            f"{comm.size} rank(s) as {grid} (t, y, x)"
        )
        owned, values = self._refine() if self._coarser else self._start(lattice)
        x = self.system.vector()
        self.system.pack(owned, values, x)
        self.system.set_reference(x)
        return x

    def _start(self, lattice: Lattice) -> tuple[NDArray[np.float64], Values]:
        job, began = self.job, time.perf_counter()
        if self.kept is not None:
            return self._go_on(lattice, self.kept)
        owned, values = STARTS[job.start.kind](
            job.start, lattice, job.make_values(), self.law, self.system.blocks.block, self.comm, self.report
        )
        self.seconds["start"] = time.perf_counter() - began
        self.report(f"start '{job.start.kind}' took {self.seconds['start']:.1f} s")
        return owned, values

    def _go_on(self, lattice: Lattice, kept: StateMeta) -> tuple[NDArray[np.float64], Values]:
        """Return the kept state, with its steps behind it."""
        from lattice.job.schema import StateStart

        self.history = list(kept.history)
        self.linear_iterations = sum(entry["linear_iterations"] for entry in kept.history)
        self.began -= self.history[-1]["seconds"]
        start = StateStart(kind="state", file=str(self.files.state))
        block = self.system.blocks.block
        owned, values = STARTS["state"](start, lattice, {}, self.law, block, self.comm, self.report)
        self.report(f"resumed after step {self.history[-1]['step']}")
        return owned, values

    def _refine(self) -> tuple[NDArray[np.float64], Values]:
        """Return the field solved on the coarser lattice, interpolated; free the coarser system."""
        assert self._coarser is not None
        system, owned, values = self._coarser
        refined = carry(system, owned, self.system)
        system.destroy()
        self._coarser = None
        return refined, values

    def _after_step(self, step: Step, x: Any) -> None:
        """Report a step, append it to the folder and write the state."""
        values = self.system.values_of(x)
        self._measure(x)
        if self.kept is not None and step.number == 0:
            return  # the kept state's own last step
        step = replace(step, number=step.number + (self.kept.history[-1]["step"] if self.kept else 0))
        self.linear_iterations += step.linear_iterations
        memory = peak_memory_mb(self.comm)
        free = {u.name: values[u.name] for u in self.system.unknowns}
        elapsed = time.perf_counter() - self.began
        self.report(step_line(step.number, step.residual_rms, free, step.linear_iterations, elapsed, memory))
        entry = {
            "step": step.number,
            "residual_rms": step.residual_rms,
            "residual_max": self.residual_max,
            "scalars": free,
            "linear_iterations": step.linear_iterations,
            "seconds": elapsed,
            "peak_memory_mb": memory,
        }
        self.history.append(entry)
        self.files.append_step(entry)
        self._write(x, "running")

    def _measure(self, x: Any) -> None:
        """Set the largest residual and the mean square of the field."""
        from mpi4py import MPI

        function = self.newton.function()
        count = self.system.blocks.owned_size
        residual = function.getArray(readonly=1)[:count]
        field = x.getArray(readonly=1)[:count]
        self.residual_max = self.comm.allreduce(float(np.abs(residual).max()), op=MPI.MAX)
        square = self.comm.allreduce(float(field @ field))
        self.mean_square = square / self.system.lattice.nodes

    def _write(self, x: Any, outcome: str) -> None:
        meta = StateMeta.of_law(
            self.law,
            self.system.lattice,
            self.system.values_of(x),
            free=tuple(u.name for u in self.system.unknowns),
            residual_rms=self.history[-1]["residual_rms"],
            residual_max=self.residual_max,
            mean_square=self.mean_square,
            outcome=outcome,
            history=tuple(self.history),
            versions=self.versions,
            job_text=self.job_text,
        )
        owned: NDArray[np.float64] = self.system.field_of(x)
        write_state(self.files.state, owned, self.system.blocks.block, meta, self.comm)

    def _finish(self, x: Any, result: NewtonResult) -> Outcome:
        if not self.history:
            raise LatticeError(f"Newton's method made no step: {result.reason}")
        outcome, code = "not converged", NOT_CONVERGED
        if result.converged:
            outcome, code = "converged", CONVERGED
        elif result.interrupted:
            outcome, code = "interrupted", INTERRUPTED
        self._write(x, outcome)
        phases = self.newton.seconds
        self.seconds |= {
            "newton": phases["solve"] - phases["after_step"],
            "set_up": phases["set_up"],
            "residual": phases["residual"],
            "linear": phases["solve"] - phases["after_step"] - phases["set_up"] - phases["residual"],
            "write": phases["after_step"],
            "total": time.perf_counter() - self.began,
        }
        summary = Summary(
            outcome=outcome,
            reason=result.reason,
            law=self.law.name,
            lattice=self.system.lattice,
            unknowns=self.system.blocks.size + len(self.system.unknowns),
            residual_rms=self.history[-1]["residual_rms"],
            residual_max=self.residual_max,
            scalars=self.system.values_of(x),
            mean_square=self.mean_square,
            newton_steps=self.history[-1]["step"],
            linear_iterations=self.linear_iterations,
            seconds=self.seconds,
            ranks=self.comm.size,
            peak_memory_mb=peak_memory_mb(self.comm),
            versions=self.versions,
        )
        self.files.write_summary(summary)
        if summary.mean_square < TRIVIAL:
            self.report("caution: the state is zero everywhere; start from a field nearer to a wanted one")
        if self.job.output.picture:
            self._draw()
        self.report(f"{outcome}: {result.reason}; {_words(summary)}; files in {self.files.path}")
        return Outcome(code, summary)

    def _draw(self) -> None:
        """Draw the state's picture on one rank; a failure costs the picture, not the run."""
        if self.comm.rank > 0:
            return
        from lattice.show.pictures import plot_state

        try:
            plot_state(self.files.state, self.files.picture)
        except LatticeError as error:
            self.report(f"no picture: {error}")


def _kept(files: RunFolder, comm: MPI.Intracomm, lattice: Lattice) -> StateMeta | None:
    """Return the record of the folder's state where a run can go on from it, the same on all ranks."""
    meta = None
    if comm.rank == 0 and files.state.exists():
        with suppress(StateFileError):
            meta = read_meta(files.state)
    if meta is not None and not (meta.history and meta.lattice == lattice):
        meta = None
    shared: StateMeta | None = comm.bcast(meta)
    return shared


def nested_lattices(lattice: Lattice, count: int) -> list[Lattice]:
    """Return the lattices of a nested iteration, coarsest first: each has half the nodes of the next.

    Examples
    --------
    >>> [level.shape for level in nested_lattices(Lattice(nt=64, ny=1, nx=100), 1)]
    [(32, 1, 50), (64, 1, 100)]
    """
    nest = [lattice]
    for _ in range(count):
        finer = nest[0]
        halves = {name: max(1, getattr(finer, name) // 2) for name in ("nt", "ny", "nx")}
        nest.insert(0, replace(finer, **halves))
    return nest


def _shape(lattice: Lattice) -> str:
    return " x ".join(str(n) for n, axis in zip(lattice.shape, "tyx", strict=True) if n > 1 or axis == "x")


def _words(summary: Summary) -> str:
    return (
        f"residual_rms {summary.residual_rms:.3e} after {summary.newton_steps} Newton steps and "
        f"{summary.linear_iterations} linear iterations, {asdict(summary)['seconds']['total']:.1f} s"
    )

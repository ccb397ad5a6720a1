"""The course of a run: its present system and field, and how they move from leg to leg."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from lattice.classify.centring import into_subspace
from lattice.geometry.lattice import Lattice
from lattice.solve.legs import Leg, halved, plan_legs
from lattice.solve.memory import Memory
from lattice.solve.progress import Progress
from lattice.solve.refine import EXTENTS, carry, refined_lattice
from lattice.solve.registry import make_preconditioner
from lattice.solve.starting import default_stages, loose_scalars
from lattice.starts import STARTS
from lattice.store.statefile import read_block, read_meta
from lattice.system.system import System
from lattice.system.unknowns import LOOSE

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.job.schema import Job
    from lattice.solve.recorder import Recorder
    from lattice.solve.registry import Preconditioner
    from lattice.solve.stop import StopFlag
    from lattice.store.statemeta import StateMeta
    from lattice.system.unknowns import Values


@dataclass(frozen=True)
class Ending:
    """How a leg, or the run, ended: "done", "failed" or the run's outcome, and why."""

    word: str
    reason: str


class Course:
    """The present system and field of a run, and where it stands.

    Collective, as all methods.

    Parameters
    ----------
    job : Job
        Resolved.
    recorder : Recorder
    comm : MPI.Intracomm
    stop : StopFlag

    Attributes
    ----------
    system : System
        The present one.
    x : PETSc.Vec
        Its vector of unknowns.
    reference : PETSc.Vec or None
        Where the present leg of Newton's method began.
    progress : Progress
    seconds : dict of str to float
        Wall time by what it went into.
    """

    system: System
    x: Any

    def __init__(self, job: Job, recorder: Recorder, comm: MPI.Intracomm, stop: StopFlag) -> None:
        self.job, self.recorder, self.comm, self.stop = job, recorder, comm, stop
        self.report, self.options, self.law = recorder.report, job.solve, job.make_law()
        self.loose = loose_scalars(self.law, job.solve.damped.free)
        self.reference: Any = None
        self.progress = Progress()
        self.seconds: dict[str, float] = {}
        self._made: Any = None

    @property
    def lattice(self) -> Lattice:
        """The present lattice, whole where a subspace lives on a part of it."""
        return self.system.whole_lattice

    @property
    def leg(self) -> Leg:
        """The present leg."""
        return self.progress.legs[self.progress.leg]

    @property
    def loose_now(self) -> tuple[str, ...]:
        """Scalars without a condition in the present leg."""
        return self._loose_of(self.leg)

    def update(self, **changes: Any) -> None:
        """Change where the run stands."""
        self.progress = replace(self.progress, **changes)

    def start(self) -> None:
        """Make the start, on the lattice of the first leg, and choose the legs."""
        job, began = self.job, time.perf_counter()
        nested = self.options.nested if self.options.stages in (None, ("newton",)) else 0
        values = job.make_values()
        self._make_system(halved(job.make_lattice(), nested), values, ())
        self._tell_system()
        make, lattice, block = STARTS[job.start.kind], self.lattice, self.system.whole_blocks.block
        owned, values = make(job.start, lattice, values, self.law, block, self.comm, self.report)
        self.seconds["start"] = time.perf_counter() - began
        self.report(f"start '{job.start.kind}' took {self.seconds['start']:.1f} s")
        self._pack(owned, values)
        self.system.set_reference(self.x)
        stages = self.options.stages or default_stages(
            self.system, self.x, job.start.kind, nested, self.report
        )
        self.update(legs=plan_legs(stages, self.options))

    def go_on(self, kept: StateMeta) -> None:
        """Take up a kept state and the history behind it."""
        progress = Progress.of_record(kept.progress)
        if kept.outcome != "running":
            # The present leg has reported its end, and will do so again.
            progress = replace(progress, reports=progress.reports[:-1])
        self.progress = progress
        self._make_system(kept.lattice, progress.made_with, self._loose_of(self.leg))
        self.progress = progress
        self._tell_system()
        self.recorder.go_on(kept, progress.first)
        files, block = self.recorder.files, self.system.whole_blocks.block
        if self.leg.method == "newton":
            path = files.state if kept.outcome == "converged" else files.reference
            values = self.comm.bcast(read_meta(path).values if self.comm.rank == 0 else None)
            self._pack(read_block(path, block), values)
            self.reference = self.x
        self._pack(read_block(files.state, block), kept.values)
        self.report(f"goes on after step {self.recorder.history[-1]['step']}")

    def enter(self) -> None:
        """Move the field to the lattice and the unknowns of the present leg, and begin it."""
        leg, lattice = self.leg, self.lattice
        if leg.halvings >= 0:
            lattice = halved(self.job.make_lattice(), leg.halvings)
        elif leg.factor != 1.0:
            lattice = refined_lattice(lattice, leg.factor)
        self.move_to(lattice, self._loose_of(leg))
        values = self.system.values_of(self.x)
        axes = [axis for axis in EXTENTS if getattr(lattice, axis) > 1]
        spacings = {axis: values[EXTENTS[axis]] / getattr(lattice, axis) for axis in axes}
        self.update(first=len(self.recorder.history), spacings=spacings, memory=Memory())
        if leg.method == "newton":
            self._forget_reference()
            self.reference = self.x.copy()
        path = self.recorder.files.reference
        self.recorder.write(self.system, self.x, "reference", self.progress, path=path)

    def move_to(self, lattice: Lattice, loose: tuple[str, ...]) -> None:
        """Carry the field to another lattice or set of unknowns."""
        present = tuple(u.name for u in self.system.unknowns if u.condition == LOOSE)
        if lattice == self.lattice and loose == present:
            return
        before, values, owned = self.system, self.system.values_of(self.x), self.system.whole_field(self.x)
        self._make_system(lattice, values, loose)
        owned = carry(before, owned, self.system)
        self.x.destroy()
        self._forget_reference()
        before.destroy()
        self._pack(owned, values)

    def back_to_reference(self) -> None:
        """Go back to where Newton's method began."""
        self.reference.copy(self.x)

    def back_to_start(self) -> None:
        """Go back to where the present leg began, on its lattice there, from the file that holds it."""
        path = self.recorder.files.reference
        meta = self.comm.bcast(read_meta(path) if self.comm.rank == 0 else None)
        self.x.destroy()
        self.system.destroy()
        self._make_system(meta.lattice, meta.values, ())
        self._pack(read_block(path, self.system.whole_blocks.block), meta.values)

    def inverse(self, report: Callable[[str], None]) -> Preconditioner:
        """Make the job's preconditioner, on the coarse lattice chosen before if the run goes on."""
        options = self.options
        if self.progress.coarse:
            coarse = options.coarse.model_copy(update=self.progress.coarse)
            options = options.model_copy(update={"coarse": coarse})
        self._made = make_preconditioner(options.preconditioner, self.system, options, report)
        made: Preconditioner = self._made
        return made

    def keep_choice(self) -> None:
        """Note the coarse lattice that the preconditioner has chosen."""
        chosen = getattr(self._made, "chosen", None)
        if chosen is not None:
            self.update(coarse=chosen)

    def _loose_of(self, leg: Leg) -> tuple[str, ...]:
        return self.loose if leg.method == "damped" and not leg.held else ()

    def _make_system(self, lattice: Lattice, values: Values, loose: tuple[str, ...]) -> None:
        """Make the present system, in place of the one before."""
        options = self.options
        subspace = self.job.make_subspace()
        self.system = System(
            self.law, lattice, values, options.free or (), options.mean, self.comm, loose, subspace
        )
        self._made = None
        self.update(made_with=dict(values), coarse={})

    def _pack(self, owned: Any, values: Values) -> None:
        self.x = self.system.vector()
        self.system.pack(into_subspace(self.system, owned, self.report), values, self.x)

    def _tell_system(self) -> None:
        system = self.system
        unknowns = system.blocks.size + len(system.unknowns)
        grid = " x ".join(str(p) for p in system.blocks.grid)
        self.report(
            f"{self.law.title or self.law.name}: {unknowns} unknowns on {shape_text(system.lattice)} nodes, "
            f"{self.comm.size} rank(s) as {grid} (t, y, x)"
        )

    def _forget_reference(self) -> None:
        if self.reference is not None:
            self.reference.destroy()
            self.reference = None

    def destroy(self) -> None:
        """Free everything."""
        self._forget_reference()
        self.x.destroy()
        self.system.destroy()


def shape_text(lattice: Lattice) -> str:
    """Return the nodes of a lattice as they are told, time first.

    Examples
    --------
    >>> shape_text(Lattice(nt=84, ny=1, nx=64))
    '84 x 64'
    """
    return " x ".join(str(n) for n, axis in zip(lattice.shape, "tyx", strict=True) if n > 1 or axis == "x")

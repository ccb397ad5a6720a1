"""What a study times: Newton steps, a whole solve, single operations, files."""

from __future__ import annotations

import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

from lattice.solve.newton import Newton
from lattice.solve.registry import make_preconditioner
from lattice.spectral.transform import Transform
from lattice.store.statefile import read_block, write_state
from lattice.store.statemeta import StateMeta
from lattice.system.timing import event

if TYPE_CHECKING:
    from lattice.job.schema import Job
    from lattice.solve.stop import StopFlag
    from lattice.study.schema import StudySection
    from lattice.system.system import System

TURNS = 20
"""Times one repeat of `kernels` calls each operation."""


class Work(Protocol):
    """Something to be timed; all methods are collective."""

    def prepare(self) -> None:
        """Make ready for a repeat; not timed."""

    def run(self) -> dict[str, Any]:
        """Do it once, and return what else is to stand in the row."""

    def lu_numbers(self) -> dict[str, float]:
        """Return the cost of this rank's LU factors, where there are any."""

    def finish(self) -> None:
        """Free what the repeat made; not timed."""

    def destroy(self) -> None:
        """Free everything."""


def make_work(section: StudySection, system: System, x: Any, job: Job, stop: StopFlag) -> Work:
    """Return what a study section says is to be measured."""
    if section.measure == "kernels":
        return Kernels(system, x)
    if section.measure == "files":
        return Files(system, x)
    options = job.solve
    if section.measure == "steps":
        # No state is that good: the steps are always made.
        options = options.model_copy(update={"newton_steps": section.newton_steps, "residual_rms": 1e-300})
    return NewtonSteps(system, x, options, stop)


class _Kept:
    """A preconditioner that outlives the solve it is lent to."""

    def __init__(self, made: Any) -> None:
        self.update, self.apply, self.apply_transpose = made.update, made.apply, made.apply_transpose

    def destroy(self) -> None:
        """Leave it to its owner."""


class NewtonSteps:
    """Newton steps from the start; the preconditioner stays, as it does from step to step of a run.

    What it does once (choosing, compiling, analysing) falls into the first repeat, usually a warm-up.
    """

    def __init__(self, system: System, x: Any, options: Any, stop: StopFlag) -> None:
        self.system, self.options, self.stop = system, options, stop
        self._start, self._x = x, x.duplicate()
        self._newton: Newton | None = None
        self._made = make_preconditioner(options.preconditioner, system, options)

    def prepare(self) -> None:
        """Go back to the start."""
        self._start.copy(self._x)
        self.system.set_reference(self._x)
        lent = _Kept(self._made)
        self._newton = Newton(self.system, lent, self.options, self.stop, lambda step, x: None)

    def run(self) -> dict[str, Any]:
        """Solve."""
        assert self._newton is not None
        result = self._newton.solve(self._x)
        steps = [s.linear_iterations for s in result.steps[1:]]
        return {
            "iterations": result.linear_iterations,
            "iterations_by_step": steps,
            "newton_steps": len(steps),
            "residual_rms": [s.residual_rms for s in result.steps],
            "converged": result.converged,
            "coarse": getattr(self._made, "chosen", None),
        }

    def lu_numbers(self) -> dict[str, float]:
        """Return the cost of the coarse lattice's factors, or of the whole lattice's."""
        bordering = getattr(self._made, "solver", self._made)
        inner = getattr(bordering, "inner", None)
        numbers = getattr(inner, "numbers", None)
        return dict(numbers()) if numbers is not None else {}

    def finish(self) -> None:
        """Free the solver."""
        assert self._newton is not None
        self._newton.destroy()
        self._newton = None

    def destroy(self) -> None:
        """Free preconditioner and vector."""
        self._made.destroy()
        self._x.destroy()


class Kernels:
    """Residual, tangent, halo and transforms alone."""

    def __init__(self, system: System, x: Any) -> None:
        self.system, self._x = system, x
        system.set_reference(x)
        system.linearise(x)
        self._right, self._out = system.vector(), system.vector()
        self._field = system.blocks.vector()
        self._transform = Transform(system.blocks)

    def prepare(self) -> None:
        """Nothing is to be made."""

    def run(self) -> dict[str, Any]:
        """Call every operation some times."""
        for _ in range(TURNS):
            self.system.residual(self._x, self._right)
            self.system.tangent(self._right, self._out)
            self._transform.backward(self._transform.forward(self._field), self._field)
        return {"turns": TURNS}

    def lu_numbers(self) -> dict[str, float]:
        """Return nothing: nothing is factorised."""
        return {}

    def finish(self) -> None:
        """Nothing was made."""

    def destroy(self) -> None:
        """Free vectors and transform."""
        for item in (self._right, self._out, self._field, self._transform):
            item.destroy()


class Files:
    """Writing a state and reading it back, by blocks."""

    def __init__(self, system: System, x: Any) -> None:
        self.system, self._x = system, x
        folder = tempfile.mkdtemp(prefix="lattice-study-") if system.comm.rank == 0 else ""
        self._path = Path(system.comm.bcast(folder)) / "state.h5"
        self._meta = StateMeta.of_law(
            system.law,
            system.lattice,
            system.values,
            free=tuple(u.name for u in system.unknowns),
            outcome="not converged",
        )

    def prepare(self) -> None:
        """Nothing is to be made."""

    def run(self) -> dict[str, Any]:
        """Write and read once."""
        with event("write"):
            write_state(
                self._path,
                self.system.field_of(self._x),
                self.system.blocks.block,
                self._meta,
                self.system.comm,
            )
        with event("read"):
            read_block(self._path, self.system.blocks.block)
        return {"file_bytes": self._path.stat().st_size}

    def lu_numbers(self) -> dict[str, float]:
        """Return nothing: nothing is factorised."""
        return {}

    def finish(self) -> None:
        """Nothing is held."""

    def destroy(self) -> None:
        """Remove the file."""
        self.system.comm.Barrier()
        if self.system.comm.rank == 0:
            self._path.unlink(missing_ok=True)
            self._path.parent.rmdir()

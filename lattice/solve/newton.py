"""Newton's method for the bordered system on PETSc SNES.

The Jacobian is a matrix-free shell, the linear solver FGMRES with the bordered preconditioner, its
tolerance from Eisenstat and Walker [1]_ unless given, the line search backtracking on the mean square
residual. Everything can be overridden in PETSc's options database.

References
----------
.. [1] S. C. Eisenstat, H. F. Walker, "Choosing the forcing terms in an inexact Newton method",
   SIAM J. Sci. Comput. 17 (1996) 16-32 (from memory).
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from lattice.solve import reasons

if TYPE_CHECKING:
    from lattice.solve.registry import Preconditioner
    from lattice.solve.stop import StopFlag
    from lattice.system.system import System

POLL_ITERATIONS = 10
GROWTH_LIMIT = 1e4
STALL_STEPS = 5
FORCING = 1e-2
"""Loosest relative tolerance of a linear solve; a looser first step costs Newton steps."""


@dataclass(frozen=True)
class Step:
    """One Newton step: its number, the residual after it, its linear iterations, seconds so far."""

    number: int
    residual_rms: float
    linear_iterations: int
    seconds: float


@dataclass(frozen=True)
class NewtonResult:
    """How a Newton solve ended.

    Parameters
    ----------
    converged : bool
    interrupted : bool
        A signal stopped it.
    reason : str
        In words.
    steps : tuple of Step
        From the start (number 0) on.
    """

    converged: bool
    interrupted: bool
    reason: str
    steps: tuple[Step, ...]

    @property
    def linear_iterations(self) -> int:
        """Linear iterations of all steps."""
        return sum(step.linear_iterations for step in self.steps)


class _Jacobian:
    """Context of the matrix-free bordered Jacobian."""

    def __init__(self, system: System) -> None:
        self.system = system

    def mult(self, matrix: Any, v: Any, out: Any) -> None:
        self.system.tangent(v, out)

    def multTranspose(self, matrix: Any, w: Any, out: Any) -> None:
        self.system.adjoint(w, out)


class _PythonPC:
    """Context of the PETSc python PC; the preconditioner itself outlives it."""

    def __init__(self, made: Preconditioner) -> None:
        self.made = made

    def apply(self, pc: Any, r: Any, y: Any) -> None:
        self.made.apply(r, y)

    def applyTranspose(self, pc: Any, r: Any, y: Any) -> None:
        self.made.apply_transpose(r, y)


class Newton:
    """A Newton solve of one system.

    Collective.

    Parameters
    ----------
    system : System
    preconditioner : Preconditioner
    options : object
        The job's solve section: residual_rms, newton_steps, linear_rtol, linear_iterations, line_search.
    stop : StopFlag
    after_step : callable
        Called on every rank with the `Step` and the vector of unknowns, which it must not change.
    """

    def __init__(
        self,
        system: System,
        preconditioner: Preconditioner,
        options: Any,
        stop: StopFlag,
        after_step: Callable[[Step, Any], None],
    ) -> None:
        self.system, self.options, self.stop, self.after_step = system, options, stop, after_step
        self.preconditioner = preconditioner
        self.seconds = {"set_up": 0.0, "residual": 0.0, "after_step": 0.0, "solve": 0.0}
        self._steps: list[Step] = []
        self._function = system.vector()
        self._matrix = self._shell(system)
        self._snes = self._make_snes()

    def _shell(self, system: System) -> Any:
        from petsc4py import PETSc

        vector = self._function
        size = (vector.getLocalSize(), vector.getSize())
        matrix = PETSc.Mat().createPython((size, size), _Jacobian(system), comm=system.comm)
        matrix.setUp()
        return matrix

    def _make_snes(self) -> Any:
        from petsc4py import PETSc

        options = self.options
        snes = PETSc.SNES().create(self.system.comm)
        snes.setFunction(self._residual, self._function)
        snes.setJacobian(self._linearise, self._matrix, self._matrix)
        snes.setTolerances(max_it=options.newton_steps)
        ksp = snes.getKSP()
        ksp.setType("fgmres")
        ksp.setTolerances(rtol=options.linear_rtol or FORCING, max_it=options.linear_iterations)
        if options.linear_rtol is None:
            snes.setUseEW(True, version=2, rtol_0=FORCING, rtol_max=FORCING)
        pc = ksp.getPC()
        pc.setType("python")
        pc.setPythonContext(_PythonPC(self.preconditioner))
        defaults = {
            "snes_linesearch_type": "bt" if options.line_search else "basic",
            "ksp_gmres_restart": str(min(options.linear_iterations, 100)),
        }
        with _default_options(defaults):
            snes.setFromOptions()
        snes.setConvergenceTest(self._test)
        snes.setMonitor(self._monitor)
        ksp.setConvergenceTest(self._linear_test)
        return snes

    def solve(self, x: Any) -> NewtonResult:
        """Solve from the vector of unknowns `x`, which is replaced by the last step."""
        started = time.perf_counter()
        self._snes.solve(None, x)
        self.seconds["solve"] += time.perf_counter() - started
        reason = int(self._snes.getConvergedReason())
        interrupted = bool(self.stop.agreed) and reason != reasons.CONVERGED
        return NewtonResult(
            reason == reasons.CONVERGED, interrupted, self._explain(reason, interrupted), tuple(self._steps)
        )

    def _explain(self, reason: int, interrupted: bool) -> str:
        if reason == reasons.CONVERGED:
            return f"residual_rms is at most {self.options.residual_rms:.1e}"
        if interrupted:
            return f"stopped by {self.stop.name}"
        text = reasons.nonlinear_text(reason)
        if reason == -3:
            text += f": {reasons.linear_text(int(self._snes.getKSP().getConvergedReason()))}"
        return text

    def _residual(self, snes: Any, x: Any, f: Any) -> None:
        started = time.perf_counter()
        self.system.residual(x, f)
        self.seconds["residual"] += time.perf_counter() - started

    def _linearise(self, snes: Any, x: Any, matrix: Any, preconditioning: Any) -> None:
        started = time.perf_counter()
        self.system.linearise(x)
        self.preconditioner.update()
        matrix.assemble()
        self.seconds["set_up"] += time.perf_counter() - started

    def _monitor(self, snes: Any, number: int, norm: float) -> None:
        started = time.perf_counter()
        before = sum(step.linear_iterations for step in self._steps)
        rms = norm / self.system.root_size if math.isfinite(norm) else math.nan
        step = Step(number, rms, snes.getLinearSolveIterations() - before, started)
        self._steps.append(step)
        self.after_step(step, snes.getSolution())
        self.seconds["after_step"] += time.perf_counter() - started

    def _test(self, snes: Any, number: int, norms: tuple[float, float, float]) -> int:
        norm = norms[2]
        if not math.isfinite(norm):
            return -4
        rms = norm / self.system.root_size
        if rms <= self.options.residual_rms:
            return reasons.CONVERGED
        if self._steps and rms > GROWTH_LIMIT * self._steps[0].residual_rms:
            return -9
        if self._stalls():
            return reasons.STALLED
        if number >= snes.getTolerances()[3]:
            return reasons.STEP_LIMIT
        return reasons.STOPPED if self.stop.poll() else 0

    def _stalls(self) -> bool:
        """Tell whether the last steps together lowered the residual by less than one percent."""
        if len(self._steps) <= STALL_STEPS:
            return False
        before = self._steps[-1 - STALL_STEPS].residual_rms
        return min(step.residual_rms for step in self._steps[-STALL_STEPS:]) > 0.99 * before

    def _linear_test(self, ksp: Any, number: int, norm: float) -> int:
        if number == 0:
            self._first_norm = norm
        if not math.isfinite(norm):
            return -9
        rtol, atol, _, most = ksp.getTolerances()
        if norm <= max(rtol * self._first_norm, atol):
            return 2
        if number >= most:
            return -3
        return -4 if number % POLL_ITERATIONS == POLL_ITERATIONS - 1 and self.stop.poll() else 0

    def function(self) -> Any:
        """Return the residual vector of the last step; read only."""
        return self._snes.getFunction()[0]

    def destroy(self) -> None:
        """Free everything. Collective."""
        self._snes.destroy()
        self._matrix.destroy()
        self._function.destroy()
        self.preconditioner.destroy()


@contextmanager
def _default_options(defaults: dict[str, str]) -> Iterator[None]:
    """Set PETSc options that the user has not set, and take them out again: the next solve may differ."""
    from petsc4py import PETSc

    database = PETSc.Options()
    added = [name for name in defaults if not database.hasName(name)]
    for name in added:
        database.setValue(name, defaults[name])
    try:
        yield
    finally:
        for name in added:
            database.delValue(name)

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
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from lattice.solve import reasons
from lattice.solve.shells import jacobian_shell, use_preconditioner

if TYPE_CHECKING:
    from lattice.solve.registry import Preconditioner
    from lattice.solve.stop import StopFlag
    from lattice.system.system import System

POLL_ITERATIONS = 10
GROWTH_LIMIT = 1e4
STALL_STEPS = 5
GOLDEN = (1.0 + math.sqrt(5.0)) / 2.0
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
    before : sequence of Step
        Steps already made, from the start on, of a solve that goes on from the last of them.
    """

    def __init__(
        self,
        system: System,
        preconditioner: Preconditioner,
        options: Any,
        stop: StopFlag,
        after_step: Callable[[Step, Any], None],
        before: Sequence[Step] = (),
    ) -> None:
        self.system, self.options, self.stop, self.after_step = system, options, stop, after_step
        self.preconditioner = preconditioner
        self.seconds = {"set_up": 0.0, "residual": 0.0, "after_step": 0.0, "solve": 0.0}
        self._steps: list[Step] = list(before)
        self._first = before[-1].number if before else 0
        self._counted = 0
        self._function = system.vector()
        self._matrix = jacobian_shell(system)
        self._snes = self._make_snes()

    def _make_snes(self) -> Any:
        from petsc4py import PETSc

        options = self.options
        snes = PETSc.SNES().create(self.system.comm)
        snes.setFunction(self._residual, self._function)
        snes.setJacobian(self._linearise, self._matrix, self._matrix)
        snes.setTolerances(max_it=max(0, options.newton_steps - self._first))
        ksp = snes.getKSP()
        ksp.setType("fgmres")
        ksp.setTolerances(rtol=options.linear_rtol or FORCING, max_it=options.linear_iterations)
        use_preconditioner(ksp, self.preconditioner)
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
        if self.options.linear_rtol is None:
            snes.getKSP().setTolerances(rtol=self._forcing())
        self.seconds["set_up"] += time.perf_counter() - started

    def _forcing(self) -> float:
        """Return the relative tolerance of the next linear solve, from the last two residuals [1]_.

        PETSc has the same rule, but no way to tell it the residual before the first step of a resumed solve.
        """
        if len(self._steps) < 2:
            return FORCING
        before, now = (step.residual_rms for step in self._steps[-2:])
        return float(min(FORCING, (now / before) ** GOLDEN))  # [1] choice 2 with gamma = 1

    def _monitor(self, snes: Any, number: int, norm: float) -> None:
        started = time.perf_counter()
        if number == 0 and self._steps:
            return  # the last step before this solve went on
        rms = norm / self.system.root_size if math.isfinite(norm) else math.nan
        done = snes.getLinearSolveIterations()
        step = Step(self._first + number, rms, done - self._counted, started)
        self._counted = done
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

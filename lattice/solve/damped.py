"""The damped stage: Levenberg-Marquardt steps that lower the mean square residual from a rough start.

A step d solves (J^T J + mu I) d = -J^T R over the field and the scalars, by conjugate gradients; it is bent
along its curvature by geodesic acceleration [1]_ and kept where it lowers the residual. Scalars without a
condition of their own (lengths) take part. The phase conditions are moved along: they only keep a step
from sliding the state along itself.

References
----------
.. [1] M. K. Transtrum, J. P. Sethna, "Improvements to the Levenberg-Marquardt algorithm for nonlinear
   least-squares minimization", arXiv:1201.5885 (2012): geodesic acceleration, measured with a difference of
   0.1, and its bound 0.75 (from memory).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from lattice.solve.memory import Memory
from lattice.solve.normal import LinearOutcome, NormalEquations
from lattice.solve.normal_preconditioners import Preconditioners

if TYPE_CHECKING:
    from lattice.solve.normal import NormalPreconditioner
    from lattice.solve.registry import Preconditioner
    from lattice.solve.stop import StopFlag
    from lattice.system.system import System

FACTOR = 3.0
"""By which mu rises after a refused step, and falls after one that is kept at once."""
LEAST, MOST = 1e-12, 1e3
"""Bounds of mu, as shares of the size of J^T J."""
PROBE = 0.1
BENT = 0.75
"""Largest acceleration, as a share of the step, with which a step is kept [1]_."""
ACCELERATION_RTOL = 0.1
LOOSE_RTOL, TIGHT_RTOL, TIGHT_BELOW = 0.03, 0.01, 1e-3
"""Relative tolerances of the steps' solves, above and below this residual."""


@dataclass(frozen=True)
class DampedStep:
    """One kept step.

    Parameters
    ----------
    number : int
        0 is the start.
    residual_rms : float
        After it.
    damping : float
        mu it was made with.
    linear_iterations : int
        Conjugate gradient iterations, those of refused steps included.
    solve_iterations : int
        Those of the kept step alone, without its acceleration.
    preconditioner : str
        "spectral" or "inverse".
    """

    number: int
    residual_rms: float
    damping: float = 0.0
    linear_iterations: int = 0
    solve_iterations: int = 0
    preconditioner: str = ""


@dataclass(frozen=True)
class DampedResult:
    """How the stage ended on a lattice.

    Parameters
    ----------
    ending : str
        "small": the residual is as small as asked; "drifted": the lattice no longer fits the box;
        "stalled", "step limit" or "interrupted".
    reason : str
        In words.
    memory : Memory
    """

    ending: str
    reason: str
    memory: Memory


class Damped:
    """Levenberg-Marquardt steps of one system.

    Collective, as all methods.

    Parameters
    ----------
    system : System
    make : callable
        Makes an approximate inverse of the Jacobian, for small damping.
    options : object
        The job's section solve.damped.
    stop : StopFlag
    after_step : callable
        Called on every rank with the `DampedStep`, the `Memory` after it, the vector of unknowns and the
        residual vector, which it must not change.
    fits : callable
        Tells for the scalars' values whether the lattice still fits the box.
    """

    def __init__(
        self,
        system: System,
        make: Callable[[], Preconditioner],
        options: Any,
        stop: StopFlag,
        after_step: Callable[[DampedStep, Memory, Any, Any], None],
        fits: Callable[[Mapping[str, float]], bool],
    ) -> None:
        self.system, self.options, self.stop = system, options, stop
        self.after_step, self.fits = after_step, fits
        self.preconditioners = Preconditioners(system, make)
        self.equations = NormalEquations(system, stop.poll)
        self._residual, self._trial_residual = system.vector(), system.vector()
        self._right, self._velocity = system.vector(), system.vector()
        self._acceleration, self._trial = system.vector(), system.vector()

    def run(self, x: Any, memory: Memory) -> DampedResult:
        """Make steps from the vector of unknowns `x`, which is replaced, until one of the endings."""
        rms = self._at(x)
        if not memory.residuals:
            memory = memory.begun(rms)
            if memory.step == 0:
                self.after_step(DampedStep(0, rms), memory, x, self._residual)
        while True:
            found = self._ending(x, memory)
            if found is None:
                memory = self._step(x, memory)
            else:
                return DampedResult(*found, memory)

    def _at(self, x: Any) -> float:
        """Move the conditions to a point and compute the residual there; return its root mean square."""
        self.system.set_reference(x)
        self.system.residual(x, self._residual)
        return float(self._residual.norm()) / self.system.root_size

    def _ending(self, x: Any, memory: Memory) -> tuple[str, str] | None:
        """Return how the stage ends here and why, None where it goes on."""
        options, rms = self.options, memory.residuals[-1]
        if rms <= options.residual_rms:
            return "small", f"residual_rms is at most {options.residual_rms:.1e}"
        if self.stop.poll():
            return "interrupted", f"stopped by {self.stop.name}"
        if memory.refused:
            return "stalled", f"no damped step lowers residual_rms = {rms:.1e} any more"
        if memory.is_flat(options.stall_steps, options.stall_fall):
            return "stalled", (
                f"residual_rms = {rms:.1e} fell by less than {100 * options.stall_fall:.3g} % over"
                f" {options.stall_steps} damped steps; another start is cheaper than more steps"
            )
        if memory.step >= options.steps:
            return "step limit", "the largest number of damped steps is used up"
        if not self.fits(self.system.values_of(x)):
            return "drifted", "period or lengths have changed"
        return None

    def _step(self, x: Any, memory: Memory) -> Memory:
        """Make one kept step, raising the damping until there is one; return the memory after it."""
        rms = self._at(x)
        self.system.linearise(x)
        scale = self.preconditioners.new_point()
        memory = memory.scaled(scale)
        self.equations.gradient(self._residual, self._right)
        damping, iterations = memory.damping, 0
        first = damping
        while damping <= MOST * scale:
            name, helping = self.preconditioners.serving(damping, memory.spectral_from)
            solved = self._solve(damping, helping, LOOSE_RTOL if rms > TIGHT_BELOW else TIGHT_RTOL)
            iterations += solved.iterations
            if solved.stopped:
                return memory.with_damping(damping)
            self._shorten(x)
            bend, more = self._accelerate(x, damping, helping)
            iterations += more
            reached = self._try(x) if bend <= BENT else rms
            if reached < rms:
                self._trial.copy(x)
                self._trial_residual.copy(self._residual)
                # After a refusal the same mu is tried again: a lower one has just failed.
                lower = damping / FACTOR if damping == first else damping
                memory = memory.after(reached, max(lower, LEAST * scale))
                step = DampedStep(memory.step, reached, damping, iterations, solved.iterations, name)
                self.after_step(step, memory, x, self._residual)
                return memory
            damping *= FACTOR
        return memory.with_damping(damping, refused=True)

    def _solve(self, damping: float, helping: NormalPreconditioner, rtol: float) -> LinearOutcome:
        """Solve for the step at a damping."""
        most = self.options.linear_iterations
        return self.equations.solve(self._right, damping, helping, rtol, most, self._velocity)

    def _shorten(self, x: Any) -> None:
        """Shorten a step that would change the period or a length too much."""
        system = self.system
        moves = zip(system.unknowns, system.border_of(self._velocity), system.border_of(x), strict=True)
        sizes = [abs(dz / z) for u, dz, z in moves if u.name == "period" or u.name.startswith("length_")]
        largest = max(sizes, default=0.0)
        if largest > self.options.largest_move:
            self._velocity.scale(self.options.largest_move / largest)

    def _accelerate(self, x: Any, damping: float, helping: NormalPreconditioner) -> tuple[float, int]:
        """Solve for the acceleration; return its size as a share of the step's, and the iterations."""
        second, work = self._trial_residual, self._trial
        x.copy(work)
        work.axpy(PROBE, self._velocity)
        self.system.residual(work, second)
        second.axpy(-1.0, self._residual)
        second.scale(1.0 / PROBE)
        self.system.tangent(self._velocity, work)
        second.axpy(-1.0, work)
        second.scale(2.0 / PROBE)  # [1]: 2/h ((f(x + h v) - f(x))/h - J v)
        self.equations.gradient(second, work)
        most = self.options.linear_iterations
        solved = self.equations.solve(work, damping, helping, ACCELERATION_RTOL, most, self._acceleration)
        size = self._velocity.norm()
        return float(self._acceleration.norm() / size) if size else 0.0, solved.iterations

    def _try(self, x: Any) -> float:
        """Return the root mean square residual after the bent step."""
        x.copy(self._trial)
        self._trial.axpy(1.0, self._velocity)
        self._trial.axpy(0.5, self._acceleration)
        if not self._in_bounds(self._trial):
            return float("inf")
        self.system.residual(self._trial, self._trial_residual)
        return float(self._trial_residual.norm()) / self.system.root_size

    def _in_bounds(self, x: Any) -> bool:
        """Tell whether period and lengths are positive."""
        values = self.system.values_of(x)
        return all(v > 0.0 for n, v in values.items() if n == "period" or n.startswith("length_"))

    def destroy(self) -> None:
        """Free everything."""
        self.preconditioners.destroy()
        self.equations.destroy()
        for vector in (self._residual, self._trial_residual, self._right, self._velocity):
            vector.destroy()
        self._acceleration.destroy()
        self._trial.destroy()

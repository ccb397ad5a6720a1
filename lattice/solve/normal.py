"""The damped normal equations (J^T J + mu I) d = b by preconditioned conjugate gradients [1]_.

Matrix-free: two products with the Jacobian an iteration.

References
----------
.. [1] M. R. Hestenes, E. Stiefel, "Methods of conjugate gradients for solving linear systems",
   J. Res. Nat. Bur. Standards 49 (1952) 409-436 (from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Protocol

if TYPE_CHECKING:
    from lattice.system.system import System

POLL_ITERATIONS = 25


class NormalPreconditioner(Protocol):
    """A symmetric positive definite approximate inverse of J^T J + mu I."""

    def update(self, damping: float) -> None:
        """Set up for the system's point of linearisation. Collective."""

    def damp(self, damping: float) -> None:
        """Take over another mu at the same point. Collective."""

    def apply(self, r: Any, y: Any) -> None:
        """Set the vector of unknowns `y` to the approximate inverse times `r`. Collective."""

    def destroy(self) -> None:
        """Free everything PETSc holds. Collective."""


@dataclass(frozen=True)
class LinearOutcome:
    """How a linear solve ended.

    Parameters
    ----------
    iterations : int
    reduction : float
        Norm of the last residual over that of the right-hand side.
    stopped : bool
        A signal ended it.
    """

    iterations: int
    reduction: float
    stopped: bool = False


class NormalEquations:
    """Solves the damped normal equations about the system's point of linearisation.

    Collective, as all methods.

    Parameters
    ----------
    system : System
    poll : callable
        Tells whether to stop, the same on all ranks; asked every `POLL_ITERATIONS` iterations.
    """

    def __init__(self, system: System, poll: Callable[[], bool]) -> None:
        self.system, self._poll = system, poll
        self._image, self._product = system.vector(), system.vector()
        self._residual, self._direction, self._helped = system.vector(), system.vector(), system.vector()

    def gradient(self, f: Any, out: Any) -> None:
        """Set `out` to -J^T f."""
        self.system.adjoint(f, out)
        out.scale(-1.0)

    def _multiply(self, v: Any, damping: float, out: Any) -> None:
        self.system.tangent(v, self._image)
        self.system.adjoint(self._image, out)
        out.axpy(damping, v)

    def solve(
        self, b: Any, damping: float, help_: NormalPreconditioner, rtol: float, most: int, x: Any
    ) -> LinearOutcome:
        """Set `x` to the solution for the right-hand side `b`, from zero.

        Stops when `norm(r) <= rtol*norm(b)`, after `most` iterations, or when asked to.
        """
        r, p, z, q = self._residual, self._direction, self._helped, self._product
        x.set(0.0)
        b.copy(r)
        size = b.norm()
        if size == 0.0:
            return LinearOutcome(0, 0.0)
        help_.apply(r, z)
        z.copy(p)
        rz, reduction = r.dot(z), 1.0
        for iteration in range(1, most + 1):
            self._multiply(p, damping, q)
            step = rz / p.dot(q)
            x.axpy(step, p)
            r.axpy(-step, q)
            reduction = r.norm() / size
            if reduction <= rtol:
                return LinearOutcome(iteration, reduction)
            if iteration % POLL_ITERATIONS == 0 and self._poll():
                return LinearOutcome(iteration, reduction, stopped=True)
            help_.apply(r, z)
            before, rz = rz, r.dot(z)
            p.aypx(rz / before, z)
        return LinearOutcome(most, reduction)

    def destroy(self) -> None:
        """Free the work vectors."""
        for vector in (self._image, self._product, self._residual, self._direction, self._helped):
            vector.destroy()

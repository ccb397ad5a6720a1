"""Linear sensitivity: how far a residual is from an error in the field, and the error itself to first order.

The smallest singular value of the bordered Jacobian bounds, to first order, the field's error by
`|du| <= |R|/sigma_min`. It is found by Lanczos' method on `J^-1 J^-T`. With the residual of exact derivatives
as right-hand side, `J du = -R_exact`, the same inverse gives the discretisation error to first order
(deferred correction [1]_).

References
----------
.. [1] V. Pereyra, "Iterated deferred corrections for nonlinear boundary value problems", Numerische
   Mathematik 11 (1968) 111-125 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import LatticeError
from lattice.solve.bordering import Bordering
from lattice.solve.registry import make_preconditioner
from lattice.system.unknowns import Values

if TYPE_CHECKING:
    from collections.abc import Callable

    from lattice.check.subject import Subject
    from lattice.solve.registry import Preconditioner
    from lattice.system.system import System

Array = NDArray[np.float64]

EXACT_STEPS, LOOSE_STEPS = 24, 1
"""Steps of Lanczos' method where one solve is a substitution, and where it is an iteration of its own."""
SETTLED = 0.03
"""Relative change of the smallest singular value from one step to the next at which it counts as found."""
UNSETTLED_MARGIN = 3.0
"""Factor on the error bound where the smallest singular value is only known from above."""
CORRECTION_RTOL, ESTIMATE_RTOL, ITERATIONS = 0.03, 0.1, 100
"""Relative tolerances of iterative solves: the correction's band is three times as wide as its error, and a
singular value need only be known to its size. Together they cost about two solves of a Newton step."""


@dataclass(frozen=True)
class Sensitivity:
    """The condition of the bordered Jacobian.

    Parameters
    ----------
    smallest : tuple of float
        Smallest singular values found, rising; each is an upper bound of its true one.
    settled : bool
        Whether the smallest no longer changed.
    error_bound : float
        `residual_rms/sigma_min`, root mean square of the field's error, to first order; three times that
        where the value is not settled.
    exact : bool
        Whether the linear solves were exact (LU) or iterations stopped early.
    """

    smallest: tuple[float, ...]
    settled: bool
    error_bound: float
    exact: bool


@dataclass(frozen=True)
class Correction:
    """The discretisation error to first order.

    Parameters
    ----------
    owned : ndarray
        This rank's part of the field's correction.
    values : dict of str to float
        Every scalar after the correction.
    relative : float
        Root mean square of the correction in units of the field's fluctuation.
    """

    owned: Array
    values: Values
    relative: float


class _Products:
    """Context of the matrix-free bordered Jacobian."""

    def __init__(self, system: System) -> None:
        self.system = system

    def mult(self, matrix: Any, v: Any, out: Any) -> None:
        self.system.tangent(v, out)

    def multTranspose(self, matrix: Any, v: Any, out: Any) -> None:
        self.system.adjoint(v, out)


class _Solves:
    """Context of the PETSc python PC."""

    def __init__(self, made: Preconditioner) -> None:
        self.made = made

    def apply(self, pc: Any, r: Any, y: Any) -> None:
        self.made.apply(r, y)

    def applyTranspose(self, pc: Any, r: Any, y: Any) -> None:
        self.made.apply_transpose(r, y)


class Inverse:
    """Solves with the bordered Jacobian and its transpose at the state.

    Collective, as all methods. By LU where the chosen preconditioner is one, else by FGMRES.

    Parameters
    ----------
    subject : Subject
    options : object
        A job's solve section; its preconditioner is used.
    report : callable
        Takes lines for the user.
    """

    def __init__(self, subject: Subject, options: Any, report: Callable[[str], None]) -> None:
        self.system = subject.system
        self.made = make_preconditioner(options.preconditioner, self.system, options, report)
        self.exact = isinstance(self.made, Bordering) and options.preconditioner != "patches"
        self.system.linearise(subject.x)
        self.made.update()
        self._ksp: Any = None if self.exact else self._make_ksp()

    def _make_ksp(self) -> Any:
        from petsc4py import PETSc

        vector = self.system.vector()
        size = (vector.getLocalSize(), vector.getSize())
        vector.destroy()
        matrix = PETSc.Mat().createPython((size, size), _Products(self.system), comm=self.system.comm)
        matrix.setUp()
        ksp = PETSc.KSP().create(self.system.comm)
        ksp.setOperators(matrix)
        ksp.setType("fgmres")
        ksp.setTolerances(max_it=ITERATIONS)
        ksp.getPC().setType("python")
        ksp.getPC().setPythonContext(_Solves(self.made))
        return ksp

    def solve(self, r: Any, y: Any, transpose: bool = False, rtol: float = ESTIMATE_RTOL) -> None:
        """Set the vector of unknowns `y` to the inverse, or the transposed one, times `r`.

        Raises
        ------
        LatticeError
            If the iteration does not come near.
        """
        if self._ksp is None:
            (self.made.apply_transpose if transpose else self.made.apply)(r, y)
            return
        self._ksp.setTolerances(rtol=rtol)
        (self._ksp.solveTranspose if transpose else self._ksp.solve)(r, y)
        if self._ksp.getConvergedReason() < 0:
            raise LatticeError(
                f"a linear solve with the Jacobian at the state did not reach {rtol:g} in "
                f"{ITERATIONS} iterations; choose another preconditioner"
            )

    def destroy(self) -> None:
        """Free everything. Collective."""
        if self._ksp is not None:
            matrix = self._ksp.getOperators()[0]
            self._ksp.destroy()
            matrix.destroy()
        self.made.destroy()


def smallest_singular_values(inverse: Inverse, residual_rms: float, start: Any) -> Sensitivity:
    """Return the smallest singular values of the bordered Jacobian.

    Collective. Lanczos' method for `J^-1 J^-T` with full reorthogonalisation, from a given vector of
    unknowns, which is changed.
    """
    basis: list[Any] = [start]
    start.scale(1.0 / start.norm())
    alphas: list[float] = []
    betas: list[float] = []
    found: list[float] = []
    settled = False
    between, image = start.duplicate(), start.duplicate()
    for step in range(EXACT_STEPS if inverse.exact else LOOSE_STEPS):
        inverse.solve(basis[-1], between, transpose=True)
        inverse.solve(between, image)
        alphas.append(float(image.dot(basis[-1])))
        norm = float(image.norm())
        for vector in basis * 2:
            image.axpy(-float(image.dot(vector)), vector)
        betas.append(float(image.norm()))
        matrix = np.diag(alphas) + np.diag(betas[:step], 1) + np.diag(betas[:step], -1)
        largest = np.linalg.eigvalsh(matrix)[::-1]
        # Of a unit vector the image's norm, too, is at most the largest eigenvalue, and soon nearer to it.
        largest[0] = max(largest[0], norm)
        found.append(1.0 / math.sqrt(largest[0]) if largest[0] > 0.0 else math.inf)
        settled = step > 1 and abs(found[-1] - found[-2]) <= SETTLED * found[-1]
        if settled or betas[-1] <= 1e-12 * largest[0]:
            settled = True
            break
        basis.append(image.copy())
        basis[-1].scale(1.0 / betas[-1])
    for vector in (*basis[1:], between, image):
        vector.destroy()
    smallest = tuple(1.0 / math.sqrt(v) for v in largest[:3] if v > 0.0)
    margin = 1.0 if settled and inverse.exact else UNSETTLED_MARGIN
    bound = margin * residual_rms / smallest[0] if smallest else math.inf
    return Sensitivity(smallest, settled, bound, inverse.exact)


NOISE = 0.1
"""Rough part of the start vector in units of the correction: it has a part in every direction."""


def start_vector(subject: Subject, correction: Array) -> Any:
    """Return a vector of unknowns rich in what the Jacobian damps least, the same on any number of ranks.

    The correction of the discretisation error has been through the inverse once, noise has a part in every
    direction: one is near the singular vector wanted, the other misses none.
    """
    blocks, system = subject.system.blocks, subject.system
    block, shape = blocks.block, subject.lattice.shape
    levels, rows, columns = (
        np.arange(*r) for r in ((block.t0, block.t1), (block.y0, block.y1), (block.x0, block.x1))
    )
    number = (levels[:, None, None] * shape[1] + rows[:, None]) * shape[2] + columns
    number = number[..., None] * blocks.components + np.arange(blocks.components)
    # Fractional parts of multiples of an irrational number are spread evenly (Weyl), and rough.
    noise = np.modf(number * (0.5 * (math.sqrt(5.0) - 1.0)))[0] - 0.5
    square = subject.comm.allreduce(float((correction**2).sum())) / blocks.size
    size = math.sqrt(square) if 0.0 < square < math.inf else 1.0
    smooth = correction if 0.0 < square < math.inf else 0.0 * noise
    x = system.vector()
    values = smooth + NOISE * size * noise
    system.store(x, values.reshape(-1), np.full(len(system.unknowns), NOISE * size))
    return x


def discretisation_error(subject: Subject, inverse: Inverse, exact: Array) -> Correction:
    """Return the correction `du` of `J du = -R_exact`.

    Collective.

    Parameters
    ----------
    subject : Subject
    inverse : Inverse
    exact : ndarray
        This rank's part of the residual with exact derivatives.
    """
    system = subject.system
    right, step = system.vector(), system.vector()
    system.store(right, -exact.reshape(-1), np.zeros(len(system.unknowns)))
    inverse.solve(right, step, rtol=CORRECTION_RTOL)
    moved = subject.x.copy()
    moved.axpy(1.0, step)
    owned, values = system.field_of(step), system.values_of(moved)
    for vector in (right, step, moved):
        vector.destroy()
    squares = subject.comm.allreduce(np.array([(owned**2).sum(), _fluctuation(subject)]))
    relative = math.sqrt(squares[0] / squares[1]) if squares[1] > 0.0 else math.inf
    return Correction(owned, values, relative)


def _fluctuation(subject: Subject) -> float:
    """Return this rank's sum of squares of the field about its means."""
    means = np.array([subject.system.means[c] for c in subject.law.components])
    return float(((subject.owned - means) ** 2).sum())

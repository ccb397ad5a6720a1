"""Two-level preconditioners of given levels, their Krylov iterations, and states to try them on."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any
from unittest.mock import patch

import numpy as np

from lattice.geometry.lattice import Lattice
from lattice.job.schema import CoarseSection, PatchesSection, SolveSection
from lattice.solve import coarse
from lattice.solve.coarse import TwoLevel
from lattice.solve.coarse_lattice import Choice
from lattice.solve.petsc import start_petsc
from lattice.starts import STARTS
from lattice.starts.options import MarchOptions
from lattice.system.system import System
from tests.problems import Array, free_of, law_of, random_field, values_of
from tests.solving import scalars

MOST = 100
Apply = Callable[[Any, Any], None]


def two_level(system: System, lattice: Lattice, smoother: str = "spectral", **options: Any) -> TwoLevel:
    """Return the preconditioner of a linearised system with a given coarse lattice, up to date."""
    patches = options.pop("patches", PatchesSection())
    section = SolveSection(coarse=CoarseSection(**options), patches=patches)
    made = TwoLevel(system, section, lambda line: None)
    with patch.object(coarse, "choose", lambda *known: Choice(lattice, smoother, "given")):
        made.update()
    return made


def random_system(name: str, lattice: Lattice, comm: Any, seed: int = 4) -> System:
    """Return a system linearised about a random field, with as many free scalars as phases allow."""
    start_petsc([])
    law = law_of(name)
    system = System(law, lattice, values_of(law), free_of(law, lattice, usual=True), {}, comm)
    x = system.vector()
    system.pack(random_field(law, lattice, seed)[system.blocks.block.slices], {}, x)
    system.set_reference(x)
    system.linearise(x)
    x.destroy()
    return system


def dense(apply: Apply, make: Callable[[], Any]) -> Array:
    """Return the matrix of a linear map, column by column, on one rank."""
    v, out = make(), make()
    columns = []
    for k in range(v.getSize()):
        v.set(0.0)
        v.getArray()[k] = 1.0
        apply(v, out)
        columns.append(np.array(out.getArray(readonly=1)))
    v.destroy()
    out.destroy()
    return np.stack(columns, axis=1)


@cache
def marched(name: str, lattice: Lattice, spin_up: float, given: tuple[tuple[str, float], ...]) -> Array:
    """Return a window of a march from noise, blended in time, on the whole lattice."""
    from mpi4py import MPI

    start_petsc([])
    law, values = law_of(name), scalars(law_of(name), **dict(given))
    system = System(law, lattice, values, (), {}, MPI.COMM_SELF)
    options = MarchOptions(seed=1, amplitude=0.5, spin_up=spin_up, blend=0.3, match_drift=())
    owned, _ = STARTS["march"](options, lattice, values, law, system.blocks.block, MPI.COMM_SELF)
    system.destroy()
    return np.asarray(owned)


def window(name: str, lattice: Lattice, spin_up: float = 60.0, **given: float) -> tuple[System, Any]:
    """Return a system linearised about a marched window, its period and drifts free, and its residual."""
    from mpi4py import MPI

    field = marched(name, lattice, spin_up, tuple(given.items()))
    law = law_of(name)
    free = ["period", *(f"drift_{a}" for a in "xy"[: law.dimensions] if law.symmetries.homogeneous[a])]
    system = System(law, lattice, scalars(law, **given), free, {}, MPI.COMM_SELF)
    x, residual = system.vector(), system.vector()
    system.pack(field, {}, x)
    system.set_reference(x)
    system.linearise(x)
    system.residual(x, residual)
    x.destroy()
    return system, residual


class _Product:
    """A PETSc matrix and preconditioner context of two products."""

    def __init__(self, tangent: Apply, inverse: Apply) -> None:
        self.tangent, self.inverse = tangent, inverse

    def mult(self, matrix: Any, v: Any, out: Any) -> None:
        self.tangent(v, out)

    def apply(self, pc: Any, r: Any, out: Any) -> None:
        self.inverse(r, out)


def iterations(system: System, made: Any, residual: Any, rtol: float, most: int = MOST) -> int:
    """Return the FGMRES iterations that reduce the residual of the linear system by `rtol`."""
    from petsc4py import PETSc

    product = _Product(system.tangent, made.apply)
    size = (residual.getLocalSize(), residual.getSize())
    matrix = PETSc.Mat().createPython((size, size), product, comm=system.comm)
    matrix.setUp()
    solver, solution = PETSc.KSP().create(system.comm), residual.duplicate()
    solver.setOperators(matrix)
    solver.setType("fgmres")
    solver.setGMRESRestart(most)
    solver.setTolerances(rtol=rtol, max_it=most)
    solver.getPC().setType("python")
    solver.getPC().setPythonContext(product)
    solver.solve(residual, solution)
    # The true residual, so that a count cannot be low because the solver was misled.
    product_of = residual.duplicate()
    system.tangent(solution, product_of)
    product_of.axpy(-1.0, residual)
    reached = product_of.norm() <= 1.1 * rtol * residual.norm()
    count = int(solver.getIterationNumber())
    for item in (solver, matrix, solution, product_of):
        item.destroy()
    return count if reached else most

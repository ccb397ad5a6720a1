"""PETSc's shells around a system's Jacobian and around a preconditioner."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from lattice.solve.registry import Preconditioner
    from lattice.system.system import System


class _Jacobian:
    """Context of the matrix-free bordered Jacobian."""

    def __init__(self, system: System) -> None:
        self.system = system

    def mult(self, matrix: Any, v: Any, out: Any) -> None:
        self.system.tangent(v, out)

    def multTranspose(self, matrix: Any, w: Any, out: Any) -> None:
        self.system.adjoint(w, out)


class _Inverse:
    """Context of a PETSc python PC; the preconditioner itself outlives it."""

    def __init__(self, made: Preconditioner) -> None:
        self.made = made

    def apply(self, pc: Any, r: Any, y: Any) -> None:
        self.made.apply(r, y)

    def applyTranspose(self, pc: Any, r: Any, y: Any) -> None:
        self.made.apply_transpose(r, y)


def jacobian_shell(system: System) -> Any:
    """Return the bordered Jacobian of a system as a PETSc matrix; the caller destroys it. Collective."""
    from petsc4py import PETSc

    local = system.blocks.owned_size + (len(system.unknowns) if system.last else 0)
    size = (local, system.blocks.size + len(system.unknowns))
    matrix = PETSc.Mat().createPython((size, size), _Jacobian(system), comm=system.comm)
    matrix.setUp()
    return matrix


def use_preconditioner(ksp: Any, made: Preconditioner) -> None:
    """Give a Krylov solver a preconditioner."""
    pc = ksp.getPC()
    pc.setType("python")
    pc.setPythonContext(_Inverse(made))

"""One linear solve of a Newton step, timed, with any preconditioner."""

from __future__ import annotations

import time
from dataclasses import dataclass
from types import SimpleNamespace
from typing import Any

from lattice.system.assembly import AssembledJacobian, rescale_gauge
from lattice.system.system import System


@dataclass(frozen=True)
class LinearResult:
    """Iterations, whether the tolerance was reached, and seconds of set-up and solve."""

    iterations: int
    converged: bool
    set_up: float
    solve: float


def solve_options(**coarse: Any) -> Any:
    """Return a solve section for a preconditioner; `coarse` overrides its coarse keys."""
    defaults: dict[str, Any] = {
        "nt": None,
        "nx": None,
        "ny": None,
        "order": None,
        "solver": "direct",
        "lu_ranks": None,
        "smoother": "auto",
        "shift": 1.0,
        "slabs": None,
        "slab_overlap": 2,
    }
    patches = SimpleNamespace(nt=None, ny=None, nx=None, overlap=4)
    return SimpleNamespace(coarse=SimpleNamespace(**(defaults | coarse)), patches=patches)


class Stock:
    """A stock PETSc preconditioner of the assembled field Jacobian, as the inner one of a bordering."""

    def __init__(self, system: System, kind: str) -> None:
        self.system, self.kind = system, kind
        self.pins: list[tuple[int, float]] = []
        self._assembled = AssembledJacobian(system.operator)
        self._pc: Any = None

    def update(self) -> None:
        """Assemble and set up."""
        from petsc4py import PETSc

        matrix = self._assembled.update()
        self._pc = PETSc.PC().create(self.system.comm)
        self._pc.setOptionsPrefix("stock_")
        self._pc.setOperators(matrix)
        database = PETSc.Options("stock_sub_")
        database.setValue("pc_type", "ilu")
        database.setValue("pc_factor_levels", "1")
        if self.kind == "asm":
            self._pc.setType("asm")
            self._pc.setASMOverlap(2)
        else:
            self._pc.setType("bjacobi")
        self._pc.setFromOptions()
        self._pc.setUp()

    def apply(self, r: Any, y: Any) -> None:
        """Apply it."""
        self._pc.apply(r, y)
        rescale_gauge(self.system.operator, y)

    def destroy(self) -> None:
        """Free it."""
        self._assembled.destroy()
        if self._pc is not None:
            self._pc.destroy()


class _Shell:
    def __init__(self, system: System) -> None:
        self.system = system

    def mult(self, matrix: Any, v: Any, out: Any) -> None:
        self.system.tangent(v, out)


class _PC:
    def __init__(self, made: Any) -> None:
        self.made = made

    def apply(self, pc: Any, r: Any, y: Any) -> None:
        self.made.apply(r, y)


def newton_step(system: System, x: Any, made: Any, rtol: float, most: int = 300) -> LinearResult:
    """Solve J d = R at `x` by right-preconditioned GMRES and return what it took. Collective."""
    from petsc4py import PETSc

    began = time.perf_counter()
    system.linearise(x)
    made.update()
    set_up = time.perf_counter() - began
    right, step = system.vector(), system.vector()
    system.residual(x, right)
    matrix = PETSc.Mat().createPython(
        ((right.getLocalSize(), right.getSize()),) * 2, _Shell(system), system.comm
    )
    matrix.setUp()
    ksp = PETSc.KSP().create(system.comm)
    ksp.setOperators(matrix)
    ksp.setType("gmres")
    ksp.setPCSide(PETSc.PC.Side.RIGHT)
    ksp.setGMRESRestart(min(most, 100))
    ksp.setTolerances(rtol=rtol, max_it=most)
    ksp.getPC().setType("python")
    ksp.getPC().setPythonContext(_PC(made))
    began = time.perf_counter()
    ksp.solve(right, step)
    solve = time.perf_counter() - began
    result = LinearResult(ksp.getIterationNumber(), ksp.getConvergedReason() > 0, set_up, solve)
    for item in (ksp, matrix, right, step):
        item.destroy()
    return result

"""The coarse level solved by an inner Krylov method on overlapping patches, where its LU does not fit."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from lattice.errors import LatticeError
from lattice.solve.bordering import Bordering
from lattice.solve.patches import RankPatches
from lattice.solve.shells import jacobian_shell, use_preconditioner

if TYPE_CHECKING:
    from lattice.system.system import System

RTOL, MOST = 1e-2, 200
"""Of the inner solve; the outer method is flexible, so it may vary."""


class PatchedCoarse:
    """GMRES on the coarse bordered system, preconditioned by patches; options prefix `coarse_`.

    Collective. It is not a fixed linear map: its transpose is one up to the inner tolerance only.

    Parameters
    ----------
    system : System
        The coarse one.
    options : object
        The job's solve section; `options.patches` sizes the patches.
    """

    def __init__(self, system: System, options: Any) -> None:
        from petsc4py import PETSc

        self.system = system
        self._bordering = Bordering(system, RankPatches(system, options, "coarse_patches_"))
        self._matrix = jacobian_shell(system)
        self._ksp = ksp = PETSc.KSP().create(system.comm)
        ksp.setOptionsPrefix("coarse_")
        ksp.setOperators(self._matrix)
        ksp.setType("gmres")
        ksp.setPCSide(PETSc.PC.Side.RIGHT)
        ksp.setTolerances(rtol=RTOL, max_it=MOST)
        ksp.setGMRESRestart(MOST)
        use_preconditioner(ksp, self._bordering)
        ksp.setFromOptions()

    def update(self) -> None:
        """Factorise the patches at the coarse point. Collective."""
        self._bordering.update()
        self._matrix.assemble()

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to the approximate coarse solution for `r`. Collective."""
        self._ksp.solve(r, y)
        self._check()

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the approximate solution of the transposed coarse system. Collective."""
        self._ksp.solveTranspose(r, y)
        self._check()

    def _check(self) -> None:
        reason = self._ksp.getConvergedReason()
        if reason < 0 and reason != -3:  # at the most iterations the outer method goes on with what there is
            raise LatticeError(
                f"the patched coarse solve failed (PETSc KSP reason {reason}); use solver = 'direct'"
            )

    def destroy(self) -> None:
        """Free everything. Collective."""
        self._ksp.destroy()
        self._matrix.destroy()
        self._bordering.destroy()

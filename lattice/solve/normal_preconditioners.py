"""Which preconditioner of the normal equations serves which damping."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

from lattice.solve.normal_inverse import InverseNormal
from lattice.solve.normal_spectral import SpectralNormal

if TYPE_CHECKING:
    from lattice.solve.normal import NormalPreconditioner
    from lattice.solve.registry import Preconditioner
    from lattice.system.system import System


class Preconditioners:
    """The spectral preconditioner for large damping, the inverse for small, each set up once at a point.

    Collective, as all methods.

    Parameters
    ----------
    system : System
    make : callable
        Makes the approximate inverse of the Jacobian; called when it is first needed.
    """

    def __init__(self, system: System, make: Callable[[], Preconditioner]) -> None:
        self.system, self._make = system, make
        # Modes of the whole lattice mean nothing on the part that carries a subspace.
        self.spectral = None if system.subspace else SpectralNormal(system)
        self.inverse: InverseNormal | None = None
        self._ready: set[str] = set()

    def new_point(self) -> float:
        """Forget set-ups: the system has been linearised elsewhere. Return the scale of J^T J there."""
        self._ready = set()
        if self.spectral is None:
            return self._growth()
        self.spectral.update(1.0)
        return self.spectral.scale

    def _growth(self) -> float:
        """Return the mean square of J over that of the field itself."""
        operator = self.system.operator
        field, image = self.system.blocks.vector(), self.system.blocks.vector()
        operator.copy_point(field)
        operator.tangent(field, image)
        growth = image.norm() / field.norm()
        field.destroy()
        image.destroy()
        return float(growth**2)

    def serving(self, damping: float, spectral_from: float) -> tuple[str, NormalPreconditioner]:
        """Return the preconditioner for a damping, ready, and its name."""
        if self.spectral is not None and damping >= spectral_from:
            self.spectral.damp(damping)
            return "spectral", self.spectral
        if self.inverse is None:
            self.inverse = InverseNormal(self.system, self._make())
        if "inverse" not in self._ready:
            self.inverse.update(damping)
            self._ready.add("inverse")
        return "inverse", self.inverse

    def destroy(self) -> None:
        """Free both."""
        if self.spectral is not None:
            self.spectral.destroy()
        if self.inverse is not None:
            self.inverse.destroy()

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
        self.spectral = SpectralNormal(system)
        self.inverse: InverseNormal | None = None
        self._ready: set[str] = set()

    def new_point(self) -> float:
        """Forget set-ups: the system has been linearised elsewhere. Return the scale of J^T J there."""
        self._ready = {"spectral"}
        self.spectral.update(1.0)
        return self.spectral.scale

    def serving(self, damping: float, spectral_from: float) -> tuple[str, NormalPreconditioner]:
        """Return the preconditioner for a damping, ready, and its name."""
        if damping >= spectral_from:
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
        self.spectral.destroy()
        if self.inverse is not None:
            self.inverse.destroy()

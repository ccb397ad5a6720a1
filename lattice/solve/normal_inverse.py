"""For small damping: B B^T, B an approximate inverse of the bordered Jacobian, for that of J^T J."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from lattice.solve.registry import Preconditioner
    from lattice.system.system import System


class InverseNormal:
    """A preconditioner of the normal equations made from one of the Jacobian and its exact transpose.

    Collective, as all methods. One set-up serves every damping at a point: B does not know it.

    Parameters
    ----------
    system : System
    made : Preconditioner
        Taken over: it is destroyed with this one.
    """

    def __init__(self, system: System, made: Preconditioner) -> None:
        self.system, self.made = system, made
        self._between = system.vector()

    def update(self, damping: float) -> None:
        """Set up the inverse; a scalar without condition is held as firmly as the damping holds it."""
        self.system.loose_weight = math.sqrt(damping)
        self.made.update()

    def damp(self, damping: float) -> None:
        """Nothing depends on the damping."""

    def apply(self, r: Any, y: Any) -> None:
        """Set `y` to B B^T r."""
        self.made.apply_transpose(r, self._between)
        self.made.apply(self._between, y)

    def destroy(self) -> None:
        """Free everything, the inverse too."""
        self._between.destroy()
        self.made.destroy()

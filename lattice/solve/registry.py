"""The inner preconditioners by the name a job file chooses."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any, Protocol

if TYPE_CHECKING:
    from lattice.system.system import System

_PLACES = {
    "direct": "lattice.solve.direct:Direct",
    "patches": "lattice.solve.patches:Patches",
}


class Preconditioner(Protocol):
    """An approximate inverse of the field part of the Jacobian.

    Attributes
    ----------
    pins : list of (int, float)
        Diagonal entries (row, number) that the inverse was made with on top of the Jacobian's; the
        bordering takes them out again.
    """

    pins: list[tuple[int, float]]

    def update(self) -> None:
        """Set up for the system's point of linearisation. Collective."""

    def apply(self, r: Any, y: Any) -> None:
        """Set the field vector `y` to the approximate inverse times `r`. Collective."""

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transposed approximate inverse times `r`. Collective."""

    def destroy(self) -> None:
        """Free everything PETSc holds. Collective."""


def make_preconditioner(name: str, system: System, options: Any) -> Preconditioner:
    """Return the named preconditioner for a system; `options` is the job's solve section."""
    module, _, kind = _PLACES[name].partition(":")
    made: Preconditioner = getattr(import_module(module), kind)(system, options)
    return made

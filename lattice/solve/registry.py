"""The preconditioners by the name a job file chooses."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any, Protocol

from lattice.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Callable

    from lattice.system.system import System


_FIELD_INVERSES = {
    "direct": "lattice.solve.direct:Direct",
    "patches": "lattice.solve.patches:RankPatches",
}
_BORDERED = {"coarse": "lattice.solve.coarse:TwoLevel"}
NAMES = (*_FIELD_INVERSES, *_BORDERED, "auto")
DIRECT_UNKNOWNS = {1: 30_000, 2: 12_000}
"""Most unknowns, by space dimensions, for which `auto` takes `direct`: there one LU of the whole lattice
costs seconds and well under 1 GB (fill grows with the dimension)."""


class FieldInverse(Protocol):
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


class Preconditioner(Protocol):
    """An approximate inverse of the whole bordered Jacobian; methods as of `FieldInverse`."""

    def update(self) -> None:
        """Set up for the system's point of linearisation. Collective."""

    def apply(self, r: Any, y: Any) -> None:
        """Set the vector of unknowns `y` to the approximate inverse times `r`. Collective."""

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transposed approximate inverse times `r`. Collective."""

    def destroy(self) -> None:
        """Free everything PETSc holds. Collective."""


def make_preconditioner(
    name: str, system: System, options: Any, report: Callable[[str], None] | None = None
) -> Preconditioner:
    """Return the named preconditioner for a system.

    Collective.

    Parameters
    ----------
    name : str
        One of `NAMES`.
    system : System
    options : object
        The job's solve section.
    report : callable, optional
        Takes lines for the log: what was chosen, and why.
    """
    from lattice.solve.bordering import Bordering

    if name == "auto":
        name = choose_preconditioner(system, report or _silent)
    if system.subspace is not None and name != "direct":
        raise InputError(
            f"must be 'direct' (or 'auto') in a solve.subspace, got '{name}':"
            " it knows the whole lattice only",
            key="solve.preconditioner",
        )
    if name in _FIELD_INVERSES:
        return Bordering(system, _load(_FIELD_INVERSES[name])(system, options))
    made: Preconditioner = _load(_BORDERED[name])(system, options, report or _silent)
    return made


def choose_preconditioner(system: System, report: Callable[[str], None]) -> str:
    """Return "direct" for a box that one LU serves, "coarse" otherwise, and report why."""
    size, most = system.blocks.size, DIRECT_UNKNOWNS[system.law.dimensions]
    steady = system.lattice.nt == 1
    if system.subspace is not None:
        report(f"preconditioner direct: {size} unknowns of a subspace")
        return "direct"
    if size <= most or steady:
        report(f"preconditioner direct: {size} unknowns{', one level' if steady else f', at most {most}'}")
        return "direct"
    report(f"preconditioner coarse: {size} unknowns, more than {most}")
    return "coarse"


def _load(place: str) -> Any:
    module, _, kind = place.partition(":")
    return getattr(import_module(module), kind)


def _silent(text: str) -> None:
    pass

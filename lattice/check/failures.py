"""Which failures of a solve are an answer, and which are errors of the program."""

from __future__ import annotations

from lattice.errors import LatticeError


def own_failure(error: BaseException) -> LatticeError:
    """Return the failure that this package reported, where PETSc has wrapped it on its way; else raise again.

    Raises
    ------
    Exception
        The error itself, where it is none of this package's.
    """
    found: BaseException | None = error
    while found is not None and type(found).__module__.partition(".")[0] == "petsc4py":
        found = found.__cause__
    if isinstance(found, LatticeError):
        return found
    raise error

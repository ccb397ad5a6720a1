"""One verdict on all ranks: an error on any rank becomes the same error on every rank."""

from __future__ import annotations

from typing import TYPE_CHECKING

from lattice.errors import LatticeError

if TYPE_CHECKING:
    from mpi4py import MPI


def raise_together(comm: MPI.Intracomm, error: Exception | None, message: str = "") -> None:
    """Raise on every rank if any rank brings an error.

    Collective. Call it where every rank passes, outside any other collective operation.

    Parameters
    ----------
    comm : MPI.Intracomm
        The ranks that must agree.
    error : Exception or None
        This rank's error, None where it is well.
    message : str
        What failed, put before the error's own text.

    Raises
    ------
    LatticeError
        The error of the lowest failing rank, with the same text on all ranks.
    """
    texts = comm.allgather(None if error is None else explain(error))
    failed = [(rank, text) for rank, text in enumerate(texts) if text is not None]
    if not failed:
        return
    rank, text = failed[0]
    where = f" (rank {rank} of {comm.size})" if rank > 0 else ""
    raise LatticeError(f"{message}{': ' if message else ''}{text}{where}") from error


def explain(error: Exception) -> str:
    """Return the text of an error in the user's words: the system's own phrase for a system error."""
    if isinstance(error, OSError) and error.strerror:
        return str(error.strerror)
    return str(error).splitlines()[0] if str(error) else type(error).__name__


def explain_cause(error: BaseException) -> str:
    """Return the text of the error that a library has wrapped, if it has: PETSc re-raises a callback's."""
    while error.__cause__ is not None and not isinstance(error, LatticeError):
        error = error.__cause__
    if isinstance(error, Exception):
        return explain(error)
    return type(error).__name__

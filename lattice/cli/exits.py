"""Exit codes, and what the user reads when something stops the program."""

from __future__ import annotations

from lattice.batch.codes import CONVERGED, FAILED, INTERRUPTED, NOT_CONVERGED, REFUSED, STOPPED_EARLY
from lattice.errors import InputError, LatticeError
from lattice.job.problems import printable

__all__ = [
    "CONVERGED",
    "FAILED",
    "INTERRUPTED",
    "NOT_CONVERGED",
    "REFUSED",
    "STOPPED_EARLY",
    "describe",
    "exit_code",
    "explain",
    "root_cause",
]

PIPE_CLOSED = 141
"""The reader of the output went away; 128 + SIGPIPE."""

TABLE = """\
exit codes:
   0  converged, or done              2  refused input
   3  not converged (state kept)      4  interrupted with a usable state
   5  certified with wide bands      6  not certified
  70  internal failure              130  interrupted before there was a state
"""


def exit_code(error: BaseException) -> int:
    """Return the exit code for a failure."""
    error = root_cause(error)
    if isinstance(error, KeyboardInterrupt):
        return STOPPED_EARLY
    return REFUSED if isinstance(error, InputError) else FAILED


def explain(error: BaseException, debug: bool = False) -> str:
    """Return what the user reads about a failure; text from files cannot steer the terminal."""
    error = root_cause(error)
    if isinstance(error, KeyboardInterrupt):
        return "interrupted"
    if isinstance(error, LatticeError):
        kind = "error" if isinstance(error, InputError) else "failed"
        text = printable(str(error), keep="\n")
        return f"{kind}: {text}"
    return f"internal failure: {printable(describe(error))}" + ("" if debug else "; --debug shows where")


def describe(error: BaseException) -> str:
    """Return an exception as one readable line.

    Examples
    --------
    >>> describe(ValueError("no such   thing"))
    'ValueError: no such thing'
    """
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text}" if text else type(error).__name__


def root_cause(error: BaseException) -> BaseException:
    """Return our own error where a library has wrapped it: PETSc re-raises a callback's failure."""
    cause = error.__cause__
    if type(error).__module__.partition(".")[0] == "petsc4py" and cause is not None:
        return root_cause(cause)
    return error

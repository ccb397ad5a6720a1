"""Named PETSc log events, so that `-log_view` shows where the time goes."""

from __future__ import annotations

from functools import cache
from typing import Any


@cache
def event(name: str) -> Any:
    """Return a PETSc log event to be used as a context manager."""
    from petsc4py import PETSc

    return PETSc.Log.Event(f"Lattice {name}")

"""Starting PETSc with the user's options, once."""

from __future__ import annotations

import sys
from collections.abc import Sequence


def start_petsc(options: Sequence[str]) -> None:
    """Initialise PETSc with options as typed after `--`, or add them to a running PETSc.

    Collective. Options of the environment variable PETSC_OPTIONS are read too; these come after them.
    """
    import petsc4py

    petsc4py.init([sys.argv[0], *options])
    from petsc4py import PETSc

    database = PETSc.Options()
    for name, value in _pairs(options):
        database.setValue(name, value)


def _pairs(options: Sequence[str]) -> list[tuple[str, str | None]]:
    """Return (name, value) of options as typed; a negative number is a value."""
    pairs: list[tuple[str, str | None]] = []
    for word in options:
        if word.startswith("-") and not word[1:2].isdigit() and not word.startswith("-."):
            pairs.append((word[1:], None))
        elif pairs:
            pairs[-1] = (pairs[-1][0], word)
    return pairs

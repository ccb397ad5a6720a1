"""Whether the phases of a field can be conditions: each must change it, and no two in the same way."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.errors import LatticeError

if TYPE_CHECKING:
    from mpi4py import MPI

DEPENDENT = 1e-10
"""Smallest eigenvalue of the templates' correlation matrix, below which they count as dependent."""
SHARE = 0.1
"""Weight in that eigenvector from which on a phase is named."""
MOVES = {
    "phase_t": "time",
    "phase_x": "a shift along x",
    "phase_y": "a shift along y",
    "phase_rotation": "a turn",
}


def check_independence(templates: Mapping[str, tuple[str, Any]], comm: MPI.Intracomm) -> None:
    """Refuse phase templates that are linearly dependent, as those of a plane wave are.

    Collective.

    Parameters
    ----------
    templates : mapping of str to (str, PETSc.Vec)
        For every condition the unknown that it fixes and the template, of any size.
    comm : MPI.Intracomm

    Raises
    ------
    LatticeError
        Naming the phases and the scalars to hold.
    """
    if len(templates) < 2:
        return
    arrays = [template.getArray(readonly=1) for _, template in templates.values()]
    products = comm.allreduce(np.array([[a @ b for b in arrays] for a in arrays]))
    sizes = np.sqrt(np.diag(products))
    eigenvalues, vectors = np.linalg.eigh(products / np.outer(sizes, sizes))
    if eigenvalues[0] < DEPENDENT:
        alike = [c for c, share in zip(templates, np.abs(vectors[:, 0]), strict=True) if share > SHARE]
        raise LatticeError(dependent(alike, [templates[c][0] for c in alike]))


def flat_start(condition: str, free: str) -> str:
    """Return the message for a field that does not vary along a phase that fixes the scalar `free`."""
    if condition == "phase_t":
        return (
            f"the field does not change in time, so {free} cannot be solved for: it is a steady state in "
            "this frame; set lattice.nt = 1, or start from a field that changes in time"
        )
    if condition == "phase_rotation":
        return (
            f"a turn does not change the field, so {free} cannot be solved for; remove it from solve.free, "
            "or start from a field of which the components that may be turned are not zero"
        )
    axis = condition.removeprefix("phase_")
    return (
        f"the field does not vary along {axis}, so {free} cannot be solved for; remove it from solve.free, "
        f"or start from a field that varies along {axis}"
    )


def dependent(conditions: list[str], free: list[str]) -> str:
    """Return the message for phases that change a field in the same way, with the scalars they fix."""
    alike = " and ".join(MOVES[c] for c in conditions)
    return (
        f"{alike} change the field in the same way, as in a plane wave, so {' and '.join(free)} cannot "
        f"all be solved for; {_remedy(conditions, free)}"
    )


def _remedy(conditions: list[str], free: list[str]) -> str:
    others = [name for c, name in zip(conditions, free, strict=True) if c != "phase_t"]
    hold = f"hold {' or '.join(others)} by leaving it out of solve.free"
    if "phase_t" not in conditions:
        return f"{hold}, or start from another field"
    more = f" and {hold}" if len(others) > 1 else ""
    return f"set lattice.nt = 1{more}, or start from a field that changes in time in other ways, too"

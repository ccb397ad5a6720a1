"""Judge stored states: what kind one is, its primitive cell and canonical representative as files."""

from __future__ import annotations

import math
import os
from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

from lattice.classify.canonical import canonical, primitive
from lattice.classify.distributed import DistributedState, stored_state
from lattice.classify.kind import Classification, classify
from lattice.store.statefile import read_meta, write_state

if TYPE_CHECKING:
    from mpi4py import MPI

Path = str | os.PathLike[str]


def classification_of(path: Path, comm: MPI.Intracomm) -> Classification:
    """Return what kind of state a file holds: as it says, else judged here. Collective.

    Raises
    ------
    StateFileError
        If the file cannot be used.
    """
    meta = read_meta(path)
    if meta.classification:
        return Classification.of_record(meta.classification)
    with stored_state(path, comm) as state:
        return _judged(state)


def write_primitive(path: Path, target: Path, comm: MPI.Intracomm) -> Classification:
    """Store the smallest state that a stored one repeats, and return what kind that is. Collective."""
    return _write(path, target, comm, primitive)


def write_canonical(path: Path, target: Path, comm: MPI.Intracomm) -> Classification:
    """Store the canonical representative of a stored state, and return its kind. Collective."""
    return _write(path, target, comm, canonical)


def _write(
    path: Path, target: Path, comm: MPI.Intracomm, made_of: Callable[[DistributedState], DistributedState]
) -> Classification:
    meta = read_meta(path)
    with stored_state(path, comm) as state:
        made = made_of(state)
        found = _judged(made)
        # On other nodes than the state's own, or one level of several, the residual is another.
        same_nodes = all(n % m == 0 for n, m in zip(state.lattice.shape, made.lattice.shape, strict=True))
        kept = made_of is primitive and same_nodes and (made.lattice.nt > 1 or state.lattice.nt == 1)
        record = replace(
            meta,
            lattice=made.lattice,
            values=made.values,
            classification=found.record(),
            outcome=meta.outcome if kept else "not solved",
            free=tuple(name for name in meta.free if name != "period" or made.lattice.nt > 1),
            residual_rms=meta.residual_rms if kept else math.nan,
            residual_max=meta.residual_max if kept else math.nan,
        )
        write_state(target, made.owned, made.blocks.block, record, comm)
        made.destroy()
    return found


def _judged(state: DistributedState) -> Classification:
    return classify(state.law, state.lattice, state.values, state.owned, state.blocks, state.blocks.comm)

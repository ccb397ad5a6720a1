"""Start from a stored state: an exact copy on its own lattice, else interpolated spectrally."""

from __future__ import annotations

from contextlib import ExitStack
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.options import Report, StateOptions, silent
from lattice.starts.stepper import Values
from lattice.starts.streaming import on_root, spread_levels

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.store.statefile import StateFile
    from lattice.store.statemeta import StateMeta

Real = NDArray[np.float64]

SCALARS = ("period", "length_x", "length_y", "drift_x", "drift_y", "rotation")


def state(
    start: StateOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of a stored state on this lattice, and the values.

    Collective. Rank 0 reads the stored field slab by slab and hands it out; no rank holds it whole.

    Parameters
    ----------
    start : StateOptions
        The job's `start` section.
    lattice : Lattice
        The lattice wanted.
    values : dict of str to float
        Scalars of the job; those that are absent are taken from the file.
    law : Law
        Must have the components of the stored law.
    block : Block
        The part of the lattice this rank owns.
    comm : MPI.Intracomm
        The ranks.

    Returns
    -------
    owned : ndarray, shape block.shape + (components,)
        Without halo.
    values : dict of str to float
        Stored scalars overridden by those of the job.

    Raises
    ------
    StateFileError, InputError
        On every rank: a file that cannot be read, or a state of other components.
    """
    with ExitStack() as files:
        opened: list[StateFile] = []

        def open_file() -> StateMeta:
            from lattice.store.statefile import StateFile

            opened.append(files.enter_context(StateFile(start.file)))
            check_components(opened[0].meta, law, start.file)
            return opened[0].meta

        meta = on_root(comm, open_file)
        ny, nx = meta.lattice.ny, meta.lattice.nx

        def read(first: int, last: int) -> Real:
            return opened[0].block(Block(first, last, 0, ny, 0, nx))

        owned = spread_levels(read, meta.lattice.shape, lattice, len(law.components), block, comm)
    if meta.lattice.shape != lattice.shape:
        report(f"state: {_nodes(meta.lattice)} levels and nodes interpolated to {_nodes(lattice)}")
    known = {*values, *law.defaults, *SCALARS, *(f"source_{c}" for c in law.components)}
    return owned, {**{k: v for k, v in meta.values.items() if k in known}, **values}


def check_components(meta: StateMeta, law: Law, path: str) -> None:
    """Refuse a stored state of other components or dimensions than a law's.

    Raises
    ------
    InputError
    """
    if (meta.components, meta.dimensions) != (law.components, law.dimensions):
        raise InputError(
            f"must hold components {', '.join(law.components)} in {law.dimensions} dimension(s), got "
            f"{', '.join(meta.components)} in {meta.dimensions}; take a state of law {law.name}",
            file=path,
        )


def _nodes(lattice: Lattice) -> str:
    shape = (lattice.nt, lattice.nx) if lattice.dimensions == 1 else lattice.shape
    return " x ".join(map(str, shape))

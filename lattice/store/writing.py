"""The two ways a field reaches its file: parallel HDF5, or slab by slab through rank 0.

Nothing may raise on one rank only between opening and closing a file that is open on all: every step is
followed by an agreement, and the file is closed by all.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from lattice.geometry.block import Block
from lattice.store.agreement import raise_together
from lattice.store.layout import LIBRARY_FORMAT, chunk_shape
from lattice.store.statemeta import StateMeta
from lattice.store.watched import WatchedFile

if TYPE_CHECKING:
    import h5py
    from mpi4py import MPI

Field = npt.NDArray[np.float64]
SLAB_BYTES = 2**24
"""Largest slab gathered on rank 0, per component, unless a single chunk row is larger."""


def fill_collectively(path: Path, owned: Field, block: Block, meta: StateMeta, comm: MPI.Intracomm) -> None:
    """Write all blocks at once with parallel HDF5 into a laid-out file, then read them back.

    Collective. Open MPI's own file layer reports some failed writes as done, hence the reading back.

    Raises
    ------
    LatticeError
        On every rank, if any rank cannot write or finds something else than it wrote.
    """
    import h5py

    file: h5py.File | None = None
    error: Exception | None = None
    try:
        file = h5py.File(path, "r+", driver="mpio", comm=comm, libver=LIBRARY_FORMAT)
    except (OSError, ValueError) as caught:
        error = caught
    raise_together(comm, error)
    assert file is not None
    try:
        _write_components(file, owned, flat_slices(block, meta), meta, comm)
    finally:
        error = _close_error(file)
    raise_together(comm, error)
    raise_together(comm, _difference(path, owned, block, meta))


def _write_components(
    file: h5py.File, owned: Field, place: tuple[slice, ...], meta: StateMeta, comm: MPI.Intracomm
) -> None:
    for index, component in enumerate(meta.components):
        part = np.ascontiguousarray(_without_rows(owned[..., index], meta))
        dataset, error = file[component], None
        try:
            with dataset.collective:
                dataset[place] = part
        except (OSError, ValueError, RuntimeError) as caught:
            error = caught
        raise_together(comm, error)


def _difference(path: Path, owned: Field, block: Block, meta: StateMeta) -> Exception | None:
    """Return how a written file differs from what this rank wrote, None if it does not."""
    import h5py

    try:
        with h5py.File(path, "r") as file:
            for index, component in enumerate(meta.components):
                stored = file[component][flat_slices(block, meta)]
                if not np.array_equal(stored, _without_rows(owned[..., index], meta)):
                    return OSError(f"component {component} reads back other values than were written")
    except (OSError, RuntimeError) as error:
        return error
    return None


def fill_through_root(path: Path, owned: Field, block: Block, meta: StateMeta, comm: MPI.Intracomm) -> None:
    """Gather the field slab by slab on rank 0, which writes it into a laid-out file.

    Collective. Rank 0 holds one slab and one other rank's share of it at a time.

    Raises
    ------
    LatticeError
        On every rank, if rank 0 cannot write.
    """
    blocks = comm.gather(block)
    error: Exception | None = None
    if blocks is not None:
        error = _write_gathered(path, owned, blocks, meta, comm)
    else:
        for component, slab in slabs(meta):
            shared = intersection(block, slab)
            if shared is not None:
                comm.Send(np.ascontiguousarray(_view(owned, block, shared, component)), dest=0)
    raise_together(comm, error)


def _write_gathered(
    path: Path, owned: Field, blocks: list[Block], meta: StateMeta, comm: MPI.Intracomm
) -> Exception | None:
    """Write every slab on rank 0; after an error go on receiving, so that no sender waits for ever."""
    import h5py

    watched = WatchedFile(path, "r+b")
    error: Exception | None = None
    file = h5py.File(watched, "r+", libver=LIBRARY_FORMAT)
    for component, slab in slabs(meta):
        gathered = _gather_slab(owned, blocks, slab, component, comm)
        try:
            if error is None and watched.error is None:
                file[meta.components[component]][flat_slices(slab, meta)] = _without_rows(gathered, meta)
        except (OSError, ValueError, RuntimeError) as caught:
            error = caught
    error = error or _close_error(file)
    watched.close()
    return watched.error or error


def _gather_slab(
    owned: Field, blocks: list[Block], slab: Block, component: int, comm: MPI.Intracomm
) -> Field:
    gathered = np.empty(slab.shape)
    for rank, block in enumerate(blocks):
        shared = intersection(block, slab)
        if shared is None:
            continue
        if rank == comm.rank:
            share = _view(owned, block, shared, component)
        else:
            share = np.empty(shared.shape)
            comm.Recv(share, source=rank)
        gathered[_within(shared, slab)] = share
    return gathered


def slabs(meta: StateMeta) -> Iterator[tuple[int, Block]]:
    """Yield (component, slab) over the whole field, slabs made of whole chunks, at most SLAB_BYTES."""
    lattice = meta.lattice
    chunk = dict(zip(meta.axes, chunk_shape(meta), strict=True))
    rows = (
        lattice.ny
        if meta.dimensions == 1
        else _thickness(chunk["y"], lattice.ny, 8 * chunk["t"] * lattice.nx)
    )
    levels = _thickness(chunk["t"], lattice.nt, 8 * rows * lattice.nx)
    for component in range(len(meta.components)):
        for t0 in range(0, lattice.nt, levels):
            for y0 in range(0, lattice.ny, rows):
                t1, y1 = min(t0 + levels, lattice.nt), min(y0 + rows, lattice.ny)
                yield component, Block(t0, t1, y0, y1, 0, lattice.nx)


def _thickness(chunk: int, nodes: int, node_bytes: int) -> int:
    """Return how many nodes of an axis make a slab: whole chunks, at least one."""
    return min(nodes, max(1, SLAB_BYTES // (chunk * node_bytes)) * chunk)


def intersection(one: Block, other: Block) -> Block | None:
    """Return the nodes two blocks share, None if there are none."""
    shared = Block(
        max(one.t0, other.t0),
        min(one.t1, other.t1),
        max(one.y0, other.y0),
        min(one.y1, other.y1),
        max(one.x0, other.x0),
        min(one.x1, other.x1),
    )
    return shared if min(shared.shape) > 0 else None


def _within(inner: Block, outer: Block) -> tuple[slice, slice, slice]:
    """Return the slices of `inner` in an array that starts at the corner of `outer`."""
    return (
        slice(inner.t0 - outer.t0, inner.t1 - outer.t0),
        slice(inner.y0 - outer.y0, inner.y1 - outer.y0),
        slice(inner.x0 - outer.x0, inner.x1 - outer.x0),
    )


def _view(owned: Field, block: Block, part: Block, component: int) -> Field:
    view: Field = owned[(*_within(part, block), component)]
    return view


def flat_slices(block: Block, meta: StateMeta) -> tuple[slice, ...]:
    """Return the block as slices of a component's dataset."""
    levels, rows, columns = block.slices
    return (levels, columns) if meta.dimensions == 1 else (levels, rows, columns)


def _without_rows(values: Field, meta: StateMeta) -> Field:
    view: Field = values[:, 0, :] if meta.dimensions == 1 else values
    return view


def _close_error(file: h5py.File) -> Exception | None:
    """Close a file and return the error of closing it, None if it went well."""
    try:
        file.close()
    except (OSError, RuntimeError, ValueError) as error:
        return error
    return None

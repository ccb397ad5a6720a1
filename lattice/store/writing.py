"""The two ways a field reaches its file: parallel HDF5, or slab by slab through rank 0.

Nothing may raise on one rank only between opening and closing a file that is open on all: every step is
followed by an agreement, and the file is closed by all.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from lattice.geometry.block import Block
from lattice.store.agreement import raise_together
from lattice.store.layout import LIBRARY_FORMAT, chunk_shape, lay_out
from lattice.store.statemeta import StateMeta

if TYPE_CHECKING:
    import h5py
    from mpi4py import MPI

Field = npt.NDArray[np.float64]
SLAB_BYTES = 2**24
"""Largest slab gathered on rank 0, per component, unless a single chunk row is larger."""


def write_collectively(path: Path, owned: Field, block: Block, meta: StateMeta, comm: MPI.Intracomm) -> None:
    """Write all blocks at once with parallel HDF5.

    Collective.

    Raises
    ------
    LatticeError
        On every rank, if any rank cannot write.
    """
    import h5py

    parts = [np.ascontiguousarray(flat_view(owned, meta, c)) for c in range(len(meta.components))]
    place = flat_slices(block, meta)
    file: h5py.File | None = None
    error: Exception | None = None
    try:
        file = h5py.File(path, "w", driver="mpio", comm=comm, libver=LIBRARY_FORMAT)
    except (OSError, ValueError) as caught:
        error = caught
    raise_together(comm, error)
    assert file is not None
    try:
        _fill_collectively(file, parts, place, meta, comm)
        raise_together(comm, _attempt_flush(file))
    finally:
        error = _attempt_close(file)
    raise_together(comm, error)


def _fill_collectively(
    file: h5py.File, parts: list[Field], place: tuple[slice, ...], meta: StateMeta, comm: MPI.Intracomm
) -> None:
    error: Exception | None = None
    datasets: list[h5py.Dataset] = []
    try:
        datasets = lay_out(file, meta, writes=comm.rank == 0)
    except (OSError, ValueError, RuntimeError) as caught:
        error = caught
    raise_together(comm, error)
    for dataset, part in zip(datasets, parts, strict=True):
        try:
            with dataset.collective:
                dataset[place] = part
        except (OSError, ValueError, RuntimeError) as caught:
            error = caught
        raise_together(comm, error)


def write_through_root(path: Path, owned: Field, block: Block, meta: StateMeta, comm: MPI.Intracomm) -> None:
    """Gather the field slab by slab on rank 0, which writes it.

    Collective. Rank 0 holds one slab and one other rank's share of it at a time.

    Raises
    ------
    LatticeError
        On every rank, if rank 0 cannot write.
    """
    blocks = comm.gather(block)
    if comm.rank == 0:
        assert blocks is not None
        error = _write_gathered(path, owned, blocks, meta, comm)
    else:
        error = None
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

    file: h5py.File | None = None
    error: Exception | None = None
    datasets: list[h5py.Dataset] = []
    try:
        file = h5py.File(path, "w", libver=LIBRARY_FORMAT)
        datasets = lay_out(file, meta, writes=True)
    except (OSError, ValueError, RuntimeError) as caught:
        error = caught
    for component, slab in slabs(meta):
        gathered = _gather_slab(owned, blocks, slab, component, comm)
        if error is None:
            try:
                datasets[component][flat_slices(slab, meta)] = _without_rows(gathered, meta)
            except (OSError, ValueError, RuntimeError) as caught:
                error = caught
    closing = _attempt_close(file) if file is not None else None
    return error or closing


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


def flat_view(owned: Field, meta: StateMeta, component: int) -> Field:
    """Return one component of an owned field with the axes of its dataset."""
    return _without_rows(owned[..., component], meta)


def _without_rows(values: Field, meta: StateMeta) -> Field:
    view: Field = values[:, 0, :] if meta.dimensions == 1 else values
    return view


def _attempt_flush(file: h5py.File) -> Exception | None:
    try:
        file.flush()
    except (OSError, RuntimeError) as error:
        return error
    return None


def _attempt_close(file: h5py.File) -> Exception | None:
    try:
        file.close()
    except (OSError, RuntimeError, ValueError) as error:
        with suppress(Exception):
            file.id.close()
        return error
    return None

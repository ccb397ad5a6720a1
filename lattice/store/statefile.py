"""State files: HDF5 that describes itself, written by all ranks, read in any part.

A file holds one dataset per component, named as the component, on the dimension scales t, (y,) x; its
root attributes and the JSON record name the law, the lattice, the scalars and how the state came about.
Content does not depend on the number of ranks. A write ends in a rename: whatever kills the run, the
folder has the old file or the new one.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from lattice.errors import LatticeError, StateFileError
from lattice.geometry.block import Block
from lattice.store.agreement import explain, raise_together
from lattice.store.layout import create_file, read_record
from lattice.store.replacement import (
    discard,
    lacks_room,
    partial_path,
    publish,
    remove_abandoned,
    reserve,
)
from lattice.store.statemeta import StateMeta
from lattice.store.writing import fill_collectively, fill_through_root

if TYPE_CHECKING:
    import h5py
    from mpi4py import MPI

Field = npt.NDArray[np.float64]
SLAB_BYTES = 2**25
"""Bytes of a slab when a field is read level by level."""
COLLECTIVE_FROM = 2**25
"""Bytes of a field from which on parallel HDF5 may pay; below, opening and checking cost more (measured)."""


@dataclass(frozen=True)
class State:
    """A whole state in memory, for small cases and one rank.

    Parameters
    ----------
    meta : StateMeta
        Law, lattice, scalars, residuals, history.
    field : ndarray, shape (nt, ny, nx, components)
        Without halo, dimensionless.
    t, y, x : ndarray
        Coordinates of the nodes, dimensionless; `y` is [0] in one space dimension.
    """

    meta: StateMeta
    field: Field
    t: Field
    y: Field
    x: Field

    def component(self, name: str) -> Field:
        """Return one component, shape (nt, nx) or (nt, ny, nx)."""
        values: Field = self.field[..., self.meta.components.index(name)]
        return values[:, 0, :] if self.meta.dimensions == 1 else values


class StateFile:
    """A state file open for reading: its record checked, its field read in the parts asked for.

    Not collective: any rank may read any part at any time.

    Parameters
    ----------
    path : path-like
        The file.

    Raises
    ------
    StateFileError
        If the file is missing, truncated, damaged, foreign or of a newer schema.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.path = str(path)
        self._file = _open_checked(self.path)
        try:
            with _damage_named(self.path):
                self.meta = read_record(self._file)
        except BaseException:
            self._file.close()
            raise

    def __enter__(self) -> StateFile:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the file."""
        self._file.close()

    def block(self, block: Block) -> Field:
        """Return the field on `block`, shape block.shape + (components,)."""
        parts = [self.part(component, block) for component in self.meta.components]
        return np.stack(parts, axis=-1)

    def part(self, component: str, block: Block) -> Field:
        """Return one component on `block`, shape block.shape."""
        dataset = self._dataset(component)
        levels, rows, columns = block.slices
        with _damage_named(self.path):
            if self.meta.dimensions == 1:
                return np.asarray(dataset[levels, columns], dtype=np.float64)[:, np.newaxis, :]
            return np.asarray(dataset[levels, rows, columns], dtype=np.float64)

    def levels(self, component: str, start: int, stop: int) -> Field:
        """Return one component on the levels `start <= n < stop`, shape (stop - start, ny, nx)."""
        lattice = self.meta.lattice
        return self.part(component, Block(start, stop, 0, lattice.ny, 0, lattice.nx))

    def slabs(self, component: str, slab_bytes: int = SLAB_BYTES) -> Iterator[tuple[int, Field]]:
        """Yield (first level, levels) of one component over the whole period, in bounded memory."""
        lattice = self.meta.lattice
        chunk = self._dataset(component).chunks[0]
        level_bytes = 8 * lattice.ny * lattice.nx
        thick = max(1, slab_bytes // (level_bytes * chunk)) * chunk if slab_bytes > level_bytes else 1
        for start in range(0, lattice.nt, thick):
            yield start, self.levels(component, start, min(start + thick, lattice.nt))

    def _dataset(self, component: str) -> h5py.Dataset:
        if component not in self.meta.components:
            names = ", ".join(self.meta.components)
            raise StateFileError(f"component must be one of {names}, got {component!r}", file=self.path)
        return self._file[component]


def write_state(
    path: str | os.PathLike[str],
    owned: Field,
    block: Block,
    meta: StateMeta,
    comm: MPI.Intracomm,
    way: str = "auto",
) -> None:
    """Write a state file, replacing an older one in a single step.

    Collective. The record is rank 0's; `written` is set here.

    Parameters
    ----------
    path : path-like
        Where; the folder must exist.
    owned : ndarray, shape block.shape + (components,)
        This rank's part of the field, without halo, dimensionless.
    block : Block
        Where that part lies; the blocks of all ranks make up the lattice.
    meta : StateMeta
        The record.
    comm : MPI.Intracomm
        The ranks that hold the field.
    way : str
        "collective" writes with parallel HDF5, "root" slab by slab through rank 0 in bounded
        memory; "auto" takes the first for a large field on several ranks where h5py has it.

    Raises
    ------
    LatticeError
        On every rank, with one text, if any rank cannot do its part; an older file at `path` is
        then untouched.
    """
    target = Path(os.path.realpath(path))
    failure = f"cannot write {path}"
    raise_together(comm, _misfit(owned, block, meta), failure)
    raise_together(comm, _blocks_incomplete(block, meta, comm), failure)
    record = comm.bcast(replace(meta, written=_now()) if comm.rank == 0 else None)
    partial = comm.bcast(partial_path(target) if comm.rank == 0 else None)
    try:
        _on_root(comm, _create, partial, target, record)
        fill = fill_collectively if _collective(way, record, comm) else fill_through_root
        fill(partial, owned, block, record, comm)
        _on_root(comm, publish, partial, target)
    except LatticeError as error:
        if comm.rank == 0:
            discard(partial)
        kept = "; the older file is untouched" if comm.bcast(target.exists()) else ""
        raise LatticeError(f"{failure}: {error}{kept}") from error


def _collective(way: str, meta: StateMeta, comm: MPI.Intracomm) -> bool:
    import h5py

    if way != "auto":
        return way == "collective"
    small = 8 * meta.lattice.nodes * len(meta.components) < COLLECTIVE_FROM
    return comm.size > 1 and not small and bool(comm.allreduce(int(h5py.get_config().mpi)) == comm.size)


def _create(partial: Path, target: Path, meta: StateMeta) -> None:
    """Lay out the partial file with all its blocks reserved."""
    remove_abandoned(target)
    try:
        create_file(partial, meta)
        reserve(partial)
    except OSError as error:
        if lacks_room(error):
            raise OSError(_shortage(partial, meta)) from error
        raise OSError(f"{explain(error)}; choose another folder with --out") from error


def _shortage(partial: Path, meta: StateMeta) -> str:
    room = os.statvfs(partial.parent)
    needed = 8e-6 * meta.lattice.nodes * len(meta.components)
    free = 1e-6 * room.f_bavail * room.f_frsize
    return (
        f"no space left in {partial.parent} or the quota is used up: the field alone needs {needed:.3g} MB, "
        f"{free:.3g} MB are free besides; free space or choose another folder with --out"
    )


def _on_root(comm: MPI.Intracomm, action: Callable[..., None], *arguments: object) -> None:
    """Do something on rank 0 and raise on all ranks if it fails there."""
    error: Exception | None = None
    if comm.rank == 0:
        try:
            action(*arguments)
        except Exception as caught:  # noqa: BLE001 - the other ranks wait for the verdict, whatever it is
            error = caught
    raise_together(comm, error)


def _misfit(owned: Field, block: Block, meta: StateMeta) -> Exception | None:
    """Return why this rank's part cannot be written, None if it can."""
    expected = (*block.shape, len(meta.components))
    if owned.shape != expected:
        return ValueError(
            f"owned field has shape {owned.shape}, block and components make {expected}; pass it without halo"
        )
    if owned.dtype != np.float64:
        return ValueError(f"owned field must be float64, got {owned.dtype}")
    if not np.isfinite(owned).all():
        count = int(np.count_nonzero(~np.isfinite(owned)))
        return ValueError(f"the field has {count} values that are not finite; the older state is worth more")
    return None


def _blocks_incomplete(block: Block, meta: StateMeta, comm: MPI.Intracomm) -> Exception | None:
    """Return why the blocks of all ranks do not make up the lattice, None if they do."""
    nodes = comm.allreduce(math.prod(block.shape))
    outside = block.t1 > meta.lattice.nt or block.y1 > meta.lattice.ny or block.x1 > meta.lattice.nx
    if nodes == meta.lattice.nodes and not outside:
        return None
    return ValueError(f"the ranks' blocks hold {nodes} nodes, the lattice has {meta.lattice.nodes}")


def read_meta(path: str | os.PathLike[str]) -> StateMeta:
    """Return the record of a state file.

    Raises
    ------
    StateFileError
        If the file is missing, truncated, damaged, foreign or of a newer schema.
    """
    with StateFile(path) as file:
        return file.meta


def read_block(path: str | os.PathLike[str], block: Block) -> Field:
    """Return the field on `block`, shape block.shape + (components,); any rank may ask for any block."""
    with StateFile(path) as file:
        return file.block(block)


def read_whole(path: str | os.PathLike[str]) -> Field:
    """Return the whole field, shape (nt, ny, nx, components): for small cases."""
    with StateFile(path) as file:
        return file.block(Block.whole(file.meta.lattice))


def open_state(path: str | os.PathLike[str]) -> State:
    """Read a whole state into memory: record, field and coordinates.

    Parameters
    ----------
    path : path-like
        A state file.

    Returns
    -------
    State
        `field` has shape (nt, ny, nx, components).

    Raises
    ------
    StateFileError
        If the file is missing, damaged, foreign or of a newer schema.
    """
    with StateFile(path) as file:
        meta = file.meta
        rows = meta.coordinate("y") if meta.dimensions == 2 else np.zeros(1)
        field = file.block(Block.whole(meta.lattice))
    return State(meta, field, meta.coordinate("t"), rows, meta.coordinate("x"))


def _open_checked(path: str) -> h5py.File:
    """Open an HDF5 file, or say what is wrong with it."""
    import h5py

    if not Path(path).exists():
        raise StateFileError("no such state file; check the path", file=path)
    if Path(path).is_dir():
        raise StateFileError("is a folder; a state file is expected, such as state.h5 in it", file=path)
    if Path(path).stat().st_size == 0:
        raise StateFileError("is empty; a state file is expected", file=path)
    with _damage_named(path):
        if not h5py.is_hdf5(path):
            raise StateFileError("is not an HDF5 file; a state file is expected", file=path)
        return h5py.File(path, "r")


@contextmanager
def _damage_named(path: str) -> Iterator[None]:
    """Turn whatever HDF5 or the checks raise into a StateFileError with the reason."""
    try:
        yield
    except StateFileError:
        raise
    except PermissionError as error:
        raise StateFileError(f"cannot be read: {error.strerror}", file=path) from error
    except (ValueError, OSError, RuntimeError, KeyError, TypeError, AttributeError) as error:
        raise StateFileError(_reason(error), file=path) from error


def _reason(error: Exception) -> str:
    text = str(error)
    if isinstance(error, ValueError) and text.startswith(("is ", "has ")):
        return text
    if "truncated" in text:
        return "is truncated: its writer or a copy was cut short; take an earlier copy"
    if "Fletcher32" in text or "checksum" in text:
        return "is damaged: a checksum does not match; take an earlier copy"
    return f"is damaged: {text.splitlines()[0] if text else type(error).__name__}; take an earlier copy"


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")

"""Work done on rank 0 for all ranks: results and slabs handed out, failures included."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, TypeVar

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError, LatticeError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.starts.interpolation import Interpolator

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]
Result = TypeVar("Result")
ReadLevels = Callable[[int, int], Real]

SLAB_BYTES = 2**24


def on_root(comm: MPI.Intracomm, work: Callable[[], Result]) -> Result:
    """Return on every rank what `work` returns on rank 0, the only rank to call it.

    Collective. For small results: they are pickled.

    Raises
    ------
    LatticeError
        On every rank with the same text, when rank 0 fails; an InputError stays one.
    """
    answer: tuple[Result | None, Exception | None] = (None, None)
    if comm.rank == 0:
        try:
            answer = (work(), None)
        except Exception as error:  # noqa: BLE001 - whatever stops rank 0 must stop all ranks
            answer = (None, error)
    result, failure = comm.bcast((answer[0], _plain(answer[1])) if comm.rank == 0 else None)
    if failure is not None:
        # Rank 0 keeps its own error and traceback.
        raise answer[1] or failure
    return result  # type: ignore[no-any-return]


def broadcast_slabs(comm: MPI.Intracomm, produce: Callable[[], Iterator[Real]]) -> Iterator[Real]:
    """Yield on every rank the arrays that the iterator of `produce` yields on rank 0.

    Collective, and so is every step: all ranks must take the same number of slabs. Memory is one slab.
    What stops rank 0 stops every rank with the same error.
    """
    slabs = produce() if comm.rank == 0 else iter(())
    slab: Real | None = None

    def next_shape() -> tuple[int, ...] | None:
        nonlocal slab
        slab = next(slabs, None)
        return None if slab is None else slab.shape

    while (shape := on_root(comm, next_shape)) is not None:
        buffer = np.empty(shape) if slab is None else np.ascontiguousarray(slab, dtype=float)
        comm.Bcast(buffer)
        yield buffer


def spread_levels(
    read: ReadLevels,
    old: tuple[int, int, int],
    lattice: Lattice,
    components: int,
    block: Block,
    comm: MPI.Intracomm,
) -> Real:
    """Return this rank's block of a field that `read(start, stop)` gives level by level on rank 0.

    Collective. On equal nodes the block is an exact copy, else the trigonometric interpolant.

    Parameters
    ----------
    read : callable
        Called on rank 0 only: levels `start <= n < stop` of the old field, shape
        (stop - start, ny, nx, components).
    old : tuple of int
        Nodes (nt, ny, nx) of the old field.
    """
    levels = max(1, SLAB_BYTES // (8 * old[1] * old[2] * components))
    starts = range(0, old[0], levels)

    def produce() -> Iterator[Real]:
        return (read(first, min(first + levels, old[0])) for first in starts)

    slabs = zip(starts, broadcast_slabs(comm, produce), strict=True)
    return Interpolator(old, lattice.shape, block).gather(slabs, components)


def _plain(error: Exception | None) -> LatticeError | None:
    """Return an error that survives pickling."""
    if error is None:
        return None
    if isinstance(error, InputError):
        return InputError(str(error))
    if isinstance(error, LatticeError):
        return LatticeError(str(error))
    return LatticeError(f"{type(error).__name__}: {error}")

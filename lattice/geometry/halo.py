"""Fill the halo of a padded block from its neighbours, or from its own other end where an axis is whole.

The axes follow one another, x first: what one has filled, the next passes on, so that corners need no
messages of their own. Whole levels are sent from where they are.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from mpi4py import MPI

Array = NDArray[np.float64]
Region = tuple[slice, ...]
FIRST_TAG = 4100  # of two per axis


@dataclass(frozen=True)
class _Axis:
    """The regions of a padded array that meet along one axis, and the ranks beyond either end."""

    low_halo: Region
    low_own: Region
    high_own: Region
    high_halo: Region
    lower: int
    upper: int
    tag: int


class Halo:
    """The halo of the blocks of a periodic grid of ranks, x varying fastest.

    Parameters
    ----------
    grid : tuple of int
        Ranks along t, y and x.
    widths : tuple of int
        Width of the halo along t, y and x.
    shape : tuple of int
        Owned nodes (levels, rows, columns) of this rank, at least the widths.
    comm : MPI.Intracomm
    """

    def __init__(
        self,
        grid: tuple[int, int, int],
        widths: tuple[int, int, int],
        shape: tuple[int, int, int],
        comm: MPI.Intracomm,
    ) -> None:
        self._comm = comm
        self.inner = tuple(slice(h, h + n) for h, n in zip(widths, shape, strict=True))
        own = list(self.inner)
        self._axes = []
        for axis in (2, 1, 0):
            if widths[axis]:
                self._axes.append(_axis(axis, grid, widths[axis], own, comm.rank))
                own[axis] = slice(0, shape[axis] + 2 * widths[axis])

    def fill(self, padded: Array) -> None:
        """Fill the halo of an array (levels, rows, columns, components) around its inner part. Collective."""
        for axis in self._axes:
            if axis.lower == axis.upper == self._comm.rank:
                padded[axis.low_halo] = padded[axis.high_own]
                padded[axis.high_halo] = padded[axis.low_own]
            else:
                self._exchange(padded, axis)

    def _exchange(self, padded: Array, axis: _Axis) -> None:
        from mpi4py import MPI

        halos = [padded[axis.low_halo], padded[axis.high_halo]]
        arriving = [halo if halo.flags.c_contiguous else np.empty(halo.shape) for halo in halos]
        down, up = np.ascontiguousarray(padded[axis.low_own]), np.ascontiguousarray(padded[axis.high_own])
        requests = [
            self._comm.Irecv(arriving[0], axis.lower, axis.tag),
            self._comm.Irecv(arriving[1], axis.upper, axis.tag + 1),
            self._comm.Isend(up, axis.upper, axis.tag),
            self._comm.Isend(down, axis.lower, axis.tag + 1),
        ]
        MPI.Request.Waitall(requests)
        for halo, values in zip(halos, arriving, strict=True):
            if values is not halo:
                halo[...] = values


def _axis(axis: int, grid: tuple[int, int, int], width: int, own: list[slice], rank: int) -> _Axis:
    place = list(np.unravel_index(rank, grid))

    def neighbour(step: int) -> int:
        moved = [*place]
        moved[axis] = (place[axis] + step) % grid[axis]
        return int(np.ravel_multi_index(moved, grid))

    def region(start: int) -> Region:
        return tuple(slice(start, start + width) if k == axis else s for k, s in enumerate(own))

    end = own[axis].stop
    return _Axis(
        region(0),
        region(width),
        region(end - width),
        region(end),
        neighbour(-1),
        neighbour(1),
        FIRST_TAG + 2 * axis,
    )

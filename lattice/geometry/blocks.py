"""The lattice on the ranks: a PETSc DMDA over (t, y, x), periodic in every axis, and its halo.

Only axes with more than one node exist in the DMDA: a steady lattice has no time axis, a lattice of one
space dimension no y axis.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.folding import FoldedHalo
from lattice.geometry.halo import Halo
from lattice.geometry.lattice import Lattice
from lattice.geometry.subspace import Subspace

if TYPE_CHECKING:
    from mpi4py import MPI

Array = NDArray[np.float64]
OWN_EXCHANGE = 20_000  # numbers per rank from which `Halo` is faster than PETSc's scatter
Indices = NDArray[np.int64]


def process_grid(ranks: int, lattice: Lattice, halo: int) -> tuple[int, int, int] | None:
    """Return the grid (pt, py, px) of ranks with the least halo, or None where none fits.

    Every rank's block must be at least as wide as the halo in each axis of the lattice.

    Examples
    --------
    >>> process_grid(2, Lattice(nt=64, ny=1, nx=16), 3)
    (2, 1, 1)
    """
    fits = [g for g in _grids(ranks) if _fits(g, lattice, halo)]
    return min(fits, key=lambda g: (_halo_nodes(g, lattice, halo), -g[0], -g[1]), default=None)


def largest_rank_count(lattice: Lattice, halo: int) -> int:
    """Return the largest number of ranks whose blocks are at least as wide as the halo."""
    return int(np.prod([_most_parts(n, halo) for n in _axes(lattice)]))


def _most_parts(nodes: int, halo: int) -> int:
    return max(1, nodes // max(1, halo)) if nodes > 1 else 1


def _axes(lattice: Lattice) -> tuple[int, int, int]:
    return (lattice.nt, lattice.ny if lattice.dimensions == 2 else 1, lattice.nx)


def _grids(ranks: int) -> Iterator[tuple[int, int, int]]:
    divisors = [d for d in range(1, ranks + 1) if ranks % d == 0]
    for pt, py in itertools.product(divisors, divisors):
        if ranks % (pt * py) == 0:
            yield pt, py, ranks // (pt * py)


def _fits(grid: tuple[int, int, int], lattice: Lattice, halo: int) -> bool:
    return all(p == 1 or p <= _most_parts(n, halo) for p, n in zip(grid, _axes(lattice), strict=True))


def _halo_nodes(grid: tuple[int, int, int], lattice: Lattice, halo: int) -> int:
    sizes = [-(-n // p) for p, n in zip(grid, _axes(lattice), strict=True)]
    padded = [s + (2 * halo if p > 1 else 0) for s, p in zip(sizes, grid, strict=True)]
    return int(np.prod(padded) - np.prod(sizes))


class Blocks:
    """A lattice field distributed over the ranks of a communicator.

    Collective to create. The DMDA's vectors hold the field in PETSc's order, rank by rank, each rank's
    part in lattice order (t, y, x, component).

    Parameters
    ----------
    lattice : Lattice
    components : int
        Values per node.
    halo : int
        Width of the halo, the same in every axis.
    comm : MPI.Intracomm
    subspace : Subspace, optional
        Of which all fields are: then only the part of the lattice that carries them is distributed.

    Attributes
    ----------
    lattice : Lattice
        The lattice that is distributed: `lattice`, or the part of it that carries a subspace.
    whole : Lattice
        The lattice as given.

    Raises
    ------
    InputError
        If the ranks cannot share the lattice.
    """

    def __init__(
        self,
        lattice: Lattice,
        components: int,
        halo: int,
        comm: MPI.Intracomm,
        subspace: Subspace | None = None,
    ) -> None:
        from petsc4py import PETSc

        self.whole = lattice
        lattice = subspace.part(lattice) if subspace else lattice
        self.lattice, self.components, self.halo, self.comm = lattice, components, halo, comm
        self.axes = [a for a, n in enumerate((lattice.nt, lattice.ny, lattice.nx)) if self._has_axis(a, n)]
        check_halo(lattice, halo)
        grid = process_grid(comm.size, lattice, halo)
        if grid is None:
            raise InputError(
                f"{comm.size} ranks cannot share a lattice of nt = {lattice.nt}, ny = {lattice.ny}, nx = "
                f"{lattice.nx} with a halo of {halo} nodes; the largest rank count is "
                f"{largest_rank_count(lattice, halo)}",
                key="ranks",
            )
        self.grid = grid
        self.dm = PETSc.DMDA().create(
            [lattice.shape[a] for a in reversed(self.axes)],
            dof=components,
            stencil_width=halo,
            stencil_type=PETSc.DMDA.StencilType.BOX,
            boundary_type=(PETSc.DM.BoundaryType.PERIODIC,) * len(self.axes),
            proc_sizes=[grid[a] for a in reversed(self.axes)],
            comm=comm,
        )
        self.block = self._own_block()
        self._axis_ends = self._ends()
        self.padded_shape = self._padded_shape()
        self.shape = (*self.block.shape, components)
        self._halo = Halo(grid, self.halos, self.block.shape, comm)
        self._own_exchange = self.size > OWN_EXCHANGE * comm.size
        self.folded = FoldedHalo(self, subspace) if subspace else None

    def _has_axis(self, axis: int, nodes: int) -> bool:
        return axis == 2 or nodes > 1 or (axis == 1 and self.lattice.dimensions == 2)

    def _own_block(self) -> Block:
        ranges = {0: (0, 1), 1: (0, 1)}
        ranges.update(zip(reversed(self.axes), self.dm.getRanges(), strict=True))
        bounds = [int(bound) for axis in range(3) for bound in ranges[axis]]
        return Block(*bounds)

    def _ends(self) -> list[Indices]:
        """Return for every axis the first node behind each part of the grid of ranks."""
        sizes: list[list[int]] = [[1], [1], [1]]
        for axis, parts in zip(reversed(self.axes), self.dm.getOwnershipRanges(), strict=True):
            sizes[axis] = [int(n) for n in parts]
        return [np.cumsum(parts) for parts in sizes]

    def _padded_shape(self) -> tuple[int, int, int, int]:
        sizes = [1, 1, 1]
        for axis, size in zip(reversed(self.axes), self.dm.getGhostCorners()[1], strict=True):
            sizes[axis] = int(size)
        return (sizes[0], sizes[1], sizes[2], self.components)

    @property
    def owned_size(self) -> int:
        """Numbers this rank owns."""
        return int(np.prod(self.shape))

    @property
    def size(self) -> int:
        """Numbers on all ranks together."""
        return self.lattice.nodes * self.components

    @property
    def halos(self) -> tuple[int, int, int]:
        """Halo widths in (t, y, x)."""
        return tuple(self.halo if a in self.axes else 0 for a in range(3))  # type: ignore[return-value]

    def coordinates(self, length: float, axis: int) -> Array:
        """Return the coordinates of this rank's padded nodes along axis 1 (y) or 2 (x)."""
        nodes = self.lattice.shape[axis]
        low = (self.block.y0, self.block.x0)[axis - 1] - self.halos[axis]
        return (low + np.arange(self.padded_shape[axis])) * (length / nodes)

    def node_numbers(self, t: Indices, y: Indices, x: Indices) -> Indices:
        """Return the places of nodes in PETSc's order of nodes, which goes rank by rank.

        Not collective. Indices broadcast against each other and must lie inside the lattice.
        """
        starts, shape = [], []
        for axis, index in enumerate((t, y, x)):
            ends = self._axis_ends[axis]
            part = np.searchsorted(ends, index, side="right")
            sizes = np.diff(ends, prepend=0)
            starts.append((part, np.asarray(index) - (ends - sizes)[part]))
            shape.append(sizes)
        (pt, dt), (py, dy), (px, dx) = starts
        counts = shape[0][:, None, None] * shape[1][:, None] * shape[2]
        before = (np.cumsum(counts.reshape(-1)) - counts.reshape(-1)).reshape(counts.shape)
        return np.asarray(before[pt, py, px] + (dt * shape[1][py] + dy) * shape[2][px] + dx)

    def columns(self, local: Indices) -> tuple[Indices, Array | None]:
        """Return the global numbers behind numbers of the padded block, and their signs where not all are 1.

        Not collective.
        """
        if self.folded:
            return self.folded.columns[local], self.folded.signs[local]
        return np.asarray(self.dm.getLGMap().apply(local)), None

    def vector(self) -> Any:
        """Return a new field vector, zero. Collective; the caller destroys it."""
        from petsc4py import PETSc

        sizes = (self.owned_size, self.size)
        field = PETSc.Vec().createWithArray(
            _zeros(self.owned_size), size=sizes, bsize=self.components, comm=self.comm
        )
        field.setDM(self.dm)
        return field

    def padded_vector(self) -> Any:
        """Return a new vector of this rank's padded block, zero; the caller destroys it."""
        from petsc4py import PETSc

        return PETSc.Vec().createWithArray(_zeros(int(np.prod(self.padded_shape))), comm=PETSc.COMM_SELF)

    def exchange(self, field: Any, padded: Any) -> None:
        """Fill a padded vector from a field vector, halo included. Collective."""
        if self.folded:
            self.folded.fill(field, padded)
            return
        if not self._own_exchange:
            self.dm.globalToLocal(field, padded)
            return
        array = self.padded(padded)
        array[self._halo.inner] = np.asarray(field.getArray(readonly=1)).reshape(self.shape)
        self._halo.fill(array)

    def owned(self, field: Any) -> Array:
        """View a field vector as this rank's array (levels, rows, columns, components)."""
        return np.asarray(field.getArray()).reshape(self.shape)

    def padded(self, padded: Any) -> Array:
        """View a padded vector as this rank's array with halo."""
        return np.asarray(padded.getArray()).reshape(self.padded_shape)

    def destroy(self) -> None:
        """Free the DMDA. Collective."""
        if self.folded:
            self.folded.destroy()
        self.dm.destroy()


def _zeros(count: int) -> Array:
    """Return zeros in memory for which NumPy asks Linux for large pages, as PETSc does not.

    Loops over large fields are up to a third faster on them.
    """
    array = np.empty(count)  # of `numpy.zeros` that is not asked
    array.fill(0.0)
    return array


def check_halo(lattice: Lattice, halo: int) -> None:
    """Refuse a lattice narrower than its halo in some axis.

    Raises
    ------
    InputError
        Naming the axis, its nodes and the fewest that work.
    """
    present = (lattice.nt > 1, lattice.dimensions == 2, True)
    for name, nodes, exists in zip(("nt", "ny", "nx"), _axes(lattice), present, strict=True):
        if exists and nodes < max(halo, 2):
            raise InputError(
                f"{name} = {nodes} is smaller than the halo of {max(halo, 2)} nodes that the orders of the "
                f"differences need; raise {name} or lower the orders",
                key=f"lattice.{name}",
            )

"""Fourier transforms of fields that are distributed in blocks.

A field's blocks are redistributed to pencils that are whole along the axis being transformed, by
mpi4py-fft; no rank gathers a field. Spectra keep the real transform's half of the last axis.
"""

from __future__ import annotations

import itertools
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.blocks import Blocks
from lattice.geometry.timing import event

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Slices = tuple[slice, ...]


class Transform:
    """Forward and backward transforms of the fields of one `Blocks`.

    Collective. The axes are those of the DMDA, in lattice order, and the components last.

    Parameters
    ----------
    blocks : Blocks

    Raises
    ------
    InputError
        If the lattice is too small to be shared by the ranks in pencils.
    """

    def __init__(self, blocks: Blocks) -> None:
        from mpi4py_fft import PFFT

        self.blocks = blocks
        self.shape = tuple(blocks.lattice.shape[a] for a in blocks.axes)
        own = tuple(blocks.grid[a] for a in blocks.axes)
        grid = pencil_grid(blocks.comm.size, self.shape, own)
        if grid is None:
            raise InputError(
                f"{blocks.comm.size} ranks cannot share the transforms of a lattice of {self.shape} nodes;"
                f" use another number of them, at most {most_pencils(self.shape)}, or solve.preconditioner = "
                "'direct'",
                key="ranks",
            )
        axes = tuple(range(len(self.shape)))
        # The grid is given: left to itself, the plan may split the axis of the components, too.
        self._plan = PFFT(
            blocks.comm, (*self.shape, blocks.components), axes=axes, dtype=float, grid=(*grid, 1)
        )
        self._real = np.empty(self._plan.forward.input_array.shape)
        self._spectrum = np.empty(self._plan.forward.output_array.shape, dtype=complex)
        self._mover = _Mover(blocks, self._plan.local_slice(False)[:-1])

    @property
    def spectral_slices(self) -> Slices:
        """Slices of the spectrum this rank holds, without the component axis."""
        return tuple(self._plan.local_slice(True)[:-1])

    def forward(self, field: Any) -> Complex:
        """Return this rank's part of the spectrum of a field vector, scaled by 1/nodes.

        Collective. The array is reused by the next call.
        """
        with event("FFT"):
            self._mover.to_pencil(field, self._real)
            self._plan.forward(self._real, self._spectrum)
        return self._spectrum

    def backward(self, spectrum: Complex, field: Any) -> None:
        """Set a field vector from its spectrum; the spectrum is not changed. Collective."""
        with event("FFT"):
            self._plan.backward(spectrum, self._real)
            self._mover.to_blocks(self._real, field)

    def empty_spectrum(self) -> Complex:
        """Return an uninitialised array for this rank's part of a spectrum."""
        return np.empty_like(self._spectrum)

    def modes(self) -> list[NDArray[np.int64]]:
        """Return for every axis the mode numbers of this rank's part, shaped to broadcast."""
        numbers = []
        for axis, (nodes, part) in enumerate(zip(self.shape, self.spectral_slices, strict=True)):
            last = axis == len(self.shape) - 1
            full = np.arange(nodes // 2 + 1) if last else np.fft.fftfreq(nodes, 1.0 / nodes).round()
            shape = [1] * len(self.shape)
            shape[axis] = -1
            numbers.append(full[part].astype(np.int64).reshape(shape))
        return numbers

    def destroy(self) -> None:
        """Free plans and scatters. Collective."""
        self._plan.destroy()
        self._mover.destroy()


class _Mover:
    """Moves a field between the DMDA's blocks and the transform's pencils; a copy where they agree."""

    def __init__(self, blocks: Blocks, pencil: Slices) -> None:
        from mpi4py import MPI

        self.blocks = blocks
        own = [blocks.block.slices[a] for a in blocks.axes]
        same = all((s.start, s.stop) == (p.start, p.stop) for s, p in zip(own, pencil, strict=True))
        self._scatter: Any = None
        if not blocks.comm.allreduce(same, op=MPI.LAND):
            self._make_scatter(pencil)

    def _make_scatter(self, pencil: Slices) -> None:
        from petsc4py import PETSc

        blocks = self.blocks
        ranges = [np.zeros(1, dtype=np.int64)] * 3
        for axis, part in zip(blocks.axes, pencil, strict=True):
            ranges[axis] = np.arange(part.start, part.stop)
        nodes = blocks.node_numbers(*np.ix_(*ranges)).reshape(-1)
        rows = nodes[:, None] * blocks.components + np.arange(blocks.components)
        rows = rows.reshape(-1).astype(PETSc.IntType)
        self._pencil = PETSc.Vec().createMPI((rows.size, blocks.size), comm=blocks.comm)
        source = PETSc.IS().createGeneral(rows, comm=blocks.comm)
        field = blocks.vector()
        first = self._pencil.getOwnershipRange()[0]
        target = PETSc.IS().createStride(rows.size, first, 1, comm=blocks.comm)
        self._scatter = PETSc.Scatter().create(field, source, self._pencil, target)
        field.destroy()
        source.destroy()
        target.destroy()

    def to_pencil(self, field: Any, pencil: Real) -> None:
        """Copy a field vector to a pencil array. Collective."""
        if self._scatter is None:
            pencil.reshape(-1)[:] = field.getArray(readonly=1)
            return
        self._scatter.begin(field, self._pencil)
        self._scatter.end(field, self._pencil)
        pencil.reshape(-1)[:] = self._pencil.getArray(readonly=1)

    def to_blocks(self, pencil: Real, field: Any) -> None:
        """Copy a pencil array to a field vector. Collective."""
        from petsc4py import PETSc

        if self._scatter is None:
            field.getArray()[:] = pencil.reshape(-1)
            return
        self._pencil.getArray()[:] = pencil.reshape(-1)
        mode = PETSc.ScatterMode.REVERSE
        self._scatter.begin(self._pencil, field, mode=mode)
        self._scatter.end(self._pencil, field, mode=mode)

    def destroy(self) -> None:
        """Free the scatter. Collective."""
        if self._scatter is not None:
            self._scatter.destroy()
            self._pencil.destroy()


def pencil_grid(ranks: int, shape: tuple[int, ...], blocks: tuple[int, ...]) -> tuple[int, ...] | None:
    """Return how many ranks share each axis of pencils that are whole along the last; None if none fits.

    The grid of the blocks where it fits, so that nothing needs to be moved; else the most even one.

    Examples
    --------
    >>> pencil_grid(4, (24, 30), (2, 2)), pencil_grid(4, (16, 12, 12), (1, 4, 1)), pencil_grid(7, (6, 30), ())
    ((4, 1), (1, 4, 1), None)
    """
    fits = [g for g in _pencil_grids(ranks, len(shape)) if _fits(g, _most_parts(shape))]
    return blocks if blocks in fits else min(fits, key=lambda g: (max(g), g), default=None)


def most_pencils(shape: tuple[int, ...]) -> int:
    """Return the largest number of ranks for which there is a grid of pencils."""
    return int(np.prod(_most_parts(shape), dtype=int))


def _pencil_grids(ranks: int, axes: int) -> list[tuple[int, ...]]:
    if axes == 1:
        return [(1,)] if ranks == 1 else []
    if axes == 2:
        return [(ranks, 1)]
    return [(p, ranks // p, 1) for p in range(1, ranks + 1) if ranks % p == 0]


def _fits(grid: tuple[int, ...], most: list[int]) -> bool:
    return all(parts <= limit for parts, limit in zip(grid[:-1], most, strict=True))


def _most_parts(shape: tuple[int, ...]) -> list[int]:
    """Return for every axis but the last how many ranks may share it: later they share the next one."""
    sizes = (*shape[:-1], shape[-1] // 2 + 1)
    return [min(pair) for pair in itertools.pairwise(sizes)]


def part_bounds(transform: Transform, comm: MPI.Comm) -> list[tuple[tuple[int, int], ...]]:
    """Return for every rank the bounds of its part of the spectrum. Collective."""
    bounds: list[tuple[tuple[int, int], ...]] = comm.allgather(
        tuple((s.start, s.stop) for s in transform.spectral_slices)
    )
    return bounds

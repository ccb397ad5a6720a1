"""Fourier coefficients of fields that are judged, and sums over them on all ranks.

Coefficients are those of mpi4py-fft's real transform: half of the last axis, each with the weight of the
modes it stands for. Where the ranks are too many for shared transforms (a line, a very small lattice) every
rank gathers the field and judges it by itself.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.blocks import Blocks
from lattice.spectral.transform import Transform, pencil_grid

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
AXES = ("t", "y", "x")


class Spectra:
    """Transforms of the fields of one lattice; `destroy` it.

    Collective, as all methods that say so.

    Parameters
    ----------
    blocks : Blocks
        How the fields are distributed; it stays the caller's.

    Attributes
    ----------
    axes : tuple of str
        The axes the lattice has, among "t", "y", "x", in the order of the coefficients' axes.
    nodes : tuple of int
        Nodes along each of them.
    modes : list of ndarray
        Mode numbers along each of them, shaped to broadcast.
    weights : ndarray
        How many modes each coefficient stands for: two unless it is its own conjugate.
    """

    def __init__(self, blocks: Blocks) -> None:
        from mpi4py import MPI

        self._given = blocks
        shape = tuple(blocks.lattice.shape[a] for a in blocks.axes)
        own = tuple(blocks.grid[a] for a in blocks.axes)
        self._gathers = pencil_grid(blocks.comm.size, shape, own) is None
        self.blocks = Blocks(blocks.lattice, blocks.components, 0, MPI.COMM_SELF) if self._gathers else blocks
        self.transform = Transform(self.blocks)
        self._field = self.blocks.vector()
        self.axes = tuple(AXES[a] for a in self.blocks.axes)
        self.nodes = self.transform.shape
        self.modes = self.transform.modes()
        last, count = self.modes[-1], self.nodes[-1]
        self.weights = np.where((last == 0) | (2 * last == count), 1.0, 2.0)

    def whole_or_own(self, owned: Real) -> Real:
        """Return a field as this rank judges it: its own part, or the whole. Collective."""
        if not self._gathers:
            return owned
        whole = np.empty(self.blocks.shape)
        for block, part in self._given.comm.allgather((self._given.block, owned)):
            whole[block.slices] = part
        return whole

    def forward(self, field: Real) -> Complex:
        """Return the coefficients of a field from `whole_or_own`. Collective."""
        self._field.getArray()[:] = field.reshape(-1)
        return self.transform.forward(self._field).copy()

    def backward(self, coefficients: Complex) -> Real:
        """Return the field of coefficients. Collective."""
        self.transform.backward(coefficients, self._field)
        return self.blocks.owned(self._field).copy()

    def total(self, local: Any) -> Real:
        """Return the sum over the ranks of an array. Collective."""
        found = self.blocks.comm.allreduce(np.asarray(local, dtype=float))
        return np.asarray(found)

    def energies(self, coefficients: Complex) -> Real:
        """Return the energy of every mode, summed over the components; the sum is the mean square."""
        return np.asarray(self.weights * (np.abs(coefficients) ** 2).sum(axis=-1))

    def is_mean(self) -> NDArray[np.bool_]:
        """Return where the mode is the mean over the whole lattice."""
        here = np.ones(np.broadcast_shapes(*(m.shape for m in self.modes)), dtype=bool)
        for mode in self.modes:
            here &= mode == 0
        return here

    def destroy(self) -> None:
        """Free transforms. Collective."""
        self.transform.destroy()
        self._field.destroy()
        if self._gathers:
            self.blocks.destroy()

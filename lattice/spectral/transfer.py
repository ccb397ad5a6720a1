"""Transfer between a fine and a coarse lattice of the same box, by truncated Fourier spectra.

Modes that both lattices carry are copied, all others are dropped or zero, in every axis and at any ratio.
Rows of evolving equations lie at the midpoints of their lattice, so residuals are shifted by half the
difference of the time steps on the way, `exp(-i omega (h_coarse - h_fine) / 2)`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.spectral.transform import Complex, Transform, part_bounds


class Transfer:
    """Restriction from a fine to a coarse lattice, prolongation back, and their transposes.

    Collective, as all methods.

    Parameters
    ----------
    fine, coarse : Transform
        Of lattices on the same communicator, with the same axes and components; the coarse one has no more
        nodes in any axis. They stay the caller's.
    evolving : sequence of bool
        For every component whether its rows lie at the midpoints.
    """

    def __init__(self, fine: Transform, coarse: Transform, evolving: tuple[bool, ...]) -> None:
        self.fine, self.coarse = fine, coarse
        self._shift = self._half_steps(evolving)
        self._copy = _SpectrumCopy(self.fine, self.coarse)
        self._small, self._large = self.coarse.empty_spectrum(), self.fine.empty_spectrum()

    def _half_steps(self, evolving: tuple[bool, ...]) -> Complex | None:
        """Return the shift of every coarse mode and component, None where there is no time axis."""
        fine, coarse = self.fine.blocks.lattice, self.coarse.blocks.lattice
        if coarse.nt == 1:
            return None
        turns = self.coarse.modes()[0] * (1.0 / coarse.nt - 1.0 / fine.nt) / 2.0
        shift = np.exp(-2j * np.pi * turns)[..., None]
        return np.where(np.array(evolving), shift, 1.0)

    def restrict(self, field: Any, out: Any, rows: bool) -> None:
        """Set a coarse field vector from a fine one; `rows` says that it is a residual."""
        self._copy.down(self.fine.forward(field), self._small)
        if rows and self._shift is not None:
            self._small *= self._shift
        self.coarse.backward(self._small, out)

    def prolong(self, field: Any, out: Any, rows: bool) -> None:
        """Set a fine field vector from a coarse one; `rows` undoes the shift of a residual."""
        spectrum = self.coarse.forward(field)
        if rows and self._shift is not None:
            spectrum *= self._shift.conj()
        self._copy.up(spectrum, self._large)
        self.fine.backward(self._large, out)

    def destroy(self) -> None:
        """Free scatters. Collective."""
        self._copy.destroy()


class _SpectrumCopy:
    """Copies the modes two spectra share between their parts on the ranks."""

    def __init__(self, fine: Transform, coarse: Transform) -> None:
        from petsc4py import PETSc

        comm = fine.blocks.comm
        components = fine.blocks.components
        kept = [np.abs(m) <= (n - 1) // 2 for m, n in zip(coarse.modes(), coarse.shape, strict=True)]
        self._mask = np.ones((1,) * len(kept), dtype=bool)
        for axis in kept:
            self._mask = self._mask & axis
        modes = np.broadcast_arrays(*coarse.modes())
        where = [m[self._mask] % n for m, n in zip(modes, fine.shape, strict=True)]
        where[-1] = modes[-1][self._mask]
        numbers = _global_numbers(where, part_bounds(fine, comm), components)
        self._width = 2 * components  # a complex number is two reals; all components travel together
        fine_size = int(np.prod([s.stop - s.start for s in fine.spectral_slices])) * self._width
        self._fine = PETSc.Vec().createMPI((fine_size, None), comm=comm)
        self._kept = PETSc.Vec().createMPI((numbers.size * self._width, None), comm=comm)
        first = self._kept.getOwnershipRange()[0]
        source = PETSc.IS().createBlock(self._width, numbers.astype(PETSc.IntType), comm=comm)
        target = PETSc.IS().createStride(numbers.size * self._width, first, 1, comm=comm)
        self._scatter = PETSc.Scatter().create(self._fine, source, self._kept, target)
        source.destroy()
        target.destroy()

    def down(self, fine: Complex, coarse: Complex) -> None:
        """Fill a coarse spectrum from a fine one."""
        self._fine.getArray()[:] = fine.reshape(-1).view(float)
        self._scatter.begin(self._fine, self._kept)
        self._scatter.end(self._fine, self._kept)
        coarse[...] = 0.0
        coarse[self._mask] = self._kept.getArray(readonly=1).view(complex).reshape(-1, coarse.shape[-1])

    def up(self, coarse: Complex, fine: Complex) -> None:
        """Fill a fine spectrum from a coarse one, zero where the coarse lattice carries nothing."""
        from petsc4py import PETSc

        self._kept.getArray()[:] = coarse[self._mask].reshape(-1).view(float)
        self._fine.set(0.0)
        mode = PETSc.ScatterMode.REVERSE
        self._scatter.begin(self._kept, self._fine, mode=mode)
        self._scatter.end(self._kept, self._fine, mode=mode)
        fine.reshape(-1).view(float)[:] = self._fine.getArray(readonly=1)

    def destroy(self) -> None:
        """Free vectors and the scatter. Collective."""
        for item in (self._scatter, self._fine, self._kept):
            item.destroy()


def _global_numbers(
    where: list[NDArray[np.int64]], bounds: list[tuple[tuple[int, int], ...]], components: int
) -> NDArray[np.int64]:
    """Return the numbers of modes in a spectrum that is stored rank by rank, each rank's part in order."""
    numbers = np.full(where[0].shape, -1, dtype=np.int64)
    first = 0
    for part in bounds:
        inside = np.ones(where[0].shape, dtype=bool)
        local = np.zeros(where[0].shape, dtype=np.int64)
        size = 1
        for index, (low, high) in zip(where, part, strict=True):
            inside &= (index >= low) & (index < high)
            local = local * (high - low) + (index - low)
            size *= high - low
        numbers[inside] = first + local[inside]
        first += size
    assert (numbers >= 0).all()
    return numbers

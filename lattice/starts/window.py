"""Start from a window of a march: cut in time, and in space where the marched box is larger.

A march of the job's own box that is cut in time only is the start `march`; this one is the same march on
a box of its own. Along a cut axis the window's first fraction `blend_space` is mixed with what follows one
length on, as its first fraction `blend` is in time. The window begins at x = y = 0 of the frame.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.march import Marcher, blended_march
from lattice.starts.modes import Modes
from lattice.starts.options import Report, WindowOptions, silent
from lattice.starts.rows import trigonometric_rows
from lattice.starts.seams import window_samples
from lattice.starts.stepper import Values

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def window(
    start: WindowOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of a window of a march, and the values with what the march found.

    Collective. As `lattice.starts.march.march`, with the marched box's lengths in `start`; rank 0 marches
    and hands out the window's slices one by one.

    Raises
    ------
    InputError, LatticeError
        On every rank: a marched box that does not hold the window, and what `march` raises.
    """
    return blended_march(_Cutter(start, lattice, values, law, report), block, comm)


class _Cutter(Marcher):
    """The march of a larger box, of which every slice is cut and blended."""

    start: WindowOptions

    def prepare(self) -> Values:
        """Check the cut, then march."""
        self._axes = {axis: self._axis(axis) for axis in "yx"[2 - self.law.dimensions :]}
        self._cut = {axis: matrix for axis, matrix in self._axes.items() if matrix is not None}
        return super().prepare()

    def lengths(self) -> tuple[float, float]:
        """Return the lengths (Ly, Lx) of the marched box."""
        own = super().lengths()
        given = (self.start.march_length_y, self.start.march_length_x)
        return (given[0] or own[0], given[1] or own[1])

    def nodes(self) -> tuple[int, int]:
        """Return the marcher's nodes (ny, nx), as close as the lattice's unless given."""
        if self.start.shape is not None:
            return super().nodes()
        pairs = zip((self.lattice.ny, self.lattice.nx), self.lengths(), super().lengths(), strict=True)
        ny, nx = (n if marched == own else 2 * round(0.5 * n * marched / own) for n, marched, own in pairs)
        return ny, nx

    def on_nodes(self, seen: Complex) -> Real:
        """Return the cut of a slice, made periodic, on the lattice's nodes, shape (ny, nx, C)."""
        if not self._cut:
            return super().on_nodes(seen)
        ny, nx = self.nodes()
        whole = (ny if "y" in self._cut else self.lattice.ny, nx if "x" in self._cut else self.lattice.nx)
        field = self.stepper.to_field(seen, whole)
        if "y" in self._cut:
            field = np.tensordot(self._cut["y"], field, axes=1)
        if "x" in self._cut:
            field = np.moveaxis(np.tensordot(self._cut["x"], field, axes=(1, 1)), 0, 1)
        return np.ascontiguousarray(field)

    def compared(self, seen: Complex) -> tuple[Modes, Complex]:
        """Return the modes of the window and the evolving spectra of the slice cut."""
        if not self._cut:
            return super().compared(seen)
        modes = Modes((self.lattice.ny, self.lattice.nx), super().lengths())
        cut = np.moveaxis(self.on_nodes(seen), -1, 0)[self.stepper.operator.evolving]
        return modes, modes.from_nodes(cut)

    def _axis(self, axis: str) -> Real | None:
        """Return the matrix that cuts and blends an axis, None where it is whole."""
        place = "yx".index(axis)
        marched, own = self.lengths()[place], super().lengths()[place]
        if marched == own:
            return None
        blend = self.start.blend_space
        if marched < own * (1.0 + blend) * (1.0 - 1e-12):
            raise InputError(
                f"start.march_length_{axis} must be at least (1 + blend_space) times box.length_{axis}, "
                f"{own * (1.0 + blend):.6g}, to hold the window with its continuation, or equal to "
                f"box.length_{axis}, got {marched:g}; raise it"
            )
        if not self.law.symmetries.homogeneous.get(axis, False):
            raise InputError(
                f"start.march_length_{axis} must be left out: law {self.law.name} depends on {axis}, so that "
                "no part of its box can stand for the whole"
            )
        new, old = (self.lattice.ny, self.lattice.nx)[place], self.nodes()[place]
        samples = list(window_samples(new, own, blend, 0, new))
        rows = trigonometric_rows(old, [s.place * old / marched for s in samples], new * marched / own)
        matrix = np.zeros((new, old))
        for sample, row in zip(samples, rows, strict=True):
            matrix[sample.node] += sample.weight * row
        return matrix

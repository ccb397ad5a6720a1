"""The smoothers of the two-level preconditioner: spectral, and slabs of time levels."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.solve.patches import Patches, slab_patches
from lattice.spectral.transform import Complex, Transform
from lattice.system.constant_part import ConstantPart

if TYPE_CHECKING:
    from lattice.system.system import System

STALE = 0.02
"""Relative change of the field up to which slabs keep their factors: a smoother need not be exact."""
LEAST_LEVELS = 4
LARGEST_INVERSE = 1e8
"""Largest number in the inverse of a mode's block, a time: beyond it the block counts as singular."""


class SpectralSmoother:
    """The exact inverse, mode by mode, of the constant-coefficient tangent: two transforms.

    Parameters
    ----------
    transform : Transform
        Of the fine lattice's blocks.
    constant : ConstantPart
        Brought up to date by its owner before `update`.
    shift : float
        Added to the symbol of evolving rows, so that slow long waves, which the coarse lattice solves, are
        not amplified.
    """

    def __init__(self, transform: Transform, constant: ConstantPart, shift: float) -> None:
        self.transform, self.constant, self.shift = transform, constant, shift
        self._inverse: Complex = np.zeros(0, dtype=complex)

    def update(self) -> None:
        """Invert the symbols at the point of linearisation. Collective."""
        self._inverse = inverse_blocks(self.constant.symbol(self.transform, self.shift))

    def apply(self, r: Any, y: Any) -> None:
        """Set the field vector `y` to the smoother times `r`. Collective."""
        multiply_blocks(self.transform, self._inverse, r, y)

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transposed smoother times `r`. Collective."""
        multiply_blocks(self.transform, np.swapaxes(self._inverse, -1, -2).conj(), r, y)

    def destroy(self) -> None:
        """Nothing of PETSc's is held; the transform is its owner's."""


def multiply_blocks(transform: Transform, matrices: Complex, r: Any, y: Any) -> None:
    """Set the field vector `y` to `r` with every Fourier mode multiplied by its own matrix. Collective."""
    spectrum = transform.forward(r)
    if matrices.shape[-1] == 1:
        spectrum *= matrices[..., 0]
    else:
        spectrum[...] = (matrices @ spectrum[..., None])[..., 0]
    transform.backward(spectrum, y)


def inverse_blocks(symbol: Complex) -> Complex:
    """Return the inverse of every mode's block, zero where it is singular: such modes are left alone.

    Examples
    --------
    >>> inverse_blocks(np.array([[[2.0]], [[0.0]]])).ravel().tolist()
    [0.5, 0.0]
    """
    determinant = np.linalg.det(symbol)
    singular = determinant == 0.0
    inverse = np.linalg.inv(np.where(singular[..., None, None], np.eye(symbol.shape[-1]), symbol))
    # Rounding hides singular blocks; what it leaves of them multiplies by far more than any mode's inverse.
    singular |= ~(np.abs(inverse).max(axis=(-1, -2)) < LARGEST_INVERSE)
    inverse[singular] = 0.0
    return np.asarray(inverse)


class SlabSmoother:
    """Overlapping slabs of a few time levels, whole in space, each solved by LU, additive.

    Parameters
    ----------
    system : System
    count : int, optional
        Slabs on all ranks together; by default one a rank, at least four.
    overlap : int
        Levels by which a slab reaches into each neighbour.
    report : callable
        Takes lines for the log.
    """

    def __init__(
        self, system: System, count: int | None, overlap: int, report: Callable[[str], None]
    ) -> None:
        ranks = system.comm.size
        most = max(1, system.lattice.nt // LEAST_LEVELS)
        wanted = count or max(4, ranks)
        self.count = max(ranks, min(wanted, most))
        self.system = system
        self._patches = Patches(system, slab_patches(system, self.count, overlap), "slabs_")
        self._factored: Any = None
        report(f"slab smoother: {self.count} slabs of time levels, {overlap} levels of overlap")

    def update(self) -> None:
        """Factorise the slabs, unless the field has hardly changed since they were. Collective."""
        operator = self.system.operator
        field = self.system.blocks.vector()
        operator.copy_point(field)
        if self._factored is not None:
            self._factored.axpy(-1.0, field)
            change = self._factored.norm() / max(field.norm(), 1e-300)
            self._factored.destroy()
            if change <= STALE:
                self._factored = field
                return
        self._patches.update()
        self._factored = field

    def apply(self, r: Any, y: Any) -> None:
        """Set the field vector `y` to the sum of the slab solves of `r`. Collective."""
        self._patches.apply(r, y)

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transpose. Collective."""
        self._patches.apply_transpose(r, y)

    def destroy(self) -> None:
        """Free the slabs. Collective."""
        self._patches.destroy()
        if self._factored is not None:
            self._factored.destroy()

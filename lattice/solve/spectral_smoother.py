"""The spectral smoother: the exact inverse, mode by mode, of the constant-coefficient tangent."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from lattice.spectral.transform import Complex, Transform
from lattice.system.constant_part import ConstantPart

if TYPE_CHECKING:
    from lattice.system.system import System


class SpectralSmoother:
    """One transform, a C x C inverse per mode, one transform back.

    Parameters
    ----------
    system : System
    transform : Transform
        Of the system's blocks; shared with the transfer between lattices.
    shift : float
        Added to the symbol of evolving rows, so that slow long waves, which the coarse lattice solves,
        are not amplified.
    """

    def __init__(self, system: System, transform: Transform, constant: ConstantPart, shift: float) -> None:
        self.system, self.transform, self.constant, self.shift = system, transform, constant, shift
        self._inverse: Complex = np.zeros(0, dtype=complex)

    def update(self) -> None:
        """Invert the symbols at the system's point of linearisation. Collective."""
        symbol = self.constant.symbol(self.transform, self.shift)
        self._inverse = 1.0 / symbol if symbol.shape[-1] == 1 else np.linalg.inv(symbol)

    def apply(self, r: Any, y: Any) -> None:
        """Set the field vector `y` to the smoother times `r`. Collective."""
        self._multiply(self._inverse, r, y)

    def apply_transpose(self, r: Any, y: Any) -> None:
        """Set `y` to the transposed smoother times `r`. Collective."""
        self._multiply(np.swapaxes(self._inverse, -1, -2).conj(), r, y)

    def _multiply(self, matrices: Complex, r: Any, y: Any) -> None:
        spectrum = self.transform.forward(r)
        if matrices.shape[-1] == 1:
            spectrum *= matrices[..., 0]
        else:
            spectrum[...] = np.einsum("...ij,...j->...i", matrices, spectrum)
        self.transform.backward(spectrum, y)

    def destroy(self) -> None:
        """Nothing of PETSc's is held; the transform belongs to the transfer."""

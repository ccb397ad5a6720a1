"""Fourier modes of one slice: compact spectra, transforms to any number of nodes, shifts.

A spectrum holds the coefficients `c(ky, kx)` of `u = sum c exp(i (kx x + ky y))`, shape
`(..., 2*my + 1, mx + 1)`: rows `0..my, -my..-1`, columns `0..mx` (the field is real). The Nyquist mode of
an even number of nodes has no well-defined derivative and is left out. Coefficients do not depend on
the number of nodes.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


class Modes:
    """The Fourier modes that a slice of `shape` nodes carries on a periodic box.

    Parameters
    ----------
    shape : tuple of int
        Nodes (ny, nx); `ny = 1` in one space dimension.
    lengths : tuple of float
        Lengths (Ly, Lx) of the box; Ly is ignored where `ny = 1`.

    Attributes
    ----------
    my, mx : int
        Largest mode number of each axis.
    ky, kx : ndarray, shapes (2*my + 1, 1) and (1, mx + 1)
        Wavenumbers.
    """

    def __init__(self, shape: tuple[int, int], lengths: tuple[float, float]) -> None:
        self.shape, self.lengths = shape, lengths
        self.my, self.mx = (shape[0] - 1) // 2, (shape[1] - 1) // 2
        numbers_y = np.concatenate([np.arange(self.my + 1), np.arange(-self.my, 0)])
        self.ky = (2.0 * np.pi / lengths[0] * numbers_y)[:, None]
        self.kx = (2.0 * np.pi / lengths[1] * np.arange(self.mx + 1))[None, :]

    @property
    def spectrum_shape(self) -> tuple[int, int]:
        """Rows and columns of a compact spectrum."""
        return (2 * self.my + 1, self.mx + 1)

    def derivative(self, a: int, b: int) -> Complex:
        """Return the factor (i kx)^a (i ky)^b of a derivative, shape `spectrum_shape`."""
        factor: Complex = (1j * self.kx) ** a * (1j * self.ky) ** b
        return factor

    def from_nodes(self, u: Real) -> Complex:
        """Return the compact spectrum of `u`, shape (..., ny, nx), given on at least these modes."""
        if self.my == 0 and u.shape[-2] == 1:
            full: Complex = scipy.fft.rfft(u, norm="forward")
            return full[..., : self.mx + 1]
        full = scipy.fft.rfft2(u, norm="forward")[..., : self.mx + 1]
        if full.shape[-2] == 2 * self.my + 1:
            return full
        return np.concatenate(
            [full[..., : self.my + 1, :], full[..., full.shape[-2] - self.my :, :]], axis=-2
        )

    def to_nodes(self, spectrum: Complex, shape: tuple[int, int] | None = None) -> Real:
        """Return the field on `shape` nodes; modes that these cannot carry are left out."""
        ny, nx = shape or self.shape
        my, mx = min(self.my, (ny - 1) // 2), min(self.mx, (nx - 1) // 2)
        full = np.zeros((*spectrum.shape[:-2], ny, nx // 2 + 1), dtype=complex)
        full[..., : my + 1, : mx + 1] = spectrum[..., : my + 1, : mx + 1]
        if my:
            full[..., ny - my :, : mx + 1] = spectrum[..., -my:, : mx + 1]
        if ny == 1:
            line: Real = scipy.fft.irfft(full, n=nx, norm="forward")
            return line
        plane: Real = scipy.fft.irfft2(full, s=(ny, nx), norm="forward")
        return plane

    def shift(self, spectrum: Complex, sx: float, sy: float) -> Complex:
        """Return the spectrum of u(x + sx, y + sy)."""
        shifted: Complex = spectrum * np.exp(1j * (self.kx * sx + self.ky * sy))
        return shifted

    def restore_symmetry(self, spectrum: Complex) -> None:
        """Make the column kx = 0 that of a real field, in place.

        Transforms ignore its other part, so that round-off in it would grow undisturbed at the linear rate.
        """
        if self.my == 0:
            spectrum.imag[..., 0] = 0.0
            return
        column = spectrum[..., 0]
        mirrored = np.roll(column[..., ::-1], 1, axis=-1)
        spectrum[..., 0] = 0.5 * (column + mirrored.conj())

    def mean_product(self, first: Complex, second: Complex) -> Any:
        """Return the mean over the box of the product of two real fields, over the last two axes."""
        product = (first * second.conj()).real
        return 2.0 * product.sum(axis=(-2, -1)) - product[..., 0].sum(axis=-1)

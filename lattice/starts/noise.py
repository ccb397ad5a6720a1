"""Smooth random fields: seeded noise on the waves a law amplifies."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.laws.law import Law
from lattice.starts.operator import SpectralOperator

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

LOW_BAND = 4
"""Largest mode number of the noise of a law that amplifies no wave."""
BESIDE = 0.1
"""Size of the noise on waves beside the band."""
NEUTRAL = 1e-12
"""Growth, relative to the fastest rate of any mode, below which a wave counts as neutral."""


def random_field(
    law: Law,
    shape: tuple[int, int],
    lengths: tuple[float, float],
    seed: int,
    amplitude: float,
    values: dict[str, float] | None = None,
) -> Real:
    """Return smooth noise on the linearly unstable waves, shape (ny, nx, C).

    The band is that about the zero state; where the law amplifies no wave, it is the lowest modes. Waves
    up to twice as short get a tenth of the size: noise on a single unstable wave would be symmetric, and a
    march from it would stay so. The coefficients are drawn in an order that does not depend on the nodes:
    one seed is one field on any lattice that carries these waves. Components whose mean is conserved or
    arbitrary have zero mean.

    Parameters
    ----------
    law : Law
        Any law that can be marched.
    shape, lengths : tuple
        Nodes (ny, nx) and lengths (Ly, Lx).
    seed : int
        Seed of NumPy's default generator.
    amplitude : float
        Root mean square of every evolving component; dimensionless.
    values : dict of str to float, optional
        Parameters of the law; its defaults unless given.
    """
    operator = SpectralOperator(law, shape, lengths, values or {})
    spectrum = random_spectrum(operator, seed, amplitude)
    return np.ascontiguousarray(np.moveaxis(operator.modes.to_nodes(operator.complete(spectrum)), -3, -1))


def random_spectrum(operator: SpectralOperator, seed: int, amplitude: float) -> Complex:
    """Return the evolving spectra of `random_field`."""
    if not (np.isfinite(amplitude) and amplitude > 0.0):
        raise InputError(f"the noise amplitude must be positive and finite, got {amplitude}")
    modes = operator.modes
    spectrum = np.zeros((len(operator.evolving), *modes.spectrum_shape), dtype=complex)
    generator = np.random.default_rng(seed)
    weights = _weights(operator)
    for row, column in _by_mode_number(operator, weights):
        real, imaginary = generator.standard_normal((2, len(operator.evolving)))
        spectrum[:, row, column] = weights[row, column] * (real + 1j * imaginary)
    spectrum[~_has_free_mean(operator), 0, 0] = 0.0
    modes.restore_symmetry(spectrum)
    sizes = np.sqrt(modes.mean_product(spectrum, spectrum))
    scale = np.divide(amplitude, sizes, out=np.zeros_like(sizes), where=sizes > 0.0)
    noise: Complex = spectrum * scale[:, None, None]
    return noise


def _has_free_mean(operator: SpectralOperator) -> NDArray[np.bool_]:
    """Return for each evolving component whether its noise may have a mean."""
    law = operator.law
    settled = {*law.symmetries.conserved, *law.symmetries.shiftable}
    return np.array([law.components[n] not in settled for n in operator.evolving])


def _weights(operator: SpectralOperator) -> Real:
    """Return the size of the noise of every mode: 1 in the band, a fraction beside it, else 0."""
    rates, modes = operator.growth_rates(), operator.modes
    # Rates of round-off size at neutral waves are no growth.
    band = rates > NEUTRAL * float(np.abs(rates).max())
    k = np.hypot(modes.kx, modes.ky)
    if not np.any(band & (k > 0.0)):
        rows = np.rint(modes.ky * modes.lengths[0] / (2.0 * np.pi))
        columns = np.rint(modes.kx * modes.lengths[1] / (2.0 * np.pi))
        band = (np.hypot(rows, columns) <= LOW_BAND) & (k > 0.0)
    beside = (k <= 2.0 * k[band].max()) & (k > 0.0)
    return np.where(band, 1.0, np.where(beside, BESIDE, 0.0))


def _by_mode_number(operator: SpectralOperator, weights: Real) -> list[tuple[int, int]]:
    """Return (row, column) of the modes with noise in an order that does not depend on the nodes."""
    rows = 2 * operator.modes.my + 1

    def order(place: tuple[int, int]) -> tuple[int, int, int]:
        number = place[0] - rows if place[0] > operator.modes.my else place[0]
        return (number * number + place[1] * place[1], place[1], number)

    return sorted(((int(row), int(column)) for row, column in np.argwhere(weights > 0.0)), key=order)

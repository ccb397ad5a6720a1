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


def random_field(
    law: Law,
    shape: tuple[int, int],
    lengths: tuple[float, float],
    seed: int,
    amplitude: float,
    values: dict[str, float] | None = None,
) -> Real:
    """Return smooth noise confined to the linearly unstable waves, shape (ny, nx, C).

    The band is that about the zero state; where the law amplifies no wave, it is the lowest modes. The
    coefficients are drawn in an order that does not depend on the nodes: one seed is one field on any
    lattice that carries the band. Components whose mean is conserved or arbitrary have zero mean.

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
    modes, law = operator.modes, operator.law
    spectrum = np.zeros((len(operator.evolving), *modes.spectrum_shape), dtype=complex)
    zero_mean = {*law.symmetries.conserved, *law.symmetries.shiftable}
    generator = np.random.default_rng(seed)
    for row, column in _band(operator):
        draws = generator.standard_normal((len(operator.evolving), 2))
        for e, component in enumerate(operator.evolving):
            at_mean = row == 0 and column == 0
            if not (at_mean and law.components[component] in zero_mean):
                spectrum[e, row, column] = draws[e, 0] + (0.0 if at_mean else 1j * draws[e, 1])
    modes.restore_symmetry(spectrum)
    sizes = np.sqrt(modes.mean_product(spectrum, spectrum))
    scale = np.divide(amplitude, sizes, out=np.zeros_like(sizes), where=sizes > 0.0)
    noise: Complex = spectrum * scale[:, None, None]
    return noise


def _band(operator: SpectralOperator) -> list[tuple[int, int]]:
    """Return (row, column) of the noise's modes, by rising mode number."""
    rates, modes = operator.growth_rates(), operator.modes
    numbers_y = np.concatenate([np.arange(modes.my + 1), np.arange(-modes.my, 0)])
    # Rates of round-off size at neutral waves are no growth.
    growing = rates > 1e-9 * max(1.0, float(np.abs(operator.linear[..., 0, 0]).max()))
    if not np.any(np.delete(growing.ravel(), 0)):
        low = np.hypot(numbers_y[:, None], np.arange(modes.mx + 1)[None, :]) <= LOW_BAND
        growing = low & (np.arange(low.size).reshape(low.shape) > 0)
    found = [(int(row), int(column)) for row, column in np.argwhere(growing)]

    def order(place: tuple[int, int]) -> tuple[int, int, int]:
        row, column = place
        number = int(numbers_y[row])
        return (number * number + column * column, column, number)

    return sorted(found, key=order)

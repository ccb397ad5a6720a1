"""Smooth random fields: seeded noise on the waves a law amplifies, of one slice or of space and time.

Noise in space and time has a Gaussian spectrum about the wavenumber that the law amplifies most, and a
Gaussian one about the frequency 0. Every rank draws the same numbers, one for each wave of the box, and
adds up its own nodes; a seed is one field on every lattice that carries these waves, on any number of
ranks.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.operator import SpectralOperator
from lattice.starts.options import NoiseOptions, Report, silent

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

LOW_BAND = 4
"""Largest mode number of the noise of a law that amplifies no wave."""
BESIDE = 0.1
"""Size of the noise on waves beside the band."""
NEUTRAL = 1e-12
"""Growth, relative to the fastest rate of any mode, below which a wave counts as neutral."""


FARTHEST = 3.0
"""Standard deviations beyond which a wave gets no noise."""
WIDTH = 0.3
"""Width of the band of wavenumbers, in units of its middle."""
RATES = 2.0
"""Width of the band of frequencies, in units of the fastest growth rate."""


def noise(
    start: NoiseOptions,
    lattice: Lattice,
    values: dict[str, float],
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, dict[str, float]]:
    """Return this rank's part of smooth noise in space and time, and the values as given.

    Not collective: every rank draws the same numbers. Constraint components follow from the others.

    Raises
    ------
    InputError
        On every rank alike: an amplitude, wavenumber, width or frequency that is not positive.
    """
    for name in ("amplitude", "wavenumber", "width", "frequency"):
        given = getattr(start, name)
        if given is not None and not (np.isfinite(given) and given > 0.0):
            raise InputError(f"start.{name} must be positive and finite, got {given}")
    lengths = (values.get("length_y", 1.0), values["length_x"])
    band = _Band(start, law, lengths, values)
    owned = band.field(lattice, values.get("period", 1.0), block)
    report(
        f"noise: wavenumbers {band.middle:.4g} +- {band.width:.2g}"
        + (f", frequencies 0 +- {band.frequency:.2g}" if lattice.nt > 1 else "")
    )
    return owned, values


class _Band:
    """The waves that noise in space and time is made of."""

    def __init__(
        self, start: NoiseOptions, law: Law, lengths: tuple[float, float], values: dict[str, float]
    ) -> None:
        self.start, self.law, self.lengths = start, law, lengths
        fastest, growth = _most_unstable(law, lengths, values)
        self.middle = start.wavenumber or fastest
        self.width = start.width or WIDTH * self.middle
        self.frequency = start.frequency or RATES * growth
        reach = self.middle + FARTHEST * self.width
        counts = [int(reach * length / (2.0 * np.pi)) + 1 for length in lengths]
        shape = (2 * counts[0] + 1 if law.dimensions == 2 else 1, 2 * counts[1] + 1)
        self.operator = SpectralOperator(
            law, (max(shape[0], 5 if law.dimensions == 2 else 1), max(shape[1], 5)), lengths, values
        )

    def field(self, lattice: Lattice, period: float, block: Block) -> Real:
        """Return the noise on a block, shape block.shape + (components,)."""
        waves = int(FARTHEST * self.frequency * period / (2.0 * np.pi)) if lattice.nt > 1 else 0
        numbers = np.arange(-waves, waves + 1)
        spectra = self._scaled(self._spectra(numbers, period))
        spectra[_beyond(numbers, lattice.nt)] = 0.0
        modes = self.operator.modes
        rows = np.rint(modes.ky[:, 0] * self.lengths[0] / (2.0 * np.pi)) * (modes.my > 0)
        columns = np.arange(modes.mx + 1)
        spectra[:, :, _beyond(rows, lattice.ny)] = 0.0
        spectra[..., _beyond(columns, lattice.nx)] = 0.0
        in_time = np.tensordot(_waves(-numbers, lattice.nt, block.t0, block.t1), spectra, axes=1)
        in_y = np.einsum("tcyx,jy->tcjx", in_time, _waves(rows, lattice.ny, block.y0, block.y1))
        field = np.einsum("tcjx,ix->tjic", in_y, _waves(columns, lattice.nx, block.x0, block.x1)).real
        owned = np.ascontiguousarray(field)
        for component, mean in self.start.mean.items():
            owned[..., self.law.components.index(component)] += mean
        return owned

    def _spectra(self, numbers: NDArray[np.int64], period: float) -> Complex:
        """Return the drawn coefficients, shape (frequencies, evolving, rows, columns)."""
        modes, evolving = self.operator.modes, len(self.operator.evolving)
        k = np.hypot(modes.kx, modes.ky)
        sizes = np.exp(-0.5 * ((k - self.middle) / self.width) ** 2)
        sizes[(np.abs(k - self.middle) > FARTHEST * self.width) | (k == 0.0)] = 0.0
        omega = 2.0 * np.pi * numbers / period
        in_time = np.exp(-0.5 * (omega / self.frequency) ** 2)
        generator = np.random.default_rng(self.start.seed)
        parts = generator.standard_normal((2, len(numbers), evolving, *modes.spectrum_shape))
        spectra: Complex = (parts[0] + 1j * parts[1]) * in_time[:, None, None, None] * sizes
        return spectra

    def _scaled(self, spectra: Complex) -> Complex:
        """Return the spectra of all components, the evolving ones of the wanted root mean square."""
        squares = 0.5 * (np.abs(spectra[..., 1:]) ** 2).sum(axis=(0, 2, 3))
        # Two waves with kx = 0 of opposite ky and frequency are one.
        column = spectra[..., 0]
        opposite = np.roll(column[::-1, :, ::-1], 1, axis=-1).conj()
        squares += 0.25 * (np.abs(column + opposite) ** 2).sum(axis=(0, 2))
        scale = np.divide(
            self.start.amplitude, np.sqrt(squares), out=np.zeros_like(squares), where=squares > 0.0
        )
        evolving = spectra * scale[None, :, None, None]
        full = self.operator.complete(evolving)
        # What constraints add by themselves is steady.
        alone = self.operator.complete(np.zeros_like(evolving[0]))
        full -= alone
        alone[..., 1:] *= 2.0
        full[len(full) // 2] += alone
        return full


def _most_unstable(law: Law, lengths: tuple[float, float], values: dict[str, float]) -> tuple[float, float]:
    """Return the wavenumber that grows fastest about the zero state and a rate to go with it.

    Where nothing grows they are those of the second wave of the box: its wavenumber and what it decays by.
    """
    shape = (65 if law.dimensions == 2 else 1, 129)
    operator = SpectralOperator(law, shape, lengths, values)
    rates = operator.growth_rates()
    k = np.hypot(operator.modes.kx, operator.modes.ky)
    rates[k == 0.0] = -np.inf
    fastest = float(rates.max())
    if fastest > NEUTRAL * float(np.abs(rates[np.isfinite(rates)]).max()):
        return float(k[np.unravel_index(int(np.argmax(rates)), k.shape)]), fastest
    lowest = 4.0 * np.pi / max(lengths[1], lengths[0] if law.dimensions == 2 else 0.0)
    decay = -float(rates[np.unravel_index(int(np.argmin(np.abs(k - lowest))), k.shape)])
    return lowest, decay if decay > 0.0 else lowest


def _beyond(numbers: NDArray[np.int64], nodes: int) -> NDArray[np.bool_]:
    """Return which mode numbers the nodes cannot carry."""
    return np.asarray(np.abs(numbers) > (nodes - 1) // 2)


def _waves(numbers: NDArray[np.int64], nodes: int, first: int, last: int) -> Complex:
    """Return exp(2 pi i number j/nodes) for nodes j, whole turns removed exactly."""
    turns = (np.arange(first, last)[:, None] * numbers[None, :].astype(np.int64)) % nodes / nodes
    waves: Complex = np.exp(2j * np.pi * turns)
    return waves


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

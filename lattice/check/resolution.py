"""Resolution: what share of a field's energy lies where its lattice can hardly carry it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from lattice.check.fourier import Fourier
from lattice.geometry.lattice import Lattice
from lattice.show.spectra import ROUNDING, central_phase, largest_phase, staggered_phase

Array = NDArray[np.float64]


@dataclass(frozen=True)
class AxisSpectrum:
    """Energy of one component by wavenumber along one axis.

    Parameters
    ----------
    component, axis : str
    wavenumbers, energy : tuple of float
        From 0 to the lattice's limit; the energies sum to the mean square.
    limit : float
        Wavenumber from which on a first derivative errs by more than a tenth: not represented.
    """

    component: str
    axis: str
    wavenumbers: tuple[float, ...]
    energy: tuple[float, ...]
    limit: float

    @property
    def last_third(self) -> float:
        """Share of the fluctuating energy in the last third of the wavenumbers; 0 for a constant."""
        return self._share(math.ceil(2 * (len(self.energy) - 1) / 3))

    @property
    def unrepresented(self) -> float:
        """Share of the fluctuating energy beyond the limit."""
        beyond = [k for k, wavenumber in enumerate(self.wavenumbers) if wavenumber > self.limit]
        return self._share(beyond[0]) if beyond else 0.0

    @property
    def modes_beyond(self) -> int:
        """How many of the lattice's wavenumbers lie beyond the limit."""
        return sum(wavenumber > self.limit for wavenumber in self.wavenumbers)

    def _share(self, first: int) -> float:
        total = math.fsum(self.energy[1:])
        if total <= ROUNDING * self.energy[0]:
            return 0.0
        return math.fsum(self.energy[max(1, first) :]) / total


def measure_resolution(fourier: Fourier, owned: Array) -> tuple[AxisSpectrum, ...]:
    """Return the spectra of all components along all axes with more than one node. Collective."""
    blocks, values = fourier.blocks, fourier.values
    spectrum = fourier.spectrum(owned)
    energy = np.abs(spectrum) ** 2 * _pairs(fourier)[..., None]
    found = []
    for place, (a, numbers) in enumerate(zip(blocks.axes, fourier.transform.modes(), strict=True)):
        nodes = blocks.lattice.shape[a]
        if nodes == 1:
            continue
        others = tuple(k for k in range(len(blocks.axes)) if k != place)
        local = energy.sum(axis=others)
        sums = np.zeros((nodes // 2 + 1, energy.shape[-1]))
        np.add.at(sums, np.abs(numbers).reshape(-1), local)
        sums = blocks.comm.allreduce(sums)
        axis = "tyx"[a]
        extent = values.get({"t": "period", "y": "length_y", "x": "length_x"}[axis], 1.0)
        wavenumbers = tuple((np.arange(nodes // 2 + 1) * (2.0 * np.pi / extent)).tolist())
        limit = resolved_phase(blocks.lattice, axis) * nodes / extent
        for c, component in enumerate(fourier.law.components):
            found.append(AxisSpectrum(component, axis, wavenumbers, tuple(sums[:, c].tolist()), limit))
    return tuple(found)


def _pairs(fourier: Fourier) -> Array:
    """Return 2 for the modes of the last axis that stand for two, 1 for its first and its unpaired last."""
    last = fourier.transform.modes()[-1]
    nodes = fourier.transform.shape[-1]
    return np.where((last > 0) & (2 * last < nodes), 2.0, 1.0)


def resolved_phase(lattice: Lattice, axis: str) -> float:
    """Return the phase per node, up to pi, from which on the axis's first difference errs by a tenth."""
    if axis == "t":
        return largest_phase(partial(staggered_phase, order=lattice.order_t))
    return largest_phase(partial(central_phase, order=lattice.order_x if axis == "x" else lattice.order_y))

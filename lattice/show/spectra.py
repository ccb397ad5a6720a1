"""Spectra of a stored field along each axis, and how far the lattice resolves them."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from lattice.geometry.block import Block
from lattice.geometry.stencils import central, staggered
from lattice.store.statefile import StateFile

Real = npt.NDArray[np.float64]

BATCH_VALUES = 2**22
"""Field values held at a time."""
SAMPLE_VALUES = 2**27
"""Values read for one spectrum; larger fields are sampled in evenly spaced batches."""
TOLERATED_ERROR = 0.1
"""Relative error of a first derivative up to which a mode counts as carried by the differences."""
ROUNDING = 1e-28
"""Fluctuating energy in units of the mean's below which it is rounding error: (1e-14)**2."""


@dataclass(frozen=True)
class Spectrum:
    """Mean square of a field by mode along one axis.

    Parameters
    ----------
    axis : str
        "t", "y" or "x".
    component : str
        Of the field.
    wavenumbers : ndarray, shape (modes,)
        Angular wavenumbers, for t frequencies; from 0 to the lattice's limit pi/spacing.
    energy : ndarray, shape (modes,)
        Contribution of each mode to the mean square, averaged over the other axes; sums to it.
    limit : float
        Wavenumber up to which the axis's differences err by at most TOLERATED_ERROR.
    """

    axis: str
    component: str
    wavenumbers: Real
    energy: Real
    limit: float

    @property
    def last_third(self) -> float:
        """Share of the fluctuating energy in the last third of the wavenumbers; NaN for a constant."""
        total = float(self.energy[1:].sum())
        if total <= ROUNDING * float(self.energy[0]):
            return math.nan
        start = math.ceil(2 * (len(self.energy) - 1) / 3)
        return float(self.energy[max(1, start) :].sum()) / total


def spectrum(file: StateFile, component: str, axis: str) -> Spectrum:
    """Return the spectrum of one component along one axis that has more than one node."""
    meta = file.meta
    nodes = meta.shape[meta.axes.index(axis)]
    extent = meta.values.get({"t": "period", "y": "length_y", "x": "length_x"}[axis], 1.0)
    place = "tyx".index(axis)
    total, lines = np.zeros(nodes // 2 + 1), 0
    for block in _batches(file, place):
        values = np.moveaxis(file.part(component, block), place, 0)
        modes = np.fft.rfft(values.reshape(nodes, -1), axis=0) / nodes
        total += (modes.real**2 + modes.imag**2).sum(axis=1)
        lines += modes.shape[1]
    energy = total / lines
    # Every mode but the mean and an even lattice's last one stands for a pair.
    energy[1 : (nodes + 1) // 2] *= 2.0
    wavenumbers = np.arange(nodes // 2 + 1) * (2.0 * np.pi / extent)
    return Spectrum(axis, component, wavenumbers, energy, resolved_phase(file, axis) * nodes / extent)


def _batches(file: StateFile, whole: int) -> Iterator[Block]:
    """Yield blocks that hold axis number `whole` completely and cover the field, or an even sample of it."""
    shape = file.meta.lattice.shape
    cut = [axis for axis in range(3) if axis != whole]
    outer, inner = cut
    width = min(shape[inner], max(1, BATCH_VALUES // shape[whole]))
    depth = min(shape[outer], max(1, BATCH_VALUES // (shape[whole] * width)))
    corners = [(i, j) for i in range(0, shape[outer], depth) for j in range(0, shape[inner], width)]
    most = max(1, SAMPLE_VALUES // (shape[whole] * width * depth))
    for i, j in corners[:: -(-len(corners) // most)]:
        ranges = [(0, n) for n in shape]
        ranges[outer] = (i, min(i + depth, shape[outer]))
        ranges[inner] = (j, min(j + width, shape[inner]))
        yield Block(*ranges[0], *ranges[1], *ranges[2])


def resolved_phase(file: StateFile, axis: str) -> float:
    """Return the phase per node, up to pi, at which the axis's first difference errs by TOLERATED_ERROR."""
    lattice = file.meta.lattice
    if axis == "t":
        return largest_phase(lambda phase: staggered_phase(phase, lattice.order_t))
    order = lattice.order_x if axis == "x" else lattice.order_y
    return largest_phase(lambda phase: central_phase(phase, order))


def central_phase(phase: Real, order: int) -> Real:
    """Return the phase the central first difference of this order sees instead of `phase`."""
    weights = [float(w) for w in central(1, order)]
    reach = len(weights) // 2
    seen: Real = sum(weights[reach + j] * 2.0 * np.sin(j * phase) for j in range(1, reach + 1))
    return seen


def staggered_phase(phase: Real, order: int) -> Real:
    """Return the phase the staggered difference over the midpoint mean of this order sees."""
    difference = [float(w) for w in staggered(1, order)]
    mean = [float(w) for w in staggered(0, order)]
    half = order // 2
    top = sum(difference[half + j] * 2.0 * np.sin((j + 0.5) * phase) for j in range(half))
    bottom = sum(mean[half + j] * 2.0 * np.cos((j + 0.5) * phase) for j in range(half))
    with np.errstate(divide="ignore"):
        return np.asarray(top / bottom)


def largest_phase(seen: Callable[[Real], Real]) -> float:
    """Return the end of the range of phases, from 0, where `seen` errs by at most TOLERATED_ERROR."""
    phases = np.linspace(0.0, np.pi, 2001)[1:]
    wrong = np.abs(seen(phases) / phases - 1.0) > TOLERATED_ERROR
    return float(phases[np.argmax(wrong)]) if wrong.any() else float(np.pi)

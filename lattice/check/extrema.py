"""The largest and smallest value of a field, of its Fourier series and not only of its nodes.

Nodal extremes jump as the nodes move from lattice to lattice; those of the series converge with its order.
"""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.check.fourier import Fourier

Array = NDArray[np.float64]

CANDIDATES = 4
"""Nodal extremes that are followed to those of the series."""
NEWTON_STEPS = 6


def extremes(fourier: Fourier, owned: Array) -> list[tuple[float, float]]:
    """Return smallest and largest value of every component, on every rank. Collective."""
    series = _Series(fourier, owned)
    found = []
    for c in range(owned.shape[-1]):
        lowest = -_highest(fourier, series, -owned[..., c], c, -1.0)
        found.append((lowest, _highest(fourier, series, owned[..., c], c, 1.0)))
    return found


def _highest(fourier: Fourier, series: _Series, array: Array, component: int, sign: float) -> float:
    """Return the largest value of sign times a component."""
    best = -np.inf
    for value, place in _candidates(fourier, array):
        best = max(best, value, series.climb(place, component, sign))
    return float(best)


def _candidates(fourier: Fourier, array: Array) -> list[tuple[float, tuple[int, ...]]]:
    """Return the highest local maxima among the nodes, the same on all ranks."""
    peak = np.ones(array.shape, dtype=bool)
    for axis, step in itertools.product(fourier.blocks.axes, (-1, 1)):
        # A rank's edge is compared with its other edge: a candidate more or less does no harm.
        peak &= array >= np.roll(array, step, axis=axis)
    peak.reshape(-1)[int(np.argmax(array))] = True
    places = np.argwhere(peak)
    values = array[peak]
    order = np.argsort(values)[::-1][:CANDIDATES]
    block = fourier.blocks.block
    corner = np.array([block.t0, block.y0, block.x0])
    own = [(float(values[k]), tuple((places[k] + corner).tolist())) for k in order]
    every = [entry for part in fourier.blocks.comm.allgather(own) for entry in part]
    return sorted(every, reverse=True)[:CANDIDATES]


class _Series:
    """The Fourier series of a field, to be evaluated with its first two derivatives anywhere."""

    def __init__(self, fourier: Fourier, owned: Array) -> None:
        self.comm = fourier.blocks.comm
        self.spectrum = fourier.spectrum(owned)
        self.axes = fourier.blocks.axes
        self.nodes = [fourier.blocks.lattice.shape[a] for a in self.axes]
        self.modes = [m.reshape(-1).astype(float) for m in fourier.transform.modes()]
        last, nodes = self.modes[-1], self.nodes[-1]
        # The last axis holds half of the modes; the shortest wave of an even count is left as a cosine.
        self.weight = np.where((last > 0) & (2 * last < nodes), 2.0, 1.0)

    def climb(self, place: tuple[int, ...], component: int, sign: float) -> float:
        """Return the value at the nearest maximum of sign times a component, by Newton's method."""
        angle = np.array([2.0 * np.pi * place[a] / n for a, n in zip(self.axes, self.nodes, strict=True)])
        spacing = np.array([2.0 * np.pi / n for n in self.nodes])
        best = -np.inf
        for _ in range(NEWTON_STEPS):
            value, slope, curvature = self._at(angle, component)
            best = max(best, sign * value)
            step = np.linalg.lstsq(curvature, -slope, rcond=1e-9)[0]
            if sign * float(slope @ step) < 0.0:
                break  # not a maximum: the node's own value stands
            longest = float(np.max(np.abs(step) / spacing, initial=0.0))
            angle = angle + step / max(1.0, longest)
            if longest < 1e-9:
                break
        return best

    def _at(self, angle: Array, component: int) -> tuple[float, Array, Array]:
        """Return value, gradient and second derivatives in the angles of all axes."""
        part: Any = self.spectrum[..., component]
        for place in reversed(range(len(self.axes))):
            wave = np.exp(1j * self.modes[place] * angle[place])
            if place == len(self.axes) - 1:
                wave = wave * self.weight
            factors = np.stack([wave, 1j * self.modes[place] * wave, -(self.modes[place] ** 2) * wave])
            # The axis that is summed is the last but for those summed before, which hold derivatives.
            part = np.moveaxis(np.tensordot(part, factors, axes=(place, 1)), -1, place)
        total = self.comm.allreduce(part.real.copy())
        count = len(self.axes)
        zero = (0,) * count
        slope, curvature = np.zeros(count), np.zeros((count, count))
        for i in range(count):
            slope[i] = total[_orders(zero, i)]
            for j in range(count):
                curvature[i, j] = total[_orders(_orders(zero, i), j)]
        return float(total[zero]), slope, curvature


def _orders(orders: tuple[int, ...], axis: int) -> tuple[int, ...]:
    return tuple(order + (k == axis) for k, order in enumerate(orders))

"""Statistics of a field: spectra, correlation lengths and histograms, of a state, of many, or of a march."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from lattice.check.resolution import AxisSpectrum

Array = NDArray[np.float64]

MOST_BINS = 61
LAGS = 400
CORRELATION = "correlation_length"
"""Begin of the names of correlation lengths, that in t being a time. They jump where a correlation that had
kept above zero first touches it, so that no certificate depends on them."""


@dataclass(frozen=True)
class Histogram:
    """How often values occur.

    Parameters
    ----------
    component : str
    edges : ndarray, shape (bins + 1,)
    density : ndarray, shape (bins,)
        Integrates to 1.
    """

    component: str
    edges: Array
    density: Array


def correlation(spectrum: AxisSpectrum, lags: Array) -> Array:
    """Return the two-point correlation of the fluctuations at given distances, 1 at distance 0.

    The sum of `energy * cos(k*r)` over the fluctuating modes (Wiener and Khinchin); 1 for a constant.
    """
    energy = np.array(spectrum.energy[1:])
    total = energy.sum()
    if not total > 0.0:
        return np.ones_like(lags)
    found: Array = np.cos(np.outer(lags, spectrum.wavenumbers[1:])) @ energy / total
    return found


def correlation_length(spectrum: AxisSpectrum) -> float:
    """Return the integral of the two-point correlation up to its first zero, half a period at most.

    Common practice; for a wave of one wavenumber k it is 1/k.

    Examples
    --------
    >>> wave = AxisSpectrum("u", "x", (0.0, 2.0, 4.0), (0.0, 0.5, 0.0), 4.0)
    >>> round(correlation_length(wave), 4)
    0.5
    """
    energy, k = np.array(spectrum.energy[1:]), np.array(spectrum.wavenumbers[1:])
    total = energy.sum()
    if not total > 0.0:
        return float("nan")
    end = _first_zero(spectrum, float(np.pi / k[0]))
    return float((energy * np.sin(k * end) / k).sum() / total)


def _first_zero(spectrum: AxisSpectrum, half: float) -> float:
    """Return the first zero of the correlation; half a period where it has none before."""
    lags = np.linspace(0.0, half, LAGS + 1)
    below = np.flatnonzero(correlation(spectrum, lags) <= 0.0)
    if not below.size:
        return half
    low, high = float(lags[below[0] - 1]), float(lags[below[0]])
    for _ in range(50):
        middle = 0.5 * (low + high)
        positive = correlation(spectrum, np.array([middle]))[0] > 0.0
        low, high = (middle, high) if positive else (low, middle)
    return 0.5 * (low + high)


def correlation_lengths(spectra: Sequence[AxisSpectrum]) -> dict[str, float]:
    """Return the correlation length of every spectrum by name."""
    return {f"{CORRELATION}_{s.axis}_{s.component}": correlation_length(s) for s in spectra}


def histograms(
    owned: Array, components: tuple[str, ...], add: Callable[[Array], Array], ends: Array
) -> tuple[Histogram, ...]:
    """Return the histogram of every component.

    Parameters
    ----------
    owned : ndarray, shape (..., components)
        The values at hand.
    components : tuple of str
    add : callable
        Sums an array over the ranks.
    ends : ndarray, shape (components, 2)
        Lowest and highest value, the same on all ranks.
    """
    found = []
    values = float(add(np.array([float(owned[..., 0].size)]))[0])
    bins = min(MOST_BINS, round(2.0 * values ** (1.0 / 3.0)))  # Rice's rule
    for c, component in enumerate(components):
        low, high = ends[c]
        if not high > low:
            low, high = low - 0.5, high + 0.5
        edges = np.linspace(low, high, bins + 1)
        counts = add(np.histogram(owned[..., c], edges)[0].astype(float))
        total = counts.sum()
        density = counts / (total * np.diff(edges)) if total else counts
        found.append(Histogram(component, edges, density))
    return tuple(found)

"""The drift of a flow along homogeneous axes, from two slices or from one."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from lattice.starts.modes import Modes

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

FINER = 4
"""Refinement of the correlation's grid before its peak is located by a parabola."""


def drift_that_aligns(
    modes: Modes, first: Complex, last: Complex, time: float, axes: tuple[str, ...]
) -> dict[str, float]:
    """Return the drift along `axes` for which `last`, shifted back, fits `first` best.

    The shift s is the peak of the correlation `<u_first(x) u_last(x + s)>`, every component divided by its
    variance; the drift is s/time with `|s|` at most half a length.

    Parameters
    ----------
    modes : Modes
        Of the spectra.
    first, last : ndarray, shape (E, *modes.spectrum_shape)
        Spectra of two slices, `time` apart, in the frame of the laboratory.
    axes : tuple of str
        "x", "y" or both.
    """
    fluctuation = first.copy()
    fluctuation[:, 0, 0] = 0.0
    product = (scaled(fluctuation, modes.mean_product(fluctuation, fluctuation)).conj() * last).sum(axis=0)
    surface = modes.to_nodes(product, (FINER * modes.shape[0] if modes.my else 1, FINER * modes.shape[1]))
    surface = surface[:, :1] if "x" not in axes else surface
    surface = surface[:1] if "y" not in axes else surface
    peak = np.unravel_index(int(np.argmax(surface)), surface.shape)
    found = {}
    for axis in axes:
        n = "yx".index(axis)
        turns = _refined(np.moveaxis(surface, n, 0)[:, peak[1 - n]], int(peak[n])) / surface.shape[n]
        found[f"drift_{axis}"] = (turns - round(turns)) * modes.lengths[n] / time
    return found


def drift_of_slice(modes: Modes, spectrum: Complex, rate: Complex, axes: tuple[str, ...]) -> dict[str, float]:
    """Return the drift along `axes` for which a slice moves most nearly as a whole.

    The least-squares solution of `u_t + cx*u_x + cy*u_y = 0`, every component divided by its variance.

    Parameters
    ----------
    modes : Modes
        Of the spectra.
    spectrum, rate : ndarray, shape (E, *modes.spectrum_shape)
        The slice and its time derivative.
    axes : tuple of str
        "x", "y" or both.
    """
    sizes = modes.mean_product(spectrum, spectrum)
    slopes = [spectrum * modes.derivative(int(axis == "x"), int(axis == "y")) for axis in axes]
    weighted = [scaled(slope, sizes) for slope in slopes]
    matrix = np.array([[modes.mean_product(a, b).sum() for b in slopes] for a in weighted])
    right = np.array([-modes.mean_product(a, rate).sum() for a in weighted])
    solution = np.linalg.lstsq(matrix, right, rcond=None)[0]
    return {f"drift_{axis}": float(c) for axis, c in zip(axes, solution, strict=True)}


def scaled(spectrum: Complex, sizes: Real) -> Complex:
    """Return spectra of components divided by their mean squares; components at rest stay zero."""
    scale = np.divide(1.0, sizes, out=np.zeros_like(sizes), where=sizes > 0.0)
    product: Complex = spectrum * scale[:, None, None]
    return product


def _refined(values: Real, peak: int) -> float:
    """Return the place of the peak of the parabola through three periodic values."""
    left, middle, right = values[peak - 1], values[peak], values[(peak + 1) % len(values)]
    curvature = left - 2.0 * middle + right
    return peak + (0.5 * float(left - right) / float(curvature) if curvature < 0.0 else 0.0)

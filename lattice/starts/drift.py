"""The drift of a flow along homogeneous axes, from two slices or from one."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from lattice.starts.modes import Modes

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

FINER = 4
"""Refinement of the grid on which the peak of the correlation is looked for."""
NEWTON_STEPS = 8


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
    turns = [int(place) / nodes for place, nodes in zip(peak, surface.shape, strict=True)]
    shift = {axis: turns["yx".index(axis)] * modes.lengths["yx".index(axis)] for axis in axes}
    found = {}
    for axis, place in _climbed(modes, product, shift).items():
        length = modes.lengths["yx".index(axis)]
        found[f"drift_{axis}"] = (place - length * round(place / length)) / time
    return found


def _climbed(modes: Modes, product: Complex, shift: dict[str, float]) -> dict[str, float]:
    """Return the peak of the correlation `sum product exp(i k s)` near `shift`, by Newton's method."""
    axes = list(shift)
    k = [modes.kx + 0.0 * modes.ky if axis == "x" else modes.ky + 0.0 * modes.kx for axis in axes]
    # Modes with kx > 0 stand for two, the other being the conjugate.
    both = np.where(modes.kx > 0.0, 2.0, 1.0) * product
    place = np.array([shift[axis] for axis in axes])
    for _ in range(NEWTON_STEPS):
        turned = both * np.exp(1j * sum(s * q for s, q in zip(place, k, strict=True)))
        slope = np.array([(1j * q * turned).sum().real for q in k])
        curvature = np.array([[-(p * q * turned).sum().real for p in k] for q in k])
        if np.linalg.eigvalsh(curvature).max() >= 0.0:
            break
        place = place - np.linalg.solve(curvature, slope)
    return dict(zip(axes, (float(s) for s in place), strict=True))


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

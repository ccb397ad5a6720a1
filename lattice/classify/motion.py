"""The uniform motion in which a field comes nearest to rest, from its Fourier coefficients."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from lattice.classify.spectra import Complex, Real, Spectra

TURN = 2.0 * np.pi
STILL = 1e-12  # periods or radians per period: rounding
DEPENDENT = 1e-10  # of the Gram matrix: directions that move the field in the same way


@dataclass(frozen=True)
class Motion:
    """How a field changes with time, and what of it is no uniform motion.

    Parameters
    ----------
    rates : dict of str to float
        Periods of x and y passed, and radians turned ("rotation"), per period in time, when the field moves
        as nearly uniformly as it can.
    change : float
        Root mean square of the time derivative, times the period over 2 pi.
    rest : float
        The same of what the uniform motion leaves.
    gradient : float
        Root mean square of all derivatives, each times its period over 2 pi.
    """

    rates: dict[str, float]
    change: float
    rest: float
    gradient: float


def find_motion(
    spectra: Spectra, coefficients: Complex, movable: tuple[str, ...], pair: tuple[int, int] | None
) -> Motion:
    """Return the uniform motion of a field that leaves the least time derivative.

    Collective. Least squares for `u_t + vx*u_x + vy*u_y - rotation*(-b, a) = 0`; a pair of components is
    turned only where moving along the axes leaves something.

    Parameters
    ----------
    spectra : Spectra
    coefficients : ndarray
    movable : tuple of str
        Axes along which the field may move.
    pair : tuple of int, optional
        Components that may turn.
    """
    slopes = {name: TURN * 1j * slope(spectra, coefficients, name) for name in spectra.axes}
    directions = {name: slopes[name] for name in spectra.axes if name in movable}
    if pair:
        directions["rotation"] = -turned(coefficients, pair)
    rate = slopes.get("t", np.zeros_like(coefficients))
    names, vectors = list(directions), [rate, *directions.values()]
    gram = _products(spectra, vectors)
    change = np.sqrt(gram[0, 0])
    sizes = [_products(spectra, [s])[0, 0] for s in slopes.values()]
    best, rest = np.zeros(len(names)), change
    for count in range(1, len(names) + 1):
        found = np.zeros(len(names))
        found[:count] = _least(gram[1 : count + 1, 1 : count + 1], -gram[0, 1 : count + 1])
        left = rate + sum((f * d for f, d in zip(found, directions.values(), strict=True)), np.zeros(1))
        size = float(np.sqrt(_products(spectra, [left])[0, 0]))
        if size < 0.5 * rest:
            best, rest = found, size
    rates = {name: 0.0 if abs(b) < STILL else float(b) for name, b in zip(names, best, strict=True)}
    return Motion(rates, float(change) / TURN, float(rest) / TURN, float(np.sqrt(sum(sizes))) / TURN)


def slope(spectra: Spectra, coefficients: Complex, name: str) -> Complex:
    """Return the mode numbers along an axis times the coefficients; the unpaired last mode has no slope."""
    axis = spectra.axes.index(name)
    mode = spectra.modes[axis]
    return np.asarray(np.where(2 * np.abs(mode) == spectra.nodes[axis], 0, mode)[..., None] * coefficients)


def turned(coefficients: Complex, pair: tuple[int, int]) -> Complex:
    """Return (-b, a) for a pair (a, b), zero for other components."""
    found = np.zeros_like(coefficients)
    found[..., pair[0]], found[..., pair[1]] = -coefficients[..., pair[1]], coefficients[..., pair[0]]
    return found


def _products(spectra: Spectra, vectors: list[Complex]) -> Real:
    weights = spectra.weights[..., None]
    return spectra.total([[float((weights * (a.conj() * b).real).sum()) for b in vectors] for a in vectors])


def _least(matrix: Real, wanted: Real) -> Real:
    return np.asarray(np.linalg.lstsq(matrix, wanted, rcond=DEPENDENT)[0])

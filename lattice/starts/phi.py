r"""Coefficients of the fourth-order exponential time-differencing Runge-Kutta scheme.

With `phi_0 = exp`, `phi_(j+1)(z) = (phi_j(z) - 1/j!)/z`. Scalars: Taylor series inside |z| < 1, the
recursion outside, where it loses no digits (compare the contour integrals of [2]). Matrices: the
augmented matrix exponential [3].

References
----------
[1] S. M. Cox, P. C. Matthews, J. Comput. Phys. 176 (2002) 430-455: ETDRK4.
[2] A.-K. Kassam, L. N. Trefethen, SIAM J. Sci. Comput. 26 (2005) 1214-1233: stable coefficients.
[3] A. H. Al-Mohy, N. J. Higham, SIAM J. Sci. Comput. 33 (2011) 488-511: phi functions as blocks of the
    exponential of an augmented matrix.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Complex = NDArray[np.complex128]

HIGHEST = 3
# The first omitted term is below 1/22! = 9e-22 for |z| < 1.
TAYLOR_TERMS = 19


@dataclass(frozen=True)
class Weights:
    """The scheme's weights for one step, each of the shape of the linear part.

    Parameters
    ----------
    whole, half : ndarray
        exp(dt L) and exp(dt L/2).
    stage : ndarray
        (dt/2) phi_1(dt L/2), for the three inner stages.
    first, middle, last : ndarray
        Weights of the nonlinear part at the start, twice in the middle, and at the end.
    """

    whole: Complex
    half: Complex
    stage: Complex
    first: Complex
    middle: Complex
    last: Complex


def scalar_phi(z: Complex) -> list[Complex]:
    """Return phi_0 .. phi_3 of every number in `z`.

    Examples
    --------
    >>> [round(float(p.real), 12) for p in scalar_phi(np.zeros(1, complex))]
    [1.0, 1.0, 0.5, 0.166666666667]
    """
    small = np.abs(z) < 1.0
    inside, outside = np.where(small, z, 0.0), np.where(small, 1.0, z)
    values: list[Complex] = [np.exp(z)]
    for j in range(1, HIGHEST + 1):
        series = np.zeros_like(z)
        for n in reversed(range(TAYLOR_TERMS)):
            series = series * inside + 1.0 / factorial(n + j)
        recursion = (values[-1] - 1.0 / factorial(j - 1)) / outside
        values.append(np.where(small, series, recursion))
    return values


def matrix_phi(z: Complex) -> list[Complex]:
    """Return phi_0 .. phi_3 of every square matrix in `z`, shape (n, size, size)."""
    unique, where = _unique_matrices(z)
    count, size = unique.shape[:2]
    augmented = np.zeros((count, (HIGHEST + 1) * size, (HIGHEST + 1) * size), dtype=unique.dtype)
    augmented[:, :size, :size] = unique
    for j in range(HIGHEST):
        rows, columns = slice(j * size, (j + 1) * size), slice((j + 1) * size, (j + 2) * size)
        augmented[:, rows, columns] = np.eye(size)
    # [3]: the first block row of the exponential is phi_0, phi_1, phi_2, phi_3.
    exponential = scipy.linalg.expm(augmented)
    return [
        np.ascontiguousarray(exponential[where, :size, j * size : (j + 1) * size]).astype(complex)
        for j in range(HIGHEST + 1)
    ]


def _unique_matrices(z: Complex) -> tuple[NDArray[Any], NDArray[np.intp]]:
    """Return the distinct matrices and where each one of `z` is; real where all are real."""
    rows = z.reshape(len(z), -1)
    numbers = rows.real if not np.any(rows.imag) else np.concatenate([rows.real, rows.imag], axis=1)
    _, first, where = np.unique(numbers, axis=0, return_index=True, return_inverse=True)
    unique: NDArray[Any] = z[first]
    return (unique if np.any(rows.imag) else unique.real), where.reshape(-1)


def weights(linear: Complex, dt: float, matrices: bool) -> Weights:
    """Return the scheme's weights.

    Parameters
    ----------
    linear : ndarray
        The linear part: any shape of scalars, or `(size, size, ...)` with `matrices`.
    dt : float
        Time step.
    matrices : bool
        Whether `linear` holds a matrix for every mode.
    """
    if not matrices:
        return _combine(scalar_phi(dt * linear), scalar_phi(0.5 * dt * linear), dt)
    size, grid = linear.shape[0], linear.shape[2:]
    stack = np.moveaxis(linear.reshape(size, size, -1), -1, 0)
    full, half = matrix_phi(dt * stack), matrix_phi(0.5 * dt * stack)

    def back(values: list[Complex]) -> list[Complex]:
        return [np.ascontiguousarray(np.moveaxis(v, 0, -1)).reshape(size, size, *grid) for v in values]

    return _combine(back(full), back(half), dt)


def _combine(full: list[Complex], half: list[Complex], dt: float) -> Weights:
    # [1] eqs. (26)-(29), written with phi functions; powers of one matrix commute.
    p1, p2, p3 = full[1:]
    middle: Complex = np.multiply(2.0 * dt, p2 - 2.0 * p3)
    return Weights(
        whole=full[0],
        half=half[0],
        stage=0.5 * dt * half[1],
        first=dt * (p1 - 3.0 * p2 + 4.0 * p3),
        middle=middle,
        last=dt * (4.0 * p3 - p2),
    )

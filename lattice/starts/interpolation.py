"""Trigonometric interpolation from one periodic lattice to another, axis by axis.

The matrix of one axis evaluates the interpolant of `old` nodes, without the modes the `new` nodes cannot
carry, at the new nodes. It is exact on every field both lattices carry; the Nyquist mode of an even number of
nodes counts as the cosine. Any rank can form the rows it owns alone, and a tensor product of such rows
applied slab by slab needs no rank to hold the whole field.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.block import Block

Real = NDArray[np.float64]


def interpolation_matrix(old: int, new: int, start: int = 0, stop: int | None = None) -> Real:
    """Return rows `start` to `stop` of the interpolation matrix from `old` to `new` periodic nodes.

    Parameters
    ----------
    old, new : int
        Numbers of nodes, even or odd; node j of n is at j/n of the length.
    start, stop : int
        Half-open range of new nodes; all unless given.

    Returns
    -------
    ndarray, shape (stop - start, old)
        For equal numbers exactly the identity.

    Examples
    --------
    >>> interpolation_matrix(2, 4).round(12)
    array([[1. , 0. ],
           [0.5, 0.5],
           [0. , 1. ],
           [0.5, 0.5]])
    """
    rows, columns = np.arange(start, new if stop is None else stop), np.arange(old)
    # Phases as whole multiples of 1/(old*new) of a turn: no rounding, so equal nodes are equal.
    turn = old * new
    phase = (rows[:, None] * old - columns[None, :] * new + turn // 2) % turn - turn // 2
    if old == new:
        return np.asarray(phase == 0, dtype=float)
    fewer = min(old, new)
    angle = np.pi * phase / turn
    full = (fewer - 1) // 2
    with np.errstate(invalid="ignore", divide="ignore"):
        # sum of cos(2 k angle) over |k| <= full: the Dirichlet kernel.
        kernel = np.where(phase == 0, 2.0 * full + 1.0, np.sin((2 * full + 1) * angle) / np.sin(angle))
    if fewer % 2 == 0:
        # Up: the old Nyquist cosine, half at either sign. Down: both signs fold onto the new one.
        kernel += (1.0 if old == fewer else 2.0) * np.cos(fewer * angle)
    return np.asarray(kernel / old, dtype=float)


class Interpolator:
    """Accumulate a rank's own block of an interpolated field from slabs of the old one.

    Not collective.

    Parameters
    ----------
    old : tuple of int
        Old nodes (nt, ny, nx).
    new : tuple of int
        New nodes.
    block : Block
        The part of the new lattice wanted.
    """

    def __init__(self, old: tuple[int, int, int], new: tuple[int, int, int], block: Block) -> None:
        self.block = block
        self._t = interpolation_matrix(old[0], new[0], block.t0, block.t1)
        self._y = interpolation_matrix(old[1], new[1], block.y0, block.y1)
        self._x = interpolation_matrix(old[2], new[2], block.x0, block.x1)
        self._ranges = (block.y0, block.y1, block.x0, block.x1)
        self._same_t, self._same_y, self._same_x = (a == b for a, b in zip(old, new, strict=True))

    def gather(self, slabs: Iterable[tuple[int, Real]], components: int) -> Real:
        """Return the owned block, shape block.shape + (components,).

        Parameters
        ----------
        slabs : iterable of (int, ndarray)
            First old level of the slab, and the slab, shape (levels, ny, nx, components); every old level
            once.
        components : int
            Length of the last axis.
        """
        owned = np.zeros((*self.block.shape, components))
        for level, slab in slabs:
            if self._same_t:
                self._copy_levels(owned, level, slab)
            else:
                weights = self._t[:, level : level + len(slab)]
                owned += np.tensordot(weights, self._in_space(slab), axes=1)
        return owned

    def _copy_levels(self, owned: Real, level: int, slab: Real) -> None:
        first, last = max(level, self.block.t0), min(level + len(slab), self.block.t1)
        if first < last:
            wanted = self._in_space(slab[first - level : last - level])
            owned[first - self.block.t0 : last - self.block.t0] = wanted

    def _in_space(self, slab: Real) -> Real:
        y0, y1, x0, x1 = self._ranges
        slab = slab[:, :, x0:x1] if self._same_x else _along("ik,tjkc->tjic", self._x, slab)
        return slab[:, y0:y1] if self._same_y else _along("ij,tjkc->tikc", self._y, slab)


def _along(axes: str, matrix: Real, slab: Real) -> Real:
    return np.asarray(np.einsum(axes, matrix, slab, optimize=True), dtype=float)

"""Weights that join pieces of a field smoothly: a window to its own continuation, a piece to the next.

All weights rise as `s**3*(10 - 15*s + 6*s**2)`, which has two continuous derivatives at both ends, and the
weights at a point add up to 1.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]


def smooth_step(s: float) -> float:
    """Return 0 below s = 0, 1 above s = 1, and the smooth rise in between.

    Examples
    --------
    >>> [smooth_step(s) for s in (-1.0, 0.0, 0.5, 1.0)]
    [0.0, 0.0, 0.5, 1.0]
    """
    s = min(1.0, max(0.0, s))
    return s * s * s * (10.0 + s * (6.0 * s - 15.0))


@dataclass(frozen=True)
class Sample:
    """A node of a window takes `weight` times the field at `place`, measured from the window's beginning."""

    node: int
    place: float
    weight: float


def window_samples(nodes: int, length: float, blend: float, start: int, stop: int) -> Iterator[Sample]:
    """Yield what nodes `start <= n < stop` of a window made periodic take from the field.

    Over its first fraction `blend` the window is mixed with its continuation one length on.

    Parameters
    ----------
    nodes : int
        Of the whole window; node n is at `n*length/nodes`.
    length : float
        Of the window.
    blend : float
        `0 <= blend < 1`.
    start, stop : int
        The nodes wanted.
    """
    for node in range(start, stop):
        place = node * length / nodes
        rising = smooth_step(node / (blend * nodes)) if blend > 0.0 and nodes > 1 else 1.0
        if rising > 0.0:
            yield Sample(node, place, rising)
        if rising < 1.0:
            yield Sample(node, place + length, 1.0 - rising)


def piece_samples(
    ends: Sequence[float], piece: int, blend: float, nodes: int, start: int, stop: int
) -> Iterator[Sample]:
    """Yield what nodes `start <= n < stop` of a periodic row of pieces take from one piece.

    Neighbours share a zone about their common end, `blend` times as wide as the shorter of the two; a place
    there lies beyond the end of one of them. A single piece has itself for a neighbour. Places are measured
    from the beginning of the row and may lie before it or behind its end.

    Parameters
    ----------
    ends : sequence of float
        Where the pieces begin, and the end of the last: one number more than pieces.
    piece : int
        Which piece.
    blend : float
        `0 <= blend < 1`.
    nodes : int
        Of the whole row.
    start, stop : int
        The nodes wanted.
    """
    sizes, length = np.diff(ends), ends[-1] - ends[0]
    size = float(sizes[piece])
    before = 0.5 * blend * min(size, float(sizes[piece - 1]))
    after = 0.5 * blend * min(size, float(sizes[(piece + 1) % len(sizes)]))
    for node in range(start, stop):
        for turn in (-1, 0, 1):
            place = node * length / nodes + turn * length
            weight = _rise(place - ends[piece], before) - _rise(place - ends[piece + 1], after)
            if weight > 0.0:
                yield Sample(node, place, weight)


def _rise(distance: float, half: float) -> float:
    if half <= 0.0:
        return 1.0 if distance >= 0.0 else 0.0
    return smooth_step(0.5 + 0.5 * distance / half)

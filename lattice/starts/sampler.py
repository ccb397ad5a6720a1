"""Sample a stored field at any times and places, slab by slab, onto a rank's own levels.

A level of the new lattice takes weighted samples of the old field at chosen times, each slid in space, with
a pair of components turned. Slabs of the old field come from rank 0 one after the other; a rank holds
some of its own levels on the old nodes of space, never the whole field.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from lattice.starts.rows import local_rows, trigonometric_rows
from lattice.starts.streaming import SLAB_BYTES, ReadLevels, broadcast_slabs

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]


@dataclass(frozen=True)
class Moment:
    """What a level takes of a stored field at one time.

    Parameters
    ----------
    level : int
        The rank's own level, from 0.
    weight : float
        Of the sample.
    place : float
        The time, in units of the distance between stored levels.
    slide : tuple of float
        (sy, sx), fractions of the stored lengths: the field is taken at y + sy, x + sx.
    angle : float
        By which the rotating pair is turned, from its first component towards the second.
    """

    level: int
    weight: float
    place: float
    slide: tuple[float, float] = (0.0, 0.0)
    angle: float = 0.0


@dataclass(frozen=True)
class Stored:
    """A stored field, as rank 0 reads it.

    Parameters
    ----------
    nodes : tuple of int
        (nt, ny, nx).
    periodic : tuple of bool
        Along which of the axes t, y, x it repeats.
    read : callable
        Levels `start <= n < stop`, shape (stop - start, ny, nx, components); called on rank 0 only.
    """

    nodes: tuple[int, int, int]
    periodic: tuple[bool, bool, bool]
    read: ReadLevels

    def rows(self, axis: int, places: Sequence[float], carried: float = np.inf) -> Real:
        """Return rows that take an axis (0, 1, 2: t, y, x) to places in units of its spacing."""
        if self.periodic[axis]:
            return trigonometric_rows(self.nodes[axis], places, carried)
        return local_rows(self.nodes[axis], places)


def add_samples(
    stored: Stored,
    moments: Sequence[Moment],
    carried: float,
    rows_y: Real,
    rows_x: Real,
    owned: Real,
    comm: MPI.Intracomm,
    signs: Sequence[int] | None = None,
    pair: tuple[int, int] | None = None,
) -> None:
    """Add samples of a stored field to this rank's levels, in place.

    Collective.

    Parameters
    ----------
    stored : Stored
    moments : sequence of Moment
        Those of this rank.
    carried : float
        Levels of the new lattice per stored period.
    rows_y, rows_x : ndarray, shapes (ly, ny) and (lx, nx)
        Take stored rows and columns to this rank's, weights included.
    owned : ndarray, shape (lt, ly, lx, components)
    comm : MPI.Intracomm
    signs : sequence of int, optional
        Factor of every component, applied before it is turned.
    pair : (int, int), optional
        Components that turn.
    """
    from mpi4py import MPI

    _, ny, nx = stored.nodes
    components = owned.shape[-1]
    held = max(1, SLAB_BYTES // (8 * ny * nx * components))
    passes = comm.allreduce(-(-len(moments) // held), op=MPI.MAX)
    y, x = (np.flatnonzero(rows.any(axis=1)) for rows in (rows_y, rows_x))
    factors = np.ones(components) if signs is None else np.asarray(signs, dtype=float)
    wanted_y, wanted_x, place = rows_y[y], rows_x[x], np.ix_(y, x)
    for first in range(0, passes * held, held):
        mine = moments[first : first + held]
        times = stored.rows(0, [m.place for m in mine], carried)
        planes = np.zeros((len(mine), ny, nx, components))
        for start, slab in _slabs(stored, held, comm):
            part = times[:, start : start + len(slab)]
            if part.any():
                planes += np.tensordot(part, slab, axes=1)
        for moment, plane in zip(mine, planes, strict=True):
            moved = _turned(_slid(plane, moment.slide) * factors, pair, moment.angle)
            in_y = np.tensordot(wanted_y, moved, axes=1)
            in_x = np.moveaxis(np.tensordot(wanted_x, in_y, axes=(1, 1)), 0, 1)
            owned[moment.level][place] += moment.weight * in_x


def _slabs(stored: Stored, held: int, comm: MPI.Intracomm) -> Iterator[tuple[int, Real]]:
    nt = stored.nodes[0]
    starts = range(0, nt, held)

    def produce() -> Iterator[Real]:
        return (stored.read(start, min(start + held, nt)) for start in starts)

    return zip(starts, broadcast_slabs(comm, produce), strict=True)


def _slid(plane: Real, slide: tuple[float, float]) -> Real:
    """Return a plane (ny, nx, components) taken at places slid by fractions of its lengths."""
    for axis, fraction in enumerate(slide):
        nodes = plane.shape[axis]
        nearest = round(fraction * nodes)
        if abs(fraction * nodes - nearest) < 1e-9:
            plane = np.roll(plane, -nearest, axis=axis)
        else:
            plane = _between_nodes(plane, axis, fraction)
    return plane


def _between_nodes(plane: Real, axis: int, fraction: float) -> Real:
    nodes = plane.shape[axis]
    modes = np.exp(2j * np.pi * fraction * np.arange(nodes // 2 + 1))
    if nodes % 2 == 0:
        # The Nyquist mode counts as the cosine.
        modes[-1] = modes[-1].real
    shape: list[Any] = [1, 1, 1]
    shape[axis] = -1
    spectrum = scipy.fft.rfft(plane, axis=axis) * modes.reshape(shape)
    moved: Real = scipy.fft.irfft(spectrum, n=nodes, axis=axis)
    return moved


def _turned(plane: Real, pair: tuple[int, int] | None, angle: float) -> Real:
    if pair is None or angle == 0.0:
        return plane
    result, (a, b) = plane.copy(), pair
    result[..., a] = np.cos(angle) * plane[..., a] - np.sin(angle) * plane[..., b]
    result[..., b] = np.sin(angle) * plane[..., a] + np.cos(angle) * plane[..., b]
    return result

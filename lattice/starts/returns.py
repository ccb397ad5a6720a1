"""Near recurrences of a march: pairs of times at which the flow is nearly the same, up to a symmetry.

The distance of two slices is the smallest over shifts along the axes that allow them, by the peak of their
correlation, and, where a pair of components may be turned, over its angle. A slice is compared with those of
one longest period before it, held in a ring; nothing older is kept but the distances and the beginnings of
the best recurrences.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from lattice.laws.law import Reflection
from lattice.starts.modes import Modes

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

MAP_ROWS = 2000
KEPT = 400
"""Most recurrences whose beginning is kept."""
EXCURSION = 3.0
"""How many times farther the flow must have been in between: nearness of what hardly moves is no return."""
ALIKE_IN_TIME, ALIKE_IN_PERIOD = 0.5, 0.1
"""Recurrences that begin within this fraction of a period of one that is closer, with a period within that
fraction of it, are the same passage of the flow."""


@dataclass(frozen=True)
class Recurrence:
    """A near recurrence.

    Parameters
    ----------
    time : float
        When it begins, from the end of the spin-up.
    lag : float
        After what time the flow is nearly the same up to the reflection.
    distance : float
        Root mean square difference over that of the flow, shift and angle at their best.
    image : int
        0: the flow itself; n: its n-th reflection.
    """

    time: float
    lag: float
    distance: float
    image: int

    @property
    def period(self) -> float:
        """Period of the state it may stand for: a reflection must be undone first."""
        return self.lag * (2.0 if self.image else 1.0)


def reflected(spectrum: Complex, reflection: Reflection, signs: Sequence[int]) -> Complex:
    """Return the spectra of reflected fields, shape (..., E, rows, columns); `signs` of the evolving ones."""
    # Of a real field the coefficient at (-kx, ky) is the conjugate of that at (kx, -ky).
    image = spectrum.conj() if reflection.x else spectrum
    if reflection.x != reflection.y:
        image = np.roll(image[..., ::-1, :], 1, axis=-2)
    factors: Complex = np.asarray(signs, dtype=float)[:, None, None] * image
    return factors


class Comparison:
    """Distances of one slice from many, smallest over shifts and angle.

    Parameters
    ----------
    modes : Modes
        Of the spectra.
    weights : ndarray, shape (E,)
        Of the components' squares.
    axes : sequence of str
        "x", "y": axes along which a shift is free.
    pair : (int, int) or None
        Rows of the components whose common angle is free.
    mean_free : sequence of int
        Rows whose mean does not count.
    finer : int, optional
        Shifts tried for each distance between nodes, the best between them by a parabola.
    """

    def __init__(
        self,
        modes: Modes,
        weights: Real,
        axes: Sequence[str],
        pair: tuple[int, int] | None,
        mean_free: Sequence[int] = (),
        finer: int | None = None,
    ) -> None:
        self.modes, self.weights, self.axes, self.pair = modes, weights, tuple(axes), pair
        self.mean_free = list(mean_free)
        rows, columns = modes.shape
        finer = finer or (2 if modes.my == 0 else 1)
        self._grid = (finer * rows if modes.my else 1, finer * columns)

    def on_finer_shifts(self, finer: int) -> Comparison:
        """Return the same comparison with that many shifts for each distance between nodes."""
        return Comparison(self.modes, self.weights, self.axes, self.pair, self.mean_free, finer)

    def prepared(self, spectra: Complex) -> Complex:
        """Return spectra as they are compared: scaled, means that do not count left out."""
        found: Complex = spectra * np.sqrt(self.weights)[:, None, None]
        found[..., self.mean_free, 0, 0] = 0.0
        return found

    def sizes(self, prepared: Complex) -> Real:
        """Return the mean squares of prepared spectra, all components together."""
        squares: Real = self.modes.mean_product(prepared, prepared).sum(axis=-1)
        return squares

    def distances(self, first: Complex, last: Complex) -> Real:
        """Return the distances of pairs of prepared spectra, shapes (n, E, rows, columns)."""
        parts = self._parts(first, last)
        surface = self._surfaces(parts)
        peak = _peaks(surface)
        both = 0.5 * (self.sizes(first) + self.sizes(last))
        ratio = np.divide(2.0 * (both - peak), both, out=np.zeros_like(both), where=both > 0.0)
        found: Real = np.sqrt(np.maximum(0.0, ratio))
        return found

    def _parts(self, first: Complex, last: Complex) -> list[Complex]:
        conjugate = first.conj()
        if self.pair is None:
            return [np.einsum("neyx,neyx->nyx", conjugate, last)]
        a, b = self.pair
        others = [row for row in range(first.shape[1]) if row not in self.pair]
        plain = np.einsum("neyx,neyx->nyx", conjugate[:, others], last[:, others])
        along = conjugate[:, a] * last[:, a] + conjugate[:, b] * last[:, b]
        across = conjugate[:, a] * last[:, b] - conjugate[:, b] * last[:, a]
        return [plain, along, across]

    def _surfaces(self, parts: list[Complex]) -> Real:
        fields = [self._on_shifts(part) for part in parts]
        joined: Real = fields[0] if len(fields) == 1 else fields[0] + np.hypot(fields[1], fields[2])
        return joined

    def _on_shifts(self, part: Complex) -> Real:
        """Return a correlation at the shifts that are free, others zero."""
        if not self.axes:
            total = 2.0 * part.sum(axis=(-2, -1)).real - part[..., 0].sum(axis=-1).real
            alone: Real = total[:, None, None]
            return alone
        surface = self.modes.to_nodes(part, self._grid)
        surface = surface if "x" in self.axes else surface[..., :1]
        return surface if "y" in self.axes else surface[..., :1, :]


@dataclass(frozen=True)
class Beginning:
    """A recurrence and the spectrum at its beginning."""

    recurrence: Recurrence
    spectrum: Complex


class ReturnScan:
    """Takes the slices of a march one by one and finds its near recurrences.

    Parameters
    ----------
    comparisons : sequence of Comparison
        One for the flow itself, one for each of its reflections: axes that are reflected have their shift
        free in any case.
    images : sequence of (Reflection, signs)
        The reflections.
    every : float
        Time between slices.
    lags : tuple of int
        Shortest and longest period, in slices.
    expected : int
        Slices to come: of the map of distances about `MAP_ROWS` rows are kept.

    Attributes
    ----------
    map : list of ndarray, shape (images + 1, longest)
        Distances of every `stride`-th slice from those 1, 2, .. slices later, the flow itself first.
    stride : int
    """

    def __init__(
        self,
        comparisons: Sequence[Comparison],
        images: Sequence[tuple[Reflection, Sequence[int]]],
        every: float,
        lags: tuple[int, int],
        expected: int,
    ) -> None:
        self.comparisons, self.images, self.every = comparisons, images, every
        self.shortest, self.longest = lags
        # Slice n is at n modulo the length: the longest period, and the row before it still to be looked at.
        shape = (self.longest + 2, len(comparisons), len(comparisons[0].weights))
        self._ring = np.zeros((*shape, *comparisons[0].modes.spectrum_shape), dtype=complex)
        self._raw: list[Complex] = []
        self._open: list[list[Real]] = []
        self._seen = self._closed = 0
        self._last: list[list[Real]] = []
        self.stride = max(1, expected // MAP_ROWS)
        self.map: list[NDArray[np.float32]] = []
        self._best: list[tuple[float, int, Beginning]] = []

    def add(self, spectrum: Complex, moved: Complex) -> None:
        """Take the next slice.

        Parameters
        ----------
        spectrum : ndarray, shape (E, rows, columns)
            The slice.
        moved : ndarray, shape (longest + 1, E, rows, columns) or (1, E, rows, columns)
            The slice as it is compared with the one n slices before it: moved back by what the frame has
            moved where that is given; one for all where nothing is given.
        """
        self._compare(moved)
        slot = self._ring[self._seen % len(self._ring)]
        for image, (comparison, seen) in enumerate(
            zip(self.comparisons, self._images(spectrum), strict=True)
        ):
            slot[image] = comparison.prepared(seen)
        self._raw.append(spectrum)
        self._open.append([np.full(self.longest, np.inf) for _ in self.comparisons])
        self._seen += 1
        if self._seen > self.longest:
            self._close_row()

    def found(self) -> list[Beginning]:
        """Return the recurrences, the closest first, each passage once."""
        chosen: list[Beginning] = []
        for beginning in sorted((item[2] for item in self._best), key=lambda b: b.recurrence.distance):
            if not any(_alike(beginning.recurrence, other.recurrence) for other in chosen):
                chosen.append(beginning)
        return chosen

    def _images(self, spectrum: Complex) -> list[Complex]:
        return [spectrum, *(reflected(spectrum, r, signs) for r, signs in self.images)]

    def _compare(self, moved: Complex) -> None:
        """Fill in the distances of a new slice from those in the ring."""
        count = min(self._seen, self.longest)
        if not count:
            return
        before = self._ring[(self._seen - 1 - np.arange(count)) % len(self._ring)]
        last = moved[1 : count + 1] if len(moved) > 1 else np.broadcast_to(moved, (count, *moved.shape[1:]))
        for image, comparison in enumerate(self.comparisons):
            distances = comparison.distances(before[:, image], comparison.prepared(last))
            for lag, distance in enumerate(distances):
                self._open[len(self._open) - 1 - lag][image][lag] = distance

    def _close_row(self) -> None:
        """Put away the oldest row, complete now, and look for minima in the one before it."""
        row = self._open.pop(0)
        if self._closed % self.stride == 0:
            self.map.append(np.array(row, dtype=np.float32))
        self._closed += 1
        self._last = [*self._last[-2:], row]
        if len(self._last) == 3:
            for image in range(len(self.comparisons)):
                self._look(image)
        if self._closed > 1:
            # The row before is still to be looked at when the next one is closed.
            self._raw.pop(0)

    def _look(self, image: int) -> None:
        """Keep the minima of the row between the last three, which begins with the oldest slice held."""
        before, here, after = (row[image] for row in self._last)
        around = np.minimum(before, after)
        near = np.minimum(around[:-2], np.minimum(around[1:-1], around[2:]))
        middle = here[1:-1]
        minima = (middle <= near) & (middle < here[:-2]) & (middle < here[2:])
        farthest = np.maximum.accumulate(self._last[1][0])[1:-1]
        minima &= farthest >= EXCURSION * middle
        times = 2.0 if image else 1.0
        for place in np.flatnonzero(minima) + 1:
            lag = (place + 1 + vertex(here[place - 1 : place + 2] ** 2)) * self.every
            if self.shortest <= times * lag / self.every <= self.longest:
                time = (self._closed - 2) * self.every
                self._keep(Recurrence(time, float(lag), float(here[place]), image))

    def _keep(self, recurrence: Recurrence) -> None:
        beginning = Beginning(recurrence, self._raw[0].copy())
        item = (-recurrence.distance, self._seen * 10_000 + len(self._best), beginning)
        if len(self._best) < KEPT:
            heapq.heappush(self._best, item)
        elif recurrence.distance < -self._best[0][0]:
            heapq.heapreplace(self._best, item)


def _alike(one: Recurrence, other: Recurrence) -> bool:
    close = abs(one.time - other.time) < ALIKE_IN_TIME * max(one.lag, other.lag)
    return one.image == other.image and close and math.isclose(one.lag, other.lag, rel_tol=ALIKE_IN_PERIOD)


def _peaks(surface: Real) -> Real:
    """Return the largest value of each periodic surface, shape (n, rows, columns), between its nodes.

    The parabola through the largest node and its neighbours, along each axis.
    """
    numbers = np.arange(len(surface))
    place = surface.reshape(len(surface), -1).argmax(axis=1)
    row, column = np.unravel_index(place, surface.shape[1:])
    middle = surface[numbers, row, column]
    peak: Real = middle.copy()
    for axis, nodes in enumerate(surface.shape[1:]):
        if nodes < 3:
            continue
        step = (1, 0) if axis == 0 else (0, 1)
        left, right = (
            surface[
                numbers,
                (row + sign * step[0]) % surface.shape[1],
                (column + sign * step[1]) % surface.shape[2],
            ]
            for sign in (-1, 1)
        )
        bend = 2.0 * middle - left - right
        peak += np.divide(0.125 * (left - right) ** 2, bend, out=np.zeros_like(bend), where=bend > 0.0)
    return peak


def vertex(values: Real) -> float:
    """Return where between -1 and 1 the parabola through three values at -1, 0, 1 is lowest.

    Examples
    --------
    >>> vertex(np.array([4.0, 1.0, 2.0]))
    0.25
    """
    left, middle, right = (float(v) for v in values)
    bend = left - 2.0 * middle + right
    return 0.0 if bend <= 0.0 else min(1.0, max(-1.0, 0.5 * (left - right) / bend))

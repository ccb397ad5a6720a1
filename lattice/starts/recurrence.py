"""Start from a near recurrence of a march: the flow between two times at which it is nearly the same.

The march is scanned once, in bounded memory (`lattice.starts.returns`). The recurrence picked gives the
period; the shift between its ends gives the drift. A flow that returns reflected returns unreflected after
twice the time: then the second half of the period is the image of the first. As in a march, the first
fraction `blend` of the recurrence is mixed with its continuation.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError, LatticeError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law, Reflection
from lattice.laws.symmetry import symmetries_at
from lattice.starts.folding import shares
from lattice.starts.frame import MeanTurn, frame_that_aligns, turned
from lattice.starts.march import WINDOW_TOLERANCE, Marcher
from lattice.starts.options import RecurrenceOptions, Report, silent
from lattice.starts.returns import Comparison, Recurrence, ReturnScan, reflected, vertex
from lattice.starts.stepper import Values, followed_step, suggest_dt
from lattice.starts.streaming import broadcast_slabs, on_root

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

SLICES_PER_PERIOD = 50
SLICES_BETWEEN_STEPS = 16
"""Slices after which the march's step is judged again."""
FINER, FINER_SHIFTS = 16, 4
"""Parts of the time between slices, and of the distance between nodes, in which the lag of a recurrence that
is picked is found."""


@dataclass(frozen=True)
class Found:
    """What a scan found.

    Parameters
    ----------
    recurrences : tuple of Recurrence
        The closest first, each passage of the flow once.
    reflections : tuple of Reflection
        Those looked at besides the flow itself: image n is reflection n - 1.
    distances : ndarray, shape (rows, images + 1, lags)
        Distances from a time to later ones, the flow itself first.
    row_time, lag_time : float
        Time between rows, and between lags; the first lag is one of them.
    """

    recurrences: tuple[Recurrence, ...]
    reflections: tuple[Reflection, ...]
    distances: NDArray[np.float32]
    row_time: float
    lag_time: float


@dataclass(frozen=True)
class Plan:
    """What all ranks must know of the window: how long one recurrence lasts, and whether it is an image."""

    lag: float
    folded: bool
    found: Values


def recurrence(
    start: RecurrenceOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of a near recurrence of a march, with its period and drifts.

    Collective. Rank 0 marches and hands out one slice at a time; the field is the same, bit for bit, on any
    number of ranks.

    Parameters
    ----------
    start : RecurrenceOptions
        The job's `start` section.
    lattice : Lattice
        With more than one level.
    values : dict of str to float
        The period is a guess, from which the range looked for follows where `start` gives none.
    law : Law
        Any law the marcher takes.
    block : Block
        The part of the lattice this rank owns.
    comm : MPI.Intracomm
    report : callable
        Called on rank 0 only.

    Returns
    -------
    owned : ndarray, shape block.shape + (components,)
        Without halo.
    values : dict of str to float
        With the recurrence's period, the drifts along `match_drift`, the rotation where `match_rotation`.

    Raises
    ------
    InputError, LatticeError
        On every rank: options that make no sense, fewer recurrences than the one picked, a law that cannot
        be marched.
    """
    returner = Returner(start, lattice, values, law, report)
    plan = on_root(comm, returner.plan)
    owned = np.zeros((*block.shape, len(law.components)))
    slices = broadcast_slabs(comm, returner.shares_of_slices)
    for share, whole in zip(shares(plan.lag, plan.folded, lattice.nt, start.blend), slices, strict=True):
        if block.t0 <= share.level < block.t1:
            part = whole[block.y0 : block.y1, block.x0 : block.x1]
            owned[share.level - block.t0] += share.weight * part
    return owned, {**values, **plan.found}


def find_recurrences(
    start: RecurrenceOptions, lattice: Lattice, values: Values, law: Law, report: Report = silent
) -> Found:
    """Return the near recurrences of a march, the closest first.

    Not collective: the march is serial; call it on one rank.

    Parameters
    ----------
    start : RecurrenceOptions
        The march, and what to look for; `pick` and `near_time` do not matter.
    lattice : Lattice
        Its nodes in space are the marcher's unless `start.shape` gives others.
    values : dict of str to float
        Guess of the period, lengths, drifts that are held, parameters.
    law : Law
        Any law the marcher takes.
    report : callable
        Takes lines of progress.

    Returns
    -------
    Found
        Recurrences, and the map of distances.

    Raises
    ------
    InputError, LatticeError
        As the start itself.
    """
    return Returner(start, lattice, values, law, report).scan()


class Returner(Marcher):
    """The march that is scanned for recurrences; all but the constructor runs on rank 0 only."""

    start: RecurrenceOptions

    def scan(self) -> Found:
        """March, look at every slice, and return what was found."""
        self._begin()
        time, dt = 0.0, self.stepper.dt
        moves = self._moves()
        self._scan.add(self.spectrum, self._moved(self.spectrum, moves))
        for n in range(1, self._slices + 1):
            self.spectrum = self.stepper.advance(self.spectrum, self.every, self.start.spin_up + time)
            time = n * self.every
            self._scan.add(self.spectrum, self._moved(self.spectrum, moves))
            if self.start.dt is None and n % SLICES_BETWEEN_STEPS == 0:
                dt = followed_step(self.stepper, self.spectrum, dt, WINDOW_TOLERANCE)
                self.stepper = self.stepper.with_step(dt)
            self._tell(f"recurrence: scanned {time:.4g} of {self._slices * self.every:.4g}")
        self._beginnings = self._scan.found()
        return Found(
            tuple(b.recurrence for b in self._beginnings),
            tuple(reflection for reflection, _ in self._images),
            np.array(self._scan.map),
            self._scan.stride * self.every,
            self.every,
        )

    def plan(self) -> Plan:
        """Scan, pick a recurrence, and find its period and frame."""
        if self.lattice.nt == 1:
            raise InputError(
                "start.kind = 'recurrence' needs lattice.nt > 1: a recurrence is a field in time"
            )
        found = self.scan()
        return self.plan_of(found, self._chosen(found))

    def plan_of(self, found: Found, number: int) -> Plan:
        """Find the period and the frame of one of the recurrences of the scan, by rank from 1."""
        beginning = self._beginnings[number - 1]
        self.spectrum, best = beginning.spectrum, beginning.recurrence
        if self.start.dt is None:
            self.stepper = self.stepper.with_step(suggest_dt(self.stepper, self.spectrum, WINDOW_TOLERANCE))
        self.image = self._images[best.image - 1] if best.image else None
        self.lag, last = self._refined(best)
        frame = self._frame_of(last)
        values = {**frame, "period": self.lag * (2.0 if self.image else 1.0)}
        values |= {f"source_{self._name(row)}": -slope for row, slope in self.running.items()}
        self._told_of(found, number, best, values)
        return Plan(self.lag, self.image is not None, values)

    def shares_of_slices(self) -> Iterator[Real]:
        """Yield the march's samples in the order of `shares`, shape (ny, nx, C)."""
        spectrum, now = self.spectrum, 0.0
        offsets = {row: float(spectrum[row, 0, 0].real) - self._mean(row) for row in self.running}
        for share in shares(self.lag, self.image is not None, self.lattice.nt, self.start.blend):
            if share.time > now:
                spectrum = self.stepper.advance(spectrum, share.time - now, self.start.spin_up)
                now = share.time
            seen = self._seen(spectrum, now, self.frame)
            for row, slope in self.running.items():
                seen[row, 0, 0] -= offsets[row] + slope * now
            if share.image and self.image is not None:
                shift = [self._mirror.get(axis, 0.0) for axis in "xy"]
                seen = self.stepper.modes.shift(reflected(seen, *self.image), -shift[0], -shift[1])
            yield self.on_nodes(seen)

    def _begin(self) -> None:
        """Spin up and make ready to scan."""
        self._prepare_march()
        guess = self.values["period"]
        shortest = self.start.shortest or 0.5 * guess
        longest = self.start.longest or 1.5 * guess
        if not shortest < longest:
            raise InputError(f"start.longest must exceed start.shortest = {shortest:g}, got {longest:g}")
        self.every = self.start.every or guess / SLICES_PER_PERIOD
        time = self.start.march_time
        if self.start.near_time is not None:
            time = min(time, self.start.near_time + 2.0 * longest)
        self._slices = math.ceil(time / self.every)
        lags = (max(2, math.floor(shortest / self.every)), math.ceil(longest / self.every) + 1)
        if self._slices < lags[1] + 3:
            raise InputError(
                f"start.march_time must exceed the longest period looked for, {longest:g}, by some slices of "
                f"{self.every:g}, got {time:g}; raise it"
            )
        self._images = self._possible_images() if self.start.reflections else []
        weights, means = self._weights(), self._wandering_rows()
        comparisons = [
            Comparison(self.stepper.modes, weights, axes, self._turning(), means)
            for axes in self._free_axes()
        ]
        self._scan = ReturnScan(comparisons, self._images, self.every, lags, self._slices)

    def _free_axes(self) -> list[Sequence[str]]:
        """Return for the flow and each of its reflections the axes along which a shift is free."""
        found: list[Sequence[str]] = [self.axes]
        for reflection, _ in self._images:
            mirrored = [a for a in "xy" if getattr(reflection, a) and self.law.symmetries.homogeneous.get(a)]
            found.append(tuple(dict.fromkeys([*self.axes, *mirrored])))
        return found

    def _turning(self) -> tuple[int, int] | None:
        return self.pair if "rotation" in self.matched else None

    def _possible_images(self) -> list[tuple[Reflection, list[int]]]:
        """Return the law's reflections under which a flow may return, with the signs of evolving components.

        Left out are those that a rotation equals or undoes, and those along an axis with a given drift.
        """
        found = []
        for reflection in symmetries_at(self.law, self.values).reflections:
            signs = [reflection.signs[n] for n in self.stepper.operator.evolving]
            turns = self.pair is not None and any(signs[row] < 0 for row in self.pair)
            drifts = any(getattr(reflection, a) and self.values.get(f"drift_{a}", 0.0) != 0.0 for a in "xy")
            if not (reflection.time or turns or drifts):
                found.append((reflection, signs))
        return found

    def _weights(self) -> Real:
        """Return one over the mean square of each evolving component, for a pair of both."""
        spectrum = self.spectrum.copy()
        spectrum[self._wandering_rows(), 0, 0] = 0.0
        squares = np.asarray(self.stepper.modes.mean_product(spectrum, spectrum))
        if self.pair is not None:
            squares[list(self.pair)] = squares[list(self.pair)].sum()
        weights: Real = np.divide(1.0, squares, out=np.zeros_like(squares), where=squares > 0.0)
        return weights

    def _moves(self) -> tuple[Complex, Real] | None:
        """Return what undoes given drifts and rotation over 0, 1, 2 .. slices; None where all are zero."""
        held = {n: v for n, v in self.frame.items() if n not in self.matched and v != 0.0}
        if not held:
            return None
        times = np.arange(self._scan.longest + 1) * self.every
        modes = self.stepper.modes
        k = held.get("drift_x", 0.0) * modes.kx + held.get("drift_y", 0.0) * modes.ky
        return np.exp(1j * times[:, None, None] * k), -held.get("rotation", 0.0) * times

    def _moved(self, spectrum: Complex, moves: tuple[Complex, Real] | None) -> Complex:
        if moves is None:
            return spectrum[None]
        phases, angles = moves
        slices = [
            turned(spectrum, self.pair, float(angle)) * p for angle, p in zip(angles, phases, strict=True)
        ]
        return np.stack(slices)

    def _chosen(self, found: Found) -> int:
        """Return the rank of the recurrence wanted."""
        count = len(found.recurrences)
        if not count:
            raise LatticeError(
                f"no near recurrence in {self._slices * self.every:g} units of time: raise start.march_time, "
                "or widen start.shortest and start.longest; a flow that rests or only travels has none"
            )
        if self.start.near_time is not None:
            away = [abs(r.time - self.start.near_time) for r in found.recurrences]
            return int(np.argmin(away)) + 1
        if self.start.pick > count:
            raise InputError(
                f"start.pick must be at most {count}, the number of near recurrences found, got "
                f"{self.start.pick}; raise start.march_time, or lower it"
            )
        return self.start.pick

    def _refined(self, best: Recurrence) -> tuple[float, Complex]:
        """Return the lag at which the distance is smallest, and the spectrum then."""
        comparison = self._scan.comparisons[best.image].on_finer_shifts(FINER_SHIFTS)
        first = comparison.prepared(self._image_of(self.spectrum)[None])
        step, begin = self.every / FINER, max(best.lag - self.every, 0.5 * self.every)
        spectrum, squares = self._after(begin, best), []
        for n in range(2 * FINER + 1):
            if n:
                spectrum = self.stepper.advance(spectrum, step, self.start.spin_up + best.time)
            held = self._seen(spectrum, begin + n * step, self._held())
            squares.append(float(comparison.distances(first, comparison.prepared(held[None]))[0]) ** 2)
        lowest = min(max(1, int(np.argmin(squares))), len(squares) - 2)
        lag = begin + (lowest + vertex(np.array(squares[lowest - 1 : lowest + 2]))) * step
        return lag, self._after(lag, best)

    def _after(self, time: float, best: Recurrence) -> Complex:
        return self.stepper.advance(self.spectrum, time, self.start.spin_up + best.time)

    def _held(self) -> Values:
        return {n: 0.0 if n in self.matched else v for n, v in self.frame.items()}

    def _image_of(self, spectrum: Complex) -> Complex:
        return spectrum if self.image is None else reflected(spectrum, *self.image)

    def _frame_of(self, last: Complex) -> Values:
        """Set the frame of the window and the mirror of its image; return the scalars found."""
        modes, pair = self.stepper.modes, self._turning()
        self.running = {
            row: float((last - self.spectrum)[row, 0, 0].real) / self.lag for row in self._wandering_rows()
        }
        back = self._seen(last, self.lag, self._held())
        axes = self._free_axes()[0 if self.image is None else 1 + self._images.index(self.image)]
        found = frame_that_aligns(modes, self._image_of(self.spectrum), back, self.lag, tuple(axes), pair)
        mirrored = "" if self.image is None else "".join(a for a in "xy" if getattr(self.image[0], a))
        self._mirror = {a: found.pop(f"drift_{a}", 0.0) * self.lag for a in mirrored}
        found |= {f"drift_{a}": 0.0 for a in mirrored if f"drift_{a}" in self.matched}
        self.frame.update(found)
        if pair is not None:
            self.frame["rotation"] = found["rotation"] = self._whole_turns(pair)
        return {name: self.frame[name] for name in self.matched}

    def _whole_turns(self, pair: tuple[int, int]) -> float:
        spectrum, turn = self.spectrum, MeanTurn(self.stepper.modes, pair)
        for _ in range(SLICES_PER_PERIOD):
            turn.look(spectrum, self.stepper.operator.rate(spectrum))
            spectrum = self.stepper.advance(spectrum, self.lag / SLICES_PER_PERIOD, self.start.spin_up)
        return turn.with_whole_turns(self.frame, self.lag)

    def _told_of(self, found: Found, number: int, best: Recurrence, values: Values) -> None:
        image = f", reflected ({image_text(self.image[0])})" if self.image else ""
        told = ", ".join(f"{name} = {value:.6g}" for name, value in values.items())
        self._tell(
            f"recurrence: number {number} of {len(found.recurrences)}, from t = {best.time:.6g}, distance "
            f"{best.distance:.3f}{image}: {told}",
            at_once=True,
        )


def image_text(reflection: Reflection) -> str:
    """Return a reflection in words.

    Examples
    --------
    >>> image_text(Reflection(True, False, (-1,)))
    'x -> -x, with signs -'
    """
    axes = ", ".join(f"{a} -> -{a}" for a in "xy" if getattr(reflection, a))
    signs = " ".join("-" if sign < 0 else "+" for sign in reflection.signs)
    return ", ".join(part for part in (axes, f"with signs {signs}" if "-" in signs else "") if part)

"""Start from a march: spin a law up from noise, cut a window of one period, make it periodic.

The window is the flow from the end of the spin-up on, seen in the frame of drift and rotation:
`u(t, x) = R(-rotation*t) u_lab(t, x + cx*t)`. Over the first fraction `blend` of the period a smooth
weight mixes it with its own continuation one period later, `v(t) = w u(t) + (1 - w) u(t + T)`, so that
`v` is as smooth across the seam as elsewhere. Rank 0 marches and hands out one slice at a time; every
rank keeps its own part. The field is the same, bit for bit, on any number of ranks.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from time import monotonic
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.frame import MeanTurn, Pair, frame_of_slice, frame_that_aligns, turned
from lattice.starts.modes import Modes
from lattice.starts.noise import random_spectrum
from lattice.starts.options import MarchOptions, Report, silent
from lattice.starts.seams import smooth_step
from lattice.starts.stepper import Stepper, Values, settle, suggest_dt
from lattice.starts.streaming import broadcast_slabs, on_root

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

SPIN_UP_TOLERANCE = 1e-5
WINDOW_TOLERANCE = 1e-6
"""Largest relative errors of one step; the window is what a solver is handed, so it is the finer."""
STRETCHES = 10
"""Parts of a spin-up between which progress may be told."""
SECONDS_BETWEEN_LINES = 5.0


def march(
    start: MarchOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of a marched window, and the values with what the march found.

    Collective. `report` is called on rank 0 only.

    Parameters
    ----------
    start : MarchOptions
        The job's `start` section.
    lattice : Lattice
        Levels and nodes the window is sampled at. `nt = 1` takes the last slice of the march.
    values : dict of str to float
        Period, lengths, drifts, rotation and parameters.
    law : Law
        Any law the marcher takes.
    block : Block
        The part of the lattice this rank owns.
    comm : MPI.Intracomm
        The ranks.

    Returns
    -------
    owned : ndarray, shape block.shape + (components,)
        Without halo.
    values : dict of str to float
        With the drifts along `match_drift`, the rotation where `match_rotation`, and the sources that hold
        the means the law lets run.

    Raises
    ------
    InputError, LatticeError
        On every rank: a law that cannot be marched, or a field that grows without bound.
    """
    return blended_march(Marcher(start, lattice, values, law, report), block, comm)


def blended_march(marcher: Marcher, block: Block, comm: MPI.Intracomm) -> tuple[Real, Values]:
    """Return this rank's part of a marcher's window, blended in time, and the values. Collective."""
    lattice, blend = marcher.lattice, marcher.start.blend
    found = on_root(comm, marcher.prepare)
    owned = np.zeros((*block.shape, len(marcher.law.components)))
    for sample, whole in enumerate(broadcast_slabs(comm, marcher.slices)):
        level = sample % lattice.nt
        if block.t0 <= level < block.t1:
            part = whole[block.y0 : block.y1, block.x0 : block.x1]
            owned[level - block.t0] += blend_weight(sample, lattice.nt, blend) * part
    return owned, {**marcher.values, **found}


def blend_weight(sample: int, nt: int, blend: float) -> float:
    """Return the weight of sample `sample` of a window in level `sample % nt`.

    Samples are one level apart; those from `nt` on belong to the continuation. The weight is 1 for
    `nt = 1`, where there is no window; else it rises over the
    first `blend*nt` levels as `s**3*(10 - 15*s + 6*s**2)`, which has two continuous derivatives at both ends.

    Examples
    --------
    >>> [blend_weight(sample, 10, 0.4) for sample in (0, 2, 12, 5)]
    [0.0, 0.5, 0.5, 1.0]
    """
    rising = smooth_step((sample % nt) / (blend * nt)) if blend > 0.0 and nt > 1 else 1.0
    return rising if sample < nt else 1.0 - rising


def samples_in(nt: int, blend: float) -> int:
    """Return how many slices a window takes: one period and its blended continuation."""
    return 1 if nt == 1 else nt + math.ceil(blend * nt)


class Marcher:
    """The march itself; all but the constructor runs on rank 0 only.

    Methods that say what the window is of a marched slice are for `lattice.starts.window` to replace.
    """

    def __init__(
        self, start: MarchOptions, lattice: Lattice, values: Values, law: Law, report: Report
    ) -> None:
        self.start, self.lattice, self.values, self.law, self.report = start, lattice, values, law, report
        self.period = values["period"] if lattice.nt > 1 else 0.0
        self._told = monotonic()

    def prepare(self) -> Values:
        """Spin up and find the frame and the sources of the window; return these."""
        self._prepare_march()
        wandering = self._wandering_rows()
        if self.lattice.nt > 1 and (self.matched or wandering):
            self._compare_ends(wandering)
        elif self.lattice.nt == 1:
            self._look_at_slice(wandering)
        found = {name: self.frame[name] for name in self.matched}
        found |= {f"source_{self._name(row)}": -slope for row, slope in self.running.items()}
        self._tell_of_window(found)
        return found

    def _prepare_march(self) -> None:
        """Spin up."""
        self.axes = _matched_axes(self.start, self.law)
        self.matched = tuple(f"drift_{axis}" for axis in self.axes)
        self.matched += ("rotation",) if _matched_rotation(self.start, self.law) else ()
        self.stepper = self._stepper()
        self.spectrum = self._spin_up(self._noise())
        self.frame = {name: self.values.get(name, 0.0) for name in ("drift_x", "drift_y", "rotation")}
        self.pair = self._pair()
        self.running: dict[int, float] = {}

    def _wandering_rows(self) -> list[int]:
        """Return the rows of evolving components whose mean runs freely without changing anything else."""
        evolving = [self.law.components[n] for n in self.stepper.operator.evolving]
        free = set(self.law.symmetries.shiftable) - set(self.law.symmetries.conserved)
        return [row for row, name in enumerate(evolving) if name in free]

    def slices(self) -> Iterator[Real]:
        """Yield the window's samples on the lattice's nodes, shape (ny, nx, C)."""
        spectrum, spacing = self.spectrum, self.period / self.lattice.nt
        offsets = {row: float(spectrum[row, 0, 0].real) - self._mean(row) for row in self.running}
        samples, began = samples_in(self.lattice.nt, self.start.blend), self.start.spin_up
        for sample in range(samples):
            if sample:
                spectrum = self.stepper.advance(spectrum, spacing, began + (sample - 1) * spacing)
            time = sample * spacing
            seen = self._seen(spectrum, time, self.frame)
            for row, slope in self.running.items():
                seen[row, 0, 0] -= offsets[row] + slope * time
            yield self.on_nodes(seen)
            self._tell(f"march: window {time:.4g} of {(samples - 1) * spacing:.4g}")

    def nodes(self) -> tuple[int, int]:
        """Return the marcher's nodes (ny, nx)."""
        return _nodes(self.start, self.lattice)

    def lengths(self) -> tuple[float, float]:
        """Return the lengths (Ly, Lx) of the marched box."""
        return (self.values.get("length_y", 1.0), self.values["length_x"])

    def on_nodes(self, seen: Complex) -> Real:
        """Return a slice on the lattice's nodes, shape (ny, nx, C)."""
        return self.stepper.to_field(seen, (self.lattice.ny, self.lattice.nx))

    def compared(self, seen: Complex) -> tuple[Modes, Complex]:
        """Return what of a slice is compared to find the frame: its modes and its evolving spectra."""
        return self.stepper.modes, seen

    def _seen(self, spectrum: Complex, time: float, frame: Values) -> Complex:
        """Return a slice as it is seen after `time` in a frame of given drift and rotation."""
        shifted = self.stepper.modes.shift(spectrum, frame["drift_x"] * time, frame["drift_y"] * time)
        return turned(shifted, self.pair, -frame["rotation"] * time)

    def _pair(self) -> Pair | None:
        """Return the marcher's rows of the law's rotating pair."""
        if self.law.rotating_pair is None:
            return None
        a, b = (self.law.components.index(name) for name in self.law.rotating_pair)
        return self.stepper.operator.evolving.index(a), self.stepper.operator.evolving.index(b)

    def _stepper(self) -> Stepper:
        dt = 1.0 if self.start.dt is None else self.start.dt
        return Stepper(self.law, self.nodes(), self.lengths(), self.values, dt)

    def _noise(self) -> Complex:
        spectrum = random_spectrum(self.stepper.operator, self.start.seed, self.start.amplitude)
        for row in range(len(spectrum)):
            spectrum[row, 0, 0] += self._mean(row)
        return spectrum

    def _spin_up(self, spectrum: Complex) -> Complex:
        """March over the spin-up, and set the step of the window."""
        stretch = self.start.spin_up / STRETCHES
        for n in range(STRETCHES if stretch > 0.0 else 0):
            if self.start.dt is None:
                spectrum, dt = settle(self.stepper, spectrum, stretch, SPIN_UP_TOLERANCE, n * stretch)
            else:
                spectrum, dt = self.stepper.advance(spectrum, stretch, n * stretch), self.start.dt
            done = f"{(n + 1) * stretch:.4g} of {self.start.spin_up:.4g}"
            self._tell(f"march: spin-up {done}, dt = {dt:.3g}", at_once=n == STRETCHES - 1)
        if self.start.dt is None:
            self.stepper = self.stepper.with_step(suggest_dt(self.stepper, spectrum, WINDOW_TOLERANCE))
        return spectrum

    def _compare_ends(self, wandering: list[int]) -> None:
        """Find the frame and the slopes of wandering means from the window's two ends."""
        first, last, turn = self.spectrum, *self._window_end()
        for row in wandering:
            self.running[row] = float((last - first)[row, 0, 0].real) / self.period
        if self.matched:
            back = self._seen(last, self.period, self.frame | dict.fromkeys(self.matched, 0.0))
            pair = turn.pair if turn else None
            (modes, first), (_, back) = self.compared(first), self.compared(back)
            self.frame.update(frame_that_aligns(modes, first, back, self.period, self.axes, pair))
        if turn:
            self.frame["rotation"] = turn.with_whole_turns(self.frame, self.period)

    def _window_end(self) -> tuple[Complex, MeanTurn | None]:
        """Return the spectrum one period on, and how fast it turned where the rotation is looked for."""
        if self.pair is None or "rotation" not in self.matched:
            return self.stepper.advance(self.spectrum, self.period, self.start.spin_up), None
        spectrum, turn = self.spectrum, MeanTurn(self.stepper.modes, self.pair)
        for _ in range(self.lattice.nt):
            turn.look(spectrum, self.stepper.operator.rate(spectrum))
            spectrum = self.stepper.advance(spectrum, self.period / self.lattice.nt, self.start.spin_up)
        return spectrum, turn

    def _look_at_slice(self, wandering: list[int]) -> None:
        rate = self.stepper.operator.rate(self.spectrum)
        for row in wandering:
            self.running[row] = float(rate[row, 0, 0].real)
        if self.matched:
            held = {name: value for name, value in self.frame.items() if name not in self.matched}
            modes, pair = self.stepper.modes, self.pair
            self.frame.update(frame_of_slice(modes, self.spectrum, rate, held, self.matched, pair))

    def _tell_of_window(self, found: Values) -> None:
        dt = self.stepper.dt
        error = self.stepper.step_error(self.spectrum, dt)
        cut = f"window of {self.period:.6g}" if self.lattice.nt > 1 else "last slice"
        text = f"march: {cut}, dt = {dt:.3g}, error of a step by halving {error:.1e}"
        self._tell(
            ", ".join([text, *(f"{name} = {value:.6g}" for name, value in found.items())]), at_once=True
        )

    def _tell(self, text: str, at_once: bool = False) -> None:
        """Report progress, by the clock unless `at_once`."""
        now = monotonic()
        if at_once or now - self._told >= SECONDS_BETWEEN_LINES:
            self._told = now
            self.report(text)

    def _name(self, row: int) -> str:
        return self.law.components[self.stepper.operator.evolving[row]]

    def _mean(self, row: int) -> float:
        return float(self.start.mean.get(self._name(row), 0.0))


def _nodes(start: MarchOptions, lattice: Lattice) -> tuple[int, int]:
    """Return the marcher's nodes (ny, nx): those given, else the lattice's."""
    if start.shape is None:
        return (lattice.ny, lattice.nx)
    given = tuple(start.shape)
    if len(given) != lattice.dimensions:
        wanted = "[nx]" if lattice.dimensions == 1 else "[ny, nx]"
        raise InputError(f"start.shape must be {wanted} for this law, got {list(given)}")
    return (given[0], given[1]) if len(given) == 2 else (1, given[0])


def _matched_axes(start: MarchOptions, law: Law) -> tuple[str, ...]:
    axes = tuple(start.match_drift or ())
    for axis in axes:
        if not law.symmetries.homogeneous.get(axis, False):
            raise InputError(
                f"start.match_drift must name axes along which law {law.name} is the same everywhere, got "
                f"'{axis}'; remove it"
            )
    return axes


def _matched_rotation(start: MarchOptions, law: Law) -> bool:
    if start.match_rotation and law.rotating_pair is None:
        raise InputError(
            f"start.match_rotation must be false: law {law.name} has no pair of components that may be "
            "turned; remove it"
        )
    return bool(start.match_rotation)

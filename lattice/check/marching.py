"""March check: the state's slices, marched from one to the next by a method of another kind.

The period is cut into short segments. Each is marched from its first slice by the pseudo-spectral stepper, in
the frame of the laboratory, seen again in the state's frame and compared with the slice it should reach. A
second march with half the step tells the marcher's own error, a third from a disturbed slice the growth of
errors over the segment. Segments being short, small errors stay small, whatever the period and the box.
Ranks share the segments.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import LatticeError
from lattice.geometry.block import Block
from lattice.starts.frame import Pair, turned
from lattice.starts.stepper import Stepper, steps_within, suggest_dt
from lattice.starts.streaming import on_root
from lattice.store.agreement import raise_together
from lattice.store.statefile import StateFile

if TYPE_CHECKING:
    from lattice.check.subject import Subject

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

GROWTH = math.e
"""Growth of errors over a segment that its length is chosen for."""
PROBES = 4
"""Segments whose growth rate is looked at before the length is chosen."""
STEP_TOLERANCE = 1e-5
"""Largest relative error of one step; the marcher's error over a segment is measured besides."""
DISTURBANCE = 1e-4
"""Size of the disturbance whose growth is followed, in units of the field's fluctuation."""
BATCH_VALUES = 2**19
"""Field values marched together on a rank: enough to hide Python's own time."""


@dataclass(frozen=True)
class MarchCheck:
    """How well the slices of a state follow from one another.

    Parameters
    ----------
    levels : int
        Levels of the longest segment.
    time : float
        Its duration.
    rate : float
        Largest local growth rate of errors, from which the length was chosen.
    mismatches : tuple of float
        Of every segment: root mean square difference in units of the field's fluctuation.
    growths : tuple of float
        Factor by which a small error grows over each segment.
    marcher_error : float
        Largest error of the marcher over a segment, by halving its step, in the same units.
    dt : float
        Its step.
    """

    levels: int
    time: float
    rate: float
    mismatches: tuple[float, ...]
    growths: tuple[float, ...]
    marcher_error: float
    dt: float

    @property
    def largest(self) -> float:
        """The largest mismatch."""
        return max(self.mismatches)

    @property
    def largest_growth(self) -> float:
        """The largest growth factor."""
        return max(self.growths)


class _Marcher:
    """Marches slices of one state; serial."""

    def __init__(self, subject: Subject, scale: Real) -> None:
        self.values, self.law, self.lattice = subject.values, subject.law, subject.lattice
        lengths = (self.values.get("length_y", 1.0), self.values["length_x"])
        self.stepper = Stepper(self.law, (self.lattice.ny, self.lattice.nx), lengths, self.values, 1.0)
        self.scale = scale[self.stepper.operator.evolving]
        self.pair = self._pair()
        self.spacing = self.values["period"] / self.lattice.nt
        self.typical = 1.0

    def _pair(self) -> Pair | None:
        if self.law.rotating_pair is None:
            return None
        a, b = (self.law.components.index(name) for name in self.law.rotating_pair)
        return self.stepper.operator.evolving.index(a), self.stepper.operator.evolving.index(b)

    def choose_step(self, slices: Real) -> None:
        """Set the step that serves all given slices, shape (n, ny, nx, C)."""
        spectra = self.stepper.to_spectrum(slices)
        self.stepper = self.stepper.with_step(suggest_dt(self.stepper, spectra, STEP_TOLERANCE))

    def march(self, slices: Real, time: float) -> Complex:
        """Return the spectra of slices after a time, seen in the state's frame."""
        return self.seen(self.stepper.advance(self.stepper.to_spectrum(slices), time), time)

    def seen(self, spectra: Complex, time: float) -> Complex:
        """Return marched spectra in the frame that has moved and turned for a time."""
        drift_x, drift_y = self.values.get("drift_x", 0.0), self.values.get("drift_y", 0.0)
        moved = self.stepper.modes.shift(spectra, drift_x * time, drift_y * time)
        if self.pair is None:
            return moved
        return np.stack([turned(s, self.pair, -self.values.get("rotation", 0.0) * time) for s in moved])

    def distance(self, first: Complex, second: Complex) -> Real:
        """Return root mean square differences of spectra, every component in units of its fluctuation."""
        difference = (first - second) / self.scale[:, None, None]
        squares = self.stepper.modes.mean_product(difference, difference).mean(axis=-1)
        distances: Real = np.sqrt(np.maximum(squares, 0.0))
        return distances

    def disturbed(self, spectra: Complex, seeds: list[int]) -> Complex:
        """Return spectra with a small smooth disturbance each, of a size known by `distance`."""
        shape = (self.lattice.ny, self.lattice.nx, len(self.law.components))
        noise = np.stack([np.random.default_rng(seed).standard_normal(shape) for seed in seeds])
        rough = self.stepper.to_spectrum(noise)
        modes = self.stepper.modes
        k2 = modes.kx**2 + modes.ky**2
        rough = rough * np.exp(-k2 / (2.0 * self.typical**2)) * self.scale[:, None, None]
        rough[..., 0, 0] = 0.0
        size = self.distance(rough, np.zeros_like(rough))
        factors = np.divide(DISTURBANCE, size, out=np.zeros_like(size), where=size > 0.0)
        result: Complex = spectra + rough * factors[:, None, None, None]
        return result

    def find_typical(self, spectra: Complex) -> None:
        """Set the size of disturbances to the root mean square wavenumber of slices."""
        modes = self.stepper.modes
        energy = (np.abs(spectra) ** 2).sum(axis=(0, 1))
        energy[0, 0] = 0.0
        total = float(energy.sum())
        k2 = modes.kx**2 + modes.ky**2
        self.typical = math.sqrt(float((energy * k2).sum()) / total) if total > 0.0 else 1.0


def march_check(subject: Subject) -> MarchCheck:
    """March every segment and compare.

    Collective. Each rank reads the slices of its own segments from the state file.

    Raises
    ------
    LatticeError
        On every rank: a law that cannot be marched, or a field that blows up.
    """
    scale = fluctuation(subject)
    rate, dt, typical = on_root(subject.comm, lambda: _probe(subject, scale))
    starts = _segments(subject, rate)
    own = starts[subject.comm.rank :: subject.comm.size]
    found: list[tuple[int, float, float, float]] = []
    error: Exception | None = None
    try:
        marcher = _Marcher(subject, scale)
        marcher.stepper, marcher.typical = marcher.stepper.with_step(dt), typical
        with StateFile(subject.path) as file:
            found = _march_own(file, marcher, own, rate)
    except (LatticeError, OSError) as caught:
        error = caught
    raise_together(subject.comm, error)
    rows = sorted(row for part in subject.comm.allgather(found) for row in part)
    levels = max(stop - start for start, stop in starts)
    spacing = subject.values["period"] / subject.lattice.nt
    return MarchCheck(
        levels,
        levels * spacing if subject.lattice.nt > 1 else steady_time(rate),
        rate,
        tuple(row[1] for row in rows),
        tuple(row[2] for row in rows),
        max(row[3] for row in rows),
        dt,
    )


def fluctuation(subject: Subject) -> Real:
    """Return the root mean square of every component about its mean; 1 for a constant. Collective."""
    means = np.array([subject.system.means[c] for c in subject.law.components])
    local = ((subject.owned - means) ** 2).reshape(-1, means.size).sum(axis=0)
    scale = np.sqrt(subject.comm.allreduce(local) / subject.lattice.nodes)
    return np.where(scale > 1e-12, scale, 1.0)


def _probe(subject: Subject, scale: Real) -> tuple[float, float, float]:
    """Return the largest local growth rate of errors at a few slices, a step and the size of disturbances.

    On one rank.
    """
    marcher, nt = _Marcher(subject, scale), subject.lattice.nt
    levels = sorted({k * nt // PROBES for k in range(PROBES)})
    with StateFile(subject.path) as file:
        slices = _read(file, levels)
    marcher.choose_step(slices)
    time = min(marcher.values["period"], 8.0 * marcher.stepper.dt) if nt > 1 else 8.0 * marcher.stepper.dt
    spectra = marcher.stepper.to_spectrum(slices)
    marcher.find_typical(spectra)
    disturbed = marcher.disturbed(spectra, levels)
    # Twice: the first part of the way lets the disturbance turn into what grows.
    both = marcher.stepper.advance(np.concatenate([spectra, disturbed]), time)
    first = marcher.distance(*np.split(both, 2))
    both = marcher.stepper.advance(both, time)
    second = marcher.distance(*np.split(both, 2))
    rates = np.log(np.maximum(second, 1e-300) / np.maximum(first, 1e-300)) / time
    return max(float(rates.max()), 0.0), marcher.stepper.dt, marcher.typical


def steady_time(rate: float) -> float:
    """Return for how long a steady state is marched."""
    return 1.0 / rate if rate > 1e-2 else 10.0


def _segments(subject: Subject, rate: float) -> list[tuple[int, int]]:
    """Return first and last level of every segment; together they cover the period."""
    nt = subject.lattice.nt
    if nt == 1:
        return [(0, 1)]
    spacing = subject.values["period"] / nt
    longest = nt if rate <= 0.0 else int(math.log(GROWTH) / (rate * spacing))
    count = max(1, -(-nt // min(max(1, longest), max(1, nt // 4))))
    ends = [round(k * nt / count) for k in range(count + 1)]
    return list(itertools.pairwise(ends))


def _march_own(
    file: StateFile, marcher: _Marcher, segments: list[tuple[int, int]], rate: float
) -> list[tuple[int, float, float, float]]:
    """Return first level, mismatch, growth and the marcher's error of this rank's segments."""
    lattice = marcher.lattice
    size = lattice.ny * lattice.nx * len(marcher.law.components)
    batch = max(1, BATCH_VALUES // size)
    found = []
    for length in sorted({stop - start for start, stop in segments}):
        time = length * marcher.spacing if lattice.nt > 1 else steady_time(rate)
        alike = [start for start, stop in segments if stop - start == length]
        for first in range(0, len(alike), batch):
            found += _march_batch(file, marcher, alike[first : first + batch], length, time)
    return found


def _march_batch(
    file: StateFile, marcher: _Marcher, starts: list[int], length: int, time: float
) -> list[tuple[int, float, float, float]]:
    nt, stepper = marcher.lattice.nt, marcher.stepper
    slices, targets = _read(file, starts), _read(file, [(start + length) % nt for start in starts])
    spectra = stepper.to_spectrum(slices)
    disturbed = marcher.disturbed(spectra, starts)
    dt = time / max(1, steps_within(time, stepper.dt))
    both = stepper.with_step(dt).advance(np.concatenate([spectra, disturbed]), time)
    coarse, moved = np.split(both, 2)
    fine = stepper.with_step(0.5 * dt).advance(spectra, time)
    growths = marcher.distance(coarse, moved) / DISTURBANCE
    mismatches = marcher.distance(marcher.seen(fine, time), stepper.to_spectrum(targets))
    errors = marcher.distance(coarse, fine) / 15.0  # of the finer march: the scheme is of fourth order
    return list(zip(starts, mismatches.tolist(), growths.tolist(), errors.tolist(), strict=True))


def _read(file: StateFile, levels: list[int]) -> Real:
    """Return the slices at levels, shape (n, ny, nx, C)."""
    lattice = file.meta.lattice
    return np.concatenate([file.block(Block(n, n + 1, 0, lattice.ny, 0, lattice.nx)) for n in levels])


def single_march(subject: Subject) -> float:
    """Return by how much one march over the whole period misses the state, in units of its fluctuation.

    Collective; rank 0 marches. Over a period in which errors grow by orders of magnitude this says nothing
    about the state: it is here to show that.
    """
    scale = fluctuation(subject)

    def whole() -> float:
        marcher = _Marcher(subject, scale)
        with StateFile(subject.path) as file:
            slices = _read(file, [0])
        marcher.choose_step(slices)
        end = marcher.march(slices, subject.values["period"])
        return float(marcher.distance(end, marcher.stepper.to_spectrum(slices))[0])

    return on_root(subject.comm, whole)

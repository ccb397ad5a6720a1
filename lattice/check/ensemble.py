"""Observables over many states: weighted means, beside the statistics of a long march.

Which weights make the mean over periodic states that of the flow is a matter of theory that asks for the
stability of each and for all of them. Here the weights are the user's: the comparison shows how far they go.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.check.fourier import Fourier
from lattice.check.observables import mean_observables, read_named
from lattice.check.observation import Observation
from lattice.check.resolution import AxisSpectrum, measure_resolution
from lattice.check.statistics import Histogram, correlation_lengths, histograms
from lattice.errors import InputError
from lattice.geometry.blocks import Blocks
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.noise import random_spectrum
from lattice.starts.stepper import Stepper, settle, suggest_dt

if TYPE_CHECKING:
    from mpi4py import MPI

Array = NDArray[np.float64]

WEIGHTS = ("area", "equal")
BATCHES = 10
"""Parts of a march whose means tell how uncertain its mean is (common practice)."""
SPIN_UP = 0.1
"""Part of the time marched before samples are taken."""
SPACING = 1.0
"""Time between samples in units of the fastest growth time, 0.25 per unit of time for the film law."""


@dataclass(frozen=True)
class Ensemble:
    """Means over states.

    Parameters
    ----------
    weights : ndarray, shape (states,)
        Summing to 1.
    means, spreads : dict of str to float
        Weighted mean and standard deviation over the states of every observable that all have.
    effective : float
        Number of equally weighted states that would count as much.
    """

    weights: Array
    means: dict[str, float]
    spreads: dict[str, float]
    effective: float


@dataclass(frozen=True)
class MarchStatistics:
    """Means over a march.

    Parameters
    ----------
    means, errors : dict of str to float
        Mean and its standard error, from the means of the march's parts.
    spectra : tuple of AxisSpectrum
        In space.
    histograms : tuple of Histogram
    time, dt : float
    samples : int
    lengths : tuple of float
        (Ly, Lx) of the box.
    """

    means: dict[str, float]
    errors: dict[str, float]
    spectra: tuple[AxisSpectrum, ...]
    histograms: tuple[Histogram, ...]
    time: float
    dt: float
    samples: int
    lengths: tuple[float, float]


def find_states(given: Sequence[Path]) -> list[Path]:
    """Return the state files meant by files and folders, each once, in order.

    Raises
    ------
    InputError
        For a path that holds none.
    """
    found: list[Path] = []
    for path in given:
        files = sorted(path.rglob("*.h5")) if path.is_dir() else [path]
        if not files or not files[0].is_file():
            raise InputError("holds no state file; check the path", file=os.fspath(path))
        found += [file for file in files if file not in found]
    return found


def combine(observations: Sequence[Observation], weight: str) -> Ensemble:
    """Return the weighted means over states of one law.

    Parameters
    ----------
    observations : sequence of Observation
    weight : str
        "area": period times lengths; "equal".

    Raises
    ------
    InputError
        For states of different laws, or a weight that is none.
    """
    laws = {(o.meta.law, o.meta.text) for o in observations}
    if len(laws) > 1:
        names = ", ".join(sorted({o.meta.law for o in observations}))
        raise InputError(f"states of one law are wanted, got several ({names}); observe them apart")
    raw = np.array([_weight(o, weight) for o in observations])
    weights = raw / raw.sum()
    shared = [n for n in observations[0].observables if all(n in o.observables for o in observations)]
    table = np.array([[o.observables[name] for name in shared] for o in observations])
    means = weights @ table
    spreads = np.sqrt(np.maximum(weights @ (table - means) ** 2, 0.0))
    return Ensemble(
        weights,
        dict(zip(shared, means.tolist(), strict=True)),
        dict(zip(shared, spreads.tolist(), strict=True)),
        float(1.0 / (weights**2).sum()),
    )


def _weight(observation: Observation, weight: str) -> float:
    if weight not in WEIGHTS:
        raise InputError(f"must be one of {', '.join(WEIGHTS)}, got '{weight}'", key="--weight")
    if weight == "equal":
        return 1.0
    values, meta = observation.meta.values, observation.meta
    area = values["length_x"] * (values.get("length_y", 1.0) if meta.dimensions == 2 else 1.0)
    return area * (values["period"] if meta.lattice.nt > 1 else 1.0)


def march_statistics(
    law: Law,
    shape: tuple[int, int],
    lengths: tuple[float, float],
    values: dict[str, float],
    time: float,
    given: Sequence[str],
    comm: MPI.Intracomm,
    report: Callable[[str], None],
    seed: int = 0,
) -> MarchStatistics:
    """March a law from noise and return the statistics of what it settles to.

    Serial: give it a communicator of one rank.

    Parameters
    ----------
    law : Law
    shape, lengths : tuple
        Nodes (ny, nx) and lengths (Ly, Lx) of the box.
    values : dict of str to float
        Parameters and sources.
    time : float
        Marched after a spin-up of a tenth of it.
    given : sequence of str
        The user's observables.
    """
    assert comm.size == 1
    stepper = Stepper(law, shape, lengths, values, 1.0)
    spectrum, _ = settle(stepper, random_spectrum(stepper.operator, seed, 0.1), SPIN_UP * time, 1e-5)
    stepper = stepper.with_step(suggest_dt(stepper, spectrum, 1e-5))
    spacing = max(SPACING / max(4.0 * stepper.fastest_growth, 1e-3), stepper.dt)
    count = max(BATCHES, int(time / spacing) // BATCHES * BATCHES)
    named = read_named(law, given)
    parts, spectra, pool = [], [], []
    for batch in range(BATCHES):
        samples = []
        for _ in range(count // BATCHES):
            spectrum = stepper.advance(spectrum, time / count)
            samples.append(stepper.to_field(spectrum))
        field = np.stack(samples)
        pool.append(field)
        numbers, found = _of_samples(law, field, lengths, values, named, comm)
        parts.append(numbers)
        spectra.append(found)
        report(f"march: {(batch + 1) * time / BATCHES:.4g} of {time:.4g}")
    names = list(parts[0])
    table = np.array([[part[name] for name in names] for part in parts])
    errors = table.std(axis=0, ddof=1) / np.sqrt(BATCHES)
    values_of_all = np.concatenate(pool)
    ends = np.stack([values_of_all.min(axis=(0, 1, 2)), values_of_all.max(axis=(0, 1, 2))], axis=1)
    return MarchStatistics(
        dict(zip(names, table.mean(axis=0).tolist(), strict=True)),
        dict(zip(names, errors.tolist(), strict=True)),
        _mean_spectra(spectra),
        histograms(values_of_all, law.components, lambda counts: counts, ends),
        time,
        stepper.dt,
        count,
        lengths,
    )


def _of_samples(
    law: Law,
    field: Array,
    lengths: tuple[float, float],
    values: dict[str, float],
    named: Any,
    comm: MPI.Intracomm,
) -> tuple[dict[str, float], tuple[AxisSpectrum, ...]]:
    """Return means and spatial spectra of slices, taken as the levels of a field: time is not used."""
    count, ny, nx, components = field.shape
    lattice = Lattice(nt=count, ny=ny, nx=nx, dimensions=law.dimensions)
    blocks = Blocks(lattice, components, 1, comm)
    box = {**values, "length_y": lengths[0], "length_x": lengths[1], "period": float(count)}
    fourier = Fourier(law, blocks, field, box)
    numbers = mean_observables(fourier) | {n.name: fourier.mean(n.expression) for n in named}
    spectra = tuple(s for s in measure_resolution(fourier, field) if s.axis != "t")
    fourier.destroy()
    blocks.destroy()
    return numbers | correlation_lengths(spectra), spectra


def _mean_spectra(parts: Sequence[tuple[AxisSpectrum, ...]]) -> tuple[AxisSpectrum, ...]:
    means = []
    for same in zip(*parts, strict=True):
        energy = np.mean([s.energy for s in same], axis=0)
        first = same[0]
        means.append(
            AxisSpectrum(first.component, first.axis, first.wavenumbers, tuple(energy.tolist()), first.limit)
        )
    return tuple(means)

"""What is observed of one state: numbers with their bands, spectra, correlation lengths, histograms."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from lattice.check.fourier import Fourier
from lattice.check.observables import measure_with, read_named
from lattice.check.resolution import AxisSpectrum, measure_resolution
from lattice.check.statistics import Histogram, histograms
from lattice.check.subject import Subject, open_subject
from lattice.store.certificates import read_certificate

if TYPE_CHECKING:
    from mpi4py import MPI

    from lattice.store.statemeta import StateMeta

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Observation:
    """One state, observed.

    Parameters
    ----------
    path : str
    meta : StateMeta
    observables : dict of str to float
    bands : dict of str to (float, float)
        Half width around the state's own value and the extrapolated value, from a certificate that holds.
    certificate : str
        Its verdict, or why there is none that holds.
    spectra : tuple of AxisSpectrum
    histograms : tuple of Histogram
    """

    path: str
    meta: StateMeta
    observables: dict[str, float]
    bands: dict[str, tuple[float, float]]
    certificate: str
    spectra: tuple[AxisSpectrum, ...]
    histograms: tuple[Histogram, ...]

    def record(self) -> dict[str, Any]:
        """Return it as plain data, for JSON."""
        return {
            "state": self.path,
            "law": self.meta.law,
            "certificate": self.certificate,
            "observables": {
                name: {"value": value}
                | (
                    {"band": self.bands[name][0], "extrapolated": self.bands[name][1]}
                    if name in self.bands
                    else {}
                )
                for name, value in self.observables.items()
            },
            "spectra": [
                {
                    "component": s.component,
                    "axis": s.axis,
                    "wavenumbers": list(s.wavenumbers),
                    "energy": list(s.energy),
                }
                for s in self.spectra
            ],
            "histograms": [
                {"component": h.component, "edges": h.edges.tolist(), "density": h.density.tolist()}
                for h in self.histograms
            ],
        }


def observe(path: str | os.PathLike[str], comm: MPI.Intracomm, given: Sequence[str] = ()) -> Observation:
    """Observe a stored state.

    Collective.

    Parameters
    ----------
    path : path-like
    comm : MPI.Intracomm
    given : sequence of str
        The user's observables, each `name=formula`.
    """
    subject = open_subject(path, comm)
    fourier = Fourier(subject.law, subject.system.blocks, subject.owned, subject.values)
    named = read_named(subject.law, given)
    numbers = measure_with(fourier, subject.system, subject.owned, subject.values, named)
    spectra = measure_resolution(fourier, subject.owned)
    bands, words = _bands(path)
    found = Observation(
        os.fspath(path),
        subject.meta,
        numbers,
        bands,
        words,
        spectra,
        histograms(subject.owned, subject.law.components, comm.allreduce, _ends(subject)),
    )
    fourier.destroy()
    subject.destroy()
    return found


def _ends(subject: Subject) -> Array:
    from mpi4py import MPI

    flat = subject.owned.reshape(-1, subject.owned.shape[-1])
    low, high = flat.min(axis=0), flat.max(axis=0)
    subject.comm.Allreduce(MPI.IN_PLACE, low, op=MPI.MIN)
    subject.comm.Allreduce(MPI.IN_PLACE, high, op=MPI.MAX)
    return np.stack([low, high], axis=1)


def _bands(path: str | os.PathLike[str]) -> tuple[dict[str, tuple[float, float]], str]:
    """Return the bands of a certificate that holds, and what is to be said of it."""
    stored = read_certificate(path)
    if stored is None:
        return {}, "none: run `lattice check`"
    if not stored.valid:
        return {}, f"no longer holds: {', '.join(stored.changed)} changed"
    bands = stored.record.get("bands", {})
    return {n: (float(b["half"]), float(b["best"])) for n, b in bands.items()}, stored.record["verdict"]

"""Write solved states to files and check them, for the tests of certificates."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from lattice.check.certificate import Certificate
from lattice.check.run import CheckOptions, check_state
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.laws.law import Law
from lattice.starts.stepper import Stepper
from lattice.store.statefile import write_state
from lattice.store.statemeta import StateMeta
from tests.solving import TURN, Real, Solved, nodes, solve

FILM = "kuramoto-sivashinsky"


def store(
    path: Path, law: Law | str, lattice: Lattice, solved: Solved, free: Sequence[str] = (), **changes: Any
) -> Path:
    """Write a state to a file and return its path."""
    from mpi4py import MPI

    law = load_law(law) if isinstance(law, str) else law
    meta = StateMeta.of_law(law, lattice, solved.values, free=tuple(free), outcome="converged")
    meta = replace(meta, **changes)
    field = np.ascontiguousarray(solved.field)
    write_state(path, field, Block.whole(lattice), meta, MPI.COMM_SELF)
    return path


def check(path: Path, **options: Any) -> Certificate:
    """Check a state on one rank."""
    from mpi4py import MPI

    return check_state(path, MPI.COMM_SELF, CheckOptions(**options), lambda text: None)


def criterion(certificate: Certificate, name: str) -> Any:
    """Return a criterion by name."""
    return next(c for c in certificate.criteria if c.name == name)


def failed(certificate: Certificate) -> set[str]:
    """Return the names of the criteria that failed."""
    return {c.name for c in certificate.criteria if c.result == "failed"}


def travelling_wave(nx: int, length: float, speed: float, order: int = 4) -> tuple[Lattice, Solved]:
    """Solve the unimodal travelling wave of the film law near a speed."""
    x = nodes(nx, length) * TURN / length
    start = 1.2 * np.sin(x) - 0.4 * np.sin(2 * x) + 0.2 * np.sign(speed) * np.cos(2 * x)
    lattice = Lattice(1, 1, nx, order_x=order)
    return lattice, solve(FILM, lattice, start[None, None, :], ("drift_x",), length_x=length, drift_x=speed)


def odd_film(length: float, nt: int, nx: int, order: int = 6) -> tuple[Lattice, Solved]:
    """Solve the periodic state among odd film fields from a march onto the attractor of these."""
    stepper = Stepper(load_law(FILM), (1, 32), (1.0, length), {}, 0.1)
    x = TURN * np.arange(32) / 32
    start = 0.5 * np.sin(x) + 2.0 * np.sin(2.0 * x)
    spectrum = stepper.advance(stepper.to_spectrum(start[None, :, None]), 200.0)
    times = np.arange(0.0, 30.0, 0.1)
    fields = np.array(list(stepper.march(spectrum, times)))
    distances = np.abs(fields - fields[0]).max(axis=(1, 2, 3))
    period = float(times[100 + np.argmin(distances[100:])])
    window = [stepper.to_spectrum(field) for field in stepper.march(spectrum, nodes(nt, period))]
    field: Real = np.array([stepper.to_field(moment, (1, nx)) for moment in window])
    lattice = Lattice(nt, 1, nx, order_t=order, order_x=order)
    return lattice, solve(FILM, lattice, field, ("period", "drift_x"), length_x=length, period=period)

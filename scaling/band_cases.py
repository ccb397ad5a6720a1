"""The states that `scaling.bands` measures: waves, patterns and periodic states of known families."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.starts.stepper import Stepper

Real = NDArray[np.float64]
TURN = 2.0 * np.pi
FILM = "kuramoto-sivashinsky"


@dataclass(frozen=True)
class Case:
    """A state to solve: its law, lattice, scalars, start and what is free."""

    name: str
    law: str
    lattice: Lattice
    values: dict[str, float]
    start: Real
    free: tuple[str, ...]


def cases(quick: bool) -> Iterator[Case]:
    """Yield the states; with `quick` a few of each kind."""
    step = 4 if quick else 1
    yield from list(film_waves())[::step]
    yield from list(patterns())[::step]
    yield from list(dispersive_waves())[::step]
    yield from list(odd_states())[::step]


def film_waves() -> Iterator[Case]:
    """Steady states and travelling waves of the film law, unimodal, on coarse lattices of three orders."""
    for length in (7.0248147310, 8.0, 9.0, 9.9345882658, 10.8):
        amplitude = 2.4 if length < 9.5 else 1.7
        for order, nx in ((2, 32), (2, 20), (4, 20), (4, 14), (6, 16), (6, 12)):
            x = TURN * np.arange(nx) / nx
            start = amplitude * np.sin(x) - 0.4 * np.sin(2 * x)
            yield _wave(f"film steady L={length:g} order {order}", length, order, nx, start, 0.0)
    for length, speed in ((11.5429484715, 0.226), (12.1673360279, 0.388), (12.6, 0.43)):
        for order, nx in ((2, 40), (4, 24), (4, 18), (6, 20), (6, 16)):
            x = TURN * np.arange(nx) / nx
            start = 1.2 * np.sin(x) - 0.4 * np.sin(2 * x) + 0.2 * np.cos(2 * x)
            yield _wave(f"film travelling L={length:g} order {order}", length, order, nx, start, speed)


def _wave(name: str, length: float, order: int, nx: int, start: Real, speed: float) -> Case:
    lattice = Lattice(1, 1, nx, order_x=order)
    values = {"period": 1.0, "length_x": length, "drift_x": speed}
    return Case(name, FILM, lattice, values, start[None, None, :, None], ("drift_x",))


def patterns() -> Iterator[Case]:
    """Steady patterns of the cubic Swift-Hohenberg law, one wavelength."""
    for r in (0.1, 0.3, 0.5, 0.9):
        for order, nx in ((2, 24), (2, 14), (4, 12), (4, 9)):
            start = 2.0 * math.sqrt(r / 3.0) * np.cos(TURN * np.arange(nx) / nx)
            values = {"period": 1.0, "length_x": TURN, "drift_x": 0.0, "r": r}
            lattice = Lattice(1, 1, nx, order_x=order)
            name = f"swift-hohenberg r={r:g} order {order}, nx {nx}"
            yield Case(name, "swift-hohenberg", lattice, values, start[None, None, :, None], ("drift_x",))


def dispersive_waves() -> Iterator[Case]:
    """The film law's elliptic waves, dispersion 4: Kudryashov, Phys. Lett. A 147 (1990) 287, from memory."""
    from scipy.special import ellipj, ellipk

    for g3 in (0.0, 0.002, 0.004):
        e3, e2, e1 = np.sort(np.roots([4.0, 0.0, -1.0 / 12.0, -g3]).real)
        w, m = math.sqrt(e1 - e3), (e2 - e3) / (e1 - e3)
        length = 2.0 * float(ellipk(m)) / w
        for order, nx in ((4, 32), (4, 22), (6, 24), (6, 18)):
            sn, cn, dn, _ = ellipj(w * np.arange(nx) * length / nx, m)
            shape = -60.0 * (e3 + (e2 - e3) * sn**2) - 120.0 * (e2 - e3) * w * sn * cn * dn
            # u = c - 1 + shape; of zero mean where c = 1 - mean(shape).
            speed = 1.0 - float(shape.mean())
            values = {"period": 1.0, "length_x": length, "drift_x": speed, "dispersion": 4.0}
            lattice = Lattice(1, 1, nx, order_x=order)
            start = (shape - shape.mean())[None, None, :, None]
            yield Case(f"film dispersive g3={g3:g} order {order}", FILM, lattice, values, start, ("drift_x",))


def odd_states() -> Iterator[Case]:
    """Periodic film states among odd fields, marched onto."""
    for nu in (0.1305, 0.129, 0.1275, 0.126):
        length = TURN / math.sqrt(nu)
        stepper, spectrum, period = _onto_odd(length)
        for order, nt, nx in ((4, 40, 30), (4, 28, 22), (6, 32, 24), (6, 24, 18)):
            times = np.arange(nt) * (period / nt)
            window = [stepper.to_spectrum(field) for field in stepper.march(spectrum, times)]
            start = np.array([stepper.to_field(moment, (1, nx)) for moment in window])
            lattice = Lattice(nt, 1, nx, order_t=order, order_x=order)
            values = {"period": period, "length_x": length, "drift_x": 0.0}
            yield Case(
                f"film odd nu={nu:g} order {order}", FILM, lattice, values, start, ("period", "drift_x")
            )


def _onto_odd(length: float) -> tuple[Stepper, Any, float]:
    stepper = Stepper(load_law(FILM), (1, 32), (1.0, length), {}, 0.1)
    x = TURN * np.arange(32) / 32
    start = 0.5 * np.sin(x) + 2.0 * np.sin(2.0 * x)
    spectrum = stepper.advance(stepper.to_spectrum(start[None, :, None]), 300.0)
    fields = np.array(list(stepper.march(spectrum, np.arange(0.0, 30.0, 0.1))))
    distances = np.abs(fields - fields[0]).max(axis=(1, 2, 3))
    return stepper, spectrum, 0.1 * (100 + int(np.argmin(distances[100:])))

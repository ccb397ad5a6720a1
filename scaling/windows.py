"""The benchmarks' test problem: a law linearised about a window of its own marched turbulence."""

from __future__ import annotations

import math
from typing import Any

from lattice.geometry.lattice import Lattice
from lattice.laws.catalogue import load_law
from lattice.starts import STARTS
from lattice.starts.options import MarchOptions
from lattice.system.system import System


def even(number: float) -> int:
    """Return the nearest even integer, at least 8."""
    return max(8, 2 * round(number / 2))


def window_lattice(
    dimensions: int, length: float, period: float, dx: float, dt: float, order: int = 4
) -> Lattice:
    """Return the lattice of a box with spacings as near as even counts allow."""
    nodes = even(length / dx)
    return Lattice(
        nt=even(period / dt),
        ny=nodes if dimensions == 2 else 1,
        nx=nodes,
        dimensions=dimensions,
        order_t=4,
        order_x=order,
        order_y=order,
    )


def window_system(
    name: str,
    length: float,
    period: float,
    dx: float,
    dt: float,
    comm: Any,
    seed: int = 1,
    spin_up: float = 100.0,
    parameters: dict[str, float] | None = None,
) -> tuple[System, Any]:
    """Return a system and its vector of unknowns at a marched window, linearised. Collective."""
    law = load_law(name)
    lattice = window_lattice(law.dimensions, length, period, dx, dt)
    axes = "xy"[: law.dimensions]
    values = {"period": period, **law.defaults, **(parameters or {})}
    values |= {
        f"{kind}_{axis}": (length if kind == "length" else 0.0)
        for kind in ("length", "drift")
        for axis in axes
    }
    values |= {f"source_{c}": 0.0 for c in law.components}
    free = ["period", *(f"drift_{axis}" for axis in axes if law.symmetries.homogeneous[axis])]
    if law.symmetries.rotations:
        values["rotation"] = 0.0
        free.append("rotation")
    system = System(law, lattice, values, free, {}, comm)
    march = MarchOptions(seed=seed, amplitude=0.5, spin_up=spin_up, blend=0.3, match_drift=())
    owned, found = STARTS["march"](march, lattice, values, law, system.blocks.block, comm)
    x = system.vector()
    system.pack(owned, found, x)
    system.set_reference(x)
    system.linearise(x)
    return system, x


def box_of_unknowns(unknowns: int, dimensions: int, dx: float, dt: float) -> float:
    """Return the length (and period) of the box that has about so many unknowns at these spacings."""
    if dimensions == 1:
        return math.sqrt(unknowns * dx * dt)
    return float((unknowns * dx * dx * dt) ** (1.0 / 3.0))

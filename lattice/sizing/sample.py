"""A smooth field that varies along every axis, where only the pattern and size of a Jacobian matter."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from lattice.system.system import System

WAVE = 9.0
"""About the length of the waves, in the units of the film laws."""


def linearise_at_waves(system: System, x: Any) -> None:
    """Set a vector of unknowns to waves, with the phase conditions there, and linearise. Collective."""
    system.pack(waves(system), system.values, x)
    system.set_reference(x)
    system.linearise(x)


def waves(system: System) -> NDArray[np.float64]:
    """Return this rank's part of a field of a few waves of size one."""
    lattice, block, values = system.lattice, system.blocks.block, system.values
    angles = [
        2.0 * np.pi * np.arange(low, high) / nodes
        for (low, high), nodes in zip(
            ((block.t0, block.t1), (block.y0, block.y1), (block.x0, block.x1)), lattice.shape, strict=True
        )
    ]
    t, y, z = angles[0][:, None, None], angles[1][:, None], angles[2]
    kx = _number(values["length_x"], lattice.nx)
    ky = _number(values.get("length_y", 1.0), lattice.ny)
    field = np.zeros(system.blocks.shape)
    for c in range(system.blocks.components):
        field[..., c] = np.cos(kx * z + ky * y + t + c) + np.cos((kx + 1) * z - 2 * t + 0.3 + 2 * c)
        field[..., c] += np.cos((kx + 2) * z - (ky + 1) * y + t + 0.9)
    return field


def _number(length: float, nodes: int) -> int:
    """Return the waves along an axis: about one in `WAVE`, and resolved."""
    if nodes == 1:
        return 0
    return max(1, min(round(length / WAVE), nodes // 6))

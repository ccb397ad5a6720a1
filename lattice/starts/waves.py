"""Start from a sum of cosine waves."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from lattice.errors import InputError
from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.laws.law import Law
from lattice.starts.options import Report, WaveOptions, WavesOptions, silent
from lattice.starts.stepper import Values

if TYPE_CHECKING:
    from mpi4py import MPI

Real = NDArray[np.float64]


def waves(
    start: WavesOptions,
    lattice: Lattice,
    values: Values,
    law: Law,
    block: Block,
    comm: MPI.Intracomm,
    report: Report = silent,
) -> tuple[Real, Values]:
    """Return this rank's part of a sum of cosines and means, and the values as given.

    Not collective. Every wave adds
    `amplitude * cos(2*pi*(kx*x/Lx + ky*y/Ly - kt*t/T) + phase)` to its component.

    Raises
    ------
    InputError
        On every rank alike: a component the law has not, or a wave the lattice cannot carry.
    """
    owned = np.zeros((*block.shape, len(law.components)))
    for name, mean in start.mean.items():
        owned[..., _component(name, law)] += mean
    for wave in start.modes:
        _check(wave, lattice)
        owned[..., _component(wave.component, law)] += wave_on_nodes(wave, lattice, block)
    return owned, values


def wave_on_nodes(wave: WaveOptions, lattice: Lattice, block: Block) -> Real:
    """Return one cosine on a block of nodes, shape block.shape."""
    t = _turns(-wave.kt, block.t0, block.t1, lattice.nt)[:, None, None]
    y = _turns(wave.ky, block.y0, block.y1, lattice.ny)[:, None]
    x = _turns(wave.kx, block.x0, block.x1, lattice.nx)
    phase = 2.0 * np.pi * (t + y + x) + wave.phase
    return np.asarray(wave.amplitude * np.cos(phase), dtype=float)


def _turns(number: int, start: int, stop: int, nodes: int) -> Real:
    """Return number*j/nodes of nodes j as a fraction of a turn, whole turns removed exactly."""
    return np.asarray((number * np.arange(start, stop)) % nodes / nodes, dtype=float)


def _component(name: str | None, law: Law) -> int:
    if name is None and len(law.components) == 1:
        return 0
    if name not in law.components:
        raise InputError(
            f"component must be one of {', '.join(law.components)}, got {name!r}", key="start.modes"
        )
    return law.components.index(name)


def _check(wave: WaveOptions, lattice: Lattice) -> None:
    for name, number, nodes in (
        ("kt", wave.kt, lattice.nt),
        ("ky", wave.ky, lattice.ny),
        ("kx", wave.kx, lattice.nx),
    ):
        if 2 * abs(number) > nodes or (nodes == 1 and number):
            raise InputError(
                f"{name} must be at most half of lattice.n{name[1]} = {nodes} in size, got {number}; "
                f"raise lattice.n{name[1]}",
                key="start.modes",
            )

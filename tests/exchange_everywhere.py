"""Compare the halo exchange with PETSc's scatter on every rank; rank 0 prints the largest difference."""

from __future__ import annotations

import json

from lattice import environment

environment.prepare()

import numpy as np
from mpi4py import MPI

from lattice.geometry.blocks import Blocks, process_grid
from lattice.geometry.halo import Halo
from lattice.geometry.lattice import Lattice

LATTICES = {
    "time and x": (Lattice(17, 1, 19), 1, 3),
    "narrow": (Lattice(16, 1, 21), 2, 3),
    "time, y and x": (Lattice(11, 12, 13, 2), 2, 2),
    "steady": (Lattice(1, 15, 16, 2), 1, 3),
    "one wide": (Lattice(4, 25, 24, 2), 3, 4),
}


def difference(lattice: Lattice, components: int, width: int, comm: MPI.Intracomm) -> float:
    """Return how far the padded arrays of both ways are apart on any rank; every place is compared."""
    blocks = Blocks(lattice, components, width, comm)
    field, wanted = blocks.vector(), blocks.padded_vector()
    field.getArray()[:] = np.random.default_rng(comm.rank).normal(size=blocks.owned_size)
    blocks.dm.globalToLocal(field, wanted)
    found = np.full(blocks.padded_shape, np.nan)
    halo = Halo(blocks.grid, blocks.halos, blocks.block.shape, comm)
    found[halo.inner] = blocks.owned(field)
    halo.fill(found)
    worst = np.abs(found - blocks.padded(wanted)).max()
    return float(comm.allreduce(worst if np.isfinite(worst) else np.inf, MPI.MAX))


def main() -> None:
    """Print the differences by lattice, for those the ranks can share."""
    comm = MPI.COMM_WORLD
    found = {
        name: difference(lattice, components, width, comm)
        for name, (lattice, components, width) in LATTICES.items()
        if process_grid(comm.size, lattice, width)
    }
    if comm.rank == 0:
        print(json.dumps(found))


main()

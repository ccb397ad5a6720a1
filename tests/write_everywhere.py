"""Write states in every way this stack has and print what every rank finds; run on several ranks.

Arguments: the folder.
"""

from __future__ import annotations

import hashlib
import json
import sys
from itertools import pairwise
from pathlib import Path

import h5py
import numpy as np
from mpi4py import MPI

from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.store import writing
from lattice.store.statefile import read_block, read_meta, read_whole, write_state
from tests.states import make_meta

LATTICES = {
    "line": Lattice(nt=67, ny=1, nx=301, dimensions=1),
    "steady": Lattice(nt=1, ny=1, nx=33, dimensions=1),
    "sheet": Lattice(nt=11, ny=70, nx=131, dimensions=2),
}


def cut_axis(nodes: int, parts: int) -> list[tuple[int, int]]:
    ends = [nodes * i // parts for i in range(parts + 1)]
    return list(pairwise(ends))


def my_block(lattice: Lattice, comm: MPI.Intracomm) -> Block:
    """Cut time and x; uneven on 3 and 5 ranks, blocks of one level where time has one."""
    grid = {1: (1, 1), 2: (1, 2), 3: (3, 1), 5: (5, 1), 6: (2, 3)}[comm.size]
    if lattice.nt == 1:
        grid = (1, comm.size)
    (t0, t1), (x0, x1) = (
        cut_axis(lattice.nt, grid[0])[comm.rank // grid[1]],
        cut_axis(lattice.nx, grid[1])[comm.rank % grid[1]],
    )
    return Block(t0, t1, 0, lattice.ny, x0, x1)


def content_hash(path: Path) -> str:
    """Hash all datasets and attributes but those that name the moment of writing."""
    digest = hashlib.sha256()
    with h5py.File(path, "r") as file:
        for name, value in sorted(file.attrs.items()):
            if name not in ("written", "metadata_sha256"):
                digest.update(f"{name}={value}".encode())
        for name in sorted(n for n in file if isinstance(file[n], h5py.Dataset)):
            digest.update(name.encode() + file[name][...].tobytes())
    return digest.hexdigest()


def main(folder: Path) -> None:
    comm = MPI.COMM_WORLD
    # Small slabs, so that these small fields need many of them.
    writing.SLAB_BYTES = 40_000
    ways = ["root"] + (["collective"] if comm.size > 1 and h5py.get_config().mpi else [])
    hashes, faults = {}, []
    for name, lattice in LATTICES.items():
        block = my_block(lattice, comm)
        whole = np.random.default_rng(7).standard_normal((*lattice.shape, 2))
        meta = make_meta(lattice, ("u", "v"))
        for way in ways:
            path = folder / f"{name}-{way}.h5"
            write_state(path, whole[block.slices].copy(), block, meta, comm, way)
            if not np.array_equal(read_block(path, block), whole[block.slices]):
                faults.append(f"{name} {way}: block on rank {comm.rank}")
            if not np.array_equal(read_whole(path), whole):
                faults.append(f"{name} {way}: whole on rank {comm.rank}")
            if read_meta(path).values != meta.values:
                faults.append(f"{name} {way}: values on rank {comm.rank}")
            hashes[f"{name}-{way}"] = content_hash(path)
            comm.Barrier()
    everything = comm.gather((faults, hashes))
    if comm.rank == 0:
        found = [fault for rank_faults, _ in everything for fault in rank_faults]
        print(json.dumps({"faults": found, "hashes": hashes, "ways": ways}))


main(Path(sys.argv[1]))

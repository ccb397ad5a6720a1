"""Kill a process that keeps writing states, many times, and look at what it leaves behind.

Arguments: the folder, how many kills, the seed. Prints a JSON summary. The writer is a fork of this process,
so that a kill costs milliseconds; it uses MPI on itself alone.
"""

from __future__ import annotations

import json
import os
import random
import signal
import sys
import time
from pathlib import Path

import numpy as np
from mpi4py import MPI

from lattice.geometry.block import Block
from lattice.geometry.lattice import Lattice
from lattice.store.statefile import open_state, write_state
from tests.states import make_meta

LATTICE = Lattice(nt=96, ny=1, nx=512, dimensions=1)


def write(path: Path, number: int) -> None:
    """Write a field whose every value is `number`, which the record repeats."""
    meta = make_meta(LATTICE, mean_square=float(number) ** 2)
    field = np.full((*LATTICE.shape, 1), float(number))
    write_state(path, field, Block.whole(LATTICE), meta, MPI.COMM_SELF)


def write_for_ever(path: Path, start: int) -> None:
    number = start
    while True:
        number += 1
        write(path, number)


def main(folder: Path, kills: int, seed: int) -> None:
    path = folder / "state.h5"
    write(path, 1)
    began = time.perf_counter()
    write(path, 1)
    one_write = time.perf_counter() - began
    rng = random.Random(seed)
    torn, numbers = 0, []
    for _ in range(kills):
        start = numbers[-1] if numbers else 1
        child = os.fork()
        if child == 0:
            write_for_ever(path, start)
        time.sleep(rng.uniform(0.5, 4.0) * one_write)
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
        torn += any(folder.glob(".state.h5.*.partial"))
        state = open_state(path)
        number = int(state.field[0, 0, 0, 0])
        assert (state.field == number).all(), "a mixture of two states"
        assert state.meta.mean_square == number**2, "the record is of another state"
        assert number >= start, "an older state came back"
        numbers.append(number)
    write(path, numbers[-1] + 1)
    left = [p.name for p in folder.iterdir() if p != path]
    print(json.dumps({"kills": kills, "torn": torn, "writes": numbers[-1] - 1, "left": left}))


main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]))

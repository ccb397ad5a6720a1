"""Flip single bits of a state file and count what becomes of it; apart from pytest in case HDF5 crashes.

Arguments: the file, how many flips, the seed. Prints a JSON summary.
"""

from __future__ import annotations

import json
import random
import sys
from pathlib import Path

import numpy as np

from lattice.errors import StateFileError
from lattice.store.statefile import open_state


def main(path: Path, flips: int, seed: int) -> None:
    sound = bytearray(path.read_bytes())
    original = open_state(path)
    rng = random.Random(seed)
    damaged = path.with_name("damaged.h5")
    counts = {"refused": 0, "unharmed": 0}
    wrong = []
    for _ in range(flips):
        place, bit = rng.randrange(len(sound)), rng.randrange(8)
        sound[place] ^= 1 << bit
        damaged.write_bytes(sound)
        sound[place] ^= 1 << bit
        try:
            state = open_state(damaged)
        except StateFileError:
            counts["refused"] += 1
            continue
        counts["unharmed"] += 1
        if state.meta != original.meta or not np.array_equal(state.field, original.field):
            wrong.append((place, bit))
    print(json.dumps(counts | {"wrong": wrong, "size": len(sound)}))


main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]))
